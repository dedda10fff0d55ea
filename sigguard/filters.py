"""Zero-phase filters and rate change in one step, in the frequency domain, over many rows at once.

Every row is extended at both ends by an odd reflection that fades out, transformed once, and
brought back as often as a band is asked for. The work rate is 250 Hz whatever the recording's
rate: all later steps (beats, waves) are written for one rate, and a recording of a lower rate
gets the finer time grid that sub-sample marks need.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

WORK_HZ = 250.0
PAD_S = 1.5


@dataclass(frozen=True, slots=True, eq=False)
class RowTransform:
    """The transform of (R, N) rows, from which filtered rows at the work rate are drawn."""

    spectrum: NDArray[np.complex64]  # (R, n_bins)
    freq_hz: NDArray[np.float64]  # (n_bins,)
    n_native: int  # padded length at the native rate
    n_work: int  # padded length at the work rate
    fs_work_hz: float
    lead_in: float  # work samples before the row's first sample (may be fractional)
    n_out: int  # work samples of the row itself

    def band(self, gain: NDArray[np.float64]) -> NDArray[np.floating]:
        """Rows (R, n_out) at the work rate after multiplying the spectrum by ``gain`` (n_bins,)."""
        return self._cut(fft.irfft(self._fit(gain), n=self.n_work, axis=-1, overwrite_x=True))

    def envelope(self, gain: NDArray[np.float64]) -> NDArray[np.floating]:
        """Magnitude of the analytic signal of a band, (R, n_out)."""
        half = self._fit(2.0 * gain)
        full = np.zeros((half.shape[0], self.n_work), dtype=half.dtype)
        full[:, : half.shape[1]] = half
        return self._cut(np.abs(fft.ifft(full, axis=-1, overwrite_x=True)))

    def _fit(self, gain: NDArray[np.float64]) -> NDArray[np.complex64]:
        """The spectrum under a gain, cut or filled to the bins of the work rate."""
        n_bins = self.n_work // 2 + 1
        scaled = (gain[:n_bins] * (self.n_work / self.n_native)).astype(np.float32)
        out = self.spectrum[:, :n_bins] * scaled
        if out.shape[1] < n_bins:
            out = np.pad(out, ((0, 0), (0, n_bins - out.shape[1])))
        return out

    def _cut(self, rows: NDArray[np.floating]) -> NDArray[np.floating]:
        first = int(self.lead_in)
        return rows[:, first : first + self.n_out]


def transform_rows(x_mv: NDArray[np.float64], fs_hz: float) -> RowTransform:
    """Transform (R, N) gap-free rows at ``fs_hz``; see the module's docstring for the edges."""
    n = x_mv.shape[1]
    seconds = int(np.ceil(n / fs_hz + 2 * PAD_S))
    n_native = fft.next_fast_len(int(round(seconds * fs_hz)), real=True)
    n_work = int(round(n_native * WORK_HZ / fs_hz))
    fs_work = n_work * fs_hz / n_native
    # The left pad is a whole number of samples at both rates as nearly as can be, so that work
    # sample 0 is native sample 0.
    left = int(round(PAD_S * fs_hz))
    lead_in = left * fs_work / fs_hz
    whole = int(round(lead_in))
    right = n_native - n - left
    padded = _extend(x_mv, left, right, fs_hz)
    spectrum = fft.rfft(padded, axis=-1, overwrite_x=True)
    freq = np.arange(spectrum.shape[1]) * (fs_hz / n_native)
    shift = (lead_in - whole) / fs_work
    if abs(shift) > 1e-9:
        spectrum *= np.exp(2j * np.pi * freq * shift).astype(np.complex64)
    return RowTransform(
        spectrum, freq, n_native, n_work, fs_work, float(whole), int(np.floor((n - 1) * fs_work / fs_hz)) + 1
    )


def _extend(x_mv: NDArray[np.float64], left: int, right: int, fs_hz: float) -> NDArray[np.floating]:
    """Odd reflection about a short mean at each end, faded to nothing."""
    n = x_mv.shape[1]
    k = max(1, min(n, int(0.04 * fs_hz)))
    mean = x_mv.mean(axis=1, keepdims=True)
    x = x_mv - mean
    out = np.zeros((x.shape[0], left + n + right), dtype=np.float32)
    out[:, left : left + n] = x
    reach_l, reach_r = min(left, n - 1), min(right, n - 1)
    if reach_l > 0:
        edge = x[:, :k].mean(axis=1, keepdims=True)
        fade = 0.5 - 0.5 * np.cos(np.pi * np.arange(1, reach_l + 1) / (reach_l + 1))
        out[:, left - reach_l : left] = (2 * edge - x[:, reach_l:0:-1]) * fade
    if reach_r > 0:
        edge = x[:, -k:].mean(axis=1, keepdims=True)
        fade = 0.5 + 0.5 * np.cos(np.pi * np.arange(1, reach_r + 1) / (reach_r + 1))
        out[:, left + n : left + n + reach_r] = (2 * edge - x[:, -2 : -reach_r - 2 : -1]) * fade
    return out


def low_pass_taps(n_taps: int, corner_hz: float, fs_hz: float) -> NDArray[np.float64]:
    """Taps of a linear-phase FIR low-pass, an odd number, gain 1 at 0 Hz: a sinc under a Hamming window.

    What scipy.signal.firwin gives (a test holds the two against each other), without the second that importing
    scipy.signal takes.
    """
    t = np.arange(n_taps) - (n_taps - 1) / 2
    taps = np.sinc(2 * corner_hz / fs_hz * t) * np.hamming(n_taps)
    return taps / taps.sum()


def high_pass(freq_hz: NDArray[np.float64], corner_hz: float, order: int = 2) -> NDArray[np.float64]:
    """Magnitude of a Butterworth high-pass run forwards and backwards (half power at the corner is then a quarter)."""
    f = (freq_hz / corner_hz) ** (2 * order)
    return f / (1.0 + f)


def low_pass(freq_hz: NDArray[np.float64], corner_hz: float, order: int = 4) -> NDArray[np.float64]:
    """Magnitude of a Butterworth low-pass run forwards and backwards."""
    return 1.0 / (1.0 + (freq_hz / corner_hz) ** (2 * order))


def band_pass(
    freq_hz: NDArray[np.float64], low_hz: float, high_hz: float, *, low_order: int = 2, high_order: int = 3
) -> NDArray[np.float64]:
    """Product of ``high_pass`` and ``low_pass``."""
    return high_pass(freq_hz, low_hz, low_order) * low_pass(freq_hz, high_hz, high_order)


def notch(
    freq_hz: NDArray[np.float64], mains_hz: float, *, half_width_hz: float = 0.6
) -> NDArray[np.float64]:
    """Gain that takes the mains line and its harmonics out, with smooth shoulders."""
    gain = np.ones_like(freq_hz)
    k = 1
    while k * mains_hz < freq_hz[-1]:
        d = np.abs(freq_hz - k * mains_hz) / half_width_hz
        gain *= 1.0 - np.exp(-0.5 * d**4)
        k += 1
    return gain
