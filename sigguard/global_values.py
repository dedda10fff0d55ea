"""Global PR, QRS and QT of strips with several leads: one beat list, one set of marks over all leads.

The slope curves of all leads are added under weights that fall with the noise between the beats, so
one lead in trouble takes nothing from the others. The QRS complex is marked on the leads' combined
slope, the P wave by the likelihoods of all leads together, the T wave on the leads' first principal
component.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import uniform_filter1d

from sigguard import averaging, beats, waves
from sigguard.averaging import BeatStack
from sigguard.measure import (
    MIN_P_EXPLAINED,
    MIN_P_RATIO,
    MIN_T_MV,
    MIN_T_RATIO,
    SEEN_MV,
    Prepared,
    Rhythm,
    average_rows,
    prepare,
    rhythm_of,
)
from sigguard.waves import FS, LENGTH, ZERO, PWave, TWave

GLOBAL_FEATURE_NAMES: tuple[str, ...] = (
    "leads_n", "duration_s", "beats_n", "rr_median_s", "rr_spread_ratio", "votes_low_share", "votes_median_share",
    "weakest_kept_ratio", "strongest_left_ratio", "between_ratio", "likeness_median", "likeness_low",
    "averages_effective_n", "snr_best_db", "snr_median_db", "snr_worst_db", "slope_noise_ratio",
    "pr_scatter_ms", "qrs_scatter_ms", "qt_scatter_ms", "pr_reach_ms", "qrs_reach_ms", "qt_reach_ms",
    "p_ratio", "p_explained_ratio", "p_rival_ratio", "p_height_uv", "t_ratio", "t_rival_ratio", "t_fall_uv",
    "pr_found_ms", "qrs_found_ms", "qt_found_ms",
)  # fmt: skip
GLOBAL_QRS_FRACTION = 0.13
LEAD_NORM = 4  # the higher, the more the earliest and the latest lead count
GLOBAL_T_LATER_MS = 12.0  # the second-latest end over the leads lies after that of their common component
P_FLOOR_MV, SLOPE_FLOOR = 0.004, 0.03


@dataclass(frozen=True, slots=True, eq=False)
class GlobalAnalysis:
    """Global values of (S,) strips."""

    value: NDArray[np.float64]  # (S, 3): pr, qrs, qt, ms
    absent: NDArray[np.int8]  # (S, 3): index into segments.ABSENT
    rate_per_min: NDArray[np.float64]  # (S,)
    beat_strip: NDArray[np.intp]  # (B,)
    beat_s: NDArray[np.float64]  # (B,)
    features: NDArray[np.float32]  # (S, G)
    weight: NDArray[np.float64]  # (S, L): how much each lead counted for the QRS, 0 to 1
    marks_ms: NDArray[np.float64]  # (S, 5): P onset, P end, QRS onset, QRS end, T end from the beat
    beat_mv: NDArray[np.float32]  # (S, L, LENGTH): averaged beats about the common beat


def analyse_global(
    x_mv: NDArray[np.floating], fs_hz: float, *, prepared: Prepared | None = None
) -> GlobalAnalysis:
    """Measure strips of equal shape, (S, L, N) millivolts at ``fs_hz``, NaN where missing.

    ``prepared`` may hold what ``measure.prepare`` made of the rows (S·L, N), to save doing it twice.
    """
    n_strips, n_leads, n = x_mv.shape
    each: NDArray[np.float64] = np.asarray(x_mv, dtype=np.float64).reshape(n_strips * n_leads, n)
    ready = prepared or prepare(each, fs_hz)
    strip, at, detail = common_beats(ready.curves, ready.work.fs_work_hz, n_strips, n_leads)
    at, likeness = _align(ready.curves.qrs_mv, ready.work.fs_work_hz, strip, at, n_strips, n_leads)
    rows = (strip[:, None] * n_leads + np.arange(n_leads)).ravel()
    order = np.lexsort((np.repeat(at, n_leads), rows))
    stack = averaging.stack_beats(
        ready.wave_mv, rows[order], np.repeat(at, n_leads)[order], np.repeat(likeness, n_leads)[order]
    )
    rhythm = rhythm_of(strip, at / ready.work.fs_work_hz, n_strips, n / fs_hz)
    return _measure(
        stack, strip, at / ready.work.fs_work_hz, likeness, rhythm, detail, ready, n_leads, n / fs_hz
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Detail:
    weakest_kept: NDArray[np.float64]
    strongest_left: NDArray[np.float64]
    between: NDArray[np.float64]


def common_beats(
    curves: beats.Curves, fs_hz: float, n_strips: int, n_leads: int
) -> tuple[NDArray[np.intp], NDArray[np.float64], _Detail]:
    """(strip, work sample) of the beats seen by all leads together."""
    peaks, between = curves.peaks, curves.between
    relative = curves.slope / np.maximum(peaks.level, 1e-9)[:, None]
    flat = peaks.level < 1e-4
    weight = np.where(flat, 0.0, 1.0 / (between + 0.05) ** 2).reshape(n_strips, n_leads)
    weight = weight / np.maximum(weight.sum(axis=1, keepdims=True), 1e-12)
    together = np.einsum("sl,sln->sn", weight, np.minimum(relative, 3.0).reshape(n_strips, n_leads, -1))
    sharp = np.einsum(
        "sl,sln->sn",
        weight,
        (curves.sharp / np.maximum(peaks.level, 1e-9)[:, None]).reshape(n_strips, n_leads, -1),
    )
    at, row, detail = _pick(together, sharp, fs_hz)
    return row, at, detail


def _pick(together: NDArray, sharp: NDArray, fs_hz: float) -> tuple[NDArray, NDArray, _Detail]:
    peaks = beats.candidates(together, fs_hz)
    strength = peaks.height / np.maximum(peaks.level, 1e-9)[peaks.row]
    relative = together / np.maximum(peaks.level, 1e-9)[:, None]
    between = beats.level_between(relative, peaks.row, peaks.at, strength >= 0.6, int(0.12 * fs_hz))
    threshold = np.clip(4.0 * between, 0.28, 0.7)
    keep = beats.separate(
        peaks, strength, sharp[peaks.row, peaks.at], fs_hz, strength >= threshold[peaks.row]
    )
    keep = beats.search_back(peaks, strength, fs_hz, keep, threshold)
    margin = strength / threshold[peaks.row]
    weakest, left = np.full(len(together), 9.0), np.zeros(len(together))
    np.minimum.at(weakest, peaks.row[keep], margin[keep])
    np.maximum.at(left, peaks.row[~keep], margin[~keep])
    return peaks.at[keep].astype(float), peaks.row[keep], _Detail(weakest, left, between)


def _align(
    qrs_mv: NDArray[np.floating],
    fs_hz: float,
    strip: NDArray[np.intp],
    at: NDArray[np.float64],
    n_strips: int,
    n_leads: int,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """(refined work samples, likeness to the typical complex) over all leads' QRS bands laid end to end."""
    if not len(at):
        return at, np.zeros(0)
    half, reach = int(0.08 * fs_hz), int(0.04 * fs_hz)
    qrs_mv = qrs_mv.reshape(n_strips, n_leads, -1)
    columns = np.clip(
        at.astype(np.intp)[:, None] + np.arange(-half - reach, half + reach + 1), 0, qrs_mv.shape[2] - 1
    )
    wide = qrs_mv[strip[:, None, None], np.arange(n_leads)[None, :, None], columns[:, None, :]]
    length = 2 * half + 1
    likeness = np.zeros(len(at))
    fine = np.zeros(len(at))
    shift = np.full(len(at), reach)
    for _ in range(2):
        cuts = np.take_along_axis(wide, (shift[:, None] + np.arange(length))[:, None, :], axis=2)
        shape = beats.typical_complex(cuts.reshape(len(at), -1), strip, n_strips).reshape(
            n_strips, n_leads, length
        )
        windows = np.lib.stride_tricks.sliding_window_view(wide, length, axis=2)
        dot = np.einsum("blsw,blw->bs", windows, shape[strip], optimize=True)
        power = np.einsum("blsw,blsw->bs", windows, windows, optimize=True)
        norm = np.sqrt(np.maximum(power, 1e-18)) * np.sqrt((shape**2).sum(axis=(1, 2)))[strip][:, None]
        corr = dot / np.maximum(norm, 1e-12)
        shift = corr.argmax(axis=1)
        likeness, fine = beats.parabola_top(corr, shift)
    return at + np.where(likeness >= 0.5, shift - reach + fine, 0.0), likeness


def _measure(
    stack: BeatStack,
    strip: NDArray[np.intp],
    beat_s: NDArray[np.float64],
    likeness: NDArray[np.float64],
    rhythm: Rhythm,
    detail: _Detail,
    ready: Prepared,
    n_leads: int,
    duration_s: float,
) -> GlobalAnalysis:
    n_strips = len(rhythm.count)
    group = averaging.dominant(stack)
    mean, _ = average_rows(stack, group)
    m = mean.beat_mv.shape[1]
    beat = mean.beat_mv.reshape(n_strips, n_leads, m, LENGTH)
    slope = waves.slope_uv_ms(beat.reshape(-1, LENGTH)).reshape(beat.shape)
    noise = np.median(np.sqrt(((slope[:, :, 1:] - slope[:, :, :1]) ** 2).mean(axis=2)), axis=2)
    core = np.sort(slope[:, :, 0, ZERO - 25 : ZERO + 26], axis=2)[:, :, -5:].mean(axis=2)
    ratio = noise / np.maximum(core, 1e-9)
    weight = np.where(core > 1e-4, 1.0 / (1.0 + (ratio / SLOPE_FLOOR) ** 2), 0.0)
    share = weight / np.maximum(weight.sum(axis=1, keepdims=True), 1e-12)
    scaled = slope / np.maximum(core, 1e-6)[:, :, None, None]
    # In a norm of high order even a small share of a loud lead is heard: here its weight goes in squared.
    loud = weight**2 / np.maximum((weight**2).sum(axis=1, keepdims=True), 1e-12)
    combined = np.einsum("sl,slmc->smc", loud, scaled**LEAD_NORM) ** (1 / LEAD_NORM)
    floor = np.sqrt((share * ratio**2).sum(axis=1))
    spread = floor[:, None] * np.concatenate([[1.0], np.full(m - 1, np.sqrt(2.0))])
    on, off = waves.qrs_edges(combined.reshape(-1, LENGTH), spread.ravel(), fraction=GLOBAL_QRS_FRACTION)
    rr_ms = np.repeat(np.nan_to_num(rhythm.rr_median_s, nan=0.8) * 1000, m)
    t, t_error, t_fall = _common_t(beat, on, off, rr_ms, noise)
    p, p_ratio = _common_p(beat, on, waves.p_reach_ms(rr_ms, on, t.off_ms))
    value = np.stack([on - p.on_ms, off - on, t.off_ms + GLOBAL_T_LATER_MS - on], axis=1).reshape(
        n_strips, m, 3
    )
    columns = _columns(
        value, p, p_ratio, t, t_fall, t_error, rhythm, detail, stack, mean, weight, ready, n_leads
    )
    columns |= {
        "duration_s": np.full(n_strips, duration_s),
        "likeness_median": _by_strip(likeness, strip, n_strips, 0.5),
        "likeness_low": _by_strip(likeness, strip, n_strips, 0.1),
        "slope_noise_ratio": floor,
    }
    shown, absent = _presence(value[:, 0], columns, rhythm)
    edges = np.stack([p.on_ms, p.off_ms, on, off, t.off_ms], axis=1).reshape(n_strips, m, 5)[:, 0]
    return GlobalAnalysis(
        shown,
        absent,
        rhythm.rate_per_min,
        strip,
        beat_s,
        np.column_stack([columns[name] for name in GLOBAL_FEATURE_NAMES]).astype(np.float32),
        weight,
        np.where(np.isfinite(shown[:, [0, 0, 1, 1, 2]]), edges, np.nan),
        beat[:, :, 0].astype(np.float32),
    )


def _common_p(beat: NDArray, on: NDArray, reach_ms: NDArray) -> tuple[PWave, NDArray[np.float64]]:
    """(P wave of (S·M,) from all leads' likelihoods, height over error (S,))."""
    n_strips, n_leads, m, _ = beat.shape
    by_lead = np.repeat(on.reshape(n_strips, 1, m), n_leads, axis=1)
    reach_by_lead = np.repeat(reach_ms.reshape(n_strips, 1, m), n_leads, axis=1)
    project, energy = waves.p_projections(beat.reshape(-1, LENGTH), by_lead.ravel(), reach_by_lead.ravel())
    project = project.reshape(n_strips, n_leads, m, -1)
    error2 = ((project[:, :, 1:] - project[:, :, :1]) ** 2).mean(axis=2)  # (S, L, A)
    error2 = np.median(error2, axis=2)
    worth = 1.0 / (error2 + np.float32(P_FLOOR_MV**2))
    score = np.einsum("sl,slma->sma", worth, project**2).reshape(n_strips * m, -1)
    total = np.einsum("sl,slm->sm", worth, energy.reshape(n_strips, n_leads, m)).ravel()
    strongest = (worth * project[:, :, 0].max(axis=2) ** 2).argmax(axis=1)
    lead = project[np.arange(n_strips), strongest].reshape(n_strips * m, -1)
    p = waves.p_wave(lead, total, on, reach_ms, score=score)
    best = score.reshape(n_strips, m, -1)[:, 0].max(axis=1)
    return p, np.sqrt(best / n_leads)


def _common_t(
    beat: NDArray, on: NDArray, off: NDArray, rr_ms: NDArray, noise: NDArray
) -> tuple[TWave, NDArray[np.float64], NDArray[np.float64]]:
    """(T wave of (S·M,) on the first principal component, its error and fall (S,))."""
    n_strips, n_leads, m, _ = beat.shape
    flat = beat.reshape(-1, LENGTH)
    smooth = uniform_filter1d(uniform_filter1d(flat, waves.T_SMOOTH, axis=1), waves.T_SMOOTH, axis=1)
    smooth = smooth.reshape(beat.shape)
    off_of = off.reshape(n_strips, m)[:, 0]
    first = ZERO + np.rint((off_of + 72) * FS / 1000).astype(np.intp)
    limit = waves.t_limit_ms(rr_ms, on).reshape(n_strips, m)[:, 0]
    last = ZERO + np.rint(limit * FS / 1000).astype(np.intp)
    column = np.arange(LENGTH)
    inside = (column >= first[:, None]) & (column <= np.maximum(last, first + 10)[:, None])
    quiet = 1.0 / (noise + np.median(noise, axis=1, keepdims=True) + 1e-6)
    window = np.where(inside[:, None], smooth[:, :, 0], 0.0) * quiet[:, :, None]
    _, _, axes = np.linalg.svd(np.einsum("slc,skc->slk", window, window))
    direction = axes[:, 0] * quiet
    direction /= np.maximum(np.sqrt((direction**2).sum(axis=1, keepdims=True)), 1e-12)
    single = np.einsum("sl,slmc->smc", direction, smooth).reshape(-1, LENGTH)
    raw = np.einsum("sl,slmc->smc", direction, beat).reshape(-1, LENGTH)
    place = np.clip(ZERO + waves.onset_column(on)[:, None] + np.arange(-5, 0), 0, LENGTH - 1)
    pq = np.take_along_axis(raw, place, axis=1).mean(axis=1)
    t = waves.t_wave(single, off, waves.t_limit_ms(rr_ms, on), pq, rr_ms)
    fall = t.fall_mv.reshape(n_strips, m)
    usable = np.where(np.isfinite(fall), fall, 0.0)
    return t, np.sqrt(((usable[:, 1:] - usable[:, :1]) ** 2).mean(axis=1)), usable[:, 0]


def _presence(
    value: NDArray[np.float64], columns: dict[str, NDArray], rhythm: Rhythm
) -> tuple[NDArray[np.float64], NDArray[np.int8]]:
    absent = np.zeros(value.shape, dtype=np.int8)
    shown = np.where((rhythm.count >= 1)[:, None], value, np.nan)
    clear = (columns["p_ratio"] >= MIN_P_RATIO) & (columns["p_explained_ratio"] >= MIN_P_EXPLAINED)
    quiet = (
        (rhythm.count >= 3)
        & (columns["averages_effective_n"] >= 3)
        & (columns["p_error_uv"] * 3 < SEEN_MV * 1e3)
    )
    shown[~clear, 0] = np.nan
    absent[quiet & ~clear, 0] = 1
    has_t = (
        (columns["t_fall_uv"] >= MIN_T_MV * 1e3)
        & (columns["t_ratio"] >= MIN_T_RATIO)
        & np.isfinite(value[:, 2])
    )
    shown[~has_t, 2] = np.nan
    return shown, absent


def _by_strip(values: NDArray, strip: NDArray, n_strips: int, share: float) -> NDArray[np.float64]:
    out = np.full(n_strips, np.nan)
    for s in np.unique(strip):
        out[s] = np.quantile(values[strip == s], share)
    return out


def _columns(
    value: NDArray,
    p: PWave,
    p_ratio: NDArray,
    t: TWave,
    t_fall: NDArray,
    t_error: NDArray,
    rhythm: Rhythm,
    detail: _Detail,
    stack: BeatStack,
    mean: averaging.Average,
    weight: NDArray,
    ready: Prepared,
    n_leads: int,
) -> dict[str, NDArray]:
    n_strips, m, _ = value.shape
    change = np.abs(np.where(np.isfinite(value[:, 1:]), value[:, 1:], value[:, :1] + 1e3) - value[:, :1])
    change = np.nan_to_num(change, nan=1e3)
    scatter, reach = np.sqrt((change**2).mean(axis=1)), change.max(axis=1)
    pp = np.ptp(mean.beat_mv[:, 0, ZERO - 20 : ZERO + 21], axis=1)
    stray = averaging.masked_median(
        np.nan_to_num(mean.stray_mv)[:, :, None], np.isfinite(mean.stray_mv)[:, :, None]
    )[:, 0]
    snr = 10 * np.log10(np.maximum(pp**2 / 8, 1e-12) / np.maximum(stray**2, 1e-9)).reshape(n_strips, n_leads)
    votes = _votes(stack, ready, n_strips, n_leads)
    height = np.abs(p.amp_mv.reshape(n_strips, m)[:, 0]) * 1e3

    def first(values: NDArray) -> NDArray:
        return values.reshape(n_strips, m)[:, 0]

    return {
        "leads_n": np.full(n_strips, float(n_leads)),
        "beats_n": rhythm.count,
        "rr_median_s": rhythm.rr_median_s,
        "rr_spread_ratio": rhythm.rr_spread,
        "votes_low_share": votes[:, 0],
        "votes_median_share": votes[:, 1],
        "weakest_kept_ratio": detail.weakest_kept,
        "strongest_left_ratio": detail.strongest_left,
        "between_ratio": detail.between,
        "averages_effective_n": np.median(mean.n_effective.reshape(n_strips, n_leads), axis=1),
        "snr_best_db": snr.max(axis=1),
        "snr_median_db": np.median(snr, axis=1),
        "snr_worst_db": snr.min(axis=1),
        "pr_scatter_ms": scatter[:, 0],
        "qrs_scatter_ms": scatter[:, 1],
        "qt_scatter_ms": scatter[:, 2],
        "pr_reach_ms": reach[:, 0],
        "qrs_reach_ms": reach[:, 1],
        "qt_reach_ms": reach[:, 2],
        "p_ratio": p_ratio,
        "p_explained_ratio": first(p.explained),
        "p_rival_ratio": first(p.rival),
        "p_height_uv": height,
        "p_error_uv": height / np.maximum(p_ratio, 1e-3),
        "t_ratio": t_fall / np.maximum(t_error, 1e-4),
        "t_rival_ratio": first(t.rival),
        "t_fall_uv": t_fall * 1e3,
        "pr_found_ms": value[:, 0, 0],
        "qrs_found_ms": value[:, 0, 1],
        "qt_found_ms": value[:, 0, 2],
    }


def _votes(stack: BeatStack, ready: Prepared, n_strips: int, n_leads: int) -> NDArray[np.float64]:
    """(S, 2): over the leads, the least and the median agreement of a lead's own beats with the common ones."""
    present = stack.present
    row, slot = np.nonzero(present)
    common = beats.agreement(
        len(present),
        row,
        stack.at[row, slot] / ready.work.fs_work_hz,
        ready.found.row,
        ready.found.at / ready.work.fs_work_hz,
    ).reshape(n_strips, n_leads)
    return np.stack([common.min(axis=1), np.median(common, axis=1)], axis=1)
