"""When a disturbance lies on a row: its level in each second, for the rows on which one is called.

A fault is called for a whole segment; a burst of two seconds should not cost ten. The level of each kind
is read in windows of about 1 s, in bands of the row's transform and of what does not recur with its beats.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from sigguard import filters, motion, noise
from sigguard.noise import Mask, Rows

WINDOW_S = 1.0
KINDS = ("wander", "muscle", "mains", "motion", "flat", "clipped", "missing")
# A window counts from these levels on, whatever the row's highest: 0.3 Hz of 0.5 mV, 25 µV rms and 25 µV of
# mains are what a recorder must put up with (IEC 60601-2-51, stability), 50 µV of movement is half a millimetre.
ENOUGH_UV = {"wander": 500.0, "muscle": 25.0, "mains": 25.0, "motion": 50.0}
LEAST_SHARE = 0.35  # of the row's highest window: constant noise, its size flickering, lies everywhere
LEAST_S = {"flat": 0.1, "clipped": 0.02, "missing": 0.02}
WANDER_TOP_HZ = 0.7
TREMOR_PASS_HZ = motion.TREMOR_PASS_HZ


@dataclass(frozen=True, slots=True, eq=False)
class FaultWindows:
    """R rows in ``n_windows`` equal windows of about 1 s; columns over KINDS."""

    on: NDArray[np.bool_]  # (R, n_windows, K): the kind, where it is called, lies on the window
    level: NDArray[np.float32]  # (R, K): over the windows it lies on; µV, or seconds for the last three


def n_windows(length_s: float) -> int:
    """Windows a row of this length is cut into, at least one."""
    return max(1, int(round(length_s / WINDOW_S)))


def fault_windows(
    x_mv: Rows,
    fs_hz: float,
    *,
    called: NDArray[np.bool_],
    qrs_mask: Mask,
    residual_mv: Rows,
    fs_res_hz: float,
    masks: dict[str, Mask],
    mains_hz: NDArray[np.float64],
    tremor_uv: NDArray[np.float64],
) -> FaultWindows:
    """Where in (R, N) rows the kinds ``called`` (R, K) lie; rows on which nothing is called cost nothing.

    ``qrs_mask`` (R, N), ``residual_mv`` (R, M) at ``fs_res_hz`` and the ``masks`` flat, clipped and missing
    (R, N) are those the features were taken from; ``mains_hz`` and ``tremor_uv`` (R,) are features. Wander is
    a range in µV over 3 s, muscle and motion are µV rms, mains is µV peak. Level is NaN, and nothing is on,
    where a kind is not called.
    """
    n_rows, n = x_mv.shape
    count = n_windows(n / fs_hz)
    on = np.zeros((n_rows, count, len(KINDS)), dtype=bool)
    level = np.full((n_rows, len(KINDS)), np.nan, dtype=np.float32)
    for k, kind in enumerate(KINDS[4:], start=4):
        rows = np.flatnonzero(called[:, k])
        if len(rows):
            seconds = _pooled(masks[kind][rows].astype(np.float32), count, "sum") / fs_hz
            on[rows, :, k] = seconds >= LEAST_S[kind]
            level[rows, k] = seconds.sum(axis=1)
    rows = np.flatnonzero(called[:, :4].any(axis=1))
    if not len(rows):
        return FaultWindows(on, level)
    filled, missing = noise.fill_gaps(np.asarray(x_mv[rows], dtype=np.float64))
    levels = _levels(
        filled,
        missing,
        fs_hz,
        qrs_mask[rows],
        residual_mv[rows],
        fs_res_hz,
        np.asarray(mains_hz, dtype=np.float64)[rows],
        np.asarray(tremor_uv, dtype=np.float64)[rows],
        count,
        np.atleast_1d(called[rows, :4].any(axis=0)),
    )
    for k, (kind, by_window) in enumerate(levels.items()):
        hit = called[rows, k]
        top = by_window.max(axis=1, keepdims=True)
        here = (by_window >= np.minimum(LEAST_SHARE * top, ENOUGH_UV[kind])) & hit[:, None]
        on[rows, :, k] = here
        square = np.where(here, by_window, 0.0) ** 2
        rms = np.sqrt(square.sum(axis=1) / np.maximum(here.sum(axis=1), 1))
        level[rows, k] = np.where(hit, top[:, 0] if kind == "wander" else rms, np.nan)
    return FaultWindows(on, level)


def _levels(
    filled: Rows,
    missing: Mask,
    fs_hz: float,
    qrs_mask: Mask,
    residual_mv: Rows,
    fs_res_hz: float,
    mains_hz: NDArray[np.float64],
    tremor_uv: NDArray[np.float64],
    count: int,
    wanted: NDArray[np.bool_],
) -> dict[str, Rows]:
    """(R, count) levels in µV of the kinds wanted, zeros of the others."""
    out: dict[str, Rows] = {kind: np.zeros((len(filled), count)) for kind in KINDS[:4]}
    plain = noise.plain_transform(filled, fs_hz)
    keep = noise.between_beats(qrs_mask, missing, fs_hz)
    res = motion.residual_of(residual_mv, fs_res_hz)
    if wanted[0]:
        out["wander"] = _wander_range(plain, count)
    if wanted[1]:
        muscle = _rms(noise.muscle_band(plain, mains_hz), keep, count)
        trembling = _rms(res.band(*TREMOR_PASS_HZ), None, count)
        # A tremor counts where the feature has told a line or hump from broad noise.
        share = np.nan_to_num(tremor_uv) / np.maximum(np.sqrt((trembling**2).mean(axis=1)), 1e-9)
        out["muscle"] = np.hypot(muscle, trembling * np.minimum(share, 1.0)[:, None])
    if wanted[2]:
        out["mains"] = np.sqrt(2.0) * _rms(_mains_band(plain, mains_hz), keep, count)
    if wanted[3]:
        out["motion"] = _rms(res.band(*motion.MOTION_HZ), None, count)
    return out


def _wander_range(plain: noise.PlainTransform, count: int) -> Rows:
    """Range of the row below 0.7 Hz over each window and its neighbours, µV."""
    points = 8 * count
    gain = filters.low_pass(plain.freq_hz, WANDER_TOP_HZ, 4)[: points // 2 + 1].astype(np.float32)
    low = plain.spectrum[:, : points // 2 + 1] * gain
    wave = fft.irfft(low, n=points, axis=-1) * (points / plain.n) * 1e3
    wave += 1e3 * plain.slope_mv[:, None] * (np.arange(points) / points)
    parts = wave.reshape(len(wave), count, 8)
    edge = np.pad(parts.max(axis=2), ((0, 0), (1, 1)), mode="edge")
    foot = np.pad(parts.min(axis=2), ((0, 0), (1, 1)), mode="edge")
    high = np.maximum(np.maximum(edge[:, :-2], edge[:, 2:]), edge[:, 1:-1])
    return high - np.minimum(np.minimum(foot[:, :-2], foot[:, 2:]), foot[:, 1:-1])


def _mains_band(plain: noise.PlainTransform, mains_hz: NDArray[np.float64]) -> Rows:
    """Rows in µV within 1.5 Hz of the mains found and its harmonics up to the fourth; zeros where none was found."""
    out = np.zeros((len(mains_hz), plain.n), dtype=np.float32)
    for hz in noise.MAINS_HZ:
        rows = np.flatnonzero(mains_hz == hz)
        if len(rows):
            off_hz = plain.freq_hz[:, None] - hz * np.arange(1, 5)
            gain = np.exp(-0.5 * (off_hz / 1.5) ** 4).sum(axis=1)
            out[rows] = fft.irfft(plain.spectrum[rows] * (1e3 * gain).astype(np.float32), n=plain.n, axis=-1)
    return out


def _rms(rows_uv: Rows, keep: Mask | None, count: int) -> Rows:
    """(R, N) → (R, count): rms of each window over what is kept; a window with too little takes its neighbours'."""
    if keep is None:
        return np.sqrt(_pooled(rows_uv**2, count, "mean"))
    share = _pooled(keep.astype(np.float32), count, "mean")
    power = _pooled(rows_uv**2 * keep, count, "mean") / np.maximum(share, 1e-9)
    open_ = share >= noise.MIN_OPEN
    if open_.all():
        return np.sqrt(power)
    known = np.where(open_, power, 0.0)
    beside = np.pad(known, ((0, 0), (1, 1)))
    seen = np.pad(open_.astype(float), ((0, 0), (1, 1)))
    near = (beside[:, :-2] + beside[:, 2:]) / np.maximum(seen[:, :-2] + seen[:, 2:], 1.0)
    return np.sqrt(np.where(open_, power, near))


def _pooled(rows: Rows, count: int, how: str) -> Rows:
    """(R, N) → (R, count) sums or means over equal windows (to the nearest sample)."""
    edges = np.rint(np.linspace(0, rows.shape[1], count + 1)).astype(np.intp)
    total = np.add.reduceat(rows, edges[:-1], axis=1, dtype=np.float64)
    return total if how == "sum" else total / np.diff(edges)
