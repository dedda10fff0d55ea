"""Mains hum on signals of known answer."""

from __future__ import annotations

import numpy as np
import pytest

from sigguard import mains, noise

RATES = (128.0, 250.0, 360.0, 500.0, 1000.0)
SECONDS = 10.0


@pytest.fixture
def rng() -> np.random.Generator:
    return np.random.default_rng(20243)


def time_s(fs_hz: float, seconds: float = SECONDS) -> np.ndarray:
    return np.arange(int(seconds * fs_hz)) / fs_hz


def beats(t: np.ndarray, bpm: float = 72.0, width_s: float = 0.011) -> tuple[np.ndarray, np.ndarray]:
    """1 mV Gaussian beats with a T wave, and the mask ±80 ms about them."""
    period = 60 / bpm
    d = (t + 0.3) % period - 0.3
    x = np.exp(-0.5 * (d / width_s) ** 2)
    for shift in (-period, 0.0, period):
        x += 0.25 * np.exp(-0.5 * ((d + shift - 0.26) / 0.045) ** 2)
    return x, np.minimum(np.abs(d), np.abs(d - period)) <= 0.08


def everything_open(x: np.ndarray, fs_hz: float) -> np.ndarray:
    return noise.between_beats(np.zeros(x.shape, bool), np.zeros(x.shape, bool), fs_hz)


def hum(t: np.ndarray, hz: float, uv: float, phase: float = 0.7) -> np.ndarray:
    return 1e-3 * uv * np.sin(2 * np.pi * hz * t + phase)


def mains_of(x: np.ndarray, fs_hz: float, mask: np.ndarray | None = None):
    mask = np.zeros(x.shape, bool) if mask is None else np.broadcast_to(mask, x.shape)
    keep = noise.between_beats(mask, np.zeros(x.shape, bool), fs_hz)
    return mains.mains(mains.open_spectrum(noise.plain_transform(x, fs_hz), keep))


@pytest.mark.parametrize("fs_hz", RATES)
@pytest.mark.parametrize("hz", [49.8, 50.0, 50.13, 60.0, 60.2])
@pytest.mark.parametrize("uv", [3.0, 25.0, 400.0])
def test_amplitude_and_frequency_of_hum_on_beats(rng, fs_hz, hz, uv):
    t = time_s(fs_hz)
    x, mask = beats(t)
    x = x + 0.001 * rng.standard_normal((8, t.size)) + hum(t, hz, uv, rng.uniform(0, 6, (8, 1)))
    base, more, found = mains_of(x, fs_hz, mask)
    np.testing.assert_allclose(base, uv, rtol=0.05, atol=0.4)
    np.testing.assert_array_equal(found, round(hz, -1))
    assert (more < 0.03 * uv + 1.0).all()


def test_harmonics_alone_tell_which_mains_it_is(rng):
    t = time_s(500.0)
    x = 0.001 * rng.standard_normal((2, t.size))
    x[0] += hum(t, 100.1, 30) + hum(t, 150.15, 40)
    x[1] += hum(t, 120, 30) + hum(t, 180, 40)
    base, more, found = mains_of(x, 500.0)
    np.testing.assert_array_equal(found, [50, 60])
    np.testing.assert_allclose(more, 50, rtol=0.06)
    np.testing.assert_array_equal(base, 0)


def test_broad_noise_is_not_called_mains(rng):
    t = time_s(500.0)
    x = beats(t)[0] + 0.1 * rng.standard_normal((400, t.size))
    base, more, found = mains_of(x, 500.0, beats(t)[1])
    called = np.isfinite(found)
    assert called.mean() <= 0.03  # 400 rows, 8 lines each
    assert (base[~called] == 0).all() and (more[~called] == 0).all()


@pytest.mark.parametrize("bpm", [60.0, 75.0, 100.0, 120.0])
def test_regular_steep_beats_are_not_called_mains(bpm):
    """At 60, 75, 100 and 120 beats a minute a harmonic of the heart rate lies on 50 or 60 Hz exactly."""
    t = time_s(500.0)
    x, mask = beats(t, bpm, width_s=0.006)
    rng = np.random.default_rng(3)
    base, _, _ = mains_of(x + 0.001 * rng.standard_normal((6, t.size)), 500.0, mask)
    assert (base < 1.0).all()


def test_a_line_above_half_the_rate_is_not_seen():
    t = time_s(100.0)
    base, more, found = mains_of(hum(t, 60, 300)[None], 100.0)
    assert base[0] == 0 and more[0] == 0 and np.isnan(found[0])


def test_mains_of_flat_and_of_closed_rows():
    base, more, found = mains_of(np.full((1, 3600), 2.0), 360.0)
    assert base[0] == 0 and more[0] == 0 and np.isnan(found[0])
    plain = noise.plain_transform(np.zeros((1, 3600)), 360.0)
    closed = mains.mains(mains.open_spectrum(plain, np.zeros((1, 3600), bool)))
    assert np.isnan(np.concatenate(closed)).all()


def test_density_of_white_noise(rng):
    x = 0.01 * rng.standard_normal((50, 5000))
    spec = mains.open_spectrum(noise.plain_transform(x, 500.0), everything_open(x, 500.0))
    part = spec.density_of(np.flatnonzero((spec.freq_hz > 60) & (spec.freq_hz < 200)))
    assert part.mean() == pytest.approx(10.0**2 / 250.0, rel=0.03)


@pytest.mark.parametrize("fs_hz", [128.0, 360.0, 500.0])
def test_hum_is_taken_out_and_the_beats_stay(fs_hz):
    t = time_s(fs_hz)
    clean = np.tile(beats(t)[0], (3, 1))
    x = clean + np.stack(
        [hum(t, 50.1, 200) + hum(t, 150.3, 50) * (fs_hz > 310), hum(t, 59.9, 100), hum(t, 50, 80)]
    )
    out = mains.remove_mains(x, fs_hz, np.array([50.0, 60.0, np.nan]))
    left = np.abs(out - clean).max(axis=1) * 1e3
    assert left[0] < 12 and left[1] < 12
    np.testing.assert_array_equal(out[2], x[2])
    np.testing.assert_allclose(mains.remove_mains(np.ones((1, 500)), fs_hz, 50.0), 1.0)
