"""The table of features: names with units, order, version, and the one place that assembles it."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from sigguard import averaging, beats
from sigguard.filters import RowTransform
from sigguard.signal_table import SIGNAL_FEATURES, signal_features

if TYPE_CHECKING:
    from sigguard.averaging import Average, BeatStack
    from sigguard.measure import Marks, Rhythm

FEATURE_VERSION = 2

BEAT_FEATURES: tuple[str, ...] = (
    "duration_s", "beats_n", "beats_averaged_n", "rr_median_s", "rr_min_s", "rr_max_s", "rr_spread_ratio", "longest_gap_s",
    "b_sqi", "likeness_median", "likeness_low", "height_low_ratio", "height_high_ratio",
    "weakest_kept_ratio", "strongest_left_ratio", "between_ratio", "least_chance", "best_left_chance",
    "qrs_pp_uv", "snr_db", "residual_uv", "stray_low_uv", "stray_high_ratio", "averages_effective_n",
    "template_correlation",
    "pq_scatter_uv", "slope_noise_ratio",
    "pr_scatter_ms", "qrs_scatter_ms", "qt_scatter_ms", "st_scatter_uv",
    "pr_reach_ms", "qrs_reach_ms", "qt_reach_ms",
    "p_height_uv", "p_error_uv", "p_ratio", "p_explained_ratio", "p_rival_ratio",
    "t_fall_uv", "t_error_uv", "t_ratio", "t_rival_ratio", "st_level_uv",
    "pr_found_ms", "qrs_found_ms", "qt_found_ms",
)  # fmt: skip
FEATURE_NAMES: tuple[str, ...] = BEAT_FEATURES + SIGNAL_FEATURES
QRS_HALF_S = 0.08


def row_features(
    x_mv: NDArray[np.float64],
    fs_hz: float,
    *,
    work: RowTransform,
    start_s: float,
    found: beats.Beats,
    stack: BeatStack,
    group: NDArray[np.bool_],
    mean: Average,
    marks: Marks,
    rhythm: Rhythm,
    pq_level_mv: NDArray[np.float64],
    residual_mv: NDArray[np.floating],
    rails_mv: NDArray[np.float64] | None,
    step_mv: NDArray[np.float64] | None,
    mains_among_hz: tuple[float, ...],
) -> tuple[NDArray[np.float32], dict[str, NDArray[np.bool_]]]:
    """((R, F) in the order of FEATURE_NAMES, masks of flat, clipped and missing samples (R, N)).

    ``x_mv`` begins ``start_s`` after the rows that ``work`` holds; beats are of ``x_mv`` only.
    """
    duration_s = x_mv.shape[1] / fs_hz
    mask = qrs_mask(found.row, found.at / work.fs_work_hz - start_s, x_mv.shape, fs_hz)
    signal, masks = signal_features(
        x_mv,
        fs_hz,
        qrs_mask=mask,
        residual_mv=residual_mv,
        fs_res_hz=work.fs_work_hz,
        rails_mv=rails_mv,
        step_mv=step_mv,
        mains_among_hz=mains_among_hz,
    )
    columns = _rhythm_columns(duration_s, rhythm, group, len(x_mv))
    columns |= _detection_columns(work, found, len(x_mv), start_s, start_s + duration_s)
    columns |= _average_columns(stack, group, mean, marks, pq_level_mv)
    columns |= _mark_columns(marks)
    table = np.column_stack([columns[name] for name in BEAT_FEATURES]).astype(np.float32)
    # What describes beats means nothing where there are none.
    alone = np.array([name not in ("duration_s", "beats_n", "beats_averaged_n", "longest_gap_s", "between_ratio", "b_sqi")
                      for name in BEAT_FEATURES])  # fmt: skip
    table[np.ix_(rhythm.count == 0, alone)] = np.nan
    return np.concatenate([table, signal], axis=1), masks


def qrs_mask(
    row: NDArray[np.intp], t_s: NDArray[np.float64], shape: tuple[int, ...], fs_hz: float
) -> NDArray[np.bool_]:
    """(R, N), True within QRS_HALF_S of a beat."""
    n_rows, n = shape
    step = np.zeros((n_rows, n + 1), dtype=np.int32)
    first = np.clip(np.rint((t_s - QRS_HALF_S) * fs_hz).astype(np.intp), 0, n)
    stop = np.clip(np.rint((t_s + QRS_HALF_S) * fs_hz).astype(np.intp) + 1, 0, n)
    np.add.at(step, (row, first), 1)
    np.add.at(step, (row, stop), -1)
    return np.cumsum(step[:, :n], axis=1) > 0


def _rhythm_columns(
    duration_s: float, rhythm: Rhythm, group: NDArray[np.bool_], n_rows: int
) -> dict[str, NDArray]:
    return {
        "duration_s": np.full(n_rows, duration_s),
        "beats_n": rhythm.count,
        "beats_averaged_n": group.sum(axis=1).astype(float),
        "rr_median_s": rhythm.rr_median_s,
        "rr_min_s": rhythm.rr_min_s,
        "rr_max_s": rhythm.rr_max_s,
        "rr_spread_ratio": rhythm.rr_spread,
        "longest_gap_s": rhythm.longest_gap_s,
    }


def _detection_columns(
    work: RowTransform, found: beats.Beats, n_rows: int, start_s: float, stop_s: float
) -> dict[str, NDArray]:
    other_row, other_at = beats.length_beats(work)
    here = (other_at >= start_s * work.fs_work_hz) & (other_at < stop_s * work.fs_work_hz)
    other_row, other_at = other_row[here], other_at[here]
    likeness = _ranked(found.likeness, found.row, n_rows)
    height = _ranked(found.height, found.row, n_rows)
    count = np.bincount(found.row, minlength=n_rows)
    return {
        "b_sqi": beats.agreement(
            n_rows, found.row, found.at / work.fs_work_hz, other_row, other_at / work.fs_work_hz
        ),
        "likeness_median": _at_share(likeness, count, 0.5),
        "likeness_low": _at_share(likeness, count, 0.1),
        "height_low_ratio": _at_share(height, count, 0.0),
        "height_high_ratio": _at_share(height, count, 1.0),
        "weakest_kept_ratio": found.weakest_kept,
        "strongest_left_ratio": found.strongest_left,
        "between_ratio": found.between,
        "least_chance": found.least_chance,
        "best_left_chance": found.best_left,
    }


def _ranked(values: NDArray[np.floating], row: NDArray[np.intp], n_rows: int) -> NDArray[np.float64]:
    """(R, K): the values of each row in ascending order, NaN after the last."""
    count = np.bincount(row, minlength=n_rows)
    order = np.lexsort((values, row))
    slot = np.arange(len(row)) - np.concatenate([[0], np.cumsum(count)[:-1]])[row]
    out = np.full((n_rows, max(1, int(count.max(initial=0)))), np.nan)
    out[row, slot] = values[order]
    return out


def _at_share(ranked: NDArray[np.float64], count: NDArray[np.intp], share: float) -> NDArray[np.float64]:
    place = np.rint(share * np.maximum(count - 1, 0)).astype(np.intp)
    return ranked[np.arange(len(ranked)), np.minimum(place, ranked.shape[1] - 1)]


def _average_columns(
    stack: BeatStack, group: NDArray[np.bool_], mean: Average, marks: Marks, pq_level_mv: NDArray[np.float64]
) -> dict[str, NDArray]:
    beat = mean.beat_mv[:, 0]
    near = slice(averaging.ZERO - 20, averaging.ZERO + 21)
    pp = np.ptp(beat[:, near], axis=1)
    stray = np.where(group, mean.stray_mv, np.nan)
    usual = averaging.masked_median(np.nan_to_num(stray)[:, :, None], group[:, :, None])[:, 0]
    worst = np.where(group, np.nan_to_num(stray), 0.0).max(axis=1)
    best = np.where(group, np.nan_to_num(stray, nan=np.inf), np.inf).min(axis=1)
    level = np.isfinite(pq_level_mv) & group
    middle = averaging.masked_median(np.nan_to_num(pq_level_mv)[:, :, None], level[:, :, None])
    off = averaging.masked_median(np.abs(np.nan_to_num(pq_level_mv) - middle)[:, :, None], level[:, :, None])[
        :, 0
    ]
    return {
        "qrs_pp_uv": pp * 1e3,
        # Signal and noise after Moody, Muldrow and Mark 1984: S = A²/8.
        "snr_db": 10 * np.log10(np.maximum(pp**2 / 8, 1e-12) / np.maximum(usual**2, 1e-9)),
        "residual_uv": usual * 1e3,
        "stray_low_uv": np.where(np.isfinite(best), best, np.nan) * 1e3,
        "stray_high_ratio": worst / np.maximum(usual, 1e-6),
        "averages_effective_n": mean.n_effective,
        "template_correlation": _template_correlation(stack, group, mean),
        "pq_scatter_uv": off * 1e3,
        "slope_noise_ratio": marks.slope_noise / np.maximum(marks.core_slope, 1e-9),
    }


def _template_correlation(stack: BeatStack, group: NDArray[np.bool_], mean: Average) -> NDArray[np.float64]:
    """Mean correlation of the beats with their average over -200 to +400 ms (after Orphanidou et al. 2015)."""
    span = slice(averaging.ZERO - 50, averaging.ZERO + 101)
    a = stack.cuts_mv[:, :, span] - stack.cuts_mv[:, :, span].mean(axis=2, keepdims=True)
    b = mean.beat_mv[:, 0, span] - mean.beat_mv[:, 0, span].mean(axis=1, keepdims=True)
    dot = np.einsum("rkl,rl->rk", a, b)
    norm = np.sqrt((a**2).sum(axis=2) * (b**2).sum(axis=1)[:, None])
    corr = np.where(stack.present, dot / np.maximum(norm, 1e-12), 0.0)
    return corr.sum(axis=1) / np.maximum(stack.present.sum(axis=1), 1)


def _mark_columns(marks: Marks) -> dict[str, NDArray]:
    n_rows, m, _ = marks.value.shape
    whole, parts = marks.value[:, :1], marks.value[:, 1:]
    change = np.abs(np.where(np.isfinite(parts), parts, whole + 1e3) - whole)
    scatter = np.sqrt((change**2).mean(axis=1))
    reach = change.max(axis=1)

    def first(values: NDArray) -> NDArray:
        return values.reshape(n_rows, m)[:, 0]

    p_mv, fall = np.abs(first(marks.p.amp_mv)), first(marks.t.fall_mv)
    return {
        "pr_scatter_ms": scatter[:, 0],
        "qrs_scatter_ms": scatter[:, 1],
        "qt_scatter_ms": scatter[:, 2],
        "st_scatter_uv": scatter[:, 3] * 1e3,
        "pr_reach_ms": reach[:, 0],
        "qrs_reach_ms": reach[:, 1],
        "qt_reach_ms": reach[:, 2],
        "p_height_uv": p_mv * 1e3,
        "p_error_uv": marks.p_error * 1e3,
        "p_ratio": p_mv / np.maximum(marks.p_error, 1e-4),
        "p_explained_ratio": first(marks.p.explained),
        "p_rival_ratio": first(marks.p.rival),
        "t_fall_uv": fall * 1e3,
        "t_error_uv": marks.t_error * 1e3,
        "t_ratio": fall / np.maximum(marks.t_error, 1e-4),
        "t_rival_ratio": first(marks.t.rival),
        "st_level_uv": marks.value[:, 0, 3] * 1e3,
        "pr_found_ms": marks.value[:, 0, 0],
        "qrs_found_ms": marks.value[:, 0, 1],
        "qt_found_ms": marks.value[:, 0, 2],
    }
