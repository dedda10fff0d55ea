"""From score to promise: isotonic upper quantiles and shares with a finite-sample allowance.

For one measurement and one group of rows (one kind of noise) the rows are ordered by score. The bound
at a score is taken from the window of rows about it: the order statistic that lies above the true
95 % quantile with the stated confidence (binomial argument, distribution-free; David and Nagaraja 2003,
chapter 7, from memory). Neighbours that break the order "a better score, a smaller bound" are pooled
(pool adjacent violators; Barlow et al. 1972, from memory).

What is learned from all kinds of noise together may be off for one of them. So the table is then asked to each
kind: its scores are taken for worse, by one step on the logit scale after another, until the rows of each kind
keep to their bounds in at least 93 %, two points below the promise that holds over all. That a wave is named
absent is asked for 90 % at any score and 95 % over all so named.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import expit, logit
from scipy.stats import beta, binom

from sigguard.reliability import LOCAL, PROMISE, Calibration, StepTable
from sigguard.training.labels import Labels

Array = NDArray[np.float64]
Statistic = Callable[[Array], float]
_FINENESS = 12  # pieces to a window
_LEAST = 1e-9
_SHIFTS = np.arange(0.0, 6.01, 0.05)  # steps by which a score may be taken for worse, on the logit scale
EACH_KIND = 0.93  # of the bounds of one kind of noise
_FEW = 30  # rows of one kind, too few to speak below


@dataclass(frozen=True, slots=True)
class CalibrationSettings:
    """window: rows a statistic rests on before pooling; confidence: that it is on the safe side;
    local: the share of named absences that must hold at each single score;
    min_group: a kind of noise with fewer rows is judged together with the rest only."""

    window: int = 400
    confidence: float = 0.75
    local: float = LOCAL
    min_group: int = 60


def upper_quantile(errors: Array, *, q: float = PROMISE, confidence: float = 0.9) -> float:
    """The smallest order statistic that is at least the q-quantile with this confidence; inf if none is.

    (n,) errors, infinite ones allowed. P(X_(k) ≥ quantile) = P(Binomial(n, q) ≤ k − 1).
    """
    n = len(errors)
    if not n:
        return np.inf
    k = int(binom.ppf(confidence, n, q)) + 1
    return float(np.partition(errors, k - 1)[k - 1]) if k <= n else np.inf


def lower_share(right: Array, *, confidence: float = 0.9) -> float:
    """One-sided lower Clopper-Pearson limit of a share, from (n,) zeros and ones; 0 for none."""
    n, hits = len(right), int(np.sum(right))
    return float(beta.ppf(1.0 - confidence, hits, n - hits + 1)) if hits else 0.0


def isotonic_windows(
    score: Array, target: Array, statistic: Statistic, *, rising: bool, window: int
) -> tuple[Array, Array]:
    """Scores and targets (n,) → lower edges of pieces, ascending, and their statistic, monotone.

    A piece is a few neighbouring rows; its statistic is that of the ``window`` rows about it, so
    that pieces can be fine and yet each rests on many rows. Edges lie halfway between neighbouring
    scores; rows of one score are never parted.
    """
    order = np.argsort(score, kind="stable")[::-1]  # from the best score down
    score, target = score[order], target[order]
    done: list[tuple[int, int, int, float]] = []  # end of the piece, rows it rests on, statistic
    sign = 1.0 if rising else -1.0
    for stop, first, last in _pieces(score, window):
        value = statistic(target[first:last])
        # Going down in score the statistic must not get better than above: pool with what is there.
        while done and sign * value > sign * done[-1][3]:
            first = done.pop()[1]
            value = statistic(target[first:last])
        done.append((stop, first, last, value))
    edge = [_halfway(score, stop) for stop, _, _, _ in done]
    return np.array(edge[::-1]), np.array([value for *_, value in done][::-1])


def shifted(table: StepTable, steps: float) -> StepTable:
    """The table that takes each score for worse by ``steps`` on the logit scale; no score reaches an edge of 1."""
    edge = expit(logit(np.clip(table.edge, _LEAST, 1 - _LEAST)) + steps)
    keep = np.concatenate([edge[1:] > edge[:-1], [True]]) if len(edge) else np.zeros(0, dtype=bool)
    return StepTable(edge=edge[keep], level=table.level[keep], below=table.below)


def fit_bound(
    score: Array, error: Array, groups: NDArray[np.bool_], settings: CalibrationSettings | None = None
) -> StepTable:
    """Score → bound_95 from (n,) scores and absolute errors (inf: lost or invented).

    ``groups`` (g, n): which rows belong to each kind the promise must hold for; they may overlap.
    """
    settings = settings or CalibrationSettings()
    if not len(score):
        return StepTable(edge=np.zeros(0), level=np.zeros(0), below=np.inf)
    edge, level = isotonic_windows(
        score,
        error,
        lambda errors: upper_quantile(errors, confidence=settings.confidence),
        rising=False,
        window=settings.window,
    )
    finite = np.isfinite(level)
    table = StepTable(edge=edge[finite], level=level[finite], below=np.inf)

    def kept(candidate: StepTable, rows: NDArray[np.bool_]) -> NDArray[np.bool_]:
        bound = candidate(score[rows])
        stated = np.isfinite(bound)
        return (error[rows] <= bound)[stated]

    return _safe_for_each(table, groups, kept, settings, least=EACH_KIND)


def fit_share(
    score: Array,
    right: NDArray[np.bool_],
    groups: NDArray[np.bool_],
    settings: CalibrationSettings | None = None,
    *,
    asked: float = PROMISE,
) -> StepTable:
    """Score → lower confidence limit of the share of right rows.

    Rows whose limit reaches ``asked`` are those that will be called: they are asked kind by kind.
    """
    settings = settings or CalibrationSettings()
    if not len(score):
        return StepTable(edge=np.zeros(0), level=np.zeros(0), below=0.0)
    edge, level = isotonic_windows(
        score,
        right.astype(float),
        lambda hits: lower_share(hits, confidence=settings.confidence),
        rising=True,
        window=settings.window,
    )
    table = StepTable(edge=edge, level=level, below=0.0)

    def kept(candidate: StepTable, rows: NDArray[np.bool_]) -> NDArray[np.bool_]:
        called = candidate(score[rows]) >= asked
        return right[rows][called]

    return _safe_for_each(table, groups, kept, settings, least=PROMISE)


def calibrate(
    scores: Array, labels: Labels, groups: NDArray[np.bool_], settings: CalibrationSettings | None = None
) -> Calibration:
    """Tables for each of m measurements from (n, m) scores and labels and (g, n) groups.

    A bound is stated beside a value, so it is learned from the rows that give one; a row that says
    "absent" makes another claim, which has a table of its own.
    """
    settings = settings or CalibrationSettings()
    bound, share, absent = [], [], []
    for k in range(scores.shape[1]):
        valued = labels.judged[:, k] & labels.valued[:, k]
        named = labels.judged[:, k] & ~labels.valued[:, k]
        bound.append(fit_bound(scores[valued, k], labels.error[valued, k], groups[:, valued], settings))
        share.append(fit_share(scores[valued, k], labels.right[valued, k], groups[:, valued], settings))
        absent.append(
            fit_share(
                scores[named, k], labels.right[named, k], groups[:, named], settings, asked=settings.local
            )
        )
    return Calibration(bound=tuple(bound), share=tuple(share), absent=tuple(absent))


def _safe_for_each(
    table: StepTable,
    groups: NDArray[np.bool_],
    kept: Callable[[StepTable, NDArray[np.bool_]], NDArray[np.bool_]],
    settings: CalibrationSettings,
    *,
    least: float,
) -> StepTable:
    """The table moved by as many steps as the kind that needs most; ``kept`` says which of its rows held."""
    for steps in _SHIFTS:
        candidate = shifted(table, steps) if steps else table
        asked = [rows for rows in groups if rows.sum() >= settings.min_group]
        if all(_keeps_promise(kept(candidate, rows), least) for rows in asked):
            return candidate
    return StepTable(edge=np.zeros(0), level=np.zeros(0), below=table.below)


def _keeps_promise(kept: NDArray[np.bool_], least: float) -> bool:
    """Whether (n,) rows of one kind keep to it often enough; a handful says nothing."""
    return len(kept) < _FEW or float(np.mean(kept)) >= least


def _pieces(score: Array, window: int) -> list[tuple[int, int, int]]:
    """Over descending scores: end of each piece, and first and last row of the window about it."""
    n, step, half = len(score), max(1, window // _FINENESS), window // 2
    out: list[tuple[int, int, int]] = []
    start = 0
    while start < n:
        stop = min(n, start + step)
        while stop < n and score[stop] == score[stop - 1]:
            stop += 1
        middle = (start + stop) // 2
        first = max(0, min(middle - half, n - window))
        out.append((stop, min(first, start), max(min(n, first + window), stop)))
        start = stop
    return out


def _halfway(score: Array, stop: int) -> float:
    if stop >= len(score):
        return float(score[-1])
    return float(0.5 * (score[stop - 1] + score[stop]))
