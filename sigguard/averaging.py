"""From beats to averaged beats: the dominant shape, its weights, and how far the average may be trusted.

The average is a weighted mean. Each beat's weight falls with how far it strays from the median of
its kind, so a burst of movement over two beats costs two beats, not the average. Half-sample
replicates (McCarthy 1969) of the same weighted mean are carried along: the marks found on them
scatter as the marks of the average themselves would if the noise were drawn anew, and that scatter
is the most telling feature of reliability there is.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sigguard.waves import FS, LENGTH, ZERO

REPLICATES = 8


@dataclass(frozen=True, slots=True, eq=False)
class BeatStack:
    """Cut-outs of all beats of (R,) rows, padded to the largest count K."""

    cuts_mv: NDArray[np.float64]  # (R, K, LENGTH); zeros where nothing is
    valid: NDArray[np.bool_]  # (R, K, LENGTH): inside the row
    present: NDArray[np.bool_]  # (R, K)
    at: NDArray[np.float64]  # (R, K) work samples; NaN where absent
    likeness: NDArray[np.float64]  # (R, K)


def stack_beats(
    wave_mv: NDArray[np.floating],
    row: NDArray[np.intp],
    at: NDArray[np.float64],
    likeness: NDArray[np.float64],
) -> BeatStack:
    """Cut (R, n) rows about fractional beat positions with cubic interpolation (Catmull and Rom 1974)."""
    n_rows, n = wave_mv.shape
    count = np.bincount(row, minlength=n_rows)
    k_max = max(1, int(count.max(initial=0)))
    slot = np.arange(len(row)) - np.concatenate([[0], np.cumsum(count)[:-1]])[row]
    whole = np.floor(at).astype(np.intp)
    f = (at - whole)[:, None].astype(wave_mv.dtype)
    columns = whole[:, None] + np.arange(-ZERO - 1, LENGTH - ZERO + 2)
    raw = wave_mv[row[:, None], np.clip(columns, 0, n - 1)]
    a, b, c, d = raw[:, :-3], raw[:, 1:-2], raw[:, 2:-1], raw[:, 3:]
    cut = b + 0.5 * f * (c - a + f * (2 * a - 5 * b + 4 * c - d + f * (3 * (b - c) + d - a)))
    inside = ((columns >= 0) & (columns < n))[:, 1:-2]
    cuts = np.zeros((n_rows, k_max, LENGTH), dtype=wave_mv.dtype)
    valid = np.zeros((n_rows, k_max, LENGTH), dtype=bool)
    present = np.zeros((n_rows, k_max), dtype=bool)
    where = np.full((n_rows, k_max), np.nan)
    like = np.zeros((n_rows, k_max))
    cuts[row, slot] = np.where(inside, cut, 0.0)
    valid[row, slot] = inside
    present[row, slot] = True
    where[row, slot] = at
    like[row, slot] = likeness
    return BeatStack(cuts, valid, present, where, like)


def dominant(stack: BeatStack) -> NDArray[np.bool_]:
    """(R, K): the beats whose QRS resembles the typical complex about as well as the best of them do."""
    like = np.where(stack.present, stack.likeness, -1.0)
    ranked = np.sort(like, axis=1)[:, ::-1]
    count = stack.present.sum(axis=1)
    good = ranked[np.arange(len(like)), np.minimum(count // 5, like.shape[1] - 1)]
    return stack.present & (like >= 0.75 * good[:, None])


def masked_median(values: NDArray[np.floating], mask: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Median over axis 1 of (R, K, …) where ``mask`` holds; 0 where it holds nowhere."""
    if values.shape[1] == 0:
        return np.zeros((values.shape[0], *values.shape[2:]))
    ranked = np.sort(np.where(mask, values, np.array(np.inf, dtype=values.dtype)), axis=1)
    count = mask.sum(axis=1)
    low = np.take_along_axis(ranked, np.maximum((count - 1) // 2, 0)[:, None], axis=1)[:, 0]
    high = np.take_along_axis(ranked, np.minimum(count // 2, values.shape[1] - 1)[:, None], axis=1)[:, 0]
    return np.where(count > 0, 0.5 * (np.where(count > 0, low, 0.0) + np.where(count > 0, high, 0.0)), 0.0)


def level_beats(
    stack: BeatStack, qrs_on_ms: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """(cuts with each beat's PQ level and the drift to the next PQ level taken out, PQ levels (R, K) mV)."""
    onset = ZERO + np.rint(np.nan_to_num(qrs_on_ms, nan=-40.0) * FS / 1000).astype(int)
    columns = np.clip(onset[:, None] + np.arange(-6, -1), 0, LENGTH - 1)
    index = np.broadcast_to(columns[:, None, :], (*stack.present.shape, 5))
    level = np.take_along_axis(stack.cuts_mv, index, axis=2).mean(axis=2)
    good = stack.present & np.take_along_axis(stack.valid, index, axis=2).all(axis=2)
    filled = _fill_sideways(level, good)
    step = np.zeros_like(filled)
    gap = np.full_like(filled, FS)
    step[:, :-1] = np.diff(filled, axis=1)
    gap[:, :-1] = np.diff(np.where(stack.present, stack.at, np.nan), axis=1)
    both = np.isfinite(gap) & (gap > 0)
    both[:, :-1] &= good[:, :-1] & good[:, 1:]
    both[:, -1] = False
    rate = np.where(both, step / np.where(both, gap, 1.0), np.nan)
    rate = _fill_sideways(np.nan_to_num(rate), both)
    from_pq = np.arange(LENGTH)[None, :] - (onset - 4)[:, None]
    # Before its own PQ point a beat drifts as the interval before it did.
    before = np.concatenate([rate[:, :1], rate[:, :-1]], axis=1)
    kind = stack.cuts_mv.dtype
    away = from_pq[:, None, :].astype(kind)
    drift = np.where(away >= 0, rate[:, :, None].astype(kind), before[:, :, None].astype(kind)) * away
    drift += filled[:, :, None].astype(kind)
    cuts = stack.cuts_mv - drift
    cuts *= stack.valid
    return cuts, np.where(good, level, np.nan)


def _fill_sideways(values: NDArray[np.float64], good: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Entries that are not good take the value of the good one before, else after; 0 if there is none."""
    k = np.arange(values.shape[1])
    last = np.maximum.accumulate(np.where(good, k, -1), axis=1)
    nxt = np.minimum.accumulate(np.where(good, k, values.shape[1])[:, ::-1], axis=1)[:, ::-1]
    pick = np.where(last >= 0, last, np.where(nxt < values.shape[1], nxt, 0))
    out = np.take_along_axis(values, pick, axis=1)
    return np.where(good.any(axis=1, keepdims=True), out, 0.0)


@dataclass(frozen=True, slots=True, eq=False)
class Average:
    """Averaged beats of (R,) rows with their replicates and what is left over."""

    beat_mv: NDArray[np.float64]  # (R, 1 + REPLICATES, LENGTH): the average first
    weight: NDArray[np.float64]  # (R, K), sums to 1 (or 0 where there is no beat)
    stray_mv: NDArray[np.float64]  # (R, K): rms of the residual over the beat; NaN where absent
    n_effective: NDArray[np.float64]  # (R,)


def average(cuts_mv: NDArray[np.float64], valid: NDArray[np.bool_], group: NDArray[np.bool_]) -> Average:
    """Weighted mean of the beats in ``group`` (R, K), with half-sample replicates."""
    mask = valid & group[:, :, None]
    centre = masked_median(cuts_mv, mask)
    weight = np.where(group, 1.0, 0.0)
    inside = valid[:, :, CORE].astype(cuts_mv.dtype)
    inside_n = np.maximum(inside.sum(axis=2), 1)
    for _ in range(2):
        power = _stray_power(cuts_mv, centre, inside, inside_n)
        usual = masked_median(power[:, :, None], group[:, :, None])[:, 0]
        weight = np.where(group, 1.0 / np.maximum(power + 0.3 * usual[:, None], 1e-9), 0.0)
        weight /= np.maximum(weight.sum(axis=1, keepdims=True), 1e-300)
        centre = _mean(cuts_mv, valid, weight[:, None, :])[:, 0]
    signs = _half_samples(group.shape[1])
    members = weight[:, None, :] * (1.0 + signs[None])
    beat = _mean(cuts_mv, valid, np.concatenate([weight[:, None, :], members], axis=1))
    power = _stray_power(cuts_mv, beat[:, 0], inside, inside_n)
    n_effective = np.where(group.any(axis=1), 1.0 / np.maximum((weight**2).sum(axis=1), 1e-12), 0.0)
    return Average(beat, weight, np.where(group, np.sqrt(power), np.nan), n_effective)


def _stray_power(
    cuts_mv: NDArray, centre: NDArray, inside: NDArray, inside_n: NDArray
) -> NDArray[np.floating]:
    """(R, K): mean square of each beat about the centre (R, L) over CORE, columns outside the row left out."""
    stray = cuts_mv[:, :, CORE] - centre[:, None, CORE].astype(cuts_mv.dtype)
    power: NDArray[np.floating] = np.einsum("rkl,rkl,rkl->rk", stray, stray, inside)
    return power.astype(np.float64) / inside_n


CORE = slice(ZERO - int(0.30 * FS), ZERO + int(0.45 * FS))


def _mean(cuts: NDArray, valid: NDArray, weight: NDArray) -> NDArray[np.float64]:
    """(R, M, L): weighted means of (R, K, L) under weights (R, M, K), columns outside a row left out."""
    weight = weight.astype(cuts.dtype)
    total = weight @ valid.astype(cuts.dtype)
    return (weight @ cuts) / np.maximum(total, 1e-12)


def _half_samples(k: int) -> NDArray[np.float64]:
    """(REPLICATES, k) of ±1: rows of a Hadamard matrix of order 16 repeated, so that halves are balanced."""
    order = 16
    h = np.array([[1.0]])
    while len(h) < order:
        h = np.block([[h, h], [h, -h]])
    return np.tile(h, (1, int(np.ceil(k / order))))[1 : 1 + REPLICATES, :k] * 1.0
