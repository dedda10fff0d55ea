"""Time of the noise features per row of 10 s, beside numpy's rfft of the same rows.

Run from the checkout: ``python tests/benchmarks/bench_noise.py``.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from functools import partial

import numpy as np

from sigguard.signal_table import SIGNAL_FEATURES, signal_features

ROWS, SECONDS, REPEATS = 60, 10.0, 7


def rows(fs_hz: float, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Beats of two steep Gaussians at 72/min with noise, 5 µV a step, and the mask about the beats."""
    n = int(SECONDS * fs_hz)
    t = np.arange(n) / fs_hz
    d = (t + 0.4) % (60 / 72) - 0.4
    beat = np.exp(-0.5 * (d / 0.011) ** 2) - 0.3 * np.exp(-0.5 * ((d - 0.03) / 0.012) ** 2)
    x = beat + 0.02 * rng.standard_normal((ROWS, n))
    return np.round(x / 0.005) * 0.005, np.broadcast_to(np.abs(d) <= 0.08, x.shape).copy()


def best_ms(work: Callable[[], object]) -> float:
    """Least CPU time of several runs, milliseconds per row."""
    spent = []
    for _ in range(REPEATS):
        start = time.process_time()
        work()
        spent.append(time.process_time() - start)
    return min(spent) / ROWS * 1e3


def main() -> None:
    rng = np.random.default_rng(1)
    for fs_hz in (250.0, 360.0, 500.0):
        x, mask = rows(fs_hz, rng)
        residual = 0.02 * rng.standard_normal((ROWS, int(SECONDS * 250)))
        features = partial(signal_features, x, fs_hz, qrs_mask=mask, residual_mv=residual, fs_res_hz=250.0)
        ours, base = best_ms(features), best_ms(partial(np.fft.rfft, x, axis=1))
        n = len(SIGNAL_FEATURES)
        print(
            f"{fs_hz:.0f} Hz: {ours:.3f} ms of CPU per row for {n} features, {ours / base:.1f} times one rfft"
        )


if __name__ == "__main__":
    main()
