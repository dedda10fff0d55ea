"""Disturbances: where their power lies, how they vary over time, and what the transforms do."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import welch

from sigguard.errors import UsageError
from sigguard.simulate.disturbance import (
    ADDITIVE_KINDS,
    ENVELOPES,
    LEAD_OFF_MODES,
    apply_clipping,
    apply_dropouts,
    apply_lead_off,
    apply_quantisation,
    clipped_share,
    draw_disturbance,
    draw_envelope,
    to_leads,
)

FS_HZ = 500.0


def draw(kind, seed, *, n_samples=15_000, fs_hz=FS_HZ, **options):
    return draw_disturbance(np.random.default_rng(seed), kind, n_samples=n_samples, fs_hz=fs_hz, **options)


def share_between(x, low_hz, high_hz, fs_hz=FS_HZ):
    f_hz, power = welch(x, fs_hz, nperseg=min(len(x), 10_000), detrend=False)
    return power[(f_hz >= low_hz) & (f_hz <= high_hz)].sum() / power.sum()


@pytest.mark.parametrize("kind", ADDITIVE_KINDS)
@pytest.mark.parametrize("envelope", [*ENVELOPES, "random"])
@pytest.mark.parametrize(("n_samples", "fs_hz"), [(5000, 500.0), (625, 125.0), (7201, 360.0)])
def test_mean_zero_rms_one_and_reproducible(kind, envelope, n_samples, fs_hz):
    x = draw(kind, 3, n_samples=n_samples, fs_hz=fs_hz, envelope=envelope)
    again = draw(kind, 3, n_samples=n_samples, fs_hz=fs_hz, envelope=envelope)
    assert x.shape == (n_samples,)
    assert np.array_equal(x, again)
    assert not np.array_equal(x, draw(kind, 4, n_samples=n_samples, fs_hz=fs_hz, envelope=envelope))
    assert x.mean() == pytest.approx(0, abs=1e-9)
    assert np.sqrt(np.mean(x**2)) == pytest.approx(1, rel=1e-9)


@pytest.mark.parametrize("seed", range(8))
@pytest.mark.parametrize(
    ("kind", "low_hz", "high_hz", "at_least"),
    [
        ("wander", 0.0, 0.75, 0.99),
        ("muscle", 18.0, 250.0, 0.9),
        ("tremor", 3.7, 12.5, 0.9),
        ("motion", 0.5, 10.0, 0.85),
        ("excursion", 0.0, 10.0, 0.85),
    ],
)
def test_power_lies_in_the_band_of_the_kind(kind, low_hz, high_hz, at_least, seed):
    assert share_between(draw(kind, seed), low_hz, high_hz) > at_least


@pytest.mark.parametrize("seed", range(4))
def test_muscle_reaches_beyond_150_hz_where_the_rate_allows(seed):
    assert share_between(draw("muscle", seed, fs_hz=1000.0), 150, 500, 1000.0) > 0.003


@pytest.mark.parametrize("mains_hz", [50.0, 60.0])
@pytest.mark.parametrize("seed", range(5))
def test_mains_is_a_line_at_its_frequency_with_harmonics(mains_hz, seed):
    x = draw("mains", seed, mains_hz=mains_hz)
    assert share_between(x, mains_hz - 0.5, mains_hz + 0.5) > 0.75
    lines = sum(share_between(x, k * mains_hz - 1.2, k * mains_hz + 1.2) for k in (1, 2, 3))
    assert lines > 0.99


def test_mains_is_50_or_60_hz_by_chance():
    tops = set()
    for seed in range(20):
        f_hz, power = welch(draw("mains", seed), FS_HZ, nperseg=5000)
        tops.add(round(f_hz[power.argmax()] / 10) * 10)
    assert tops == {50, 60}


def test_no_harmonic_folds_at_low_sampling_rates():
    x = draw("mains", 1, fs_hz=125.0, mains_hz=50.0)
    assert share_between(x, 48, 52, 125.0) > 0.98


def test_pops_hold_steps_that_recover():
    jumps = [np.abs(np.diff(draw("pops", seed))).max() for seed in range(20)]
    typical = [np.median(np.abs(np.diff(draw("pops", seed)))) for seed in range(20)]
    assert np.median(jumps) > 50 * np.median(typical)


def test_an_excursion_towers_over_the_rest():
    ratio = []
    for seed in range(10):
        x = draw("excursion", seed)
        ratio.append(np.abs(x - np.median(x)).max() / np.median(np.abs(x - np.median(x))))
    assert np.median(ratio) > 10


def test_a_burst_is_uneven_and_a_constant_size_is_not():
    def spread(envelope, seed):
        size = draw("muscle", seed, envelope=envelope).reshape(-1, 500).std(axis=1)
        return size.max() / size.min()

    bursting, constant = (
        [spread(envelope, seed) for seed in range(12)] for envelope in ("bursting", "constant")
    )
    assert np.median(bursting) > 3 * np.median(constant)
    assert np.median(constant) < 2.5  # muscle flickers a little by itself


def test_envelopes_are_positive_and_constant_is_one():
    for envelope in ENVELOPES:
        for seed in range(5):
            out = draw_envelope(np.random.default_rng(seed), envelope, n_samples=5000, fs_hz=FS_HZ)
            assert (out > 0).all()
    np.testing.assert_array_equal(
        draw_envelope(np.random.default_rng(0), "constant", n_samples=9, fs_hz=FS_HZ), 1
    )


def test_noise_of_one_electrode_reaches_the_leads_by_their_algebra():
    noise = np.zeros((9, 100))
    noise[1] = draw("motion", 0, n_samples=100)  # LA
    expected = np.array([1, 0, -1, -0.5, 1, -0.5, *[-1 / 3] * 6])  # I II III aVR aVL aVF V1..V6
    np.testing.assert_allclose(to_leads(noise), np.outer(expected, noise[1]), atol=1e-12)


def test_what_all_electrodes_share_is_in_no_lead():
    noise = np.tile(draw("mains", 0, n_samples=200), (9, 1))
    np.testing.assert_allclose(to_leads(noise), 0, atol=1e-12)


def test_clipping_keeps_the_inside_the_gaps_and_nothing_beyond():
    x = np.array([-2.0, -0.5, np.nan, 0.3, 4.0])
    np.testing.assert_array_equal(apply_clipping(x, low_mv=-1, high_mv=1), [-1, -0.5, np.nan, 0.3, 1])
    assert clipped_share(x, low_mv=-1, high_mv=1) == pytest.approx(0.4)
    with pytest.raises(UsageError):
        apply_clipping(x, low_mv=1, high_mv=1)


@given(step_mv=st.floats(0.001, 0.05), seed=st.integers(0, 1000))
@settings(max_examples=30, deadline=None)
def test_quantisation_errs_by_half_a_step_at_most(step_mv, seed):
    x = np.random.default_rng(seed).standard_normal(300)
    coarse = apply_quantisation(x, step_mv=step_mv)
    assert np.abs(coarse - x).max() <= step_mv / 2 + 1e-12
    np.testing.assert_allclose(coarse / step_mv, np.round(coarse / step_mv), atol=1e-6)


def test_a_converter_step_must_be_positive():
    with pytest.raises(UsageError):
        apply_quantisation(np.zeros(3), step_mv=0.0)


@pytest.mark.parametrize("seed", range(10))
def test_dropouts_lose_about_the_share_on_all_rows_alike_and_leave_the_rest(seed):
    x = np.random.default_rng(seed).standard_normal((3, 4000))
    out = apply_dropouts(x, np.random.default_rng(seed), share=0.3)
    gone = np.isnan(out)
    assert (gone == gone[0]).all()
    assert 0.05 < gone.mean() <= 0.31  # stretches may overlap
    np.testing.assert_array_equal(out[~gone], x[~gone])
    assert np.isfinite(x).all()  # the source is not touched
    held = apply_dropouts(x, np.random.default_rng(seed), share=0.3, held=True)
    assert np.isfinite(held).all()
    assert (np.diff(held, axis=1) == 0).mean() == pytest.approx(gone.mean(), abs=0.01)


@pytest.mark.parametrize("mode", LEAD_OFF_MODES)
@pytest.mark.parametrize("seed", range(5))
def test_lead_off_holds_no_ecg_in_its_stretch(mode, seed):
    beat = np.zeros(5000)
    beat[::400] = 1.0
    out = apply_lead_off(beat, np.random.default_rng(seed), fs_hz=FS_HZ, mode=mode)
    without = apply_lead_off(0 * beat, np.random.default_rng(seed), fs_hz=FS_HZ, mode=mode)
    np.testing.assert_array_equal(out, without)
    if mode == "flat":
        assert np.abs(out).max() < 0.02
    elif mode == "rail":
        assert np.abs(np.abs(out[2500:]) - 5.0).max() < 0.02
    else:
        assert out.std() > 0.03


@pytest.mark.parametrize("seed", range(5))
def test_lead_off_of_a_part_leaves_what_comes_before(seed):
    x = np.random.default_rng(seed).standard_normal(5000)
    out = apply_lead_off(x, np.random.default_rng(seed), fs_hz=FS_HZ, mode="rail", share=0.4)
    changed = np.flatnonzero(out != x)
    assert changed[0] > 0 or changed[-1] - changed[0] >= 1999
    np.testing.assert_array_equal(out[: changed[0]], x[: changed[0]])
    tail = out - x
    assert np.abs(tail[-1]) <= 5.0 + 4.0


@pytest.mark.parametrize(
    "call",
    [
        lambda rng: draw_disturbance(rng, "jam", n_samples=100, fs_hz=FS_HZ),
        lambda rng: draw_disturbance(rng, "mains", n_samples=3, fs_hz=FS_HZ),
        lambda rng: draw_disturbance(rng, "muscle", n_samples=100, fs_hz=FS_HZ, envelope="jam"),
        lambda rng: apply_lead_off(np.zeros(100), rng, fs_hz=FS_HZ, mode="jam"),
        lambda rng: apply_lead_off(np.zeros((2, 100)), rng, fs_hz=FS_HZ),
    ],
)
def test_what_cannot_be_is_refused(call):
    with pytest.raises(UsageError):
        call(np.random.default_rng(0))
