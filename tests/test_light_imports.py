"""What was written again to spare an import gives what the library gives, and the import is spared."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import nnls
from scipy.signal import find_peaks, firwin, upfirdn

from sigguard.electrodes import non_negative_least_squares
from sigguard.filters import low_pass_taps
from sigguard.rhythm_beats import spaced_peaks
from sigguard.rhythm_shape import _decimate

HEAVY = ("sklearn", "scipy.signal", "scipy.stats", "scipy.optimize", "pydicom", "joblib", "matplotlib")


@pytest.mark.parametrize(
    ("n_taps", "corner_hz", "fs_hz"), [(51, 28.0, 500.0), (37, 26.25, 360.0), (5, 10.0, 50.0)]
)
def test_low_pass_taps_are_those_of_scipy(n_taps: int, corner_hz: float, fs_hz: float) -> None:
    np.testing.assert_allclose(
        low_pass_taps(n_taps, corner_hz, fs_hz), firwin(n_taps, corner_hz, fs=fs_hz), atol=1e-15
    )


@pytest.mark.parametrize("n", [40, 41, 43, 1000])
@pytest.mark.parametrize("factor", [1, 2, 4, 8])
def test_decimation_is_filtering_and_taking_every_nth(n: int, factor: int) -> None:
    x = np.random.default_rng(n).normal(size=(3, n))
    taps = firwin(21, 0.3)
    padded = np.pad(x, ((0, 0), (10, 10)), mode="edge")
    whole = upfirdn(taps, padded, axis=1)[:, 20 : 20 + n]
    np.testing.assert_allclose(_decimate(x, taps, factor), whole[:, ::factor], atol=1e-12)


@given(st.integers(0, 2**32 - 1), st.integers(1, 40), st.integers(1, 400), st.floats(0.05, 3.0))
def test_spaced_peaks_are_those_of_scipy(seed: int, apart: int, n: int, roughness: float) -> None:
    rng = np.random.default_rng(seed)
    x = np.cumsum(rng.normal(size=n)) * (1 / roughness) + rng.normal(size=n)
    np.testing.assert_array_equal(spaced_peaks(x, apart), find_peaks(x, distance=apart)[0])


@given(st.lists(st.integers(0, 3), max_size=60))
def test_flat_tops_are_those_of_scipy(steps: list[int]) -> None:
    x = np.array(steps, dtype=float)
    np.testing.assert_array_equal(spaced_peaks(x, 1), find_peaks(x)[0])


@given(st.integers(0, 2**32 - 1), st.integers(1, 9))
def test_non_negative_least_squares_is_that_of_scipy(seed: int, n: int) -> None:
    rng = np.random.default_rng(seed)
    design, target = rng.normal(size=(20, n)), rng.normal(size=20)
    np.testing.assert_allclose(non_negative_least_squares(design, target), nnls(design, target)[0], atol=1e-9)


def test_a_check_imports_nothing_it_does_not_need(tmp_path: Path) -> None:
    from sigguard.resources import resource_path

    header = resource_path("synthetic", "demo/01-clean.hea")
    script = (
        "import sys\nfrom sigguard.screening import screen_path\n"
        f"screen_path({str(header)!r}, out_dir={str(tmp_path)!r})\n"
        f"print([name for name in {HEAVY!r} if name in sys.modules])"
    )
    done = subprocess.run(
        [sys.executable, "-c", script],
        env={"PYTHONPATH": str(Path(__file__).parents[1])},
        capture_output=True,
        text=True,
        timeout=120,
        check=True,
    )
    assert done.stdout.strip() == "[]"
