"""Tremor and movement: what is left of a row when the averaged beats are taken off."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from sigguard import filters
from sigguard.flatline import runs_of
from sigguard.noise import Mask, Rows, quantile_of, rms_over, window_rms

TREMOR_HZ = (4.0, 12.0)
MOTION_HZ = (1.0, 10.0)
TREMOR_PASS_HZ = (3.2, 17.0)  # wide enough that a sine at 4.5 or 11 Hz keeps its height
BELOW_HZ, ABOVE_HZ = (2.0, 4.0), (12.0, 18.0)  # where the background of tremor is read
LEAST_UV = 1e-3
THIN_HZ = 80.0


@dataclass(frozen=True, slots=True, eq=False)
class Residual:
    """What does not recur with the beats, in µV, and its transform; the work shared by tremor and motion."""

    rows_uv: Rows  # (R, M)
    spectrum: NDArray[np.complex64]  # of the rows, their mean removed, faded at both ends over 0.25 s
    density: Rows  # (R, n_low): power per bin up to 18 Hz under a Hann window, any scale
    freq_hz: NDArray[np.float64]
    fs_hz: float

    @property
    def thin_len(self) -> int:
        """Samples of a row at about 80 Hz, which is enough for bands that end at 12 Hz."""
        m = self.rows_uv.shape[1]
        return min(m, fft.next_fast_len(int(np.ceil(m * THIN_HZ / self.fs_hz)), real=True))

    @property
    def thin_fs_hz(self) -> float:
        return self.thin_len * self.fs_hz / self.rows_uv.shape[1]

    def band(self, low_hz: float, high_hz: float) -> Rows:
        """The rows between two frequencies, (R, thin_len)."""
        n = self.thin_len
        k = n // 2 + 1
        gain = filters.band_pass(self.freq_hz[:k], low_hz, high_hz, low_order=3, high_order=4)
        gain *= n / self.rows_uv.shape[1]
        return fft.irfft(self.spectrum[:, :k] * gain.astype(np.float32), n=n, axis=-1, overwrite_x=True)


def residual_of(residual_mv: Rows, fs_hz: float) -> Residual:
    """(R, M) in mV; NaN counts as 0."""
    rows = np.nan_to_num(residual_mv) * 1e3
    m = rows.shape[1]
    x = (rows - rows.mean(axis=1, keepdims=True)).astype(np.float32)
    hann = (0.5 - 0.5 * np.cos(2 * np.pi * (np.arange(m) + 0.5) / m)).astype(np.float32)
    n_bins = min(m // 2 + 1, int(np.ceil(ABOVE_HZ[1] * m / fs_hz)) + 2)
    weighted = fft.rfft(x * hann, axis=-1, overwrite_x=True)[:, :n_bins].astype(np.complex128)
    density = weighted.real**2 + weighted.imag**2
    k = min(int(0.25 * fs_hz), m // 2)
    if k:
        fade = (0.5 - 0.5 * np.cos(np.pi * (np.arange(k) + 0.5) / k)).astype(np.float32)
        x[:, :k] *= fade
        x[:, -k:] *= fade[::-1]
    spectrum = fft.rfft(x, axis=-1, overwrite_x=True)
    return Residual(rows, spectrum, density, np.arange(m // 2 + 1) * (fs_hz / m), fs_hz)


def tremor(res: Residual, open_mask: Mask) -> tuple[NDArray, NDArray]:
    """Tremor from 4 to 12 Hz: rms in µV above its surroundings, and peakedness; each (R,).

    The rms is taken where ``open_mask`` (R, thin_len) lies between beats, its power cut to the share that
    stands above a straight line, in log power over log frequency, from 2–4 to 12–18 Hz: broad noise gives
    little, a line or hump all. Peakedness: highest 1 Hz-wide density over that line (1 for noise alone). Flat: 0 and NaN.
    """
    share, peak = _above_line(res)
    level = rms_over(res.band(*TREMOR_PASS_HZ), open_mask)
    return level * np.sqrt(share), peak


def _above_line(res: Residual) -> tuple[NDArray, NDArray]:
    f = res.freq_hz[: res.density.shape[1]]
    none = np.full(len(res.density), np.nan)
    if len(f) < 2 or f[-1] < ABOVE_HZ[1] or f[1] > 0.5:
        return none, none
    lo, hi = np.searchsorted(f, TREMOR_HZ)
    below, above = _mean_density(res, *BELOW_HZ), _mean_density(res, *ABOVE_HZ)
    silent = res.density[:, lo:hi].mean(axis=1) <= 0
    floor = 1e-12 * np.maximum(res.density.max(axis=1), 1e-300)
    log_b, log_a = np.log(np.maximum(below, floor)), np.log(np.maximum(above, floor))
    at = (np.log(f[lo:hi]) - np.log(3.0)) / (np.log(15.0) - np.log(3.0))
    line = np.exp(log_b[:, None] + (log_a - log_b)[:, None] * at)
    band = res.density[:, lo:hi]
    share = np.clip(1.0 - line.sum(axis=1) / np.where(silent, 1.0, band.sum(axis=1)), 0.0, 1.0)
    width = max(1, int(round(1.0 / f[1])))
    smooth = np.cumsum(np.pad(band / line, ((0, 0), (1, 0))), axis=1)
    peak = (smooth[:, width:] - smooth[:, :-width]).max(axis=1) / width
    return np.where(silent, 0.0, share), np.where(silent, np.nan, peak)


def _mean_density(res: Residual, low_hz: float, high_hz: float) -> NDArray[np.float64]:
    i, j = np.searchsorted(res.freq_hz, (low_hz, high_hz))
    return res.density[:, i : max(j, i + 1)].mean(axis=1)


def motion(res: Residual) -> tuple[NDArray, NDArray, NDArray, NDArray]:
    """Movement: rms from 1 to 10 Hz, highest rms of a 0.5 s window, largest step, all µV, and crest factor; each (R,).

    The step is the largest change of level between the medians of neighbouring 0.5 s; the crest
    factor the highest window over the median window (1 for constant movement). Flat: 0, 0, 0, NaN.
    Rows shorter than 1 s: no step (NaN).
    """
    y = res.band(*MOTION_HZ)
    whole = np.ones(y.shape, dtype=bool)
    windows = window_rms(y, whole, res.thin_fs_hz, 0.5)
    peak, middle = quantile_of(windows, 1.0), quantile_of(windows, 0.5)
    crest = np.where(middle > LEAST_UV, peak / np.maximum(middle, LEAST_UV), np.nan)
    return rms_over(y, whole), peak, _largest_step(res), crest


def _largest_step(res: Residual) -> NDArray[np.float64]:
    width = max(1, int(round(0.5 * res.fs_hz)))
    n_win = res.rows_uv.shape[1] // width
    if n_win < 2:
        return np.full(len(res.rows_uv), np.nan)
    blocks = res.rows_uv[:, : n_win * width].reshape(len(res.rows_uv), n_win, width)
    thin = blocks[:, :, :: max(1, width // 25)]  # a median of 25 samples spread over the window is as good
    return np.abs(np.diff(np.median(thin, axis=2), axis=1)).max(axis=1)


def qrs_height_mv(filled_mv: Rows, qrs_mask: Mask) -> NDArray[np.float64]:
    """Median over beats of the peak-to-peak height within the mask, mV, (R,); NaN for a row without beats."""
    out = np.full(len(filled_mv), np.nan)
    runs = runs_of(qrs_mask, 2)
    if not len(runs):
        return out
    n = filled_mv.shape[1]
    # reduceat takes start, end, start, end, … over the flattened rows; an end at the very last sample is left out.
    edges = np.column_stack((runs.row * n + runs.start, runs.row * n + runs.end)).ravel()
    if edges[-1] == filled_mv.size:
        edges = edges[:-1]
    flat = filled_mv.ravel()
    height = np.maximum.reduceat(flat, edges)[::2] - np.minimum.reduceat(flat, edges)[::2]
    order = np.lexsort((height, runs.row))
    row, height = runs.row[order], height[order]
    rows, first, count = np.unique(row, return_index=True, return_counts=True)
    out[rows] = 0.5 * (height[first + (count - 1) // 2] + height[first + count // 2])
    return out


def excursion_ratio(
    filled_mv: Rows, res: Residual, height_mv: NDArray[np.float64]
) -> tuple[NDArray, NDArray]:
    """Highest deflection from the median, of the row and of the residual, over the median QRS height; each (R,).

    NaN for a row without beats or with a QRS of no height.
    """
    ok = np.nan_to_num(height_mv) > 1e-6
    height = np.where(ok, height_mv, 1.0)
    thin = filled_mv[:, :: max(1, filled_mv.shape[1] // 500)]
    middle = np.median(thin, axis=1)
    reach = np.maximum(filled_mv.max(axis=1) - middle, middle - filled_mv.min(axis=1))
    rest = np.abs(res.rows_uv).max(axis=1) * 1e-3
    return np.where(ok, reach / height, np.nan), np.where(ok, rest / height, np.nan)
