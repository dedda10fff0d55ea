"""What is steep above the band of the search: pacing spikes, which are no beats, and sharp complexes, which are.

The patient-first search looks at 1 to 28 Hz. A QRS made of faster deflections than that is lost in it, and the P and
T waves that are left may look like a sine. Such complexes still show above 28 Hz as short bursts on quiet ground, one a
beat; fibrillation has little there, and nothing that recurs. Bursts alone prove nothing: a pacemaker goes on spiking
into a fibrillating heart, and a loose electrode clicks with every compression of the chest. So the waves between the
bursts have to be locked to them (nearly all of the power recurs with the bursts), and must not recur more often than
the bursts do (flutter may by chance keep step with a pacemaker).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import uniform_filter1d

from sigguard.rhythm_beats import steep_peaks
from sigguard.rhythm_shape import Work, sharpness_lag, windows

Floats = NDArray[np.floating]
Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]

BURST_S = 0.04
STANDS_OUT = 4.0  # times the ground around it
GROUND_S, GROUND_QUANTILE = 1.0, 0.6  # to either side; bursts may fill up to two fifths of the time
MOST = 0.8  # of the bursts of a window must stand out
SHORTEST_RR_S, LONGEST_RR_S = 0.33, 1.5
BEFORE_S, AFTER_S = (0.22, 0.08), (0.08, 0.34)  # where P and T are looked for, beside the burst itself
NEIGHBOURS = 4  # bursts before and after that tell what recurs
LOCKED = 0.8  # share of the power between the bursts that recurs with them
SHAPE_S, SHIFT_S = 0.06, 0.03  # half of the burst, and how far it may be shifted to match the one before
SAME_SHAPE = 0.6  # correlation
ONCE_A_BEAT = 0.1  # the autocorrelation at one RR exceeds that at any shorter lag by so much
SHORTEST_LAG_S, NEAR_RR_S = 0.08, 0.04


def sharp_beats(work: Work) -> Bools:
    """(n_leads, n_windows): windows through which sharp complexes go on, with waves locked to them."""
    n_leads, n = work.y_mv.shape
    begin = np.arange(windows(work.y_mv, work.length, work.step).shape[1]) * work.step
    out = np.zeros((n_leads, begin.size), bool)
    burst = _bursts(work)
    row, at = steep_peaks(burst, work)
    if len(row) < 3 or not begin.size:
        return out
    stands = burst[row, at] >= STANDS_OUT * _ground(burst, row, at, round(GROUND_S * work.fs_hz))
    common, power = _recurring(work, row, at)
    tape = row * n + at
    starts = np.arange(n_leads)[:, None] * n + begin
    low, high = np.searchsorted(tape, starts), np.searchsorted(tape, starts + work.length)

    def total(x: NDArray) -> Floats:
        upto = np.concatenate([[0.0], np.cumsum(x)])
        return upto[high] - upto[low]

    count = high - low
    locked = total(common) >= LOCKED * np.maximum(total(power), 1e-12)
    likely = (count >= 3) & locked & (total(stands) >= MOST * count)
    for lead, window in np.argwhere(likely):
        inside = at[low[lead, window] : high[lead, window]] - begin[window]
        out[lead, window] = (
            _paced_through(inside, work)
            and _of_one_shape(work, lead, inside + begin[window])
            and _once_a_beat(work.y_mv[lead, begin[window] : begin[window] + work.length], inside, work.fs_hz)
        )
    return out


def _bursts(work: Work) -> Floats:
    """Mean absolute second difference over BURST_S, (n_leads, n): above 28 Hz, below hardly anything."""
    x, n = work.full_mv, work.y_mv.shape[1]
    size = np.abs(_bend(x, sharpness_lag(work.full_hz)))
    factor = round(work.full_hz / work.fs_hz)
    padded = np.pad(size, ((0, 0), (0, n * factor - x.shape[1])))
    pooled = padded.reshape(len(x), n, factor).mean(axis=2)
    return uniform_filter1d(pooled, 2 * round(BURST_S / 2 * work.fs_hz) + 1, axis=1, mode="nearest")


def _bend(x: Floats, lag: int) -> Floats:
    """Second difference over ``lag`` samples, (n_rows, n) as x, zeros at the ends."""
    out = np.zeros(x.shape)
    out[:, lag:-lag] = x[:, 2 * lag :] + x[:, : -2 * lag] - 2 * x[:, lag:-lag]
    return out


def _ground(burst: Floats, row: Ints, at: Ints, reach: int) -> Floats:
    around = np.clip(at[:, None] + np.arange(-reach, reach + 1, 2), 0, burst.shape[1] - 1)
    ground: Floats = np.quantile(burst[row[:, None], around], GROUND_QUANTILE, axis=1)
    return ground


def _recurring(work: Work, row: Ints, at: Ints) -> tuple[Floats, Floats]:
    """Of the waves beside each burst: their product with the mean of its neighbours' waves, and with themselves.

    The expected ratio of the two is the share of power that recurs, whatever the number of neighbours.
    """
    rate = work.fs_hz
    before = np.arange(-round(BEFORE_S[0] * rate), -round(BEFORE_S[1] * rate) + 1)
    after = np.arange(round(AFTER_S[0] * rate), round(AFTER_S[1] * rate) + 1)
    index = np.clip(at[:, None] + np.concatenate([before, after]), 0, work.y_mv.shape[1] - 1)
    piece = work.y_mv[row[:, None], index]
    piece = piece - piece.mean(axis=1, keepdims=True)
    upto = np.concatenate([np.zeros((1, piece.shape[1])), np.cumsum(piece, axis=0)])
    here = np.arange(len(at))
    first = np.maximum(here - NEIGHBOURS, np.searchsorted(row, row))
    stop = np.minimum(here + NEIGHBOURS + 1, np.searchsorted(row, row, side="right"))
    others = upto[stop] - upto[first] - piece
    mean = others / np.maximum(stop - first - 1, 1)[:, None]
    return np.einsum("ij,ij->i", piece, mean), np.einsum("ij,ij->i", piece, piece)


def _paced_through(inside: Ints, work: Work) -> bool:
    """Whether no RR is too short and none, nor what is left at the window's edges, too long."""
    rr = np.diff(inside)
    edges = np.diff(np.concatenate([[0], inside, [work.length]]))
    return bool(rr.min() >= SHORTEST_RR_S * work.fs_hz and edges.max() <= LONGEST_RR_S * work.fs_hz)


def _of_one_shape(work: Work, lead: int, at: Ints) -> bool:
    """Whether most bursts, ``at`` at the working rate, resemble the one before in their fast deflections.

    A QRS does, beat for beat; clicks of a loose contact do not.
    """
    rate, x = work.full_hz, work.full_mv[lead]
    half, reach = round(SHAPE_S * rate), round(SHIFT_S * rate)
    middle = at * round(rate / work.fs_hz)
    index = np.clip(middle[:, None] + np.arange(-half - reach, half + reach + 1), 0, len(x) - 1)
    bend = _bend(x[index], sharpness_lag(rate))
    first, second = bend[:-1, reach:-reach], windows(bend[1:], 2 * half + 1, 1)
    product = np.einsum("ij,ikj->ik", first, second)
    norm = np.sqrt(np.einsum("ij,ij->i", first, first)[:, None] * np.einsum("ikj,ikj->ik", second, second))
    return bool(np.quantile((product / (norm + 1e-12)).max(axis=1), 1 - MOST) >= SAME_SHAPE)


def _once_a_beat(y_mv: Floats, inside: Ints, rate: float) -> bool:
    """Whether one window without its bursts, (n,), resembles itself after one RR better than after any part of it."""
    shown = np.ones(len(y_mv))
    shown[
        np.clip(inside[:, None] + np.arange(-round(0.07 * rate), round(0.07 * rate) + 1), 0, len(y_mv) - 1)
    ] = 0
    y = (y_mv - np.sum(y_mv * shown) / max(shown.sum(), 1.0)) * shown
    rr, near = int(np.median(np.diff(inside))), round(NEAR_RR_S * rate)
    lags = np.arange(round(SHORTEST_LAG_S * rate), min(rr + near, len(y) - 2) + 1)
    alike = np.empty(len(lags))
    for k, lag in enumerate(lags):
        a, b = y[:-lag], y[lag:]
        both = shown[:-lag] * shown[lag:]
        alike[k] = np.sum(a * b) / np.sqrt(np.sum(a * a * both) * np.sum(b * b * both) + 1e-18)
    dipped = np.maximum.accumulate(alike < 0.3)
    shorter = np.where(dipped & (lags < 0.85 * rr), alike, -1.0).max()
    return bool(alike[np.abs(lags - rr) <= near].max() - shorter >= ONCE_A_BEAT)
