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
    smooth = _decimate(filled, _low_pass(fs_hz, rate), factor)
    slow = smooth
    for box_s in SLOW_BOXES_S:
        slow = uniform_filter1d(slow, 2 * round(box_s * rate / 2) + 1, axis=1, mode="nearest")
    if lost is not None and lost.any():
        present = present & ~lost
    return Work(
        smooth - slow, _any_in_step(present, factor, slow.shape[1]), rate, round(rate), 4 * round(rate)
    )


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
    """Zero-phase FIR filter with the ends held, every ``factor``-th sample kept, the first one first."""
    half = len(taps) // 2
    padded = np.pad(x, ((0, 0), (half, half)), mode="edge")
    n_out = -(-x.shape[1] // factor)
    out = np.zeros((x.shape[0], n_out))
    for k, tap in enumerate(taps):  # some fifty taps, each over all kept samples at once
        out += tap * padded[:, k : k + x.shape[1] : factor]
    return out


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
    index = np.arange(n) - shift
    moved = np.take_along_axis(w, np.maximum(index, 0), axis=-1)
    valid = index >= 0
    above = (np.abs(w + moved) * valid).sum(axis=-1)
    below = ((magnitude + np.abs(moved)) * valid).sum(axis=-1)
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
