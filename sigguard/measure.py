"""The measuring procedure: from the samples of many rows to values, beats and features, in one pass.

Per row: fill gaps, transform once, find beats, average the dominant shape, mark its waves, read rate,
PR, QRS, QT and ST, and describe how well all that could be done. The same steps run on the
half-sample replicates of the average, whose scatter tells how far each mark may be off.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import uniform_filter1d

from sigguard import averaging, beats, waves
from sigguard.averaging import Average, BeatStack
from sigguard.beat_judge import shipped_judge
from sigguard.features import FEATURE_NAMES, row_features
from sigguard.filters import RowTransform, high_pass, low_pass, transform_rows
from sigguard.noise import MAINS_HZ, fill_gaps
from sigguard.waves import FS, LENGTH, ZERO, PWave, TWave

__all__ = [
    "FEATURE_NAMES",
    "Analysis",
    "Marks",
    "Prepared",
    "Rhythm",
    "analyse",
    "average_rows",
    "mark_waves",
    "prepare",
    "rhythm_of",
]

WAVE_BAND_HZ = (0.5, 35.0)  # 0.5 Hz forwards and backwards is within Kligfield et al. 2007 (0.67 Hz)
CHUNK_ROWS = 48  # keeps the work of one pass within the cache and its memory flat
MIN_P_MV, MIN_P_RATIO, MIN_P_EXPLAINED = 0.015, 4.0, 0.40
STEADY_P_RATIO, STEADY_PR_MS = (
    3.0,
    12.0,
)  # a weaker P wave counts if all halves of the beats put it at one place
MIN_T_MV, MIN_T_RATIO = 0.03, 3.2
SEEN_MV = 0.04  # a wave of this height would have been seen if three standard errors stay below it


@dataclass(frozen=True, slots=True, eq=False)
class Rhythm:
    """Intervals of (R,) rows in seconds; NaN where there are too few beats."""

    count: NDArray[np.float64]
    rr_median_s: NDArray[np.float64]
    rr_min_s: NDArray[np.float64]
    rr_max_s: NDArray[np.float64]
    rr_spread: NDArray[np.float64]  # median absolute successive difference over the median
    longest_gap_s: NDArray[np.float64]  # row edges count as ends of a gap
    rate_per_min: NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Marks:
    """Marks and levels of (R, M) averaged beats: the average in column 0, its replicates after."""

    on_ms: NDArray[np.float64]
    off_ms: NDArray[np.float64]
    p: PWave
    t: TWave
    pq_mv: NDArray[np.float64]
    value: NDArray[np.float64]  # (R, M, 4): pr, qrs, qt ms; st mV
    p_error: NDArray[np.float64]  # (R,) standard error of the P wave's height, mV
    t_error: NDArray[np.float64]  # (R,) the same of the T wave's fall
    slope_noise: NDArray[np.float64]  # (R,)
    core_slope: NDArray[np.float64]  # (R,)


@dataclass(frozen=True, slots=True, eq=False)
class Analysis:
    """What the procedure found on (R,) rows. Columns over measurements follow segments.MEASUREMENTS."""

    value: NDArray[np.float64]  # (R, 5): 1/min, ms, ms, ms, mV
    absent: NDArray[np.int8]  # (R, 5): index into segments.ABSENT
    beat_row: NDArray[np.intp]  # (B,)
    beat_s: NDArray[np.float64]  # (B,) seconds from the row's first sample
    features: NDArray[np.float32]  # (R, F)
    median_beat_mv: NDArray[np.float32]  # (R, LENGTH), the averaged beat about its fiducial at FS
    marks_ms: NDArray[np.float64]  # (R, 5): P onset, P end, QRS onset, QRS end, T end from the fiducial
    residual_mv: NDArray[np.float32]  # (R, n_work): the row less its averaged beats
    flat: NDArray[np.bool_]  # (R, N)
    clipped: NDArray[np.bool_]  # (R, N)
    missing: NDArray[np.bool_]  # (R, N)
    prepared: Prepared | None = None  # of the same rows, where they were done in one piece


def analyse(
    x_mv: NDArray[np.floating],
    fs_hz: float,
    *,
    rails_mv: NDArray[np.float64] | None = None,
    step_mv: NDArray[np.float64] | None = None,
    margin: tuple[int, int] = (0, 0),
    mains_among_hz: tuple[float, ...] = MAINS_HZ,
) -> Analysis:
    """Measure rows of equal length.

    ``x_mv`` (R, N) millivolts at ``fs_hz``, NaN where missing; ``rails_mv`` (R, 2) and ``step_mv``
    (R,) the converter's range and step where known (NaN where not). The first and last ``margin``
    samples belong to the neighbours: they steady the filters and the beats at the edges, nothing
    found in them counts, and times run from the first sample after the margin. ``mains_among_hz``: the
    mains frequencies to choose from. Flat or empty rows
    give no beats, no values and finite descriptions of their flatness.
    """
    rows_mv: NDArray[np.float64] = np.atleast_2d(np.asarray(x_mv, dtype=np.float64))
    parts = [
        _analyse_chunk(
            rows_mv[i : i + CHUNK_ROWS],
            fs_hz,
            None if rails_mv is None else rails_mv[i : i + CHUNK_ROWS],
            None if step_mv is None else step_mv[i : i + CHUNK_ROWS],
            margin,
            mains_among_hz,
        )
        for i in range(0, max(len(rows_mv), 1), CHUNK_ROWS)
    ]
    if len(parts) == 1:
        return parts[0]
    sizes = np.concatenate([[0], np.cumsum([len(p.value) for p in parts])[:-1]])

    def joined(name: str) -> NDArray:
        return np.concatenate([getattr(p, name) for p in parts])

    rows = np.concatenate([p.beat_row + size for p, size in zip(parts, sizes, strict=True)])
    rest: dict[str, Any] = {
        name: joined(name) for name in Analysis.__dataclass_fields__ if name not in ("beat_row", "prepared")
    }
    return Analysis(beat_row=rows, **rest)


def _analyse_chunk(
    x_mv: NDArray[np.float64],
    fs_hz: float,
    rails_mv: NDArray[np.float64] | None,
    step_mv: NDArray[np.float64] | None,
    margin: tuple[int, int],
    mains_among_hz: tuple[float, ...],
) -> Analysis:
    ready = prepare(x_mv, fs_hz)
    x_mv = x_mv[:, margin[0] : x_mv.shape[1] - margin[1]]
    start_s, length_s = margin[0] / fs_hz, x_mv.shape[1] / fs_hz
    work, wave_mv = ready.work, ready.wave_mv
    found = between(ready.found, start_s * work.fs_work_hz, (start_s + length_s) * work.fs_work_hz)
    stack = averaging.stack_beats(wave_mv, found.row, found.at, found.likeness)
    group = averaging.dominant(stack)
    mean, pq_level_mv = average_rows(stack, group)
    rhythm = rhythm_of(found.row, found.at / work.fs_work_hz - start_s, len(x_mv), length_s)
    marks = mark_waves(mean, rhythm)
    value, absent = read_values(mean, marks, rhythm)
    first = int(round(start_s * work.fs_work_hz))
    residual = residual_rows(wave_mv, stack, group, mean)[:, first : first + int(length_s * work.fs_work_hz)]
    features, masks = row_features(
        x_mv,
        fs_hz,
        work=work,
        start_s=start_s,
        found=found,
        stack=stack,
        group=group,
        mean=mean,
        marks=marks,
        rhythm=rhythm,
        pq_level_mv=pq_level_mv,
        residual_mv=residual,
        rails_mv=rails_mv,
        step_mv=step_mv,
        mains_among_hz=mains_among_hz,
    )
    edges = np.stack(
        [marks.p.on_ms, marks.p.off_ms, marks.on_ms.ravel(), marks.off_ms.ravel(), marks.t.off_ms], axis=1
    ).reshape(len(x_mv), -1, 5)[:, 0]
    return Analysis(
        value,
        absent,
        found.row,
        found.at / work.fs_work_hz - start_s,
        features,
        mean.beat_mv[:, 0].astype(np.float32),
        np.where(np.isfinite(value[:, [1, 1, 2, 2, 3]]), edges, np.nan),
        residual.astype(np.float32),
        masks["flat"],
        masks["clipped"],
        masks["missing"],
        ready,
    )


@dataclass(frozen=True, slots=True, eq=False)
class Prepared:
    """What the procedure needs of (R, N) rows before any averaging."""

    work: RowTransform
    found: beats.Beats
    wave_mv: NDArray[np.floating]  # (R, n) at the work rate
    curves: beats.Curves


def prepare(x_mv: NDArray[np.float64], fs_hz: float) -> Prepared:
    """Fill, transform, find beats, filter: (R, N) rows, NaN where missing."""
    filled, missing = fill_gaps(x_mv)
    work = transform_rows(np.asarray(filled, dtype=np.float64), fs_hz)
    curves = beats.detection_curves(work)
    found = beats.find_beats(work, beat_chance, curves=curves)
    return Prepared(work, drop_in_gaps(found, missing, work), wave_band(work), curves)


def beat_chance(candidates: NDArray[np.float64]) -> NDArray[np.float64]:
    """The shipped judge's probability that each of (C, F) candidates is a beat."""
    return shipped_judge().predict_proba(candidates)[:, 0]


def wave_band(work: RowTransform, upper_hz: float = WAVE_BAND_HZ[1]) -> NDArray[np.floating]:
    """Rows in which the waves are measured, (R, n) at the work rate."""
    return work.band(high_pass(work.freq_hz, WAVE_BAND_HZ[0]) * low_pass(work.freq_hz, upper_hz, 5))


def averaged_beats(
    x_mv: NDArray[np.float64], fs_hz: float, *, upper_hz: float = 110.0
) -> NDArray[np.float64]:
    """The averaged beat of each of (R, N) rows in a wider band than the marks are read in, (R, LENGTH) mV at FS.

    For showing and comparing shapes: small notches of the QRS complex live above 35 Hz.
    """
    ready = prepare(np.atleast_2d(x_mv), fs_hz)
    stack = averaging.stack_beats(
        wave_band(ready.work, upper_hz), ready.found.row, ready.found.at, ready.found.likeness
    )
    mean, _ = average_rows(stack, averaging.dominant(stack))
    return mean.beat_mv[:, 0]


def between(found: beats.Beats, start: float, stop: float) -> beats.Beats:
    """The beats from work sample ``start`` up to ``stop``."""
    keep = (found.at >= start) & (found.at < stop)
    return replace(
        found,
        row=found.row[keep],
        at=found.at[keep],
        likeness=found.likeness[keep],
        height=found.height[keep],
    )


def drop_in_gaps(found: beats.Beats, missing: NDArray[np.bool_], work: RowTransform) -> beats.Beats:
    """Beats without those that lie where samples are missing: what was filled in is no signal."""
    if not missing.any() or not len(found.row):
        return found
    scale = missing.shape[1] / work.n_out
    inside = missing[found.row, np.clip((found.at * scale).astype(np.intp), 0, missing.shape[1] - 1)]
    keep = ~inside
    return replace(
        found,
        row=found.row[keep],
        at=found.at[keep],
        likeness=found.likeness[keep],
        height=found.height[keep],
    )


def average_rows(stack: BeatStack, group: NDArray[np.bool_]) -> tuple[Average, NDArray[np.float64]]:
    """(average with replicates, PQ level of each beat (R, K) mV) of the beats in ``group``."""
    rough = averaging.masked_median(stack.cuts_mv, stack.valid & group[:, :, None])
    onset, _ = waves.qrs_edges(waves.slope_uv_ms(rough), np.zeros(len(rough)))
    cuts, level = averaging.level_beats(stack, onset)
    return averaging.average(cuts, stack.valid, group), level


def rhythm_of(row: NDArray[np.intp], t_s: NDArray[np.float64], n_rows: int, duration_s: float) -> Rhythm:
    """Intervals from flat beats sorted by row and time."""
    count = np.bincount(row, minlength=n_rows)
    k = max(2, int(count.max(initial=0)))
    slot = np.arange(len(row)) - np.concatenate([[0], np.cumsum(count)[:-1]])[row]
    times = np.full((n_rows, k), np.nan)
    times[row, slot] = t_s
    rr = np.diff(times, axis=1)
    present = np.isfinite(rr)
    enough = present.any(axis=1)
    middle = _median_where(rr, present)
    change = np.abs(np.diff(rr, axis=1))
    spread = _median_where(change, np.isfinite(change)) / np.maximum(middle, 1e-9)
    first = np.where(count > 0, np.nan_to_num(times[:, 0]), duration_s)
    final = np.where(count > 0, times[np.arange(n_rows), np.maximum(count - 1, 0)], duration_s)
    longest = np.maximum(np.where(present, rr, 0.0).max(axis=1), np.maximum(first, duration_s - final))
    longest = np.where(count > 0, longest, duration_s)
    span = np.where(count > 1, final - first, np.nan)
    return Rhythm(
        count.astype(float),
        np.where(enough, middle, np.nan),
        np.where(enough, np.where(present, rr, np.inf).min(axis=1), np.nan),
        np.where(enough, np.where(present, rr, -np.inf).max(axis=1), np.nan),
        np.where(count > 2, spread, np.nan),
        longest,
        np.where(count > 1, 60.0 * (count - 1) / np.where(count > 1, span, 1.0), np.nan),
    )


def _median_where(values: NDArray[np.float64], mask: NDArray[np.bool_]) -> NDArray[np.float64]:
    return averaging.masked_median(values[:, :, None], mask[:, :, None])[:, 0]


def mark_waves(mean: Average, rhythm: Rhythm) -> Marks:
    """Marks on the averages and all their replicates."""
    n_rows, m, _ = mean.beat_mv.shape
    beat = mean.beat_mv.reshape(n_rows * m, LENGTH)
    slope = waves.slope_uv_ms(beat)
    by_row = slope.reshape(n_rows, m, LENGTH)
    scatter = np.sqrt(((by_row[:, 1:] - by_row[:, :1]) ** 2).mean(axis=1))
    noise = np.median(scatter, axis=1)
    # A replicate holds half the beats: its own noise is larger by the root of two.
    noise_all = noise[:, None] * np.concatenate([[1.0], np.full(m - 1, np.sqrt(2.0))])
    on, off = waves.qrs_edges(slope, noise_all.ravel())
    rr_ms = np.repeat(np.nan_to_num(rhythm.rr_median_s, nan=0.8) * 1000, m)
    pq = _level(beat, on, -24.0, 0.0)
    st = _level(beat, off, *waves.ST_AFTER_MS) - pq
    smooth = uniform_filter1d(uniform_filter1d(beat, waves.T_SMOOTH, axis=1), waves.T_SMOOTH, axis=1)
    t = waves.t_wave(smooth, off, waves.t_limit_ms(rr_ms, on), pq, rr_ms)
    reach = waves.p_reach_ms(rr_ms, on, t.off_ms)
    project, energy = waves.p_projections(beat, on, reach)
    p = waves.p_wave(project, energy, on, reach)
    value = np.stack([on - p.on_ms, off - on, t.off_ms - on, st], axis=1).reshape(n_rows, m, 4)
    return Marks(
        on.reshape(n_rows, m),
        off.reshape(n_rows, m),
        p,
        t,
        pq.reshape(n_rows, m),
        value,
        _p_error(p, n_rows, m),
        _scatter(t.fall_mv.reshape(n_rows, m)),
        noise,
        np.sort(by_row[:, 0, ZERO - 25 : ZERO + 26], axis=1)[:, -5:].mean(axis=1),
    )


def _level(
    beat: NDArray[np.float64], from_ms: NDArray[np.float64], start_ms: float, stop_ms: float
) -> NDArray:
    """Mean level of each averaged beat between two times after its own mark."""
    first = ZERO + np.rint((np.nan_to_num(from_ms) + start_ms) * FS / 1000).astype(int)
    width = max(1, int(round((stop_ms - start_ms) * FS / 1000)))
    columns = np.clip(first[:, None] + np.arange(width), 0, LENGTH - 1)
    return np.take_along_axis(beat, columns, axis=1).mean(axis=1)


def _p_error(p: PWave, n_rows: int, m: int) -> NDArray[np.float64]:
    """Scatter over the replicates of the projection on the average's own best bump, mV of height."""
    score = np.sqrt(p.score.reshape(n_rows, m, -1))
    own = p.atom.reshape(n_rows, m)[:, 0]
    loading = np.take_along_axis(score, own[:, None, None], axis=2)[:, :, 0]
    tall = np.abs(p.amp_mv.reshape(n_rows, m)[:, 0]) / np.maximum(
        np.abs(p.loading.reshape(n_rows, m)[:, 0]), 1e-12
    )
    return np.sqrt(((loading[:, 1:] - loading[:, :1]) ** 2).mean(axis=1)) * tall


def _scatter(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """(R,): rms difference of the replicates from the average, of (R, M); NaN where the average is."""
    return np.sqrt(
        ((np.where(np.isfinite(values[:, 1:]), values[:, 1:], values[:, :1]) - values[:, :1]) ** 2).mean(
            axis=1
        )
    )


def read_values(mean: Average, marks: Marks, rhythm: Rhythm) -> tuple[NDArray[np.float64], NDArray[np.int8]]:
    """((R, 5) values, (R, 5) index into segments.ABSENT)."""
    n_rows, m, _ = marks.value.shape
    value = np.full((n_rows, 5), np.nan)
    absent = np.zeros((n_rows, 5), dtype=np.int8)
    some = rhythm.count >= 1
    value[:, 0] = rhythm.rate_per_min
    value[:, 1:] = np.where(some[:, None], marks.value[:, 0], np.nan)
    p_mv = np.abs(marks.p.amp_mv.reshape(n_rows, m)[:, 0])
    explained = marks.p.explained.reshape(n_rows, m)[:, 0]
    onset = marks.value[:, 1:, 0]
    steady = np.sqrt(((onset - marks.value[:, :1, 0]) ** 2).mean(axis=1)) <= STEADY_PR_MS
    ratio = p_mv / np.maximum(marks.p_error, 1e-6)
    clear = (ratio >= MIN_P_RATIO) | ((ratio >= STEADY_P_RATIO) & steady)
    clear &= (p_mv >= MIN_P_MV) & (explained >= MIN_P_EXPLAINED)
    quiet = some & (mean.n_effective >= 3) & (3 * marks.p_error < SEEN_MV)
    value[~clear, 1] = np.nan
    absent[quiet & ~clear, 1] = 1
    # A P wave in most halves of the beats, but never at one place, stands in no fixed relation.
    wandering = (np.sqrt(((onset - onset.mean(axis=1, keepdims=True)) ** 2).mean(axis=1)) > 25.0) & (
        p_mv >= SEEN_MV
    )
    absent[quiet & wandering & ~clear, 1] = 2
    fall = marks.t.fall_mv.reshape(n_rows, m)[:, 0]
    has_t = np.isfinite(fall) & (fall >= MIN_T_MV) & (fall >= MIN_T_RATIO * marks.t_error)
    value[~has_t, 3] = np.nan
    quiet_t = some & (mean.n_effective >= 3) & np.isfinite(fall) & (3 * marks.t_error < SEEN_MV)
    absent[quiet_t & ~has_t, 3] = 1
    return value, absent


def residual_rows(
    wave_mv: NDArray[np.floating], stack: BeatStack, group: NDArray[np.bool_], mean: Average
) -> NDArray[np.floating]:
    """(R, n): the row less its averaged beats; zero under beats of another shape, which are not noise."""
    n_rows, n = wave_mv.shape
    residual = wave_mv.copy()
    k = stack.at.shape[1]
    row, slot = np.nonzero(stack.present)
    if not len(row):
        return residual
    at = np.rint(stack.at[row, slot]).astype(np.intp)
    gap = np.full((n_rows, k), float(LENGTH))
    gap[:, :-1] = np.where(np.isfinite(np.diff(stack.at, axis=1)), np.diff(stack.at, axis=1), LENGTH)
    gap_before = np.concatenate([gap[:, :1], gap[:, :-1]], axis=1)
    # A beat owns the time from 0.42 of the interval before it to 0.58 of the interval after it.
    own_left = np.minimum(0.42 * gap_before, ZERO)[row, slot]
    own_right = np.minimum(0.58 * gap, LENGTH - 1 - ZERO)[row, slot]
    offset = np.arange(LENGTH) - ZERO
    owned = (offset >= -own_left[:, None]) & (offset < own_right[:, None])
    columns = at[:, None] + offset
    owned &= (columns >= 0) & (columns < n)
    shape = np.where(group[row, slot][:, None], mean.beat_mv[row, 0], 0.0)
    level = np.where(group[row, slot][:, None], 1.0, 0.0)
    which = np.broadcast_to(row[:, None], columns.shape)[owned]
    where = columns[owned]
    residual[which, where] = (
        residual[which, where] * np.broadcast_to(level, columns.shape)[owned] - shape[owned]
    )
    return residual
