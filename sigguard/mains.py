"""Mains hum: how much at 50 or 60 Hz and harmonics, which of the two, and taking it out.

A sine is fitted by least squares to the bins of a Hann-weighted transform about each line, on
what lies between beats: steep regular beats have lines of their own, one heart rate apart, and
one may fall on 50 Hz. The frequency is refined within ±0.3 Hz from the ratio of neighbouring
bins, which is exact for a sine under a Hann window (Grandke 1983, from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from sigguard.noise import MAINS_HZ, Mask, PlainTransform, Rows, beat_free

SEARCH_HZ = 0.3
MAX_HARMONIC = 4  # 5 × 60 = 6 × 50: from there on a harmonic tells nothing apart
TELLS_APART = 11.0  # line over background, as power, plus the logarithm of the bins searched
LEAST_UV = 0.5
NEAR_HZ, FAR_HZ = 0.8, 4.0  # background: this far from the line


@dataclass(frozen=True, slots=True, eq=False)
class OpenSpectrum:
    """Transform of what lies between beats above about 20 Hz, under a Hann window with the beats cut out."""

    spectrum: NDArray[np.complex64]  # (R, N // 2 + 1), µV
    freq_hz: NDArray[np.float64]
    weight_sum: NDArray[np.float64]  # (R,): 0 where nothing lies between beats
    weight_power: NDArray[np.float64]  # (R,): sum of the squared weights
    fs_hz: float

    def density_of(self, bins: NDArray[np.intp] | slice) -> Rows:
        """One-sided power density of some bins in µV²/Hz, (R, n); 0 where nothing lies between beats."""
        part = self.spectrum[:, bins]
        scale = np.where(
            self.weight_power > 0, 2.0 / (self.fs_hz * np.maximum(self.weight_power, 1e-300)), 0.0
        )
        return (part.real.astype(np.float64) ** 2 + part.imag.astype(np.float64) ** 2) * scale[:, None]


def open_spectrum(plain: PlainTransform, keep: Mask) -> OpenSpectrum:
    """From a row's transform and the samples between beats (R, N) to the spectrum between beats."""
    y = plain.band(1e3 * beat_free(plain.freq_hz))
    hann = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(plain.n) / plain.n)
    weight = keep * hann.astype(np.float32)
    y *= weight
    weight_sum = weight.sum(axis=1, dtype=np.float64)
    weight_power = np.einsum("ij,ij->i", weight, weight).astype(np.float64)
    return OpenSpectrum(
        fft.rfft(y, axis=-1, overwrite_x=True), plain.freq_hz, weight_sum, weight_power, plain.fs_hz
    )


def mains(spec: OpenSpectrum, *, among_hz: tuple[float, ...] = MAINS_HZ) -> tuple[NDArray, NDArray, NDArray]:
    """Mains hum: amplitude and harmonics in µV (peak, not rms), and 50 or 60; each (R,).

    The first is the amplitude at 50 or 60 Hz, whichever carries more, the local background taken
    off; the second the root of the summed squares over the harmonics 2 to 4. Where no line stands
    out of the background (13 to 14 times its power), both are 0 and the third is NaN. NaN in all three
    where nothing lies between beats. A line above half the rate is folded down and is not seen.
    """
    unknown = spec.weight_sum <= 0
    first, rest = [], []
    for hz in among_hz:
        lines = [_line_power(spec, hz * k, SEARCH_HZ * k) for k in range(1, MAX_HARMONIC + 1)]
        first.append(lines[0])
        rest.append(np.sum(lines[1:], axis=0))
    base, more = np.array(first), np.array(rest)
    which = np.argmax(base + more, axis=0)
    rows = np.arange(len(which))
    base_uv, more_uv = np.sqrt(base[which, rows]), np.sqrt(more[which, rows])
    found = (base_uv > 0) | (more_uv > 0)
    hz_found = np.where(found, np.asarray(among_hz)[which], np.nan)
    return (
        np.where(unknown, np.nan, base_uv),
        np.where(unknown, np.nan, more_uv),
        np.where(unknown, np.nan, hz_found),
    )


def _line_power(spec: OpenSpectrum, hz: float, search_hz: float) -> NDArray[np.float64]:
    """Squared amplitude (µV²) of a line near ``hz``, 0 where it does not stand out; (R,)."""
    n_bins = len(spec.freq_hz)
    none = np.zeros(len(spec.weight_sum))
    df = spec.freq_hz[1] if n_bins > 1 else np.inf
    if hz + 1.0 > spec.freq_hz[-1]:
        return none
    lo, hi = int(np.floor((hz - search_hz) / df)), int(np.ceil((hz + search_hz) / df)) + 1
    first, last = max(int((hz - FAR_HZ) / df), 1), min(int((hz + FAR_HZ) / df) + 1, n_bins - 1)
    if lo < 3 or hi + 2 >= n_bins:
        return none
    part = spec.spectrum[:, first : last + 1]
    power = part.real.astype(np.float64) ** 2 + part.imag.astype(np.float64) ** 2
    f = spec.freq_hz[first : last + 1]
    away = np.abs(f - hz) > max(NEAR_HZ, search_hz + 3 * df)
    if away.sum() < 4:
        return none
    scale = np.where(spec.weight_sum > 0, 2.0 / np.maximum(spec.weight_sum, 1e-300), 0.0)
    background = np.median(power[:, away], axis=1) / np.log(2.0) * scale**2
    amp2 = _peak_amplitude(np.sqrt(power), lo - first, hi - first, scale) ** 2
    # The highest of n bins of noise grows with log n (its power is exponentially distributed).
    stands_out = (amp2 > (TELLS_APART + np.log(hi - lo)) * background) & (amp2 > LEAST_UV**2)
    return np.where(stands_out, np.maximum(amp2 - background, 0.0), 0.0)


def _peak_amplitude(mag: Rows, lo: int, hi: int, scale: NDArray[np.float64]) -> NDArray[np.float64]:
    """Least-squares amplitude of a sine on the three bins about the highest one in [lo, hi)."""
    rows = np.arange(len(mag))
    top = lo + np.argmax(mag[:, lo:hi], axis=1)
    left, mid, right = mag[rows, top - 1], mag[rows, top], mag[rows, top + 1]
    side = np.where(right > left, 1.0, -1.0)
    ratio = np.maximum(left, right) / np.maximum(mid, 1e-300)
    offset = side * np.clip((2 * ratio - 1) / (ratio + 1), 0.0, 0.5)
    shape = [_hann_lobe(offset + 1), _hann_lobe(offset), _hann_lobe(offset - 1)]
    fit = left * shape[0] + mid * shape[1] + right * shape[2]
    return scale * fit / (shape[0] ** 2 + shape[1] ** 2 + shape[2] ** 2)


def _hann_lobe(d: NDArray[np.float64]) -> NDArray[np.float64]:
    """Main lobe of the Hann window, d bins from its centre, 1 at the centre, 1/2 one bin off."""
    near_one = np.abs(np.abs(d) - 1.0) < 1e-6
    safe = np.where(near_one, 0.5, d)
    return np.where(near_one, 0.5, np.sinc(safe) / (1.0 - safe**2))


def remove_mains(x_mv: Rows, fs_hz: float, hz: float | NDArray[np.float64]) -> Rows:
    """Take a steady mains line and its harmonics out by fitting sines and subtracting them.

    (R, N) without NaN and 50, 60 or NaN for all or each row (R,) → (R, N) in the unit given. A row
    with NaN is returned as it came. The frequency is refined within ±0.3 Hz on the strongest
    harmonic; amplitude and phase are constant over the row, so hum that swells is left in part.
    """
    want = np.broadcast_to(np.asarray(hz, dtype=np.float64), (len(x_mv),))
    out = np.array(x_mv, dtype=np.float64)
    t = np.arange(x_mv.shape[1]) / fs_hz
    hann = 0.5 - 0.5 * np.cos(2 * np.pi * (np.arange(x_mv.shape[1]) + 0.5) / x_mv.shape[1])
    for nominal in np.unique(want[np.isfinite(want)]):
        rows = np.flatnonzero(want == nominal)
        x = out[rows] - out[rows].mean(axis=1, keepdims=True)
        exact = _refine_hz(x * hann, t, float(nominal))
        k = 1
        while k * nominal < 0.49 * fs_hz:
            phase = 2 * np.pi * k * exact[:, None] * t
            c, s = np.cos(phase), np.sin(phase)
            cc, ss, cs = (hann * c * c).sum(1), (hann * s * s).sum(1), (hann * c * s).sum(1)
            xc, xs = (hann * c * x).sum(1), (hann * s * x).sum(1)
            det = cc * ss - cs**2
            a, b = (xc * ss - xs * cs) / det, (xs * cc - xc * cs) / det
            sine = a[:, None] * c + b[:, None] * s
            x -= sine
            out[rows] -= sine
            k += 1
    return out


def _refine_hz(weighted: Rows, t: NDArray[np.float64], nominal: float) -> NDArray[np.float64]:
    """Frequency within ±0.3 Hz of the nominal with the most power: a grid, then a parabola; (R,)."""
    grid = nominal + np.linspace(-SEARCH_HZ, SEARCH_HZ, 25)
    level = np.abs(weighted @ np.exp(-2j * np.pi * np.outer(t, grid)))
    rows = np.arange(len(level))
    top = np.clip(np.argmax(level, axis=1), 1, len(grid) - 2)
    a, b, c = level[rows, top - 1], level[rows, top], level[rows, top + 1]
    bend = a - 2 * b + c
    shift = np.where(bend < 0, 0.5 * (a - c) / np.where(bend < 0, bend, 1.0), 0.0)
    return grid[top] + np.clip(shift, -1, 1) * (grid[1] - grid[0])
