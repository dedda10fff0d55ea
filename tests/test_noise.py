"""Gaps, wander and muscle noise on signals of known answer."""

from __future__ import annotations

import numpy as np
import pytest

from sigguard import noise

RATES = (128.0, 250.0, 360.0, 500.0, 1000.0)
SECONDS = 10.0


@pytest.fixture
def rng() -> np.random.Generator:
    return np.random.default_rng(20240)


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


def muscle_band(x: np.ndarray, fs_hz: float, mains_hz: float = np.nan) -> np.ndarray:
    return noise.muscle_band(noise.plain_transform(x, fs_hz), np.full(len(x), mains_hz))


def everything_open(x: np.ndarray, fs_hz: float) -> np.ndarray:
    return noise.between_beats(np.zeros(x.shape, bool), np.zeros(x.shape, bool), fs_hz)


def test_gaps_are_bridged_as_numpy_interp_does(rng):
    x = rng.standard_normal((40, 200))
    x[rng.random(x.shape) < 0.4] = np.nan
    filled, missing = noise.fill_gaps(x)
    place = np.arange(200)
    for row, got, gone in zip(x, filled, missing, strict=True):
        np.testing.assert_allclose(got, np.interp(place, place[~gone], row[~gone]), atol=1e-12)
    np.testing.assert_array_equal(missing, np.isnan(x))


def test_a_row_of_nothing_becomes_zeros_and_a_whole_one_is_not_touched():
    x = np.array([[np.nan] * 5, [1.0, 2, 3, 4, 5], [np.nan, np.inf, 7.0, np.nan, np.nan]])
    filled, missing = noise.fill_gaps(x)
    np.testing.assert_array_equal(filled, [[0] * 5, [1, 2, 3, 4, 5], [7] * 5])
    assert missing[2].tolist() == [True, True, False, True, True]
    whole = np.ones((2, 3))
    assert noise.fill_gaps(whole)[0] is whole


@pytest.mark.parametrize("fs_hz", RATES)
def test_wander_of_a_slow_sine(fs_hz):
    t = time_s(fs_hz)
    x = 3.0 + 0.4 * np.sin(2 * np.pi * 0.3 * t)[None]
    rms, span, slope = noise.wander(noise.plain_transform(x, fs_hz))
    assert rms[0] == pytest.approx(400 / np.sqrt(2), rel=0.03)
    assert span[0] == pytest.approx(800, rel=0.04)
    assert slope[0] == pytest.approx(400 * 2 * np.pi * 0.3, rel=0.15)


def test_a_drift_is_wander_and_an_offset_is_none():
    t = time_s(360.0)
    x = np.stack([0.1 * t, np.full_like(t, 5.0)])
    rms, span, slope = noise.wander(noise.plain_transform(x, 360.0))
    assert rms[0] == pytest.approx(1000 / np.sqrt(12), rel=0.02)
    assert span[0] == pytest.approx(1000, rel=0.02)
    assert slope[0] == pytest.approx(100, rel=0.02)
    assert max(rms[1], span[1], slope[1]) < 1e-3


def test_beats_are_little_wander():
    t = time_s(500.0)
    rms, *_ = noise.wander(noise.plain_transform(beats(t, 60)[0][None], 500.0))
    assert rms[0] < 15.0


@pytest.mark.parametrize("fs_hz", RATES)
def test_muscle_of_white_noise_is_the_share_of_its_band(rng, fs_hz):
    x = 0.05 * rng.standard_normal((30, int(SECONDS * fs_hz)))
    y = muscle_band(x, fs_hz)
    rms, steady, burst = noise.muscle(y, everything_open(x, fs_hz), fs_hz)
    expected = 50.0 * np.sqrt((min(150.0, 0.45 * fs_hz) - 20.0) / (fs_hz / 2))
    assert rms.mean() == pytest.approx(expected, rel=0.05)
    assert steady.mean() == pytest.approx(expected, rel=0.06)
    assert 1.0 < (burst / steady).mean() < 1.5


def test_bursts_are_told_from_constant_noise(rng):
    t = time_s(500.0)
    x = 0.05 * rng.standard_normal((20, t.size)) * ((t % 4) < 1.0)
    y = muscle_band(x, 500.0)
    rms, steady, burst = noise.muscle(y, everything_open(x, 500.0), 500.0)
    assert (burst > 10 * steady).all()
    assert (rms < burst).all()


def test_beats_are_no_muscle_noise(rng):
    t = time_s(500.0)
    x, mask = beats(t)
    quiet = x + 0.002 * rng.standard_normal((20, t.size))
    keep = noise.between_beats(np.broadcast_to(mask, quiet.shape), np.zeros(quiet.shape, bool), 500.0)
    rms, steady, _ = noise.muscle(muscle_band(quiet, 500.0), keep, 500.0)
    expected = 2.0 * np.sqrt(130 / 250)
    assert steady.mean() == pytest.approx(expected, rel=0.15)
    assert rms.mean() < 2 * expected


def test_mains_is_no_muscle_noise():
    t = time_s(500.0)
    for hz, lines in ((50.0, (50.0, 49.8, 50.2, 150.0)), (60.0, (60.0, 59.8, 120.0))):
        x = np.stack([0.2 * np.sin(2 * np.pi * f * t + 1) for f in lines])
        rms, *_ = noise.muscle(muscle_band(x, 500.0, hz), everything_open(x, 500.0), 500.0)
        assert (rms < 0.06 * 200 / np.sqrt(2)).all()


def test_muscle_of_flat_and_of_closed_rows():
    x = np.full((2, 3600), 1.7)
    keep = everything_open(x, 360.0)
    keep[1] = False
    rms, steady, burst = noise.muscle(muscle_band(x, 360.0), keep, 360.0)
    assert max(rms[0], steady[0], burst[0]) < 1e-4
    assert np.isnan([rms[1], steady[1], burst[1]]).all()


def test_samples_between_beats():
    fs_hz, n = 100.0, 1000
    mask, missing = np.zeros((3, n), bool), np.zeros((3, n), bool)
    mask[0, 300:320] = True
    mask[1] = True
    missing[2, 500:510] = True
    keep = noise.between_beats(mask, missing, fs_hz)
    assert not keep[:, :10].any() and not keep[:, -10:].any()
    assert not keep[0, 300:320].any() and keep[0, 320] and keep[0, 299]
    assert keep[1, 10:-10].all()  # nothing would be left: the beats stay in
    assert not keep[2, 495:515].any() and keep[2, 494] and keep[2, 515]
    np.testing.assert_array_equal(mask[0, 300:320], True)  # the caller's mask is not touched


@pytest.mark.parametrize("q", [0.0, 0.3, 0.5, 0.95, 1.0])
def test_quantile_over_what_is_there_equals_numpy(rng, q):
    x = rng.standard_normal((30, 17))
    x[rng.random(x.shape) < 0.3] = np.nan
    np.testing.assert_allclose(noise.quantile_of(x, q), np.nanquantile(x, q, axis=1))
    assert np.isnan(noise.quantile_of(np.full((1, 4), np.nan), q)).all()
    assert np.isnan(noise.quantile_of(np.empty((2, 0)), q)).all()
