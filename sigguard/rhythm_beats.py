"""Anything that might be a beat, and how wide and how alike: for the patient-first search only.

The ordinary detector is made for ordinary beats and may fail on the rhythms looked for here. These
candidates are found by steepness against the near surroundings and are many rather than few. All leads
are handled at once: each candidate carries the row of its lead.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import maximum_filter1d, median_filter, uniform_filter1d

from sigguard.rhythm_shape import Work

Floats = NDArray[np.floating]
Ints = NDArray[np.int64]

HALF_S = 0.16  # half of the stretch looked at around a candidate
STEEP_SHARE = 0.4  # of the surroundings' usual peak steepness that makes a candidate
APART_S = 0.2
MOVE_S = 0.06  # a beat found elsewhere is moved to the steepest place this near
WIDTH_SHARE = 0.15  # of the steepest slope; where the slope stays below, the complex has ended. On simulated leads: 95 % of
# wide tachycardias and 15 % of narrow rhythms then come out at 120 ms or more in a single lead
BRIDGE_S = 0.04  # a flat top or notch of this length does not end a complex
SAME_HEIGHT = 0.6  # neighbours of one rhythm differ in steepness by less than this factor
TRIM = 2  # samples a complex may be shifted to match its neighbour


@dataclass(frozen=True, slots=True, eq=False)
class Train:
    """Candidates of all leads, (n,) each, ordered by lead, then time."""

    row: Ints
    at: Ints  # samples at the working rate
    height_mv: Floats  # peak to peak within HALF_S
    steep_mv: Floats  # mean absolute slope over 100 ms, mV per sample
    width_ms: Floats
    likeness: Floats  # -1 to 1: the better correlation with the candidate before and the one after
    kinship: Floats  # the same with the two before and the two after: T waves or extra beats may lie between
    company: Floats  # the second best of those four: noise resembles itself once, beats do so again and again

    def __len__(self) -> int:
        return len(self.row)


def find_trains(work: Work, lead_beats_s: Sequence[Floats]) -> tuple[Train, Train]:
    """Candidates by steepness, and the beats found elsewhere (s, one array a lead).

    Where both agree in every beat, both are the same object.
    """
    steepness = _steepness(work)
    own = steep_peaks(steepness, work)
    given = _given_peaks(steepness, work, lead_beats_s)
    found = measure_train(work, steepness, *own)
    if np.array_equal(own[0], given[0]) and np.array_equal(own[1], given[1]):
        return found, found
    return found, measure_train(work, steepness, *given)


def _steepness(work: Work) -> Floats:
    """Mean absolute slope over 100 ms, mV per sample, (n_leads, n)."""
    slope = np.abs(np.diff(work.y_mv, axis=1, prepend=work.y_mv[:, :1]))
    return uniform_filter1d(slope, 2 * round(0.05 * work.fs_hz) + 1, axis=1, mode="nearest")


def steep_peaks(steepness: Floats, work: Work) -> tuple[Ints, Ints]:
    """(rows, samples) of peaks well above the usual: the median over 5 s of the highest value within each second."""
    n_leads, n = steepness.shape
    second = work.step
    padded = np.pad(steepness, ((0, 0), (0, -n % second)), mode="edge")
    usual = median_filter(padded.reshape(n_leads, -1, second).max(axis=2), size=(1, 5), mode="nearest")
    apart = max(1, round(APART_S * work.fs_hz))
    tape = np.pad(steepness, ((0, 0), (1, apart)))  # leads end to end, too far apart to touch
    peaks = spaced_peaks(tape.ravel(), apart)
    row, at = np.divmod(peaks, tape.shape[1])
    at -= 1
    value = steepness[row, at]
    keep = (value >= STEEP_SHARE * usual[row, at // second]) & (value > 1e-6)
    return row[keep], at[keep]


def spaced_peaks(x: Floats, apart: int) -> Ints:
    """Local maxima of x (n,), thinned so that any two are ``apart`` samples or more apart, the higher one kept.

    A flat top counts as its middle; the ends are none. What scipy.signal.find_peaks gives (a test holds the two
    against each other), without the second that importing scipy.signal takes. Of two equally high, the later stays.
    """
    if not len(x):
        return np.empty(0, dtype=np.int64)
    edge = np.flatnonzero(np.diff(x)) + 1
    start, stop = np.concatenate([[0], edge]), np.concatenate([edge, [len(x)]])
    value = x[start]
    top = np.flatnonzero((value[1:-1] > value[:-2]) & (value[1:-1] > value[2:])) + 1
    at = (start[top] + stop[top] - 1) // 2
    rank = np.empty(len(at), dtype=np.int64)
    rank[np.argsort(x[at], kind="stable")] = np.arange(len(at))
    kept = []
    while len(at):
        best = rank == _highest_near(at, rank, apart)  # the highest of those left nearby stay ...
        kept.append(at[best])
        gone = _highest_near(at, np.where(best, rank, -1), apart) >= 0  # ... and all near to them go
        at, rank = at[~gone], rank[~gone]
    return np.sort(np.concatenate(kept)) if kept else at


def _highest_near(at: Ints, value: Ints, apart: int) -> Ints:
    """For each peak the highest value among the peaks less than ``apart`` samples away, itself included."""
    out = value.copy()
    for k in range(1, len(at)):
        near = at[k:] - at[:-k] < apart
        if not near.any():
            break
        out[:-k] = np.where(near, np.maximum(out[:-k], value[k:]), out[:-k])
        out[k:] = np.where(near, np.maximum(out[k:], value[:-k]), out[k:])
    return out


def _given_peaks(steepness: Floats, work: Work, lead_beats_s: Sequence[Floats]) -> tuple[Ints, Ints]:
    n = steepness.shape[1]
    row = np.repeat(np.arange(len(lead_beats_s)), [len(beats) for beats in lead_beats_s])
    t_s = np.concatenate([np.asarray(beats, dtype=np.float64) for beats in lead_beats_s])
    at = np.round(t_s * work.fs_hz).astype(np.int64)
    inside = (at >= 0) & (at < n)
    row, at = row[inside], at[inside]
    if not at.size:
        return row, at
    reach = round(MOVE_S * work.fs_hz)
    around = np.clip(at[:, None] + np.arange(-reach, reach + 1), 0, n - 1)
    at = around[np.arange(at.size), steepness[row[:, None], around].argmax(axis=1)]
    row, at = np.divmod(np.unique(row * n + at), n)
    return row, at


def measure_train(work: Work, steepness: Floats, row: Ints, at: Ints) -> Train:
    """Height, width and likeness of the complexes at (row, at)."""
    n = work.y_mv.shape[1]
    half = round(HALF_S * work.fs_hz)
    if row.size == 0:
        return Train(row, at, *(np.empty(0) for _ in range(6)))
    index = np.clip(at[:, None] + np.arange(-half, half + 1), 0, n - 1)
    piece = work.y_mv[row[:, None], index]
    steep = steepness[row, at]
    sums = np.cumsum(piece, axis=1), np.cumsum(piece * piece, axis=1)
    near = _likeness(piece, steep, row, 1, sums)
    four = np.sort(np.concatenate([near, _likeness(piece, steep, row, 2, sums)]), axis=0)
    widths = _widths_ms(piece, work.fs_hz)
    return Train(row, at, np.ptp(piece, axis=1), steep, widths, near.max(axis=0), four[-1], four[-2])


def _widths_ms(piece: Floats, rate: float) -> Floats:
    """From the first to the last steep sample around the middle, gaps up to BRIDGE_S bridged."""
    slope = uniform_filter1d(np.abs(np.diff(piece, axis=1)), 3, axis=1, mode="nearest")
    n = slope.shape[1]
    centre = slice(n // 2 - n // 4, n // 2 + n // 4 + 1)
    top = slope[:, centre].max(axis=1, keepdims=True)
    summit = slope[:, centre].argmax(axis=1)[:, None] + centre.start
    steep = slope > WIDTH_SHARE * top
    bridge = 2 * round(BRIDGE_S * rate / 2) + 1
    closed = ~maximum_filter1d(~maximum_filter1d(steep, bridge, axis=1), bridge, axis=1) | steep
    columns = np.arange(n)
    left_gap = np.where(~closed & (columns <= summit), columns, -1).max(axis=1)
    right_gap = np.where(~closed & (columns >= summit), columns, n).min(axis=1)
    return (right_gap - left_gap - 1) * 1e3 / rate


def _likeness(piece: Floats, steep: Floats, row: Ints, apart: int, upto: tuple[Floats, Floats]) -> Floats:
    """(2, n): correlations with the complexes ``apart`` before and after in the same lead, -1 where there is none.

    ``upto``: running sums of the pieces and of their squares.
    """
    count = len(piece)
    if count <= apart:
        return np.full((2, count), -1.0)
    n = piece.shape[1] - 2 * TRIM
    core = piece[:, TRIM:-TRIM] - piece[:, TRIM:-TRIM].mean(axis=1, keepdims=True)
    first, second = core[:-apart], piece[apart:]
    # the core has mean 0, so that the mean of the moved piece drops out of the product
    sums, squares = upto[0][apart:], upto[1][apart:]
    best = np.full(count - apart, -1.0)
    norm = np.sqrt((first * first).sum(axis=1))
    for k in range(2 * TRIM + 1):
        product = np.einsum("ij,ij->i", first, second[:, k : k + n])
        total = sums[:, k + n - 1] - (sums[:, k - 1] if k else 0.0)
        power = squares[:, k + n - 1] - (squares[:, k - 1] if k else 0.0)
        best = np.maximum(best, product / (norm * np.sqrt(np.maximum(power - total**2 / n, 0.0)) + 1e-12))
    lower, higher = np.minimum(steep[apart:], steep[:-apart]), np.maximum(steep[apart:], steep[:-apart])
    best = np.where(lower >= SAME_HEIGHT * higher, best, np.minimum(best, 0.0))
    best[row[apart:] != row[:-apart]] = -1.0
    none = np.full(apart, -1.0)
    return np.stack([np.concatenate([none, best]), np.concatenate([best, none])])
