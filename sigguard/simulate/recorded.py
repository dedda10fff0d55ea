"""Recorded noise (MIT-BIH Noise Stress Test Database) split by time, and the noise-stress ratio.

Moody, Muldrow, Mark 1984: SNR = 10·log10(S/(N·a²)) for noise gain a, S = A²/8 with A the mean peak-to-peak
QRS amplitude, N the square of the mean one-second RMS of the noise about its mean; both means trimmed by
5 % at either end.
"""

from __future__ import annotations

from fractions import Fraction
from pathlib import Path

import numpy as np
from scipy.signal import resample_poly
from scipy.stats import trim_mean

from sigguard.errors import UsageError
from sigguard.readers.wfdb_files import quiet_wfdb
from sigguard.simulate.shapes import Array

PARTS = ("train", "calibrate", "test")
RECORDED_KINDS = ("bw", "ma", "em")  # baseline wander, muscle artifact, electrode motion
NOISE_FS_HZ = 360.0
# Minutes, (first, last); the electrode-motion record is joined at 2, 4 and 6 min and no cut crosses a join.
SPLIT_MIN: dict[str, dict[str, tuple[tuple[int, int], ...]]] = {
    "bw": {"train": ((0, 12),), "calibrate": ((12, 16),), "test": ((16, 20),)},
    "ma": {"train": ((0, 12),), "calibrate": ((12, 16),), "test": ((16, 20),)},
    "em": {"train": ((0, 2), (2, 4)), "calibrate": ((4, 6),), "test": ((6, 8),)},
}
TRIM = 0.05
MAX_BEATS = 300


class NoiseBank:
    """Cuts of the recorded noise from one part of the time split, at any sampling rate.

    ``folder`` holds the WFDB records bw, ma and em at 360 Hz with two signals each. Raises UsageError for an
    unknown part, and for a folder without the records.
    """

    def __init__(self, folder: str | Path, part: str) -> None:
        if part not in PARTS:
            raise UsageError(f"part of the noise must be one of {', '.join(PARTS)}, found {part!r}")
        self.part = part
        self._stretches = {kind: _read_stretches(Path(folder), kind, part) for kind in RECORDED_KINDS}
        self._resampled: dict[tuple[str, float], list[Array]] = {}

    def draw(self, rng: np.random.Generator, kind: str, *, n_samples: int, fs_hz: float) -> Array:
        """A random cut of a random signal, (n_samples,), mV, mean removed, random sign.

        ``kind`` is one of RECORDED_KINDS. Raises UsageError if it is not, or if no stretch is long enough.
        """
        if kind not in RECORDED_KINDS:
            raise UsageError(f"recorded noise is one of {', '.join(RECORDED_KINDS)}, found {kind!r}")
        stretches = [s for s in self._at_rate(kind, fs_hz) if s.shape[1] >= n_samples]
        if not stretches:
            raise UsageError(f"no stretch of {kind} ({self.part}) holds {n_samples} samples at {fs_hz:g} Hz")
        stretch = stretches[int(rng.integers(len(stretches)))]
        row = int(rng.integers(stretch.shape[0]))
        start = int(rng.integers(stretch.shape[1] - n_samples + 1))
        cut = stretch[row, start : start + n_samples]
        return (cut - cut.mean()) * float(rng.choice((-1.0, 1.0)))

    def _at_rate(self, kind: str, fs_hz: float) -> list[Array]:
        key = (kind, float(fs_hz))
        if key not in self._resampled:
            ratio = Fraction(fs_hz).limit_denominator(1000) / Fraction(int(NOISE_FS_HZ))
            if abs(float(ratio) * NOISE_FS_HZ - fs_hz) > 1e-9:
                raise UsageError(
                    f"sampling rate {fs_hz!r} Hz is not a ratio that recorded noise can be brought to"
                )
            up, down = ratio.numerator, ratio.denominator
            self._resampled[key] = [
                s if up == down else resample_poly(s, up, down, axis=1, padtype="line")
                for s in self._stretches[kind]
            ]
        return self._resampled[key]


def _read_stretches(folder: Path, kind: str, part: str) -> list[Array]:
    if not (folder / f"{kind}.hea").is_file():
        raise UsageError(f"recorded noise not found: expected {kind}.hea in the noise folder {folder}")
    out = []
    for first_min, last_min in SPLIT_MIN[kind][part]:
        first, last = (round(m * 60 * NOISE_FS_HZ) for m in (first_min, last_min))
        with quiet_wfdb() as wfdb:
            record = wfdb.rdrecord(str(folder / kind), sampfrom=first, sampto=last, physical=True)
        if record.fs != NOISE_FS_HZ:
            raise UsageError(f"noise record {kind}: expected {NOISE_FS_HZ:g} Hz, found {record.fs} Hz")
        signal = record.p_signal.T
        if not np.isfinite(signal).all():
            raise UsageError(
                f"noise record {kind}: samples are missing between minutes {first_min} and {last_min}"
            )
        out.append(np.ascontiguousarray(signal))
    return out


def qrs_peak_to_peak_mv(x_mv: Array, beats_s: Array, fs_hz: float) -> float:
    """Mean peak-to-peak of ±50 ms about each of the first 300 beats, trimmed 5 % at either end, mV.

    ``x_mv`` is (n_samples,). Beats whose window leaves the signal or holds NaN do not count; NaN without any.
    """
    x_mv = np.asarray(x_mv, dtype=np.float64)
    half = round(0.05 * fs_hz)
    at = np.round(np.asarray(beats_s, dtype=np.float64) * fs_hz).astype(np.intp)
    at = at[(at >= half) & (at < len(x_mv) - half)][:MAX_BEATS]
    if len(at) == 0:
        return float("nan")
    size = np.ptp(x_mv[at[:, None] + np.arange(-half, half + 1)], axis=1)
    size = size[np.isfinite(size)]
    return float(trim_mean(size, TRIM)) if len(size) else float("nan")


def noise_power_mv2(noise_mv: Array, fs_hz: float) -> float:
    """N of the noise-stress ratio: the square of the trimmed mean one-second RMS about the mean, mV²."""
    noise_mv = np.asarray(noise_mv, dtype=np.float64)
    second = max(1, min(round(fs_hz), len(noise_mv)))
    whole = len(noise_mv) // second
    rms = noise_mv[: whole * second].reshape(whole, second).std(axis=1)[:MAX_BEATS]
    return float(trim_mean(rms, TRIM) ** 2)


def snr_gain(qrs_pp_mv: float, noise_mv: Array, snr_db: float, fs_hz: float) -> float:
    """Gain a for the noise, (n_samples,), so that the noise-stress ratio is snr_db.

    Raises UsageError if the noise is still or holds NaN, or the QRS size is not a positive number.
    """
    power = noise_power_mv2(noise_mv, fs_hz)
    if not (power > 0 and np.isfinite(power)):
        raise UsageError("the noise must move and hold no gaps to be scaled to a signal-to-noise ratio")
    if not (qrs_pp_mv > 0 and np.isfinite(qrs_pp_mv)):
        raise UsageError(f"the QRS peak-to-peak must be a positive number of mV, found {qrs_pp_mv!r}")
    return float(np.sqrt(qrs_pp_mv**2 / 8 / (power * 10 ** (snr_db / 10))))
