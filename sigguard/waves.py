"""Onsets, ends and levels on averaged beats, many at once.

An averaged beat is a row of (R, L) at the work rate, millivolts, its QRS complex at column
``ZERO``. Each mark is found by an integral, not by the first sample across a threshold, because
an integral moves little when noise rides on the wave:

- QRS onset and end: the change point of the slope's magnitude, by cumulative sum (Page 1954);
- P: least squares against a dictionary of bumps on a sloping base;
- T end: the greatest trapezium under the falling limb (Vázquez-Seisdedos et al. 2011).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import uniform_filter1d

BEFORE_S, AFTER_S = 0.44, 0.72
FS = 250.0
ZERO = int(BEFORE_S * FS)
LENGTH = ZERO + int(AFTER_S * FS) + 1


# Chosen on the half of the hand-marked records that is named as training data in models/CARD.md.
QRS_FRACTION = 0.13  # of the steepest slope: where the complex is taken to begin and end
QRS_SLACK_MS = 16.0
QRS_OUTWARD_MS = 8.0  # hands mark where the line is left, which lies outside that point
P_SHARP = 0.06  # how much of the best bump's energy a rival may lack and still be heard
P_LOCAL = 7.0  # columns
T_SMOOTH = 11  # columns, twice
T_LIMB_MS = 330.0  # usual place of the limb that ends the T wave at 60/min
LAST_LIMB = 0.55
T_BEFORE_NEXT_MS = 60.0
T_INWARD_MS = 20.0  # what the smoothing adds to the end
ST_AFTER_MS = (40.0, 80.0)  # J + 60 ms, a mean over 40 ms about it


def slope_uv_ms(beat_mv: NDArray[np.float64]) -> NDArray[np.float64]:
    """Magnitude of the slope over 12 ms, mV per sample, smoothed; (R, L) → (R, L)."""
    d = np.zeros_like(beat_mv)
    d[:, 1:-1] = 0.5 * (beat_mv[:, 2:] - beat_mv[:, :-2])
    return uniform_filter1d(np.abs(d), 3, axis=1, mode="nearest")


def _edge(excess: NDArray[np.float64], slack: NDArray[np.float64]) -> NDArray[np.float64]:
    """(R,): fractional count of columns, going outward, at which the running sum of ``excess`` peaks.

    The walk ends where the sum has fallen below its highest by ``slack``.
    """
    total = np.cumsum(excess, axis=1)
    high = np.maximum.accumulate(total, axis=1)
    over = (high - total) > slack[:, None]
    stop = np.where(over.any(axis=1), over.argmax(axis=1), excess.shape[1])
    alive = np.arange(excess.shape[1])[None, :] <= stop[:, None]
    best = np.where(alive, total, -np.inf).argmax(axis=1)
    # Sub-sample: where the excess crosses zero between this column and the next.
    here = np.arange(len(best))
    a, b = excess[here, best], excess[here, np.minimum(best + 1, excess.shape[1] - 1)]
    part = np.where((a > 0) & (b < 0), a / np.maximum(a - b, 1e-12), 0.0)
    return best + part


def qrs_edges(
    slope: NDArray[np.float64], noise: NDArray[np.float64], *, fraction: float = QRS_FRACTION
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """(onset, end) in ms from the fiducial. ``noise`` (R,): slope magnitude of the noise alone."""
    near = slice(ZERO - int(0.10 * FS), ZERO + int(0.10 * FS) + 1)
    core = np.sort(slope[:, near], axis=1)[:, -5:].mean(axis=1)
    level = np.hypot(fraction * core, noise)
    slack = level * QRS_SLACK_MS / 1000 * FS
    # Start from the centre of the slope's energy, so that the walk begins inside the complex.
    weight = slope[:, near] ** 2
    centre = (
        ZERO
        - int(0.10 * FS)
        + np.rint(
            (weight * np.arange(weight.shape[1])).sum(axis=1) / np.maximum(weight.sum(axis=1), 1e-18)
        ).astype(int)
    )
    reach = int(0.16 * FS)
    steps = np.arange(reach)
    rows = np.arange(len(slope))[:, None]
    left = slope[rows, np.clip(centre[:, None] - steps, 0, LENGTH - 1)] - level[:, None]
    right = slope[rows, np.clip(centre[:, None] + steps, 0, LENGTH - 1)] - level[:, None]
    on = centre - _edge(left, slack) - ZERO
    off = centre + _edge(right, slack) - ZERO
    return on * 1000 / FS - QRS_OUTWARD_MS, off * 1000 / FS + QRS_OUTWARD_MS


P_WINDOW = int(0.34 * FS)
P_APART = 8  # columns between two bumps that are not the same wave
P_GUARD = 2  # columns left free before the QRS onset


@cache
def _bumps() -> tuple[NDArray, NDArray, NDArray, NDArray]:
    """Dictionary of P waves on a window of P_WINDOW columns that ends at the QRS onset.

    Returns (atoms (A, W) orthogonal to base and slope, unit energy; onset and end in columns before
    the QRS onset; peak height of the unit atom). Shapes: raised cosine, and the biphasic form.
    """
    column = np.arange(P_WINDOW) - (P_WINDOW - 1) - P_GUARD
    base = np.linalg.qr(np.stack([np.ones(P_WINDOW), column / column.std()], axis=1))[0]
    atoms, on, off, peak = [], [], [], []
    for length in np.arange(16, 39, 2):
        for start in np.arange(-P_WINDOW + 2, -length + 2, 2):
            u = np.clip((column - start) / length, 0, 1)
            hump = 0.5 - 0.5 * np.cos(2 * np.pi * u)
            for shape in (hump, np.sin(2 * np.pi * u) * np.sqrt(hump)):
                free = shape - base @ (base.T @ shape)
                norm = np.sqrt((free**2).sum())
                atoms.append(free / norm)
                on.append(start)
                off.append(start + length)
                peak.append(np.abs(shape).max() / norm)
    single = [np.array(column, dtype=np.float32) for column in (atoms, on, off, peak)]
    return single[0], single[1], single[2], single[3]


@dataclass(frozen=True, slots=True, eq=False)
class PWave:
    """The P wave of (R,) averaged beats."""

    on_ms: NDArray[np.floating]  # from the fiducial
    off_ms: NDArray[np.floating]
    amp_mv: NDArray[np.floating]  # height of the best bump, signed
    explained: NDArray[np.floating]  # share of the window's variance
    rival: NDArray[np.floating]  # energy of the best bump elsewhere over that of the best, 0 to 1
    atom: NDArray[np.intp]
    score: NDArray[np.floating]  # (R, A) energies
    loading: NDArray[np.floating]  # (R,) mV: projection on the best atom


def p_reach_ms(
    rr_ms: NDArray[np.float64], qrs_on_ms: NDArray[np.float64], t_off_ms: NDArray[np.float64]
) -> NDArray:
    """How far before the QRS onset a P wave may begin, (R,) ms: up to where the T wave before it has ended."""
    by_t = rr_ms - (t_off_ms - qrs_on_ms) - 8.0
    by_rate = 0.45 * rr_ms + 20.0
    return np.clip(np.where(np.isfinite(by_t), by_t, by_rate), 110.0, np.minimum(by_rate + 60.0, 340.0))


def p_projections(
    beat_mv: NDArray[np.float64], qrs_on_ms: NDArray[np.float64], reach_ms: NDArray[np.float64]
) -> tuple[NDArray, NDArray]:
    """((R, A) projections on the bumps, mV; (R,) energy of the window about its base, mV²), single precision.

    Before ``reach_ms`` the window is held at its value there, so that the T wave before it does not count.
    """
    atoms = _bumps()[0]
    columns = ZERO + onset_column(qrs_on_ms)[:, None] + np.arange(-P_WINDOW + 1, 1) - P_GUARD
    open_from = ZERO + onset_column(qrs_on_ms) - np.rint(reach_ms * FS / 1000).astype(np.intp)
    columns = np.clip(np.maximum(columns, open_from[:, None]), 0, LENGTH - 1)
    window = np.take_along_axis(beat_mv, columns, axis=1).astype(np.float32)
    column = np.arange(P_WINDOW) - (P_WINDOW - 1) - P_GUARD
    base = np.linalg.qr(np.stack([np.ones(P_WINDOW), column / column.std()], axis=1))[0].astype(np.float32)
    free = window - (window @ base) @ base.T
    return free @ atoms.T, (free**2).sum(axis=1)


def onset_column(qrs_on_ms: NDArray[np.float64]) -> NDArray[np.intp]:
    """Whole columns of a QRS onset from the fiducial; 40 ms before it where there is none."""
    return np.rint(np.nan_to_num(qrs_on_ms, nan=-40.0) * FS / 1000).astype(np.intp)


def p_wave(
    project: NDArray[np.float32],
    energy: NDArray[np.float32],
    qrs_on_ms: NDArray[np.float64],
    reach_ms: NDArray[np.float64],
    *,
    score: NDArray[np.float32] | None = None,
) -> PWave:
    """The best P wave before each QRS onset, from ``p_projections``.

    ``score`` (R, A) may be given where several leads are weighed together. The marks are means over
    all bumps near the best, weighted by how well each explains the window: a mark that two bumps
    dispute lies between them and moves smoothly when noise tips the balance.
    """
    _, on, off, tall = _bumps()
    q = onset_column(qrs_on_ms)
    score = project**2 if score is None else score
    reach = (reach_ms * FS / 1000).astype(np.float32)
    score = np.where(on[None, :] >= -reach[:, None], score, np.float32(0.0))
    best = score.max(axis=1)
    first = score.argmax(axis=1)
    far = (on[None, :] - on[first][:, None]) * np.float32(1 / P_LOCAL)
    rise = (score / np.maximum(best, 1e-12)[:, None] - 1) * np.float32(0.5 / P_SHARP)
    weight = np.exp(rise - np.float32(0.5) * far * far)
    weight[score == 0.0] = 0.0
    total = np.maximum(weight.sum(axis=1), 1e-12)
    ms = 1000 / FS
    elsewhere = np.where(np.abs(far) > P_APART / P_LOCAL, score, np.float32(0.0)).max(axis=1)
    loading = project[np.arange(len(score)), first]
    return PWave(
        (weight @ on / total + q) * ms,
        (weight @ off / total + q) * ms,
        loading * tall[first],
        best / np.maximum(energy, 1e-12),
        elsewhere / np.maximum(best, 1e-12),
        first,
        score,
        loading,
    )


@dataclass(frozen=True, slots=True, eq=False)
class TWave:
    """The T wave of (R,) averaged beats; NaN where there is no room for one."""

    peak_ms: NDArray[np.float64]  # from the fiducial
    off_ms: NDArray[np.float64]
    height_mv: NDArray[np.float64]  # of the lobe before the last limb, against the PQ level
    fall_mv: NDArray[np.float64]  # what the last limb comes down by
    rival: NDArray[np.float64]  # steepness of the best limb elsewhere over that of the last, 0 and up


def t_wave(
    smooth_mv: NDArray[np.float64],
    qrs_off_ms: NDArray[np.float64],
    limit_ms: NDArray[np.float64],
    pq_mv: NDArray[np.float64],
    rr_ms: NDArray[np.float64],
) -> TWave:
    """The T wave between the QRS end and ``limit_ms`` on smoothed averaged beats (R, L).

    Its end is where the trapezium under the last limb is greatest (Vázquez-Seisdedos et al. 2011).
    """
    rows, ms = np.arange(len(smooth_mv)), 1000 / FS
    n = LENGTH - ZERO  # columns count from the fiducial: nothing before it is looked at
    column = np.arange(n, dtype=np.float32)[None, :]
    first = np.rint((np.nan_to_num(qrs_off_ms, nan=50.0) + 72) / ms).astype(int)
    last = np.clip(np.rint(np.nan_to_num(limit_ms) / ms).astype(int), 0, n - 1)
    room = last - first > int(0.10 * FS)
    last = np.minimum(np.maximum(last, first + int(0.10 * FS)), n - 1)
    first = np.minimum(first, last - 5)
    y = smooth_mv[:, ZERO:] - pq_mv[:, None]
    slope = np.zeros_like(y)
    slope[:, 1:-1] = 0.5 * (y[:, 2:] - y[:, :-2])
    inside = (column >= first[:, None]) & (column <= last[:, None])
    steep, rival = _last_limb(np.where(inside, slope, 0.0), first, rr_ms)
    sign = -np.sign(slope[rows, steep])
    # The peak is the highest point of the lobe before the limb.
    lobe = (column < steep[:, None]) & (column >= np.maximum(first, steep - int(0.16 * FS))[:, None])
    top = np.where(lobe, sign[:, None] * y, -np.inf).argmax(axis=1)
    right = np.minimum(last, steep + int(0.22 * FS))
    area = sign[:, None] * (y[rows, steep][:, None] - y) * (2 * right[:, None] - column - steep[:, None])
    area = np.where((column >= steep[:, None]) & (column <= right[:, None]), area, -np.inf)
    best = np.maximum(area.max(axis=1), 1e-9)
    weight = np.exp(np.maximum(area * (100.0 / best[:, None]) - 100.0, -80.0))
    # A limb that the limit cuts off spans no trapezium: it has no end to give.
    room &= area.max(axis=1) > 1e-9
    end = (weight * column).sum(axis=1) / np.maximum(weight.sum(axis=1), 1e-12)
    foot = y[rows, np.clip(np.rint(end).astype(int), 0, n - 1)]

    def where_room(values: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.where(room, values, np.nan)

    return TWave(
        where_room(top * ms),
        where_room(end * ms - T_INWARD_MS),
        where_room(y[rows, top]),
        where_room(np.abs(y[rows, top] - foot)),
        where_room(rival),
    )


def t_limit_ms(rr_ms: NDArray[np.float64], qrs_on_ms: NDArray[np.float64]) -> NDArray[np.float64]:
    """Where the search for the T wave ends, ms from the fiducial: short of the next QRS complex."""
    return np.minimum(rr_ms + qrs_on_ms - T_BEFORE_NEXT_MS, 700.0)


def _last_limb(
    slope: NDArray[np.float64], first: NDArray[np.intp], rr_ms: NDArray[np.float64]
) -> tuple[NDArray[np.intp], NDArray[np.float64]]:
    """(column, from the fiducial, of the limb that ends the T wave; steepness of the best other limb over its own).

    It is steep, near the usual distance for this heart rate, and the last such.
    """
    n = slope.shape[1]
    column = np.arange(n, dtype=slope.dtype)[None, :]
    usual = T_LIMB_MS * np.sqrt(np.clip(rr_ms, 300, 1500) / 1000)
    off_by = column * (1000 / FS / 0.30 / usual[:, None]).astype(slope.dtype) - slope.dtype.type(1 / 0.30)
    steepness = np.abs(slope) * np.exp(-0.5 * off_by**2)
    summit = np.zeros(slope.shape, dtype=bool)
    summit[:, 1:-1] = (steepness[:, 1:-1] >= steepness[:, :-2]) & (steepness[:, 1:-1] > steepness[:, 2:])
    lasting = summit & (steepness >= LAST_LIMB * steepness.max(axis=1, keepdims=True))
    steep = np.where(lasting.any(axis=1), n - 1 - lasting[:, ::-1].argmax(axis=1), first)
    own = np.take_along_axis(steepness, steep[:, None], axis=1)[:, 0]
    # A rival is a limb whose standing near LAST_LIMB could flip with a little noise.
    other = np.where(summit & (np.abs(column - steep[:, None]) > int(0.06 * FS)), steepness, 0.0).max(axis=1)
    return steep, other / np.maximum(own, 1e-12)
