"""How finely a row was recorded: resolution and bandwidth, from the samples alone."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from sigguard.mains import OpenSpectrum
from sigguard.noise import Mask, Rows, beat_free

SAME_MV = 1e-9
LOOK_FROM_HZ, LOOK_TO_HZ, BAND_HZ = 20.0, 250.0, 6.0
CLEAR_OF_FLOOR = 4.0  # a band takes part in the fit if its power is that many times the floor
BETTER = 4.0
LEAST_NEED = 0.2
SLOPE_COST = 0.02  # of two filters that explain alike, the one on flatter noise
MISFIT = 0.15  # mean squared error of the log power; 40 bins a band alone give 0.03


def step_mv_of(move_mv: Rows, missing: Mask) -> NDArray[np.float64]:
    """Resolution as the smallest difference between neighbouring samples that is not 0, mV, (R,).

    ``move_mv`` (R, N−1) holds the absolute differences of neighbours, ``missing`` is (R, N).

    NaN for a row that never moves. Samples that were filtered or resampled after digitising give a
    tiny step: their resolution is then no limit.
    """
    counts = move_mv > SAME_MV
    if missing.any():
        counts &= ~(missing[:, 1:] | missing[:, :-1])
    least = np.min(move_mv, axis=1, initial=np.inf, where=counts)
    return np.where(np.isfinite(least), least, np.nan)


def effective_bits(height_mv: NDArray[np.float64], step_mv: NDArray[np.float64]) -> NDArray[np.float64]:
    """log2 of the steps in the median QRS height, (R,); at most 24, NaN without beats or a step."""
    ok = (np.nan_to_num(height_mv) > 0) & (np.nan_to_num(step_mv) > 0)
    ratio = np.where(ok, height_mv, 1.0) / np.where(ok, step_mv, 1.0)
    return np.where(ok, np.clip(np.log2(np.maximum(ratio, 1.0)), 0.0, 24.0), np.nan)


@dataclass(frozen=True, slots=True, eq=False)
class _LowPassModel:
    """Candidate filters on the bands of a spectrum; the same for all rows of one length and rate."""

    which: NDArray[np.intp]  # band of each bin, −1 for none
    count: NDArray[np.float64]  # (B,): bins in each band
    undo: NDArray[np.float64]  # (n_bins,): takes the high-pass of the open spectrum back
    log_f: NDArray[np.float64]  # (B,)
    log_h: NDArray[np.float64]  # (C, B): log power response; the first has no filter
    corner_hz: NDArray[np.float64]  # (C,): NaN for the first


@lru_cache(maxsize=32)
def _low_pass_model(n_bins: int, df: float, fs_hz: float) -> _LowPassModel | None:
    f = np.arange(n_bins) * df
    top = min(LOOK_TO_HZ, 0.49 * fs_hz)
    n_bands = int((top - LOOK_FROM_HZ) // BAND_HZ)
    if n_bands < 6:
        return None
    band = np.floor((f - LOOK_FROM_HZ) / BAND_HZ).astype(np.intp)
    line = np.minimum(np.abs(f - 50.0 * np.round(f / 50.0)), np.abs(f - 60.0 * np.round(f / 60.0))) < 1.0
    which = np.where((f >= LOOK_FROM_HZ) & (band < n_bands) & ~line, band, -1)
    count = np.bincount(which[which >= 0], minlength=n_bands).astype(np.float64)
    if count.min() < 3:
        return None
    middle = LOOK_FROM_HZ + (np.arange(n_bands) + 0.5) * BAND_HZ
    corners = np.geomspace(22.0, 0.8 * top, 30)
    pairs = [(c, n) for c in corners for n in (2, 4, 8)]
    log_h = np.array([np.zeros(n_bands)] + [-np.log1p((middle / c) ** (2 * n)) for c, n in pairs])
    undo = np.where(f >= LOOK_FROM_HZ, 1.0 / np.maximum(beat_free(f), 0.1) ** 2, 0.0)
    return _LowPassModel(
        which, count, undo, np.log(middle), log_h, np.array([np.nan] + [c for c, _ in pairs])
    )


def low_pass_hz_est(spec: OpenSpectrum, step_mv: NDArray[np.float64]) -> NDArray[np.float64]:
    """Corner (−3 dB) of the recording's low-pass, Hz, (R,); NaN where it cannot be told.

    What shows a filter is the noise between beats: from 20 Hz it falls as a power law (slope 0 to 2),
    times the response of a Butterworth filter, onto the floor of the resolution. The filter that
    explains the log power in bands of 6 Hz best is taken if it explains it four times better than a
    steeper power law (slope to 3) without a filter. A recording so clean that its noise does not
    stand above the floor, or filtered above 0.4 of the rate, gives NaN.

    Tried on beats with 3 to 100 µV of white or pink noise, 5 µV a step, 250 to 1000 Hz, filters of order
    2 and 4 from 25 to 150 Hz: no filter was found where there was none. From 10 µV on most filters from
    35 Hz to 0.3 of the rate were found: order 4 to a fifth of the truth, order 2 up to 1.5 times (single rows
    1.8 times) too high. A corner of 25 Hz leaves little above 20 Hz and is often missed.
    """
    unknown = np.full(len(spec.weight_sum), np.nan)
    model = (
        _low_pass_model(len(spec.freq_hz), float(spec.freq_hz[1]), spec.fs_hz)
        if len(spec.freq_hz) > 1
        else None
    )
    if model is None:
        return unknown
    bands = _band_means(spec, model)
    step_uv = np.maximum(np.nan_to_num(step_mv) * 1e3, 1e-3)
    of_step = step_uv**2 / 12.0 * 2.0 / spec.fs_hz
    floor = np.maximum(of_step, 0.8 * bands.min(axis=1))[:, None]
    clear = bands > CLEAR_OF_FLOOR * floor
    enough = (clear.sum(axis=1) >= 2) & (bands[:, 0] > 20.0 * floor[:, 0])
    some = np.flatnonzero(enough)
    if some.size == 0:
        return unknown
    log_p = np.log(bands[some])
    error = _misfit(log_p, clear[some], np.log(floor[some]), model.log_h, model.log_f)
    # Without a filter the lowest band may be noise like the others and no floor at all.
    bare = _misfit(log_p, log_p > log_p.min() - 1, np.log(of_step[some, None]), model.log_h[:1], model.log_f)
    error[:, 0] = np.minimum(error[:, 0], bare[:, 0])
    best = 1 + np.argmin(error[:, 1:], axis=1)
    least = error[np.arange(some.size), best]
    corner = model.corner_hz[best]
    good = (
        (error[:, 0] > np.maximum(BETTER * least, LEAST_NEED))
        & (least < MISFIT)
        & (corner < 0.4 * spec.fs_hz)
        & (corner > 23.0)
    )
    unknown[some] = np.where(good, corner, np.nan)
    return unknown


def _band_means(spec: OpenSpectrum, model: _LowPassModel) -> Rows:
    """Mean power density in each band, µV²/Hz, (R, B), the high-pass of the spectrum undone."""
    inside = np.flatnonzero(model.which >= 0)
    power = spec.density_of(inside) * model.undo[inside]
    first = np.searchsorted(model.which[inside], np.arange(len(model.count)))
    return np.maximum(np.add.reduceat(power, first, axis=1) / model.count, 1e-12)


def _misfit(log_p: Rows, clear: Mask, log_floor: Rows, log_h: Rows, f: NDArray[np.float64]) -> Rows:
    """Mean squared error of log power (R, B) for each candidate (C, B), the first without a filter; (R, C)."""
    w = clear.astype(np.float64)
    n = w.sum(axis=1, keepdims=True)
    f_mean = (w * f).sum(axis=1, keepdims=True) / n
    wf = w * (f - f_mean)
    f_var = np.maximum((wf * (f - f_mean)).sum(axis=1, keepdims=True), 1e-9)
    # Sums over bands of log_p − log_h, for all candidates at once.
    mean = (w * log_p).sum(axis=1, keepdims=True) / n - w @ log_h.T / n
    slope = ((wf * log_p).sum(axis=1, keepdims=True) - wf @ log_h.T) / f_var
    slope[:, 0] = np.clip(slope[:, 0], -3.0, 1.0)
    slope[:, 1:] = np.clip(slope[:, 1:], -2.0, 0.0)
    fit = mean[:, :, None] + slope[:, :, None] * (f - f_mean)[:, None, :] + log_h
    np.logaddexp(fit, log_floor[:, :, None], out=fit)
    fit -= log_p[:, None, :]
    error = np.einsum("ijk,ijk->ij", fit, fit) / fit.shape[2]
    error[:, 1:] += SLOPE_COST * slope[:, 1:] ** 2
    return error


def high_pass_hz_est(x_mv: Rows, fs_hz: float) -> NDArray[np.float64]:
    """Corner of the recording's high-pass, Hz, (R,): always NaN, because a row does not show it.

    Tried: the ratio of power at 0.05–0.35 Hz to that at 0.35–0.8 Hz, on simulated beats at 50 to 110 a
    minute with recorded or simulated wander of 20 to 300 µV, first-order filters of 0.05 to 1 Hz
    (60 rows each). Telling 0.5 from 0.05 Hz had an area under the curve of 0.79 to 0.85 on rows of
    10 s and 0.88 to 0.94 on 30 s; telling 0.15 from 0.05 Hz 0.62 to 0.70. The wander itself differs more
    from patient to patient than the filter changes it, so the corner has to come from the header.
    """
    return np.full(len(x_mv), np.nan)
