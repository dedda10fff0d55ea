"""Filters against scipy's Butterworth designs, and the time axis after the change of rate.

Independent truth: scipy.signal (butter, freqs, sosfiltfilt); pulses and lines of known place.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import signal
from scipy.interpolate import CubicSpline

from sigguard.filters import WORK_HZ, band_pass, high_pass, low_pass, notch, transform_rows

RATES = (125.0, 128.0, 250.0, 257.0, 360.0, 500.0, 1000.0)


def times(fs_hz: float, duration_s: float = 10.0) -> np.ndarray:
    return np.arange(round(duration_s * fs_hz)) / fs_hz


@pytest.mark.parametrize("order", [1, 2, 3, 5])
@pytest.mark.parametrize(("kind", "gain"), [("highpass", high_pass), ("lowpass", low_pass)])
def test_gain_is_butterworths_squared(kind, gain, order):
    f = np.geomspace(0.05, 120, 200)
    _, h = signal.freqs(*signal.butter(order, 2 * np.pi * 7.0, kind, analog=True), worN=2 * np.pi * f)
    np.testing.assert_allclose(gain(f, 7.0, order), np.abs(h) ** 2, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(gain(np.array([7.0]), 7.0, order), 0.5)


def test_zero_frequency_is_taken_by_the_high_pass_and_left_by_the_low_pass():
    zero = np.array([0.0])
    assert high_pass(zero, 0.5)[0] == 0.0 and low_pass(zero, 35.0)[0] == 1.0
    assert band_pass(zero, 6.0, 22.0)[0] == 0.0


@pytest.mark.parametrize("fs_hz", RATES)
def test_waveform_equals_sosfiltfilt_away_from_the_edges(fs_hz):
    """Same answer as running the digital filter both ways, at 2000 Hz where its own warping is negligible."""
    rng = np.random.default_rng(5)
    parts = [(f, rng.uniform(0.2, 1), rng.uniform(0, 6)) for f in (0.15, 0.5, 3.0, 9.0, 18.0, 33.0, 47.0)]

    def wave(t):
        return sum(a * np.sin(2 * np.pi * f * t + p) for f, a, p in parts)

    fine = times(2000.0, 20.0)
    sos_high = signal.butter(2, 0.5, "highpass", fs=2000.0, output="sos")
    sos_low = signal.butter(5, 35.0, fs=2000.0, output="sos")
    padded = signal.sosfiltfilt(sos_low, signal.sosfiltfilt(sos_high, wave(fine - 5.0)))
    work = transform_rows(wave(times(fs_hz))[None], fs_hz)
    ours = work.band(high_pass(work.freq_hz, 0.5) * low_pass(work.freq_hz, 35.0, 5))[0]
    t = np.arange(work.n_out) / work.fs_work_hz
    middle = (t > 4) & (t < 6)
    np.testing.assert_allclose(ours[middle], CubicSpline(fine - 5.0, padded)(t[middle]), atol=0.02)


@pytest.mark.parametrize("fs_hz", RATES)
@pytest.mark.parametrize(("f_hz", "passes"), [(2.0, False), (12.0, True), (45.0, False)])
def test_a_line_through_a_band_has_the_gain_of_sosfiltfilt(fs_hz, f_hz, passes):
    expected = float(
        np.prod(
            [
                np.abs(
                    signal.freqs(*signal.butter(n, 2 * np.pi * c, k, analog=True), worN=[2 * np.pi * f_hz])[1]
                )
                ** 2
                for n, c, k in ((2, 6.0, "highpass"), (3, 22.0, "lowpass"))
            ]
        )
    )
    work = transform_rows(np.sin(2 * np.pi * f_hz * times(fs_hz))[None], fs_hz)
    out = work.band(band_pass(work.freq_hz, 6.0, 22.0))[0]
    t = np.arange(work.n_out) / work.fs_work_hz
    middle = (t > 2) & (t < 8)
    rows = np.stack([np.sin(2 * np.pi * f_hz * t), np.cos(2 * np.pi * f_hz * t)])[:, middle]
    found = np.linalg.lstsq(rows.T, out[middle], rcond=None)[0]
    np.testing.assert_allclose(found, [expected, 0.0], atol=2e-3)  # a sine without shift: zero phase
    assert (expected > 0.7) == passes


@pytest.mark.parametrize("fs_hz", RATES)
def test_envelope_of_a_line_is_its_amplitude(fs_hz):
    work = transform_rows(0.7 * np.sin(2 * np.pi * 12 * times(fs_hz))[None], fs_hz)
    gain = band_pass(work.freq_hz, 6.0, 22.0)
    expected = 0.7 * band_pass(np.array([12.0]), 6.0, 22.0)[0]
    np.testing.assert_allclose(work.envelope(gain)[0, 500:2000], expected, atol=5e-3)


@pytest.mark.parametrize("mains_hz", [50.0, 60.0])
def test_notch_takes_the_line_and_its_harmonics_only(mains_hz):
    f = np.arange(0, 235, 0.1)
    gain = notch(f, mains_hz)
    off = np.min(np.abs(f[:, None] - mains_hz * np.arange(1, 6)), axis=1)
    assert np.all(gain[off <= 0.21] < 0.01)  # mains keeps within 0.2 Hz
    assert np.all(gain[off >= 1.4] > 0.999)
    assert np.all((gain >= 0) & (gain <= 1))


def test_notch_leaves_a_row_as_it_was_without_mains():
    t = times(500.0)
    ecg_like = np.sin(2 * np.pi * 8 * t)
    with_mains = transform_rows((ecg_like + 0.4 * np.sin(2 * np.pi * 50.1 * t))[None], 500.0)
    without = transform_rows(ecg_like[None], 500.0)
    gain = notch(without.freq_hz, 50.0)
    np.testing.assert_allclose(
        with_mains.band(gain)[0, 500:2000], without.band(np.ones_like(gain))[0, 500:2000], atol=4e-3
    )


@pytest.mark.parametrize("fs_hz", RATES)
@pytest.mark.parametrize("at_s", [0.3, 3.0, 5.1234, 9.7])
def test_a_pulse_stays_where_it_is_in_time(fs_hz, at_s):
    x = np.exp(-0.5 * ((times(fs_hz) - at_s) / 0.012) ** 2)  # about as sharp as a QRS complex
    work = transform_rows(x[None], fs_hz)
    assert abs(work.fs_work_hz - WORK_HZ) < 0.3
    out = work.band(low_pass(work.freq_hz, 40.0))[0]
    k = int(out.argmax())
    a, b, c = out[k - 1 : k + 2]
    found_s = (k + 0.5 * (a - c) / (a - 2 * b + c)) / work.fs_work_hz
    assert abs(found_s - at_s) < 0.5e-3


@pytest.mark.parametrize("fs_hz", RATES)
def test_work_rows_cover_the_row_and_no_more(fs_hz):
    work = transform_rows(np.zeros((3, round(7.3 * fs_hz))), fs_hz)
    out = work.band(np.ones_like(work.freq_hz))
    last_s = (round(7.3 * fs_hz) - 1) / fs_hz
    assert out.shape[0] == 3
    assert last_s - 1 / work.fs_work_hz < (out.shape[1] - 1) / work.fs_work_hz <= last_s + 1e-9


@pytest.mark.parametrize("fs_hz", RATES)
@pytest.mark.parametrize("level_mv", [0.0, 1.5, -300.0])
def test_constant_rows_become_nothing(fs_hz, level_mv):
    work = transform_rows(np.full((2, round(5 * fs_hz)), level_mv), fs_hz)
    for gain in (np.ones_like(work.freq_hz), high_pass(work.freq_hz, 0.5)):
        assert np.abs(work.band(gain)).max() < 1e-9
        assert work.envelope(gain).max() < 1e-9


def test_a_sloping_row_is_flat_after_the_high_pass_but_for_its_ends():
    t = times(500.0)
    work = transform_rows((0.3 * t)[None], 500.0)
    out = work.band(high_pass(work.freq_hz, 0.5))[0]
    assert np.abs(out[500:2000]).max() < 0.02  # of a rise of 3 mV


@pytest.mark.parametrize("n", [2, 3, 10, 63])
def test_rows_of_a_few_samples_do_not_break(n):
    work = transform_rows(np.random.default_rng(0).normal(size=(2, n)), 500.0)
    out = work.band(low_pass(work.freq_hz, 35.0))
    assert out.shape == (2, (n - 1) // 2 + 1) and np.isfinite(out).all()


def test_rows_do_not_know_of_each_other():
    x = np.random.default_rng(3).normal(size=(5, 2500))
    gain = high_pass(transform_rows(x, 360.0).freq_hz, 0.5)
    together = transform_rows(x, 360.0).band(gain)
    alone = np.concatenate([transform_rows(row[None], 360.0).band(gain) for row in x])
    np.testing.assert_allclose(together, alone, atol=1e-12)
