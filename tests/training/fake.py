"""A crude measuring procedure that errs the more the noisier a row is: enough to train on in tests."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import uniform_filter1d
from scipy.signal import find_peaks

from sigguard.training.table import Procedure

FEATURE_NAMES = ("slow_mv", "fast_mv", "size_mv", "kurtosis", "beats", "missing_share", "pr_ms")


@dataclass(frozen=True, slots=True, eq=False)
class FakeAnalysis:
    value: NDArray[np.float64]
    absent: NDArray[np.int8]
    beat_row: NDArray[np.int32]
    beat_s: NDArray[np.float64]
    features: NDArray[np.float32]


def analyse(x_mv: NDArray[np.float64], fs_hz: float, **header: NDArray[np.float64]) -> FakeAnalysis:
    """Whatever the header tells. Beats are tall peaks; intervals and ST are numbers that move with what lies on the row."""
    missing = np.isnan(x_mv)
    x = np.where(missing, 0.0, x_mv)
    slow = uniform_filter1d(x, int(0.6 * fs_hz), axis=1)
    smooth = uniform_filter1d(x - slow, max(3, int(0.03 * fs_hz)), axis=1)
    fast = x - slow - smooth
    size = np.quantile(np.abs(smooth), 0.99, axis=1) + 1e-9
    beats = [
        find_peaks(np.abs(row), height=0.6 * peak, distance=int(0.3 * fs_hz))[0] / fs_hz
        for row, peak in zip(smooth, size, strict=True)
    ]
    slow_mv, fast_mv = slow.std(axis=1), np.median(np.abs(fast), axis=1)
    value = np.full((len(x), 5), np.nan)
    for r, at in enumerate(beats):
        if len(at) > 2:
            value[r, 0] = 60 / np.median(np.diff(at))
    value[:, 1] = 160 + 400 * fast_mv
    value[:, 2] = 90 + 300 * fast_mv
    value[:, 3] = 400 + 200 * slow_mv
    value[:, 4] = 0.3 * np.median(slow, axis=1)
    absent = np.zeros((len(x), 5), dtype=np.int8)
    no_p = size < 0.15
    value[no_p, 1], absent[no_p, 1] = np.nan, 1
    kurtosis = ((smooth / smooth.std(axis=1, keepdims=True).clip(1e-9)) ** 4).mean(axis=1)
    features = np.stack(
        [slow_mv, fast_mv, size, kurtosis, [len(b) for b in beats], missing.mean(axis=1), value[:, 1]], axis=1
    )
    row = np.repeat(np.arange(len(x)), [len(b) for b in beats]).astype(np.int32)
    return FakeAnalysis(value, absent, row, np.concatenate(beats), features.astype(np.float32))


@dataclass(frozen=True, slots=True, eq=False)
class FakeGlobal:
    value: NDArray[np.float64]
    absent: NDArray[np.int8]
    features: NDArray[np.float32]


def analyse_global(x_mv: NDArray[np.float64], fs_hz: float) -> FakeGlobal:
    """The worst lead decides."""
    n, leads, samples = x_mv.shape
    each = analyse(x_mv.reshape(n * leads, samples), fs_hz)
    value = np.where(np.isnan(each.value), 0.0, each.value).reshape(n, leads, 5).max(axis=1)[:, 1:4]
    return FakeGlobal(
        value, np.zeros(value.shape, dtype=np.int8), each.features[:, :4].reshape(n, leads, 4).max(axis=1)
    )


FAKE = Procedure(
    analyse=analyse,
    feature_names=FEATURE_NAMES,
    analyse_global=analyse_global,
    global_feature_names=("slow_mv", "fast_mv", "size_mv", "kurtosis"),
)
