"""Wander and muscle noise, and the pieces other noise extractors share.

Rows are (R, N) stretches of equal length in millivolts at the recording's own rate. One
transform of each row serves the wander (its lowest bins), the muscle band and the search for
mains. It is kept in single precision, for speed: 1 mV is then known to 0.1 nV. A feature that
cannot be given is NaN; a flat row has noise of 0.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from sigguard import filters

Rows = NDArray[np.floating]
Mask = NDArray[np.bool_]

WANDER_TOP_HZ = 0.5
MAINS_HZ = (50.0, 60.0)
MUSCLE_LOW_HZ = 20.0
MUSCLE_TOP_HZ = 150.0
TOP_OF_FS = 0.45  # share of the rate up to which a recording's own anti-alias filter is trusted
EDGE_S = 0.1  # at both ends of a row the periodic transform bends what it shows
MIN_OPEN = 0.25  # share of a window that must lie between beats for it to count


def fill_gaps(x_mv: Rows) -> tuple[Rows, Mask]:
    """Bridge missing samples by straight lines.

    (R, N) with NaN → filled (R, N) without NaN, and where samples were missing (R, N). Before the
    first and after the last sample the nearest one is held; a row without any becomes zeros.
    An array without NaN comes back as it is, not copied.
    """
    missing = ~np.isfinite(x_mv)
    holed = np.flatnonzero(missing.any(axis=1))
    if holed.size == 0:
        return x_mv, missing
    gone = missing[holed]
    n = x_mv.shape[1]
    place = np.arange(n)
    before = np.maximum.accumulate(np.where(gone, -1, place), axis=1)
    after = np.minimum.accumulate(np.where(gone, n, place)[:, ::-1], axis=1)[:, ::-1]
    left = np.where(before < 0, np.where(after < n, after, 0), before)
    right = np.where(after >= n, left, after)
    safe = np.where(gone, 0.0, x_mv[holed])
    a, b = np.take_along_axis(safe, left, 1), np.take_along_axis(safe, right, 1)
    part = (place - left) / np.maximum(right - left, 1)
    filled = x_mv.copy()
    filled[holed] = np.where(gone, a + (b - a) * np.clip(part, 0.0, 1.0), safe)
    return filled, missing


@dataclass(frozen=True, slots=True, eq=False)
class PlainTransform:
    """Transform of rows from which the straight line between their ends was taken, so that they close."""

    spectrum: NDArray[np.complex64]  # (R, N // 2 + 1), mV
    freq_hz: NDArray[np.float64]
    n: int
    fs_hz: float
    slope_mv: NDArray[np.float64]  # (R,): what the line rises over the row

    def band(self, gain: NDArray[np.float64]) -> Rows:
        """Rows (R, N) in mV after multiplying the spectrum by ``gain`` (n_bins,)."""
        return fft.irfft(self.spectrum * gain.astype(np.float32), n=self.n, axis=-1, overwrite_x=True)


def plain_transform(filled_mv: Rows, fs_hz: float) -> PlainTransform:
    """(R, N) rows without NaN → their transform; the line runs between the means of the outer 40 ms."""
    n = filled_mv.shape[1]
    k = max(1, min(n // 2, int(0.04 * fs_hz)))
    ends = filled_mv[:, -k:].mean(axis=1) - filled_mv[:, :k].mean(axis=1)
    slope = ends * n / max(n - k, 1)
    ramp = np.arange(n) / n - (n - 1) / (2 * n)
    x = (filled_mv - filled_mv.mean(axis=1, keepdims=True)).astype(np.float32)
    x -= slope[:, None].astype(np.float32) * ramp.astype(np.float32)
    return PlainTransform(
        fft.rfft(x, axis=-1, overwrite_x=True), np.arange(n // 2 + 1) * (fs_hz / n), n, fs_hz, slope
    )


def wander(plain: PlainTransform) -> tuple[NDArray, NDArray, NDArray]:
    """Baseline wander below 0.5 Hz: rms in µV, range in µV, steepest slope in µV/s; each (R,).

    The mean is no wander, a drift from one end to the other is. What a row of T seconds cannot
    tell from a drift (below 1/T Hz) is counted as the drift it looks like. Flat: 0.
    """
    wave = wander_wave_uv(plain)
    n_out, duration_s = wave.shape[1], plain.n / plain.fs_hz
    rms = np.sqrt((wave**2).mean(axis=1))
    slope = np.abs(np.diff(wave, axis=1)).max(axis=1) * (n_out / duration_s)
    return rms, wave.max(axis=1) - wave.min(axis=1), slope


def wander_wave_uv(plain: PlainTransform) -> NDArray[np.float64]:
    """Baseline wander below 0.5 Hz about its mean, (R, n_out) in µV on a coarse even grid of at least 64 points."""
    duration_s = plain.n / plain.fs_hz
    n_bins = min(int(np.ceil(WANDER_TOP_HZ * duration_s)) + 1, len(plain.freq_hz))
    low = plain.spectrum[:, :n_bins].astype(np.complex128)
    low[:, plain.freq_hz[:n_bins] > WANDER_TOP_HZ] = 0.0
    n_out = max(16 * n_bins, 64)
    wave = fft.irfft(low, n=n_out, axis=-1) * (n_out / plain.n)
    wave += plain.slope_mv[:, None] * (np.arange(n_out) / n_out - (n_out - 1) / (2 * n_out))
    wave -= wave.mean(axis=1, keepdims=True)
    return wave * 1e3


def top_hz(fs_hz: float, limit_hz: float = MUSCLE_TOP_HZ) -> float:
    """Highest frequency looked at: ``limit_hz`` or 0.45 of the rate."""
    return min(limit_hz, TOP_OF_FS * fs_hz)


def muscle_band(plain: PlainTransform, mains_hz: NDArray[np.float64]) -> Rows:
    """Rows (R, N) in µV between 20 and 150 Hz (or 0.45 of the rate), the mains found taken out with its harmonics.

    ``mains_hz`` (R,) is 50, 60 or NaN. Only a line that is there is taken out: a notch answers a steep
    beat by ringing for a second. The gain is such that white noise has the rms of an ideal band
    from 20 Hz to the top, whatever was taken out.
    """
    out = np.empty((len(plain.spectrum), plain.n), dtype=np.float32)
    for hz in (np.nan, *MAINS_HZ):
        rows = np.flatnonzero(np.isnan(mains_hz) if np.isnan(hz) else mains_hz == hz)
        if rows.size == 0:
            continue
        gain = muscle_gain(plain, hz)
        if rows.size == len(out):
            return plain.band(gain)
        out[rows] = fft.irfft(
            plain.spectrum[rows] * gain.astype(np.float32), n=plain.n, axis=-1, overwrite_x=True
        )
    return out


def muscle_gain(plain: PlainTransform, mains_hz: float) -> NDArray[np.float64]:
    """Gain (n_bins,), mV to µV, of the muscle band without the mains line (NaN: none) and its harmonics; see muscle_band."""
    top = top_hz(plain.fs_hz)
    gain = beat_free(plain.freq_hz) * filters.low_pass(plain.freq_hz, top, order=8)
    if not np.isnan(mains_hz):
        gain = gain * filters.notch(plain.freq_hz, mains_hz)
    passed = (gain**2).sum() * plain.freq_hz[1]
    return gain * (1e3 * np.sqrt((top - MUSCLE_LOW_HZ) / passed))


def beat_free(freq_hz: NDArray) -> NDArray[np.float64]:
    """High-pass at 20 Hz, gentle enough not to ring beyond 80 ms from a beat."""
    return filters.high_pass(freq_hz, MUSCLE_LOW_HZ, order=2)


def between_beats(qrs_mask: Mask, missing: Mask, fs_hz: float) -> Mask:
    """Samples (R, N) to measure noise on: present, away from beats, from gaps (50 ms) and from the row's ends.

    In a row whose beats leave less than 30 % open (a fast rhythm, or beats found in noise) the beats stay in.
    """
    n = qrs_mask.shape[1]
    open_ = ~qrs_mask
    crowded = open_.mean(axis=1) < 0.3
    open_[crowded] = True
    holed = np.flatnonzero(missing.any(axis=1))
    if holed.size:
        open_[holed] &= ~widen(missing[holed], int(0.05 * fs_hz))
    edge = min(int(EDGE_S * fs_hz), n // 4)
    if edge:
        open_[:, :edge] = False
        open_[:, -edge:] = False
    return open_


def widen(mask: Mask, by: int) -> Mask:
    """Every True stretch made longer by ``by`` samples at both ends."""
    count = np.zeros((mask.shape[0], mask.shape[1] + 2 * by + 1), dtype=np.int32)
    np.cumsum(mask, axis=1, out=count[:, by + 1 : by + 1 + mask.shape[1]])
    count[:, by + 1 + mask.shape[1] :] = count[:, by + mask.shape[1], None]
    n = mask.shape[1]
    return count[:, 2 * by + 1 : 2 * by + 1 + n] > count[:, :n]


def rms_over(y: Rows, keep: Mask) -> NDArray[np.float64]:
    """Root mean square of each row over the samples kept; NaN where none is."""
    count = keep.sum(axis=1)
    power = np.einsum("ij,ij,ij->i", y, y, keep)
    return np.where(count > 0, np.sqrt(power / np.maximum(count, 1)), np.nan)


def window_rms(y: Rows, keep: Mask, fs_hz: float, seconds: float) -> Rows:
    """Root mean square in windows end to end: (R, N) → (R, n_windows); NaN where under a quarter is kept."""
    width = max(1, int(round(seconds * fs_hz)))
    n_win = y.shape[1] // width
    shape = (y.shape[0], n_win, width)
    y3, k3 = y[:, : n_win * width].reshape(shape), keep[:, : n_win * width].reshape(shape)
    count = k3.sum(axis=2)
    power = np.einsum("ijk,ijk,ijk->ij", y3, y3, k3)
    return np.where(count >= max(1.0, MIN_OPEN * width), np.sqrt(power / np.maximum(count, 1)), np.nan)


def quantile_of(values: Rows, q: float) -> NDArray[np.float64]:
    """Quantile of each row over what is not NaN (linear between neighbours); NaN for a row of nothing."""
    if values.shape[1] == 0:
        return np.full(values.shape[0], np.nan)
    ordered = np.sort(values, axis=1)  # NaN goes last
    count = np.isfinite(values).sum(axis=1)
    at = q * np.maximum(count - 1, 0)
    low = np.floor(at).astype(np.intp)
    high = np.minimum(low + 1, np.maximum(count - 1, 0))
    rows = np.arange(len(values))
    a, b = ordered[rows, low], ordered[rows, high]
    return np.where(count > 0, a + (b - a) * (at - low), np.nan)


def muscle(muscle_uv: Rows, keep: Mask, fs_hz: float) -> tuple[NDArray, NDArray, NDArray]:
    """Muscle noise between beats: rms, steady and burst level in µV; each (R,).

    Steady is the median over windows of 0.5 s, burst the 95th percentile over windows of 0.25 s:
    alike for constant noise, far apart for bursts. NaN where nothing lies between beats. Flat: 0.
    """
    steady = quantile_of(window_rms(muscle_uv, keep, fs_hz, 0.5), 0.5)
    burst = quantile_of(window_rms(muscle_uv, keep, fs_hz, 0.25), 0.95)
    return rms_over(muscle_uv, keep), steady, burst
