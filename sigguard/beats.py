"""Finding heart beats in many rows at once.

Two detectors that share nothing but the samples: ``slope`` works on the envelope of the 5–22 Hz
band, ``length`` on the curve length of the signal below 16 Hz (after Zong, Moody and Jiang 2003).
Their agreement is a quality index (bSQI, Li, Mark and Clifford 2008). The beats that are used
come from ``slope`` and are then weighed against the row's own typical QRS complex.

Thresholds come from the whole row at once, not from what came before: the reference is the
median over stretches of about a second of the highest value in each, so that a short excursion of ten times
the QRS raises it nowhere.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import maximum_filter1d, uniform_filter1d

from sigguard.beat_judge import Seen, candidate_features
from sigguard.filters import RowTransform, band_pass, high_pass, low_pass

REFRACTORY_S = 0.2
QUIET = (0.06, 0.15)  # level between the beats: below the rule is trusted, above the judge
SURE_AGAINST = 0.05
MATCH_S = 0.15  # ANSI/AAMI EC57
QRS_BAND_HZ = (4.0, 25.0)
STANDS_OUT, LEFT_SHARE = 1.3, 0.75
SHAPE_COUNTS = (0.2, 3.0)  # how much likeness to the typical complex weighs: at rest, and more with the noise


Judge = Callable[[NDArray[np.float64]], NDArray[np.float64]]


@dataclass(frozen=True, slots=True, eq=False)
class Candidates:
    """Local peaks of a detection function, flat over rows and sorted by row, then time."""

    row: NDArray[np.intp]
    at: NDArray[np.intp]  # work samples
    height: NDArray[np.float64]
    level: NDArray[np.float64]  # (R,): the row's typical QRS height


def local_peaks(curve: NDArray[np.float64], reach: int) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """(row, column) of the samples of (R, n) that are the highest within ±reach and above zero."""
    top = maximum_filter1d(curve, 2 * reach + 1, axis=1, mode="constant")
    row, at = np.nonzero((curve == top) & (curve > 0))
    # Equal neighbours on a plateau: the first one stands for all.
    if len(row):
        first = np.ones(len(row), dtype=bool)
        first[1:] = (np.diff(row) != 0) | (np.diff(at) > reach)
        row, at = row[first], at[first]
    return row, at


def typical_height(curve: NDArray[np.float64], fs_hz: float, stretch_s: float = 1.2) -> NDArray[np.float64]:
    """(R,): median over stretches of the highest value in each; stretches that hold no beat are few."""
    n = curve.shape[1]
    count = max(1, int(round(n / (stretch_s * fs_hz))))
    edges = np.linspace(0, n, count + 1).astype(int)[:-1]
    tops = np.maximum.reduceat(curve, edges, axis=1)
    if count < 4:
        return tops.max(axis=1) if count < 3 else np.median(tops, axis=1)
    return np.median(tops, axis=1)


def slope_curve(work: RowTransform) -> NDArray[np.float64]:
    """Envelope of the 5–22 Hz band, mV, smoothed over 60 ms."""
    env = work.envelope(band_pass(work.freq_hz, 6.0, 22.0, low_order=2, high_order=3))
    return uniform_filter1d(env, max(3, int(0.06 * work.fs_work_hz)), axis=1, mode="nearest")


def length_curve(smooth_mv: NDArray[np.floating], fs_hz: float) -> NDArray[np.float64]:
    """Curve length over 130 ms of (R, n) rows low-passed at 16 Hz (Zong, Moody and Jiang 2003)."""
    step = np.abs(np.diff(smooth_mv, axis=1, prepend=smooth_mv[:, :1]))
    return uniform_filter1d(step, max(3, int(0.13 * fs_hz)), axis=1, mode="nearest") * int(0.13 * fs_hz)


def length_band(work: RowTransform) -> NDArray[np.floating]:
    """Rows as the ``length`` detector wants them, 1 to 16 Hz."""
    return work.band(high_pass(work.freq_hz, 1.0) * low_pass(work.freq_hz, 16.0, 3))


def candidates(curve: NDArray[np.float64], fs_hz: float) -> Candidates:
    """Peaks of a detection function at least REFRACTORY_S apart."""
    row, at = local_peaks(curve, int(0.5 * REFRACTORY_S * fs_hz))
    return Candidates(row, at, curve[row, at], typical_height(curve, fs_hz))


@dataclass(frozen=True, slots=True, eq=False)
class Beats:
    """Beats of (R, n) rows, flat and sorted; ``at`` in work samples, fractional."""

    row: NDArray[np.intp]
    at: NDArray[np.float64]
    likeness: NDArray[np.float64]  # correlation of each with its row's typical complex
    height: NDArray[np.floating]  # relative to the row's typical height
    weakest_kept: NDArray[np.float64]  # (R,) strength of the least beat, relative to the threshold
    strongest_left: NDArray[np.float64]  # (R,) strength of the best candidate that is no beat, likewise
    between: NDArray[np.float64]  # (R,) level between the strong peaks over the typical height
    least_chance: NDArray[
        np.float64
    ]  # (R,) the judge's probability of the beat it believes least; 1 without one
    best_left: NDArray[np.float64]  # (R,) its probability of the best candidate left out; 0 without one


def complexes(qrs_mv: NDArray[np.floating], row: NDArray, at: NDArray, half: int) -> NDArray[np.float64]:
    """(n_beats, 2*half+1) cut-outs of (R, n) rows; columns outside a row repeat its edge."""
    columns = np.clip(at[:, None] + np.arange(-half, half + 1), 0, qrs_mv.shape[1] - 1)
    return qrs_mv[row[:, None], columns]


def typical_complex(cuts: NDArray, row: NDArray, n_rows: int) -> NDArray[np.float64]:
    """(R, L): the mean, after scaling to unit energy, of the cut-outs that most others resemble.

    Rows without cut-outs get zeros. The seed is the cut-out with the highest median absolute
    correlation to the rest; those that correlate with it at 0.7 or more are averaged.
    """
    unit = cuts / np.maximum(np.sqrt((cuts**2).sum(axis=1, keepdims=True)), 1e-12)
    count = np.bincount(row, minlength=n_rows)
    out = np.zeros((n_rows, cuts.shape[1]), dtype=cuts.dtype)
    if not len(row):
        return out
    k_max = int(count.max())
    start = np.concatenate([[0], np.cumsum(count)[:-1]])
    slot = np.arange(len(row)) - start[row]
    stacked = np.zeros((n_rows, k_max, cuts.shape[1]), dtype=cuts.dtype)
    stacked[row, slot] = unit
    present = np.zeros((n_rows, k_max), dtype=bool)
    present[row, slot] = True
    alike = stacked @ stacked.transpose(0, 2, 1)
    both = present[:, :, None] & present[:, None, :]
    # Median over the others, from a sort that puts absent pairs last.
    ranked = np.sort(np.where(both, -alike, np.inf), axis=2)
    middle = np.clip((count - 1) // 2, 0, None)
    typical = np.where(present, -np.take_along_axis(ranked, middle[:, None, None], axis=2)[:, :, 0], -np.inf)
    seed = typical.argmax(axis=1)
    like_seed = alike[np.arange(n_rows), seed]
    weight = np.where(present & (like_seed >= 0.7), 1.0, 0.0)
    return np.einsum("rk,rkl->rl", weight, stacked) / np.maximum(weight.sum(axis=1, keepdims=True), 1.0)


def best_likeness(
    qrs_mv: NDArray[np.floating], row: NDArray, at: NDArray, shape: NDArray[np.float64], reach: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """(correlation, shift) of each candidate with its row's typical complex at the best shift within ±reach.

    The shift is in work samples, refined by a parabola through the best three.
    """
    length = shape.shape[1]
    half = length // 2
    wide = complexes(qrs_mv, row, at, half + reach)
    windows = np.lib.stride_tricks.sliding_window_view(wide, length, axis=1)
    dot = np.einsum("bsl,bl->bs", windows, shape[row], optimize=True)
    power = np.cumsum(np.pad(wide**2, ((0, 0), (1, 0))), axis=1)
    power = power[:, length:] - power[:, :-length]
    norm = np.sqrt(np.maximum(power, 1e-18)) * np.sqrt((shape**2).sum(axis=1))[row][:, None]
    corr = dot / np.maximum(norm, 1e-12)
    best = corr.argmax(axis=1)
    top, fine = parabola_top(corr, best)
    return top, best - reach + fine


def parabola_top(
    curve: NDArray[np.float64], best: NDArray[np.intp]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """(value at ``best``, offset of the vertex of the parabola through it and its neighbours), (R,) each."""
    here = np.arange(len(curve))
    left, mid, right = (curve[here, np.clip(best + d, 0, curve.shape[1] - 1)] for d in (-1, 0, 1))
    bend = left - 2 * mid + right
    inner = (best > 0) & (best < curve.shape[1] - 1) & (bend < -1e-12)
    return mid, np.where(inner, 0.5 * (left - right) / np.where(inner, bend, -1.0), 0.0)


@dataclass(frozen=True, slots=True, eq=False)
class Curves:
    """What both the search in each lead and the one over all leads start from, (R, n) at the work rate."""

    slope: NDArray[np.floating]  # detection function
    sharp: NDArray[np.floating]  # envelope of the 12–40 Hz band
    qrs_mv: NDArray[np.floating]
    peaks: Candidates  # of ``slope``
    height: NDArray[np.floating]  # of each peak, over the row's typical height
    between: NDArray[np.float64]  # (R,) level between the strong peaks, over the typical height


def detection_curves(work: RowTransform) -> Curves:
    """Detection function, its peaks and the bands that describe them."""
    fs_hz = work.fs_work_hz
    slope = slope_curve(work)
    peaks = candidates(slope, fs_hz)
    level = np.maximum(peaks.level, 1e-9)
    height = peaks.height / level[peaks.row]
    sharp = uniform_filter1d(work.envelope(band_pass(work.freq_hz, 12.0, 40.0)), 15, axis=1)
    qrs_mv = work.band(band_pass(work.freq_hz, *QRS_BAND_HZ))
    between = level_between(slope / level[:, None], peaks.row, peaks.at, height >= 0.6, int(0.12 * fs_hz))
    return Curves(slope, sharp, qrs_mv, peaks, height, between)


def find_beats(work: RowTransform, judge: Judge | None = None, *, curves: Curves | None = None) -> Beats:
    """Beats of all rows: candidates of the ``slope`` detector, weighed by rule and, in noise, by ``judge``.

    ``judge`` gives the probability that each of some described candidates is a beat (see beat_judge);
    without it the rule stands alone. Where it is quiet the rule's beats are dropped only if the judge
    is nearly sure against them: an odd complex in a clean row is more likely ectopy than noise. Flat
    rows give none.
    """
    seen, threshold, shift = survey(work, curves or detection_curves(work))
    keep = seen.kept
    if judge is not None and len(seen.row):
        chance = judge(candidate_features(seen))
        doubt = np.clip((seen.between - QUIET[0]) / (QUIET[1] - QUIET[0]), 0.0, 1.0)[seen.row]
        asked = np.where(keep, SURE_AGAINST + (0.5 - SURE_AGAINST) * doubt, 0.5)
        keep = apart(seen, chance, chance >= asked)
    # A complex that resembles the typical one is timed by it; any other by its own energy.
    at = seen.at.astype(np.float64) + np.where(seen.likeness >= 0.7, shift, 0.0)
    margin = seen.strength / threshold[seen.row]
    weakest, left = np.full(len(seen.between), 9.0), np.zeros(len(seen.between))
    np.minimum.at(weakest, seen.row[keep], margin[keep])
    np.maximum.at(left, seen.row[~keep], margin[~keep])
    least, most = np.ones(len(seen.between)), np.zeros(len(seen.between))
    if judge is not None and len(seen.row):
        np.minimum.at(least, seen.row[keep], chance[keep])
        np.maximum.at(most, seen.row[~keep], chance[~keep])
    return Beats(
        seen.row[keep],
        at[keep],
        seen.likeness[keep],
        seen.height[keep],
        weakest,
        left,
        seen.between,
        least,
        most,
    )


def survey(work: RowTransform, curves: Curves) -> tuple[Seen, NDArray[np.float64], NDArray[np.float64]]:
    """(all candidates as described for a judge, threshold of each row, shift to the typical complex of each).

    The rule's threshold rises with the level of what lies between the strong peaks, so that noise of
    the same band does not turn into beats.
    """
    fs_hz = work.fs_work_hz
    peaks, height, qrs_mv, between = curves.peaks, curves.height, curves.qrs_mv, curves.between
    n_rows, n_work = curves.slope.shape
    seeds = height >= 0.5
    cuts = complexes(qrs_mv, peaks.row, peaks.at, int(0.08 * fs_hz))
    shape = typical_complex(cuts[seeds], peaks.row[seeds], n_rows)
    likeness, shift = best_likeness(qrs_mv, peaks.row, peaks.at, shape, int(0.04 * fs_hz))
    # Where it is quiet an odd shape is believed (ectopy); the noisier, the more a beat must look like one.
    by_shape = np.clip(SHAPE_COUNTS[0] + SHAPE_COUNTS[1] * between, 0.0, 0.7)[peaks.row]
    strength = np.minimum(height, 3.0) * (1.0 - by_shape * (1.0 - np.clip(likeness, 0, 1)))
    # A T wave has little in the 12–40 Hz band.
    sharp = maximum_filter1d(curves.sharp, 25, axis=1)[peaks.row, peaks.at]
    threshold = np.clip(4.0 * between, 0.28, 0.7)
    keep = separate(peaks, strength, sharp, fs_hz, strength >= threshold[peaks.row])
    keep = search_back(peaks, strength, fs_hz, keep, threshold)
    length = maximum_filter1d(length_curve(length_band(work), fs_hz), 25, axis=1)[peaks.row, peaks.at]
    seen = Seen(
        peaks.row,
        peaks.at,
        height,
        sharp,
        length,
        likeness,
        strength,
        keep,
        cuts,
        between,
        n_work,
        fs_hz,
    )
    return seen, threshold, shift


def apart(seen: Seen, chance: NDArray[np.float64], keep: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Of two kept candidates within the refractory time the less likely goes."""
    keep = keep.copy()
    for _ in range(6):
        index = np.flatnonzero(keep)
        a, b = index[:-1], index[1:]
        close = (seen.row[a] == seen.row[b]) & ((seen.at[b] - seen.at[a]) < REFRACTORY_S * seen.fs_hz)
        if not close.any():
            break
        weaker, stronger = (
            np.where(chance[a] < chance[b], a, b)[close],
            np.where(chance[a] < chance[b], b, a)[close],
        )
        beaten = np.zeros(len(keep), dtype=bool)
        beaten[weaker] = True
        drop = weaker[~beaten[stronger]]
        keep[drop if len(drop) else weaker[:1]] = False
    return keep


def level_between(
    relative: NDArray, row: NDArray, at: NDArray, strong: NDArray, reach: int
) -> NDArray[np.float64]:
    """(R,): median of a detection function away from its strong peaks; 0 where nothing is away."""
    near = np.zeros(relative.shape, dtype=np.uint8)
    near[row[strong], at[strong]] = 1
    near = maximum_filter1d(near, 2 * reach + 1, axis=1)
    # Sorting with the near samples pushed to the end gives a median without NaN bookkeeping.
    ranked = np.sort(np.where(near > 0, np.inf, relative), axis=1)
    count = (near == 0).sum(axis=1)
    middle = ranked[np.arange(len(ranked)), np.maximum(count // 2 - 1, 0)]
    return np.where(count > 0, middle, 0.0)


def separate(
    peaks: Candidates, strength: NDArray, sharp: NDArray, fs_hz: float, keep: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """Of two candidates that stand too close the lesser goes, unless both may well be beats."""
    keep = keep.copy()
    for _ in range(6):
        index = np.flatnonzero(keep)
        if len(index) < 2:
            break
        a, b = index[:-1], index[1:]
        gap = np.where(peaks.row[a] == peaks.row[b], (peaks.at[b] - peaks.at[a]) / fs_hz, np.inf)
        second_weaker = strength[a] > strength[b]
        weaker, stronger = np.where(second_weaker, b, a), np.where(second_weaker, a, b)
        ratio = strength[weaker] / np.maximum(strength[stronger], 1e-12)
        blunt = sharp[weaker] < 0.5 * sharp[stronger]
        clash = (gap < REFRACTORY_S) | ((gap < 0.26) & (ratio < 0.9))
        clash |= second_weaker & blunt & (gap < 0.36) & (ratio < 0.65)
        if not clash.any():
            break
        # A candidate beaten by one that is itself beaten waits for the next round.
        beaten = np.zeros(len(keep), dtype=bool)
        beaten[weaker[clash]] = True
        drop = weaker[clash & ~beaten[stronger]]
        keep[drop if len(drop) else weaker[clash][:1]] = False
    return keep


def search_back(
    peaks: Candidates, strength: NDArray, fs_hz: float, keep: NDArray[np.bool_], threshold: NDArray
) -> NDArray[np.bool_]:
    """In a gap of 1.5 times the usual interval the strongest candidate above half the threshold may come in.

    It must stand out from what else was left out, as P waves and fibrillation waves in a pause do not.
    """
    index = np.flatnonzero(keep)
    out = keep.copy()
    if len(index) < 4:
        return out
    gap = np.where(np.diff(peaks.row[index]) == 0, np.diff(peaks.at[index]), -1)
    padded = np.pad(np.where(gap > 0, gap, np.nan).astype(float), 4, constant_values=np.nan)
    near = np.lib.stride_tricks.sliding_window_view(padded, 9)
    ranked = np.sort(near, axis=1)  # NaN last
    count = np.isfinite(near).sum(axis=1)
    usual = ranked[np.arange(len(near)), np.maximum((count - 1) // 2, 0)]
    common = _common_left(peaks, strength, keep)
    for i in np.flatnonzero((gap > 1.5 * usual) & (count >= 3)):
        first, last = index[i], index[i + 1]
        between = np.arange(first + 1, last)
        if not len(between):
            continue
        late = (peaks.at[between] - peaks.at[first]) / fs_hz > 0.36
        early = (peaks.at[last] - peaks.at[between]) / fs_hz > 0.30
        least = max(0.5 * threshold[peaks.row[first]], STANDS_OUT * common[peaks.row[first]])
        fit = between[late & early & (strength[between] > least)]
        if len(fit):
            out[fit[strength[fit].argmax()]] = True
    return out


def _common_left(peaks: Candidates, strength: NDArray, keep: NDArray[np.bool_]) -> NDArray[np.float64]:
    """(R,): the strength that a fifth of the candidates left out reach; 0 where none was left out."""
    left = np.flatnonzero(~keep)
    row = peaks.row[left]
    count = np.bincount(row, minlength=len(peaks.level))
    order = left[np.lexsort((strength[left], row))]
    start = np.concatenate([[0], np.cumsum(count)[:-1]])
    place = np.minimum(start + (LEFT_SHARE * count).astype(np.intp), max(len(order) - 1, 0))
    return np.where(count > 0, strength[order[place]], 0.0) if len(order) else np.zeros(len(peaks.level))


def agreement(
    n_rows: int, row_a: NDArray, t_a: NDArray, row_b: NDArray, t_b: NDArray, window_s: float = MATCH_S
) -> NDArray[np.float64]:
    """bSQI, (n_rows,): matched / (n_a + n_b - matched) within ±window_s (Li, Mark and Clifford 2008); 0 for none.

    Inputs are flat, sorted by row and time, seconds.
    """
    count_a, count_b = np.bincount(row_a, minlength=n_rows), np.bincount(row_b, minlength=n_rows)
    if not len(t_a) or not len(t_b):
        return np.zeros(n_rows)
    span = max(t_a.max(), t_b.max()) + 10 * window_s
    key_a, key_b = row_a * span + t_a, row_b * span + t_b
    nearest = (
        np.clip(np.searchsorted(key_b, key_a), 1, len(key_b) - 1)
        if len(key_b) > 1
        else np.zeros(len(key_a), int)
    )
    before = np.maximum(nearest - 1, 0)
    pick = np.where(np.abs(key_b[before] - key_a) <= np.abs(key_b[nearest] - key_a), before, nearest)
    hit = np.abs(key_b[pick] - key_a) <= window_s
    # One of b serves one of a.
    hit &= np.concatenate([[True], ~((pick[1:] == pick[:-1]) & hit[:-1])])
    matched = np.bincount(row_a[hit], minlength=n_rows)
    return matched / np.maximum(count_a + count_b - matched, 1)


def length_beats(work: RowTransform) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """(row, work sample) of the beats that the ``length`` detector finds by itself."""
    peaks = candidates(length_curve(length_band(work), work.fs_work_hz), work.fs_work_hz)
    strength = peaks.height / np.maximum(peaks.level, 1e-9)[peaks.row]
    keep = separate(peaks, strength, np.ones(len(strength)), work.fs_work_hz, strength >= 0.5)
    return peaks.row[keep], peaks.at[keep]
