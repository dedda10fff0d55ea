"""Spectrum and shape of a row: band powers and the published quality indices.

One Hann-weighted transform of each row, its mean removed, serves them all. It is kept in single
precision, for speed; what is summed over bins is summed in double.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from sigguard.noise import Mask, Rows, top_hz

BANDS_HZ = (
    (0.05, 0.5), (0.5, 1.0), (1.0, 4.0), (4.0, 8.0), (8.0, 15.0),
    (15.0, 25.0), (25.0, 40.0), (40.0, 75.0), (75.0, 150.0),
)  # fmt: skip
BAND_NAMES = tuple(f"power_{lo:g}_{hi:g}hz_log10_uv2".replace(".", "p") for lo, hi in BANDS_HZ)
LEAST_UV2 = 1e-6  # what a band without power is given, so that its logarithm exists
EDGE_SHARE = 0.95


@dataclass(frozen=True, slots=True, eq=False)
class RowSpectrum:
    """Power of each row in each frequency bin, in µV²; the sum over bins is the row's weighted variance."""

    power_uv2: NDArray[np.float32]  # (R, n_bins)
    running_uv2: Rows  # (R, n_bins + 1): sum of the bins before
    freq_hz: NDArray[np.float64]  # (n_bins,)
    fs_hz: float

    def band_uv2(self, low_hz: float, high_hz: float) -> NDArray[np.float64]:
        """Power at low ≤ f < high, (R,); NaN where half the rate lies below ``high_hz``."""
        if high_hz > self.fs_hz / 2 * (1 + 1e-9):
            return np.full(len(self.power_uv2), np.nan)
        i, j = np.searchsorted(self.freq_hz, (low_hz - 1e-9, high_hz - 1e-9))
        return np.maximum(self.running_uv2[:, j] - self.running_uv2[:, i], 0.0)


def row_spectrum(filled_mv: Rows, fs_hz: float) -> RowSpectrum:
    """(R, N) rows without NaN, mV → their spectrum. Flat rows have no power in any bin.

    The plain mean is removed before weighting. What the Hann window then leaves in the first bins
    is wander slower than the row is long, and stays there.
    """
    n = filled_mv.shape[1]
    hann = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(n) / n)
    scale = np.sqrt(2.0 * 1e6 / (n * max(float((hann * hann).sum()), 1e-300)))
    x = (filled_mv - filled_mv.mean(axis=1, keepdims=True)).astype(np.float32)
    x *= (hann * scale).astype(np.float32)
    spec = fft.rfft(x, axis=-1, overwrite_x=True)
    power = spec.real**2
    power += spec.imag**2
    power[:, 0] /= 2
    if n % 2 == 0:
        power[:, -1] /= 2
    running = np.zeros((len(power), power.shape[1] + 1))
    np.cumsum(power, axis=1, dtype=np.float64, out=running[:, 1:])
    return RowSpectrum(power, running, np.arange(n // 2 + 1) * (fs_hz / n), fs_hz)


def band_powers(spec: RowSpectrum) -> Rows:
    """log10 of the power in µV² in each of BANDS_HZ, (R, 9); 75–150 Hz ends at 0.45 of the rate if that is lower.

    At least −6. NaN for a band that reaches above half the rate (the last: less than 10 Hz of it left).
    """
    out = np.empty((len(spec.power_uv2), len(BANDS_HZ)))
    for k, (low, high) in enumerate(BANDS_HZ):
        if k == len(BANDS_HZ) - 1:
            high = top_hz(spec.fs_hz, high)
            if high < low + 10.0:
                out[:, k] = np.nan
                continue
        out[:, k] = np.log10(np.maximum(spec.band_uv2(low, high), LEAST_UV2))
    return out


def p_sqi(spec: RowSpectrum) -> NDArray[np.float64]:
    """pSQI = P(5–15 Hz) / P(5–40 Hz), (R,) (Clifford et al. 2012, from memory); NaN if flat or below 80 Hz."""
    return _ratio(spec.band_uv2(5.0, 15.0), spec.band_uv2(5.0, 40.0))


def bas_sqi(spec: RowSpectrum) -> NDArray[np.float64]:
    """basSQI = 1 − P(0–1 Hz) / P(0–40 Hz), (R,) (Clifford et al. 2012, from memory); NaN if flat or below 80 Hz."""
    return 1.0 - _ratio(spec.band_uv2(0.0, 1.0), spec.band_uv2(0.0, 40.0))


def _ratio(part: NDArray[np.float64], whole: NDArray[np.float64]) -> NDArray[np.float64]:
    ok = whole > LEAST_UV2
    return np.where(ok, part / np.where(ok, whole, 1.0), np.nan)


def spectral_entropy(spec: RowSpectrum) -> NDArray[np.float64]:
    """Entropy of the power from 0.5 to 40 Hz, 0 (one line) to 1 (white), (R,); NaN if flat."""
    i, j = np.searchsorted(spec.freq_hz, (0.5 - 1e-9, min(40.0, spec.fs_hz / 2) + 1e-9))
    power = spec.power_uv2[:, i:j]
    total = power.sum(axis=1, keepdims=True, dtype=np.float64)
    if j - i < 2:
        return np.full(len(power), np.nan)
    share = power / np.where(total > LEAST_UV2, total, 1.0)
    h = -(share * np.log(np.maximum(share, 1e-30))).sum(axis=1) / np.log(j - i)
    return np.where(total[:, 0] > LEAST_UV2, h, np.nan)


def spectral_edge_hz(spec: RowSpectrum) -> NDArray[np.float64]:
    """Frequency below which 95 % of the power from 0.5 Hz to 150 Hz (or 0.45 of the rate) lies, (R,); NaN if flat."""
    i, j = np.searchsorted(spec.freq_hz, (0.5 - 1e-9, top_hz(spec.fs_hz) + 1e-9))
    run = spec.running_uv2[:, i + 1 : j + 1] - spec.running_uv2[:, i : i + 1]
    if j <= i:
        return np.full(len(run), np.nan)
    total = run[:, -1]
    at = np.minimum((run < EDGE_SHARE * total[:, None]).sum(axis=1), run.shape[1] - 1)
    return np.where(total > LEAST_UV2, spec.freq_hz[i + at], np.nan)


def shape_moments(x_mv: Rows, missing: Mask) -> tuple[NDArray, NDArray]:
    """kSQI and sSQI: kurtosis (3 for a normal distribution) and skewness over the samples present; each (R,).

    ``x_mv`` without NaN (missing samples bridged; they are left out of the sums). NaN for a flat row
    or fewer than 4 samples. Clifford et al. 2012 (from memory).
    """
    count = (~missing).sum(axis=1)
    keep = ~missing
    n = np.maximum(count, 1)
    if missing.any():
        d = np.where(keep, x_mv - (np.einsum("ij,ij->i", x_mv, keep) / n)[:, None], 0.0)
    else:
        d = x_mv - x_mv.mean(axis=1, keepdims=True)
    d2 = d * d
    m2 = d2.sum(axis=1) / n
    m3, m4 = np.einsum("ij,ij->i", d2, d) / n, np.einsum("ij,ij->i", d2, d2) / n
    ok = (count >= 4) & (m2 > LEAST_UV2 * 1e-6)
    safe = np.where(ok, m2, 1.0)
    return np.where(ok, m4 / safe**2, np.nan), np.where(ok, m3 / safe**1.5, np.nan)
