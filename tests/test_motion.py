"""Tremor and movement of known size."""

from __future__ import annotations

import numpy as np
import pytest

from sigguard import motion, noise

RATES = (128.0, 250.0, 360.0, 500.0, 1000.0)
SECONDS = 10.0


@pytest.fixture
def rng() -> np.random.Generator:
    return np.random.default_rng(20245)


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


def residual(x_mv: np.ndarray, fs_hz: float = 250.0) -> tuple[motion.Residual, np.ndarray]:
    res = motion.residual_of(np.atleast_2d(x_mv), fs_hz)
    return res, np.ones((len(res.rows_uv), res.thin_len), bool)


@pytest.mark.parametrize("hz", [4.7, 6.0, 8.0, 10.5, 11.5])
def test_tremor_is_the_rms_of_its_sine(rng, hz):
    t = time_s(250.0)
    x = 0.1 * np.sin(2 * np.pi * hz * t) + 0.005 * rng.standard_normal((10, t.size))
    level, peak = motion.tremor(*residual(x))
    np.testing.assert_allclose(level, 100 / np.sqrt(2), rtol=0.12)
    assert (peak > 20).all()


def test_broad_noise_is_little_tremor(rng):
    white = 0.1 * rng.standard_normal((200, 2500))
    red = np.cumsum(white, axis=1)
    for x in (white, 0.1 * (red - red.mean(axis=1, keepdims=True))):
        res, open_ = residual(x)
        level, peak = motion.tremor(res, open_)
        band = noise.rms_over(res.band(*motion.TREMOR_HZ), open_)
        assert np.median(level / band) < 0.35
        assert np.median(peak) < 3.5


def test_motion_of_a_sine_and_of_one_excursion():
    t = time_s(250.0)
    bump = np.exp(-0.5 * ((t - 5.25) / 0.08) ** 2) * np.sin(2 * np.pi * 3 * (t - 5.2))
    rms, peak, step, crest = motion.motion(residual(np.stack([0.2 * np.sin(2 * np.pi * 3 * t), bump]))[0])
    assert rms[0] == pytest.approx(200 / np.sqrt(2), rel=0.05)
    assert crest[0] == pytest.approx(1.0, abs=0.1)
    assert peak[1] > 5 * rms[1] / 2 and crest[1] > 20
    assert step[0] < 150


def test_a_step_has_its_height():
    t = time_s(250.0)
    _, _, step, _ = motion.motion(residual(np.where(t < 5.0, 0.0, 0.6))[0])
    assert step[0] == pytest.approx(600, rel=0.01)
    _, _, step, _ = motion.motion(residual(np.where(t < 5.13, 0.0, -0.6))[0])
    assert step[0] == pytest.approx(600, rel=0.01)


def test_tremor_and_motion_of_flat_and_missing_rows():
    x = np.zeros((2, 2500))
    x[1] = np.nan
    res, open_ = residual(x)
    level, peak = motion.tremor(res, open_)
    rms, high, step, crest = motion.motion(res)
    for got in (level, rms, high, step):
        np.testing.assert_array_equal(got, 0)
    assert np.isnan(peak).all() and np.isnan(crest).all()


def test_qrs_height_is_the_median_over_beats():
    x, mask = np.zeros((3, 100)), np.zeros((3, 100), bool)
    for k, (at, height) in enumerate([(10, 1.0), (30, 9.0), (50, 2.0)]):
        x[0, at], x[1, at] = height, -height
        mask[0, at - 3 : at + 3] = True
        mask[1, at - 3 : at + 3] = k < 2
    mask[2, 95:] = True
    x[2, 97] = 0.25
    np.testing.assert_allclose(motion.qrs_height_mv(x, mask), [2.0, 5.0, 0.25])
    assert np.isnan(motion.qrs_height_mv(x, np.zeros_like(mask))).all()


def test_excursions_are_told_in_heights_of_the_qrs():
    t = time_s(250.0)
    x, mask = beats(t)
    x = x + np.where((t > 5.5) & (t < 5.55), 4.0, 0.0)
    height = motion.qrs_height_mv(x[None], mask[None])
    whole, rest = motion.excursion_ratio(x[None], residual(x - beats(t)[0])[0], height)
    assert height[0] == pytest.approx(1.0, abs=0.02)
    assert whole[0] == pytest.approx(4.0, abs=0.3) and rest[0] == pytest.approx(4.0, abs=0.1)
    nothing = motion.excursion_ratio(x[None], residual(x)[0], np.array([np.nan]))
    assert np.isnan(np.concatenate(nothing)).all()
