"""Shape of short stretches of one lead, for the patient-first search: filters, windows, published indices.

Everything here is local in time: a filtered sample depends on samples at most 1.2 s away, so that overlapping
blocks give what the whole gives.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray
from scipy import fft
from scipy.ndimage import uniform_filter1d

from sigguard.filters import low_pass_taps

Floats = NDArray[np.floating]
Bools = NDArray[np.bool_]

WORK_HZ = 125.0  # enough for the width of a QRS; fibrillation needs half of it
WINDOW_S = 4.0
HIGHEST_HZ = 28.0
SLOW_BOXES_S = (
    0.6,
    0.45,
)  # moving averages whose cascade is taken away: half is gone at 0.7 Hz, all kept from 1.5 Hz
OUT_AT_ONCE = 32
SHARP_S = 0.008
SPIKE_MV, SPIKE_LEFT = (
    0.25,
    0.35,
)  # least height of a pacing spike; the share of it that may be left after 8 ms
LONE_S, LONE_SHARE = 0.06, 0.5  # nothing half as sharp this near
SHAPE_NAMES = (
    "leakage",
    "fullness",
    "slope_fullness",
    "quiet_share",
    "periodicity",
    "log_peak_hz",
    "concentration",
    "slow_share",
    "fast_share",
)


@dataclass(frozen=True, slots=True, eq=False)
class Work:
    """One or more leads at the working rate, band-limited, with what of it rests on data."""

    y_mv: Floats  # (n_leads, n): about 1 to 28 Hz
    present: Bools  # (n_leads, n): a sample was there
    fs_hz: float
    step: int  # samples between windows, about 1 s
    length: int  # samples of a window, 4 steps
    full_mv: Floats  # (n_leads, n_samples): as it came, gaps filled, pacing spikes taken out
    full_hz: float


def decimation(fs_hz: float) -> int:
    """By how much the sampling rate is divided to come near WORK_HZ."""
    return max(1, round(fs_hz / WORK_HZ))


def grid_samples(fs_hz: float) -> int:
    """Blocks have to start at a multiple of this many samples (about 1 s) to see the windows the whole sees."""
    factor = decimation(fs_hz)
    return factor * round(fs_hz / factor)


def prepare(x_mv: Floats, fs_hz: float, *, lost: Bools | None = None) -> Work:
    """(n_leads, n_samples) mV, NaN where missing → the leads at the working rate, about 1 to 28 Hz.

    A gap is filled with its nearest sample, so that what lies beyond a long gap has no influence. ``lost``: samples
    that are there and tell nothing of the heart; they are filtered with the others, but not present.
    """
    factor = decimation(fs_hz)
    rate = fs_hz / factor
    present = np.isfinite(x_mv)
    filled = np.where(present, x_mv, 0.0)
    for row in np.flatnonzero(~present.all(axis=1)):
        filled[row] = _nearest_fill(x_mv[row], present[row])
    filled = without_spikes(filled, fs_hz)
    smooth = _decimate(filled, _low_pass(fs_hz, rate), factor)
    slow = smooth
    for box_s in SLOW_BOXES_S:
        slow = uniform_filter1d(slow, 2 * round(box_s * rate / 2) + 1, axis=1, mode="nearest")
    if lost is not None and lost.any():
        present = present & ~lost
    present = _any_in_step(present, factor, slow.shape[1])
    return Work(smooth - slow, present, rate, round(rate), 4 * round(rate), filled, fs_hz)


def sharpness_lag(fs_hz: float) -> int:
    """Samples, about 8 ms: a second difference so wide passes 28 to 100 Hz and hardly anything below 10 Hz."""
    return max(1, round(SHARP_S * fs_hz))


def without_spikes(x_mv: Floats, fs_hz: float) -> Floats:
    """(n_leads, n_samples) without lone deflections too narrow for any heart; the same array where there are none.

    Pacing spikes go on when the heart no longer follows: they must not pass for beats. A spike is SPIKE_MV or more
    high, all but over 8 ms beside its top, and without a second one near by: a QRS of fast deflections has several.
    """
    lag = sharpness_lag(fs_hz)
    if x_mv.shape[1] <= 4 * lag:
        return x_mv
    bend = np.zeros(x_mv.shape)
    np.subtract(x_mv[:, 2 * lag :], x_mv[:, lag:-lag], out=bend[:, lag:-lag])
    bend[:, lag:-lag] += x_mv[:, : -2 * lag]
    bend[:, lag:-lag] -= x_mv[:, lag:-lag]
    np.abs(bend, out=bend)
    row, at = np.nonzero(bend >= 2 * (1 - SPIKE_LEFT) * SPIKE_MV)
    if not len(row):
        return x_mv
    n = x_mv.shape[1]
    lone = round(LONE_S * fs_hz)
    reach = np.arange(-lone, lone + 1)
    around = bend[row[:, None], np.clip(at[:, None] + reach, 0, n - 1)]
    top = around.max(axis=1)
    near = np.abs(reach) <= 2 * lag
    chosen = (bend[row, at] == top) & (around[:, ~near].max(axis=1) <= LONE_SHARE * top)
    row, at = row[chosen], at[chosen]
    sides = [x_mv[row, np.clip(at + k * lag, 0, n - 1)] for k in (-2, -1, 0, 1, 2)]
    line = (sides[0] + sides[4]) / 2
    left = np.maximum(np.abs(sides[1] - line), np.abs(sides[3] - line))
    spike = left <= SPIKE_LEFT * np.abs(sides[2] - line)
    if not spike.any():
        return x_mv
    row, at = row[spike, None], at[spike, None]
    across = np.arange(-2 * lag + 1, 2 * lag)
    first, last = x_mv[row, np.clip(at - 2 * lag, 0, n - 1)], x_mv[row, np.clip(at + 2 * lag, 0, n - 1)]
    out = x_mv.copy()
    out[row, np.clip(at + across, 0, n - 1)] = first + (last - first) * (across + 2 * lag) / (4 * lag)
    return out


@lru_cache(maxsize=8)
def _low_pass(fs_hz: float, rate: float) -> Floats:
    return low_pass_taps(2 * round(0.05 * fs_hz) + 1, min(HIGHEST_HZ, 0.42 * rate), fs_hz)


def _nearest_fill(x: Floats, present: Bools) -> Floats:
    good = np.flatnonzero(present)
    if not good.size:
        return np.zeros_like(x)
    after = np.clip(np.searchsorted(good, np.arange(x.size)), 0, good.size - 1)
    before = np.maximum(after - 1, 0)
    here = np.arange(x.size)
    nearer = np.where(np.abs(good[before] - here) <= np.abs(good[after] - here), good[before], good[after])
    return x[nearer]


def _decimate(x: Floats, taps: Floats, factor: int) -> Floats:
    """Zero-phase FIR filter with the ends held, every ``factor``-th sample kept, the first one first.

    As one product of stretches of OUT_AT_ONCE kept samples with a banded matrix, which is several times as fast as a
    sum over taps.
    """
    half, n_out = len(taps) // 2, -(-x.shape[1] // factor)
    n_parts = -(-n_out // OUT_AT_ONCE)
    hop, reach = OUT_AT_ONCE * factor, (OUT_AT_ONCE - 1) * factor + len(taps)
    after = max(half, (n_parts - 1) * hop + reach - x.shape[1] - half)
    padded = np.pad(x, ((0, 0), (half, after)), mode="edge")
    band = np.zeros((reach, OUT_AT_ONCE))
    for k in range(OUT_AT_ONCE):
        band[k * factor : k * factor + len(taps), k] = taps
    parts = sliding_window_view(padded, reach, axis=1)[:, ::hop][:, :n_parts]
    return (parts @ band).reshape(len(x), n_parts * OUT_AT_ONCE)[:, :n_out]


def _any_in_step(present: Bools, factor: int, n_out: int) -> Bools:
    short = n_out * factor - present.shape[1]
    padded = np.pad(present, ((0, 0), (0, short)), mode="edge") if short else present
    return np.any(padded.reshape(present.shape[0], n_out, factor), axis=2)


def windows(rows: NDArray, length: int, step: int) -> NDArray:
    """(n_leads, n) → (n_leads, n_windows, length), a view; no window where the signal is too short."""
    if rows.shape[1] < length:
        return np.empty((rows.shape[0], 0, length), rows.dtype)
    return sliding_window_view(rows, length, axis=1)[:, ::step]


def shape_indices(work: Work) -> tuple[Floats, Floats]:
    """(n_leads, n_windows, 9) indices of SHAPE_NAMES and (n_leads, n_windows) rms in mV, every second 4 s.

    leakage: VF-filter (Kuo and Dillman 1978), 0 for a sine. fullness, slope_fullness: mean of |signal| or
    |slope| over its rms (0.9 sine, 0.8 random, below 0.5 for narrow complexes on a flat line). quiet_share:
    slope energy of the quietest quarter of 0.16 s pieces over their mean. periodicity: highest
    autocorrelation at the lag of one cycle. log_peak_hz: ln of the strongest frequency. concentration,
    slow_share, fast_share: shares of power within 0.75 Hz of the peak and its double, below 2 Hz and above 9 Hz.
    Silent windows give zeros.
    """
    half_rate = work.fs_hz / 2
    length = work.length // 2
    w = _half_rate_windows(work, length).astype(np.float32)  # half the memory to move, ample for an index
    w -= w.mean(axis=-1, keepdims=True)
    rms = np.sqrt(np.mean(w * w, axis=-1))
    safe = np.where(rms > 1e-9, rms, 1.0)
    w /= safe[..., None]
    slope = np.diff(w, axis=-1)
    magnitude, steepness = np.abs(w), np.abs(slope)
    slope_rms = np.sqrt(np.mean(slope * slope, axis=-1)) + 1e-12
    piece = max(2, round(0.16 * half_rate))
    n_pieces = slope.shape[-1] // piece
    energy = (slope[..., : n_pieces * piece] ** 2).reshape(*slope.shape[:-1], n_pieces, piece).mean(axis=-1)
    quarter = n_pieces // 4
    quiet = np.partition(energy, quarter, axis=-1)[..., : quarter + 1].mean(axis=-1)
    out = np.empty((*rms.shape, len(SHAPE_NAMES)))
    out[..., 0] = _leakage(w, magnitude, steepness)
    out[..., 1] = magnitude.mean(axis=-1)
    out[..., 2] = steepness.mean(axis=-1) / slope_rms
    out[..., 3] = np.sqrt(quiet / (slope_rms**2))
    out[..., 4:] = _spectral(w, half_rate)
    out[rms <= 1e-9] = 0.0
    return out, rms


def _half_rate_windows(work: Work, length: int) -> Floats:
    """Every second sample of each window of 2·length samples, whether a step is odd or even."""
    if work.step % 2:
        return windows(work.y_mv, work.length, work.step)[..., ::2]
    even = work.y_mv[:, : work.y_mv.shape[1] // 2 * 2 : 2]
    return windows(even, length, work.step // 2)


def _leakage(w: Floats, magnitude: Floats, steepness: Floats) -> Floats:
    n = w.shape[-1]
    half_period = np.pi * magnitude.sum(axis=-1) / (steepness.sum(axis=-1) + 1e-12) + 0.5
    shift = np.clip(half_period.astype(np.int64), 1, n // 2)[..., None]
    padded = np.zeros(
        (*w.shape[:-1], n + n // 2), w.dtype
    )  # zeros before, so that a shift never leaves the row
    padded[..., n // 2 :] = w
    start = np.arange(shift.size).reshape(shift.shape) * padded.shape[-1] + n // 2 - shift
    moved = padded.ravel().take(start + np.arange(n))
    moved += w
    upto = np.cumsum(magnitude, axis=-1)
    alone = np.take_along_axis(upto, shift - 1, axis=-1)[..., 0]  # before the moved signal begins
    above = np.abs(moved, out=moved).sum(axis=-1) - alone
    below = upto[..., -1] - alone + np.take_along_axis(upto, n - 1 - shift, axis=-1)[..., 0]
    return above / (below + 1e-12)


def _spectral(w: Floats, rate: float) -> Floats:
    """(…, 5): periodicity, ln peak frequency, concentration, share below 2 Hz, share above 9 Hz."""
    n = w.shape[-1]
    padded = 1 << (2 * n - 1).bit_length() - 1
    power = np.abs(fft.rfft(w, padded, axis=-1)) ** 2
    lag = np.arange(1, int(0.75 * rate) + 1)
    auto = fft.irfft(power, padded, axis=-1)[..., : lag[-1] + 1]
    auto = auto[..., 1:] / (auto[..., :1] + 1e-12) * (n / (n - lag))
    dipped = np.maximum.accumulate(auto < 0, axis=-1)  # a cycle counts from the first fall below zero
    periodicity = np.where(dipped, auto, 0.0).max(axis=-1)
    freq = fft.rfftfreq(padded, 1 / rate)
    total = power.sum(axis=-1) + 1e-12
    cumulative = np.concatenate([np.zeros((*power.shape[:-1], 1)), np.cumsum(power, axis=-1)], axis=-1)
    top = power[..., : np.searchsorted(freq, 10.0)].argmax(axis=-1)
    spread = max(1, round(0.75 / freq[1]))
    near = _between(cumulative, top - spread, top + spread + 1)
    double = _between(cumulative, np.maximum(2 * top - spread, top + spread + 1), 2 * top + spread + 1)
    slow = cumulative[..., np.searchsorted(freq, 2.0)]
    fast = total - cumulative[..., np.searchsorted(freq, 9.0)]
    columns = (
        periodicity,
        np.log(np.maximum(freq[top], 0.5)),
        (near + double) / total,
        slow / total,
        fast / total,
    )
    return np.stack(columns, axis=-1)


def _between(cumulative: Floats, low: NDArray[np.int64], high: NDArray[np.int64]) -> Floats:
    last = cumulative.shape[-1] - 1
    upper = np.take_along_axis(cumulative, np.clip(high, 0, last)[..., None], axis=-1)
    lower = np.take_along_axis(cumulative, np.clip(low, 0, last)[..., None], axis=-1)
    return (upper - lower)[..., 0]
