"""Recorded noise: the time split keeps its parts apart, and gains give the ratio they promise."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sigguard.errors import UsageError
from sigguard.readers.wfdb_files import quiet_wfdb
from sigguard.simulate.ecg import draw_scene, simulate
from sigguard.simulate.recorded import (
    PARTS,
    RECORDED_KINDS,
    SPLIT_MIN,
    NoiseBank,
    noise_power_mv2,
    qrs_peak_to_peak_mv,
    snr_gain,
)


@pytest.fixture(scope="module")
def clock_bank(tmp_path_factory):
    """Records whose slope tells the time: the value is the square of the time in seconds."""
    folder = tmp_path_factory.mktemp("noise")
    for kind, minutes in (("bw", 20), ("ma", 20), ("em", 8)):
        t_s = np.arange(minutes * 60 * 360) / 360.0
        digital = np.round(np.column_stack([t_s**2, -(t_s**2)]) * 1000).astype(np.int64)
        with quiet_wfdb() as wfdb:
            wfdb.wrsamp(
                kind,
                fs=360,
                units=["mV"] * 2,
                sig_name=["noise1", "noise2"],
                d_signal=digital,
                fmt=["32"] * 2,
                adc_gain=[1000.0] * 2,
                baseline=[0] * 2,
                write_dir=str(folder),
            )
    return folder


def times_of(cut_mv):
    """First and last moment of a cut of the clock records, seconds: half the slope."""
    slope = np.abs(np.gradient(cut_mv, 1 / 360.0))
    n = len(slope) // 20
    return np.mean(slope[1 : n + 1]) / 2, np.mean(slope[-n - 1 : -1]) / 2


@pytest.mark.parametrize("kind", RECORDED_KINDS)
def test_the_parts_never_overlap_and_no_cut_crosses_a_join(clock_bank, kind):
    seconds = {part: [] for part in PARTS}
    for part in PARTS:
        bank = NoiseBank(clock_bank, part)
        for seed in range(40):
            cut = bank.draw(np.random.default_rng(seed), kind, n_samples=7200, fs_hz=360.0)
            first_s, last_s = times_of(cut)
            within = [60 * a - 1 <= first_s and last_s <= 60 * b + 1 for a, b in SPLIT_MIN[kind][part]]
            assert sum(within) == 1, (part, first_s, last_s)
            seconds[part].append((first_s, last_s))
    assert max(s for _, s in seconds["train"]) < min(s for s, _ in seconds["calibrate"]) + 2
    assert max(s for _, s in seconds["calibrate"]) < min(s for s, _ in seconds["test"]) + 2


def test_the_split_is_the_one_written_down():
    """As the README of the open recordings states it."""
    assert SPLIT_MIN["em"] == {"train": ((0, 2), (2, 4)), "calibrate": ((4, 6),), "test": ((6, 8),)}
    for kind in ("bw", "ma"):
        assert SPLIT_MIN[kind] == {"train": ((0, 12),), "calibrate": ((12, 16),), "test": ((16, 20),)}


def test_draws_have_no_mean_either_sign_and_are_reproducible(clock_bank):
    bank = NoiseBank(clock_bank, "train")
    rising = []
    for seed in range(30):
        cut = bank.draw(np.random.default_rng(seed), "bw", n_samples=3600, fs_hz=360.0)
        again = bank.draw(np.random.default_rng(seed), "bw", n_samples=3600, fs_hz=360.0)
        assert np.array_equal(cut, again)
        assert cut.mean() == pytest.approx(0, abs=1e-6)
        rising.append(cut[-1] > cut[0])
    assert 3 < sum(rising) < 27


@pytest.mark.parametrize("fs_hz", [125.0, 250.0, 257.0, 500.0, 1000.0])
def test_a_resampled_cut_keeps_its_time_scale(clock_bank, fs_hz):
    n = round(10 * fs_hz)
    cut = NoiseBank(clock_bank, "test").draw(np.random.default_rng(1), "ma", n_samples=n, fs_hz=fs_hz)
    assert cut.shape == (n,)
    curve = np.polyfit(np.arange(n) / fs_hz, cut, 2)[0]  # second derivative of t² over 2
    assert abs(curve) == pytest.approx(1.0, rel=0.01)


def test_what_cannot_be_is_refused(clock_bank, tmp_path):
    with pytest.raises(UsageError, match="part"):
        NoiseBank(clock_bank, "all")
    with pytest.raises(UsageError, match="bw.hea"):
        NoiseBank(tmp_path, "train")
    bank = NoiseBank(clock_bank, "train")
    with pytest.raises(UsageError, match="recorded noise"):
        bank.draw(np.random.default_rng(0), "hum", n_samples=100, fs_hz=360.0)
    with pytest.raises(UsageError, match="holds"):
        bank.draw(np.random.default_rng(0), "em", n_samples=360 * 121, fs_hz=360.0)
    with pytest.raises(UsageError, match="ratio"):
        bank.draw(np.random.default_rng(0), "em", n_samples=360, fs_hz=np.pi * 100)


def ratio_db(qrs_pp_mv, noise_mv, fs_hz):
    """The noise-stress ratio written out once more from its definition."""
    seconds = len(noise_mv) // round(fs_hz)
    parts = np.split(noise_mv[: seconds * round(fs_hz)], seconds)
    rms = sorted(np.sqrt(np.mean((part - part.mean()) ** 2)) for part in parts)
    cut = int(0.05 * seconds)
    return 10 * np.log10(qrs_pp_mv**2 / 8 / np.mean(rms[cut : seconds - cut]) ** 2)


@given(
    snr_db=st.floats(-6, 30),
    size=st.floats(0.01, 50),
    qrs=st.floats(0.1, 5),
    seed=st.integers(0, 100),
)
@settings(max_examples=60, deadline=None)
def test_the_gain_gives_the_ratio_to_a_tenth_of_a_decibel(snr_db, size, qrs, seed):
    noise = size * np.random.default_rng(seed).standard_normal(10 * 360)
    gain = snr_gain(qrs, noise, snr_db, 360.0)
    assert ratio_db(qrs, gain * noise, 360.0) == pytest.approx(snr_db, abs=0.1)


def test_gain_on_a_simulated_ecg_and_its_beats():
    rng = np.random.default_rng(3)
    ecg = simulate(draw_scene(rng, rhythm="sinus"), rng)
    size = qrs_peak_to_peak_mv(ecg.signal_mv[7], ecg.beats_s, ecg.fs_hz)
    noise = rng.standard_normal(ecg.n_samples)
    assert ratio_db(size, snr_gain(size, noise, 6.0, 500.0) * noise, 500.0) == pytest.approx(6.0, abs=0.1)
    assert 0.3 * np.ptp(ecg.signal_mv[7]) < size <= np.ptp(ecg.signal_mv[7])


def test_trims_leave_out_the_loudest_seconds():
    noise = np.random.default_rng(0).standard_normal(100 * 360)
    loud = noise.copy()
    loud[: 3 * 360] *= 100
    assert noise_power_mv2(loud, 360.0) == pytest.approx(noise_power_mv2(noise, 360.0), rel=0.03)


def test_a_sine_has_the_power_of_the_closed_formula():
    t_s = np.arange(20 * 500) / 500.0
    assert noise_power_mv2(3 + 0.2 * np.sin(2 * np.pi * 10 * t_s), 500.0) == pytest.approx(
        0.2**2 / 2, rel=1e-6
    )


def test_peak_to_peak_of_known_beats():
    x = np.zeros(5000)
    at = np.array([500, 1500, 2500, 3500])
    x[at], x[at + 20] = 1.0, -0.5
    assert qrs_peak_to_peak_mv(x, at / 500.0, 500.0) == pytest.approx(1.5)
    assert np.isnan(qrs_peak_to_peak_mv(x, np.zeros(0), 500.0))
    assert np.isnan(qrs_peak_to_peak_mv(x, np.array([0.01]), 500.0))
    x[500] = np.nan
    assert qrs_peak_to_peak_mv(x, at / 500.0, 500.0) == pytest.approx(1.5)


@pytest.mark.parametrize(
    ("qrs", "noise"), [(1.0, np.zeros(1000)), (1.0, np.full(1000, np.nan)), (0.0, None), (np.nan, None)]
)
def test_a_gain_that_cannot_be_is_refused(qrs, noise):
    noise = np.random.default_rng(0).standard_normal(1000) if noise is None else noise
    with pytest.raises(UsageError):
        snr_gain(qrs, noise, 6.0, 500.0)


@pytest.mark.parametrize("part", PARTS)
@pytest.mark.parametrize("kind", RECORDED_KINDS)
def test_the_open_noise_records_can_be_drawn(open_data, part, kind):
    bank = NoiseBank(open_data / "nstdb", part)
    for seed in range(5):
        cut = bank.draw(np.random.default_rng(seed), kind, n_samples=15_000, fs_hz=500.0)
        assert np.isfinite(cut).all() and cut.std() > 0.005
        gain = snr_gain(1.0, cut, 12.0, 500.0)
        assert ratio_db(1.0, gain * cut, 500.0) == pytest.approx(12.0, abs=0.1)
