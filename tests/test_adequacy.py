"""Resolution and bandwidth read off the samples."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import signal

from sigguard import adequacy, mains, noise


@pytest.fixture
def rng() -> np.random.Generator:
    return np.random.default_rng(20242)


def beats(t: np.ndarray, bpm: float = 72.0) -> tuple[np.ndarray, np.ndarray]:
    period = 60 / bpm
    d = (t + 0.3) % period - 0.3
    return np.exp(-0.5 * (d / 0.011) ** 2), np.minimum(np.abs(d), np.abs(d - period)) <= 0.08


def low_pass(x: np.ndarray, fs_hz: float, mask: np.ndarray, step: float = 0.005) -> np.ndarray:
    x = np.round(x / step) * step
    keep = noise.between_beats(np.broadcast_to(mask, x.shape), np.zeros(x.shape, bool), fs_hz)
    spec = mains.open_spectrum(noise.plain_transform(x, fs_hz), keep)
    return adequacy.low_pass_hz_est(spec, np.full(len(x), step))


@pytest.mark.parametrize("step", [0.001, 0.005, 0.0381])
def test_resolution_is_the_converters_step(rng, step):
    x = step * np.round(rng.standard_normal((5, 3000)) * 0.3 / step)
    move = np.abs(np.diff(x, axis=1))
    np.testing.assert_allclose(adequacy.step_mv_of(move, np.zeros(x.shape, bool)), step)


def test_resolution_leaves_bridged_samples_out():
    x = np.array([[0.0, 0.1, np.nan, np.nan, 0.2, 0.4], [1.0] * 6, [np.nan] * 6])
    filled, missing = noise.fill_gaps(x)
    step = adequacy.step_mv_of(np.abs(np.diff(filled, axis=1)), missing)
    assert step[0] == pytest.approx(0.1)
    assert np.isnan(step[1:]).all()
    assert np.isnan(adequacy.step_mv_of(np.empty((2, 0)), np.zeros((2, 1), bool))).all()


def test_bits():
    bits = adequacy.effective_bits(
        np.array([1.024, 1.0, np.nan, 1.0, 1.0]), np.array([0.001, 0.5, 0.1, np.nan, 1e-12])
    )
    np.testing.assert_allclose(bits, [10.0, 1.0, np.nan, np.nan, 24.0])


@pytest.mark.parametrize("fs_hz", [250.0, 360.0, 500.0, 1000.0])
@pytest.mark.parametrize("corner", [40.0, 75.0, 100.0, 150.0])
def test_a_steep_low_pass_is_found(rng, fs_hz, corner):
    if corner > 0.32 * fs_hz:
        pytest.skip("too near half the rate to be told from the recorder's own limit")
    t = np.arange(int(10 * fs_hz)) / fs_hz
    x, mask = beats(t)
    x = x + 0.03 * rng.standard_normal((20, t.size))
    sos = signal.butter(4, corner, fs=fs_hz, output="sos")
    found = low_pass(signal.sosfilt(sos, x, axis=1), fs_hz, mask)
    assert np.isfinite(found).mean() > 0.9
    assert np.nanmedian(found) == pytest.approx(corner, rel=0.2)


@pytest.mark.parametrize("fs_hz", [128.0, 250.0, 500.0, 1000.0])
@pytest.mark.parametrize("uv", [2.0, 10.0, 50.0])
@pytest.mark.parametrize("fall", [0.0, 0.5, 0.9])
def test_no_low_pass_is_found_where_there_is_none(rng, fs_hz, uv, fall):
    t = np.arange(int(10 * fs_hz)) / fs_hz
    x, mask = beats(t)
    spec = np.fft.rfft(rng.standard_normal((40, t.size)))
    spec *= (np.maximum(np.fft.rfftfreq(t.size, 1 / fs_hz), 5.0) / 50.0) ** -fall
    assert np.isfinite(low_pass(x + 1e-3 * uv * np.fft.irfft(spec, t.size), fs_hz, mask)).mean() <= 0.03


def test_bandwidth_of_flat_and_short_rows():
    x = np.zeros((2, 3600))
    assert np.isnan(low_pass(x, 360.0, np.zeros(x.shape, bool))).all()
    assert np.isnan(low_pass(np.ones((2, 40)), 360.0, np.zeros((2, 40), bool))).all()
    assert np.isnan(adequacy.high_pass_hz_est(x, 360.0)).all()
