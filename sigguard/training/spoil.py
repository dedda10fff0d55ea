"""Lays disturbances on clean rows: which, how strong, and each one alone for the faults' truth."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import UsageError
from sigguard.reliability import HARM_FAULTS, LEARNED_FAULTS
from sigguard.segments import MEASUREMENTS
from sigguard.simulate.disturbance import (
    ADDITIVE_KINDS,
    apply_clipping,
    apply_dropouts,
    apply_lead_off,
    apply_quantisation,
    draw_disturbance,
    to_leads,
)
from sigguard.simulate.recipes import TrainingRecipe
from sigguard.simulate.recorded import NoiseBank, snr_gain

Array = NDArray[np.float64]

FAULT_OF = {
    "wander": "wander",
    "recorded-bw": "wander",
    "muscle": "muscle",
    "tremor": "muscle",
    "recorded-ma": "muscle",
    "mains": "mains",
    "motion": "motion",
    "pops": "motion",
    "excursion": "motion",
    "recorded-em": "motion",
}
TRANSFORM_FAULT = {
    "clipping": "clipped",
    "dropout": "flat",
    "lead-off": "flat",
}  # a dropout that is not held: missing
# Kinds that bring or bend other disturbances, so that silence about those is no truth. Recorded noise is not among
# them: bw, ma and em each hold something of the others, and are to be named by what they are chiefly.
UNCLEAR = ("lead-off", "clipping")
# Decibels by which a kind is laid on more strongly: where the waves are measured, little is left of hum and drift.
STRONGER_DB = {"mains": 14.0, "wander": 5.0, "recorded-bw": 5.0}
_NOMINAL_QRS_MV = 1.0  # scales the noise where there is no QRS
_LEAST_QRS_MV = 0.1
_AS_ASKED: Mapping[str, float] = MappingProxyType({})


@dataclass(frozen=True, slots=True)
class NoiseSource:
    """Where disturbances come from: the recipe's weights, and recorded noise of one part of its time."""

    recipe: TrainingRecipe
    folder: str | None
    part: str

    def kinds(self) -> tuple[tuple[str, ...], Array]:
        """Kinds that can be drawn and their shares; recorded ones only with a folder."""
        weights = {
            kind: weight
            for kind, weight in self.recipe.disturbances.items()
            if weight > 0 and (self.folder is not None or not kind.startswith("recorded-"))
        }
        share = np.array(list(weights.values()))
        return tuple(weights), share / share.sum()

    def noise(self, rng: np.random.Generator, kind: str, *, n_samples: int, fs_hz: float) -> Array:
        """Additive noise of a kind, (n_samples,), of no particular size."""
        if kind.startswith("recorded-"):
            if self.folder is None:
                raise UsageError(f"{kind} needs a folder of recorded noise")
            bank = _bank(self.folder, self.part)
            return bank.draw(rng, kind.removeprefix("recorded-"), n_samples=n_samples, fs_hz=fs_hz)
        envelope = _weighted(rng, self.recipe.envelopes)
        return draw_disturbance(rng, kind, n_samples=n_samples, fs_hz=fs_hz, envelope=envelope)


@lru_cache(maxsize=3)
def _bank(folder: str, part: str) -> NoiseBank:
    return NoiseBank(folder, part)


@dataclass(frozen=True, slots=True, eq=False)
class SpoiltRow:
    """One spoilt row and what lies on it. ``alone``: the clean row with one of the additive kinds only,
    given where several disturbances meet."""

    x_mv: Array  # (n_samples,)
    kinds: tuple[str, ...]
    snr_db: float  # of all additive noise together; NaN without
    alone: tuple[tuple[str, Array], ...]
    rails_mv: tuple[float, float] = (np.nan, np.nan)  # where it was clipped


def draw_kinds(rng: np.random.Generator, source: NoiseSource) -> tuple[str, ...]:
    """Which disturbances meet on one row: none to several, all different."""
    kinds, share = source.kinds()
    counts = np.array([weight for _, weight in source.recipe.n_disturbances])
    pick = int(rng.choice(len(counts), p=counts / counts.sum()))
    n = min(source.recipe.n_disturbances[pick][0], len(kinds))
    return tuple(str(k) for k in rng.choice(kinds, size=n, replace=False, p=share))


def spoil_row(
    rng: np.random.Generator,
    clean_mv: Array,
    *,
    kinds: tuple[str, ...],
    snr_db: float,
    qrs_mv: float,
    step_mv: float,
    fs_hz: float,
    source: NoiseSource,
    stronger: Mapping[str, float] = _AS_ASKED,
) -> SpoiltRow:
    """(n_samples,) clean and disturbances → the spoilt row, in the recorder's steps.

    ``snr_db`` (noise-stress definition) is that of the additive noise together, shared at random
    among its kinds; ``stronger`` names kinds laid on by so many decibels more. ``qrs_mv`` is the row's QRS peak to peak; NaN or tiny ones are taken as a nominal size.
    """
    additive = [k for k in kinds if k in FAULT_OF]
    transforms = [k for k in kinds if k not in FAULT_OF]
    size = qrs_mv if np.isfinite(qrs_mv) and qrs_mv > 0 else _NOMINAL_QRS_MV
    size = max(size, _LEAST_QRS_MV)
    shares = np.sqrt(rng.dirichlet(np.ones(len(additive)))) if additive else np.zeros(0)
    noise = []
    for kind, share in zip(additive, shares, strict=True):
        x = source.noise(rng, kind, n_samples=len(clean_mv), fs_hz=fs_hz)
        noise.append(x * (share * snr_gain(size, x, snr_db - stronger.get(kind, 0.0), fs_hz)))
    x_mv = clean_mv + np.sum(noise, axis=0) if noise else clean_mv
    rails_mv = (np.nan, np.nan)
    for kind in transforms:
        x_mv = _transform(rng, kind, x_mv, size, fs_hz)
        if kind == "clipping":
            low_mv, high_mv = apply_quantisation(
                np.array([np.nanmin(x_mv), np.nanmax(x_mv)]), step_mv=step_mv
            )
            rails_mv = (float(low_mv), float(high_mv))
    alone: tuple[tuple[str, Array], ...] = ()
    if len(kinds) > 1:
        alone = tuple(
            (kind, apply_quantisation(clean_mv + x, step_mv=step_mv))
            for kind, x in zip(additive, noise, strict=True)
        )
    return SpoiltRow(
        x_mv=apply_quantisation(x_mv, step_mv=step_mv),
        kinds=kinds,
        snr_db=snr_db if additive else np.nan,
        alone=alone,
        rails_mv=rails_mv,
    )


def spoil_strip(
    rng: np.random.Generator,
    clean_mv: Array,
    *,
    kinds: tuple[str, ...],
    snr_db: float,
    qrs_mv: float,
    fs_hz: float,
    source: NoiseSource,
) -> Array:
    """(12, n_samples) clean → spoilt: additive kinds on one lead, on all, or on electrodes (recipe's targets)."""
    n = clean_mv.shape[1]
    out = np.array(clean_mv)
    size = max(qrs_mv if np.isfinite(qrs_mv) else _NOMINAL_QRS_MV, _LEAST_QRS_MV)
    for kind in kinds:
        if kind not in FAULT_OF:
            lead = int(rng.integers(12))
            out[lead] = _transform(rng, kind, out[lead], size, fs_hz)
            continue
        target = _weighted(rng, source.recipe.targets)
        rows = {"one-lead": 1, "all-leads": 12, "electrodes": int(rng.integers(1, 4))}[target]
        noise = np.stack([source.noise(rng, kind, n_samples=n, fs_hz=fs_hz) for _ in range(rows)])
        gain = np.array([snr_gain(size, x, snr_db, fs_hz) for x in noise]) * rng.uniform(0.3, 1.0, rows)
        noise *= gain[:, None]
        if target == "one-lead":
            out[int(rng.integers(12))] += noise[0]
        elif target == "all-leads":
            out += noise
        else:
            electrodes = np.zeros((9, n))
            electrodes[rng.choice(9, size=rows, replace=False)] = noise
            out += to_leads(electrodes)
    return out


def fault_truth(
    kinds: list[tuple[str, ...]], felt: list[dict[str, bool]]
) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Truth and "is asked" of the learned faults, (n, 4) each.

    ``felt[r]`` says of each additive kind on row r whether it alone was felt by a measurement. A fault
    that was not laid on is not there; beside kinds of unclear content nothing is asked.
    """
    truth = np.zeros((len(kinds), len(LEARNED_FAULTS)), dtype=bool)
    asked = np.ones_like(truth)
    for r, (on_row, was_felt) in enumerate(zip(kinds, felt, strict=True)):
        if any(kind in UNCLEAR for kind in on_row):
            asked[r] = False
        for kind, hit in was_felt.items():
            column = LEARNED_FAULTS.index(FAULT_OF[kind])
            truth[r, column] |= hit
            asked[r, column] = True
    return truth, asked


def harm_truth(taken: list[dict[str, NDArray[np.int8]]]) -> NDArray[np.int8]:
    """(n, H, 5) over HARM_FAULTS: 1 this fault alone took the measurement, 0 it did not, -1 not asked.

    ``taken[r]`` gives (5,) such answers for each fault that lies on row r by itself somewhere.
    """
    out = np.full((len(taken), len(HARM_FAULTS), len(MEASUREMENTS)), -1, dtype=np.int8)
    for r, by_fault in enumerate(taken):
        for fault, answers in by_fault.items():
            column = out[r, HARM_FAULTS.index(fault)]
            np.maximum(column, answers, out=column)
    return out


def _transform(rng: np.random.Generator, kind: str, x_mv: Array, qrs_mv: float, fs_hz: float) -> Array:
    if kind == "clipping":
        middle = float(np.nanmedian(x_mv))
        low, high = (middle - qrs_mv * rng.uniform(0.1, 1.0), middle + qrs_mv * rng.uniform(0.1, 1.0))
        return apply_clipping(x_mv, low_mv=low, high_mv=high)
    if kind == "quantisation":
        return apply_quantisation(x_mv, step_mv=float(np.exp(rng.uniform(np.log(0.01), np.log(0.2)))))
    if kind == "dropout":
        return apply_dropouts(x_mv, rng, share=float(rng.uniform(0.02, 0.7)), held=bool(rng.random() < 0.4))
    if kind == "lead-off":
        return apply_lead_off(x_mv, rng, fs_hz=fs_hz, share=float(rng.uniform(0.1, 1.0)))
    raise UsageError(f"no disturbance is called {kind!r}; known: {', '.join((*ADDITIVE_KINDS, *FAULT_OF))}")


def _weighted(rng: np.random.Generator, weights: dict[str, float]) -> str:
    share = np.array(list(weights.values()))
    return str(rng.choice(list(weights), p=share / share.sum()))
