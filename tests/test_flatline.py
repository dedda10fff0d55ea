"""Flat and clipped stretches made on purpose, and smooth ones that are neither."""

from __future__ import annotations

import numpy as np
import pytest

from sigguard import flatline, noise

RATES = (128.0, 250.0, 360.0, 500.0, 1000.0)
SECONDS = 10.0


@pytest.fixture
def rng() -> np.random.Generator:
    return np.random.default_rng(20244)


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


def flat_of(x: np.ndarray, fs_hz: float, mask: np.ndarray | None = None, step: float = 0.005) -> np.ndarray:
    x = np.atleast_2d(x)
    filled, missing = noise.fill_gaps(x)
    mask = np.zeros(x.shape, bool) if mask is None else np.broadcast_to(mask, x.shape)
    move = np.abs(np.diff(filled, axis=1))
    return flatline.flat_mask(filled, move, missing, fs_hz, qrs_mask=mask, step_mv=np.full(len(x), step))


def clip_of(x: np.ndarray, fs_hz: float, step: float = 0.005, rails=None) -> np.ndarray:
    filled, missing = noise.fill_gaps(np.atleast_2d(x))
    rails = None if rails is None else np.tile(rails, (len(filled), 1))
    return flatline.clipped_mask(filled, missing, fs_hz, step_mv=np.full(len(filled), step), rails_mv=rails)


def quantised(x: np.ndarray, step: float = 0.005) -> np.ndarray:
    return np.round(x / step) * step


def test_runs_and_paint_are_inverse(rng):
    mask = rng.random((20, 90)) < 0.6
    np.testing.assert_array_equal(flatline.paint(flatline.runs_of(mask), mask.shape), mask)
    assert (flatline.runs_of(mask, 4).length >= 4).all()
    want = [max((len(s) for s in "".join("x" if m else " " for m in row).split()), default=0) for row in mask]
    np.testing.assert_allclose(flatline.longest_s(mask, 10.0), np.array(want) / 10)


@pytest.mark.parametrize("fs_hz", RATES)
def test_a_held_stretch_is_flat_to_the_sample(rng, fs_hz):
    t = time_s(fs_hz)
    x = quantised(beats(t)[0] + 0.01 * rng.standard_normal(t.size))
    x[(t >= 3.0) & (t < 5.5)] = x[t >= 3.0][0]
    x[(t >= 7.0) & (t < 7.6)] = -0.4
    flat = flat_of(x, fs_hz, beats(t)[1])
    assert flat[0, (t >= 3.0) & (t < 5.5)].all() and flat[0, (t >= 7.0) & (t < 7.6)].all()
    assert flat.sum() / fs_hz == pytest.approx(3.1, abs=0.05)


@pytest.mark.parametrize("bpm", [40.0, 72.0, 110.0])
@pytest.mark.parametrize("step", [0.001, 0.005, 0.02])
def test_pauses_between_waves_of_a_noise_free_recording_are_not_flat(bpm, step):
    t = time_s(500.0)
    x, mask = beats(t, bpm)
    assert not flat_of(quantised(x, step), 500.0, mask, step).any()


def test_noise_of_one_step_is_flat_and_of_three_is_not(rng):
    dither = 0.005 * rng.integers(0, 2, (1, 3600)).astype(float)
    assert flat_of(dither, 360.0).all()
    assert not flat_of(0.005 * rng.integers(-3, 4, (1, 3600)), 360.0).any()


def test_constant_and_missing_rows():
    x = np.full((3, 1000), 0.3)
    x[1] = np.nan
    x[2, 400:] = np.nan
    flat = flat_of(x, 250.0, step=np.nan)
    assert flat[0].all() and not flat[1].any()
    assert flat[2, :400].all() and not flat[2, 400:].any()
    assert not clip_of(x, 250.0, step=np.nan).any()


def test_calibration_pulses_and_pacing_spikes_are_neither_flat_nor_clipped():
    t = time_s(500.0)
    x, mask = beats(t, 60)
    x = x * 0.8
    x[(t >= 4.40) & (t < 4.60)] = 1.0
    paced, _ = beats(t, 60)
    paced = 0.8 * paced
    paced[((t + 0.05) % 1.0) < 0.0035] += 2.0
    both = quantised(np.stack([x, paced]))
    assert not clip_of(both, 500.0).any()
    assert not flat_of(both, 500.0, mask).any()


@pytest.mark.parametrize("fs_hz", RATES[1:])
@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_cut_tops_are_clipped(rng, fs_hz, sign):
    t = time_s(fs_hz)
    x, _ = beats(t, width_s=0.02)
    x = sign * quantised(np.minimum(x + 0.003 * rng.standard_normal(t.size), 0.5))
    clipped = clip_of(x, fs_hz)
    top = sign * x >= 0.4999
    assert clipped[0, top].mean() > 0.9
    assert not clipped[0, ~top].any()


@pytest.mark.parametrize("noise_mv", [0.01, 0.02, 0.05])
def test_saturation_by_wander_is_clipped(rng, noise_mv):
    t = time_s(360.0)
    x = beats(t)[0] + 2 * np.sin(2 * np.pi * 0.2 * t) + noise_mv * rng.standard_normal((30, t.size))
    x = quantised(np.clip(x, -1.5, 1.5))
    clipped = clip_of(x, 360.0)
    truth = np.abs(x) >= 1.4999
    assert ((clipped & truth).sum(axis=1) > 0.9 * truth.sum(axis=1)).all()
    assert not (clipped & ~truth).any()


@pytest.mark.parametrize("noise_steps", [0.3, 0.8, 1.2, 1.6, 3.0])
def test_noisy_tops_are_seldom_clipped(rng, noise_steps):
    """Slow rounded tops, the worst case: a T wave higher than the QRS at 1000 Hz."""
    t = time_s(1000.0)
    d = t % 0.8 - 0.4
    x = 0.5 * np.exp(-0.5 * (d / 0.05) ** 2) + 0.005 * noise_steps * rng.standard_normal((100, t.size))
    assert clip_of(quantised(x), 1000.0).any(axis=1).mean() <= 0.02


@pytest.mark.parametrize("fs_hz", RATES)
@pytest.mark.parametrize("step", [0.001, 0.005, 0.02, 0.05])
@pytest.mark.parametrize("height", [0.1, 1.0, 3.0])
def test_smooth_tops_are_not_clipped_however_coarse(rng, fs_hz, step, height):
    t = time_s(fs_hz)
    rows = []
    for bpm in (50.0, 72.0, 93.0, 130.0):
        x, _ = beats(t, bpm, width_s=rng.uniform(0.008, 0.03))
        rows += [height * x, height * (x + 0.01 * rng.standard_normal(t.size)), height * -x]
    assert not clip_of(quantised(np.array(rows), step), fs_hz, step).any()


def test_known_rails_need_only_two_samples():
    t = time_s(250.0)
    x = quantised(np.minimum(beats(t, 72.0, 0.012)[0], 0.95))
    assert clip_of(x, 250.0, rails=[-1.0, 0.95]).any()
    assert not clip_of(x, 250.0, rails=[-1.0, 2.0])[0, x < 0.94].any()
    assert not clip_of(quantised(beats(t)[0]), 250.0, rails=[np.nan, np.nan]).any()
