"""Spectrum and shape against scipy and closed formulas."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import signal, stats

from sigguard import spectrum


@pytest.fixture
def rng() -> np.random.Generator:
    return np.random.default_rng(20241)


@pytest.mark.parametrize("n", [5000, 3601])
def test_power_equals_scipys_periodogram(rng, n):
    x = rng.standard_normal((5, n)) + 3.0
    fs_hz = 500.0
    spec = spectrum.row_spectrum(x, fs_hz)
    freq, density = signal.periodogram(x, fs_hz, window="hann", detrend="constant", scaling="density", axis=1)
    np.testing.assert_allclose(spec.freq_hz, freq)
    np.testing.assert_allclose(spec.power_uv2, density * freq[1] * 1e6, rtol=1e-4, atol=1.0)


def test_parseval(rng):
    """The bins add up to the variance under the window."""
    x = rng.standard_normal((4, 3600))
    hann = signal.get_window("hann", 3600)
    d = x - x.mean(axis=1, keepdims=True)
    np.testing.assert_allclose(
        spectrum.row_spectrum(x, 360.0).running_uv2[:, -1],
        1e6 * ((d * hann) ** 2).sum(axis=1) / (hann**2).sum(),
        rtol=1e-5,
    )


@pytest.mark.parametrize("hz", [0.2, 0.7, 2.5, 6.0, 11.0, 20.0, 30.0, 55.0, 100.0])
def test_a_sine_falls_into_its_band(hz):
    t = np.arange(5000) / 500.0
    powers = spectrum.band_powers(
        spectrum.row_spectrum((0.3 * np.sin(2 * np.pi * hz * t + 0.4))[None], 500.0)
    )[0]
    own = next(k for k, (lo, hi) in enumerate(spectrum.BANDS_HZ) if lo <= hz < hi)
    assert np.argmax(powers) == own
    assert powers[own] == pytest.approx(np.log10(300.0**2 / 2), abs=0.1)


def test_an_offset_leaks_nowhere():
    t = np.arange(5000) / 500.0
    x = np.sin(2 * np.pi * 10 * t)[None]
    a, b = (spectrum.row_spectrum(x + off, 500.0) for off in (0.0, 1000.0))
    np.testing.assert_allclose(a.band_uv2(0.0, 1.0), 0.0, atol=1e-3)
    np.testing.assert_allclose(b.band_uv2(0.0, 1.0), 0.0, atol=1e-3)


@pytest.mark.parametrize("fs_hz, known", [(100.0, 7), (128.0, 7), (200.0, 9), (250.0, 9), (500.0, 9)])
def test_bands_above_half_the_rate_are_unknown(rng, fs_hz, known):
    x = 0.1 * rng.standard_normal((2, int(10 * fs_hz)))
    powers = spectrum.band_powers(spectrum.row_spectrum(x, fs_hz))
    assert np.isfinite(powers[:, :known]).all() and np.isnan(powers[:, known:]).all()


def test_published_ratios_of_two_sines():
    t = np.arange(5000) / 500.0
    x = np.sin(2 * np.pi * 10 * t) + 2 * np.sin(2 * np.pi * 30 * t) + 3 * np.sin(2 * np.pi * 0.5 * t)
    spec = spectrum.row_spectrum(x[None], 500.0)
    assert spectrum.p_sqi(spec)[0] == pytest.approx(1 / 5, abs=1e-6)
    assert spectrum.bas_sqi(spec)[0] == pytest.approx(1 - 9 / 14, abs=1e-4)


def test_moments_equal_scipys(rng):
    x = rng.gamma(2.0, size=(6, 2000))
    kurtosis, skewness = spectrum.shape_moments(x, np.zeros(x.shape, bool))
    np.testing.assert_allclose(kurtosis, stats.kurtosis(x, axis=1, fisher=False))
    np.testing.assert_allclose(skewness, stats.skew(x, axis=1))
    missing = rng.random(x.shape) < 0.3
    kurtosis, skewness = spectrum.shape_moments(x, missing)
    np.testing.assert_allclose(kurtosis[2], stats.kurtosis(x[2, ~missing[2]], fisher=False))
    np.testing.assert_allclose(skewness[2], stats.skew(x[2, ~missing[2]]))


def test_entropy_and_edge_of_a_line_and_of_white_noise(rng):
    t = np.arange(5000) / 500.0
    x = np.concatenate([np.sin(2 * np.pi * 10 * t)[None], rng.standard_normal((20, 5000))])
    spec = spectrum.row_spectrum(x, 500.0)
    entropy, edge = spectrum.spectral_entropy(spec), spectrum.spectral_edge_hz(spec)
    assert entropy[0] < 0.2 and (entropy[1:] > 0.88).all()
    assert edge[0] == pytest.approx(10, abs=0.15)
    assert edge[1:].mean() == pytest.approx(0.5 + 0.95 * 149.5, rel=0.02)


def test_scale_and_sign_change_what_they_should(rng):
    x = rng.standard_normal((3, 2500))
    a, b = spectrum.row_spectrum(x, 250.0), spectrum.row_spectrum(-5 * x, 250.0)
    for index in (spectrum.p_sqi, spectrum.bas_sqi, spectrum.spectral_entropy, spectrum.spectral_edge_hz):
        np.testing.assert_allclose(index(a), index(b), rtol=1e-4)
    np.testing.assert_allclose(spectrum.band_powers(b) - spectrum.band_powers(a), np.log10(25.0), rtol=1e-4)
    none = np.zeros(x.shape, bool)
    np.testing.assert_allclose(spectrum.shape_moments(x, none)[1], -spectrum.shape_moments(-5 * x, none)[1])


@pytest.mark.parametrize("level", [0.0, 1.7, 1e3])
def test_flat_rows(level):
    x = np.full((2, 3600), level)
    spec = spectrum.row_spectrum(x, 360.0)
    for index in (spectrum.p_sqi, spectrum.bas_sqi, spectrum.spectral_entropy, spectrum.spectral_edge_hz):
        assert np.isnan(index(spec)).all()
    np.testing.assert_array_equal(spectrum.band_powers(spec), -6.0)
    assert np.isnan(spectrum.shape_moments(x, np.zeros(x.shape, bool))).all()
