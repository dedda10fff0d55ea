"""Does the promise hold where nothing was learned? Figures on the untouched part of the corpus."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sigguard.reliability import GLOBAL_MEASUREMENTS, LEARNED_FAULTS, ReliabilityModel
from sigguard.segments import MEASUREMENTS
from sigguard.training.table import GROUPS, Rows

STEADY_SHARE = 0.9  # a cell is measurable when this share of its draws is right
_RESAMPLES = 400


@dataclass(frozen=True, slots=True)
class Kept:
    """The promise for one measurement under one kind of noise.

    ``broken``: share of the values called reliable that were moved beyond the tolerance, with a 95 %
    bootstrap interval over carriers. ``bound_broken``: share of all values with a finite bound that
    were moved beyond it. ``kept``: share called reliable in cells measurable in 9 of 10 draws.
    Shares are NaN where there is nothing to count.
    """

    measurement: str
    noise: str
    n_values: int
    n_reliable: int
    broken: float
    broken_low: float
    broken_high: float
    n_bounded: int
    bound_broken: float
    n_cells: int
    kept: float


@dataclass(frozen=True, slots=True)
class FaultScore:
    """One learned fault: how often it lies there, is called, and rightly."""

    fault: str
    n: int
    prevalence: float
    recall: float
    precision: float


def evaluate_rows(model: ReliabilityModel, rows: Rows, *, seed: int) -> list[Kept]:
    """The promise on lead rows by measurement and kind of noise ("all": any)."""
    scores = model.score(rows.features)
    return _evaluate(rows, model.reliable(scores), model.bound(scores), MEASUREMENTS, seed)


def evaluate_strips(model: ReliabilityModel, strips: Rows, *, seed: int) -> list[Kept]:
    """The same for the global measurements."""
    scores = model.score_global(strips.features)
    return _evaluate(
        strips, model.reliable_global(scores), model.bound_global(scores), GLOBAL_MEASUREMENTS, seed
    )


def evaluate_faults(model: ReliabilityModel, rows: Rows) -> list[FaultScore]:
    """Recall and precision of the learned faults at their thresholds, over the rows that are asked."""
    called = model.faults(rows.features) >= model.fault_threshold
    out = []
    for k, fault in enumerate(LEARNED_FAULTS):
        asked = rows.fault_asked[:, k]
        truth, says = rows.fault[asked, k], called[asked, k]
        out.append(
            FaultScore(
                fault=fault,
                n=int(asked.sum()),
                prevalence=_share(truth),
                recall=_share(says[truth]),
                precision=_share(truth[says]),
            )
        )
    return out


def _evaluate(
    rows: Rows, reliable: NDArray[np.bool_], bound: NDArray[np.float64], names: tuple[str, ...], seed: int
) -> list[Kept]:
    out = []
    plain = rows.cell < 0
    for k, name in enumerate(names):
        valued = rows.judged[:, k] & rows.valued[:, k]
        called = valued & reliable[:, k]
        wrong = ~rows.right[:, k]
        for noise in ("all", *GROUPS[:-1]):
            here = rows.group != GROUPS.index("none") if noise == "all" else rows.group == GROUPS.index(noise)
            use = called & here & plain
            low, high = _bootstrap(wrong[use], rows.carrier[use], seed)
            bounded = valued & here & plain & np.isfinite(bound[:, k])
            n_cells, kept = _kept(rows, k, called, here)
            out.append(
                Kept(
                    measurement=name,
                    noise=noise,
                    n_values=int(np.sum(valued & here & plain)),
                    n_reliable=int(use.sum()),
                    broken=_share(wrong[use]),
                    broken_low=low,
                    broken_high=high,
                    n_bounded=int(bounded.sum()),
                    bound_broken=_share(rows.error[bounded, k] > bound[bounded, k]),
                    n_cells=n_cells,
                    kept=kept,
                )
            )
    return out


def _kept(rows: Rows, k: int, called: NDArray[np.bool_], here: NDArray[np.bool_]) -> tuple[int, float]:
    """Number of measurable cells, and the share of their rows that is called reliable."""
    use = np.flatnonzero((rows.cell >= 0) & here & rows.judged[:, k])
    if not len(use):
        return 0, float("nan")
    _, cell = np.unique(rows.cell[use], return_inverse=True)
    n = np.bincount(cell)
    steady = np.bincount(cell, weights=rows.right[use, k] & rows.valued[use, k]) >= STEADY_SHARE * n - 1e-9
    return int(steady.sum()), _share(called[use][steady[cell]])


def _bootstrap(wrong: NDArray[np.bool_], carrier: NDArray[np.integer], seed: int) -> tuple[float, float]:
    """95 % interval of a share, whole carriers drawn again with replacement."""
    if not len(wrong):
        return float("nan"), float("nan")
    _, who = np.unique(carrier, return_inverse=True)
    n, bad = np.bincount(who), np.bincount(who, weights=wrong)
    drawn = np.random.default_rng(seed).integers(0, len(n), size=(_RESAMPLES, len(n)))
    share = bad[drawn].sum(axis=1) / n[drawn].sum(axis=1)
    return float(np.quantile(share, 0.025)), float(np.quantile(share, 0.975))


def _share(hits: NDArray[np.bool_]) -> float:
    return float(np.mean(hits)) if len(hits) else float("nan")
