"""Real recordings that package registries carry: no download, nothing of ours in them.

- pydicom's ``waveform_ecg.dcm``: 10 s, 12 leads at 1000 Hz, and beside it the recorder's own median beat
  (1200 samples at 1000 Hz, trigger at sample 501): an average made by other people's software.
- PyWavelets' ``ecg``: 1024 samples of MIT-BIH at 360 Hz in converter steps; 200 steps to the millivolt is assumed
  from the database's usual gain. The three beats were counted by eye on a plot.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pytest
from scipy.interpolate import CubicSpline
from scipy.signal import butter, sosfiltfilt

from sigguard import Recording, check, open_recording
from sigguard.global_values import analyse_global
from sigguard.measure import WAVE_BAND_HZ, analyse, averaged_beats
from sigguard.waves import FS, LENGTH, ZERO


@cache
def dicom_file() -> Path:
    data = pytest.importorskip("pydicom.data")
    try:
        path = data.get_testdata_file("waveform_ecg.dcm", download=False)
    except (OSError, ValueError):
        path = None
    if path is None:
        pytest.skip("this pydicom comes without waveform_ecg.dcm")
    return Path(path)


@cache
def recorders_median_mv() -> np.ndarray:
    """(12, 1200): the second multiplex group, in millivolts (its channels are in µV)."""
    import pydicom
    import pydicom.waveforms  # noqa: F401  (older versions load it lazily)

    dataset = pydicom.dcmread(dicom_file())
    group = dataset.WaveformSequence[1]
    assert group.MultiplexGroupLabel == "MEDIAN BEAT" and group.NumberOfWaveformSamples == 1200
    return dataset.waveform_array(1).T / 1000.0


@cache
def rhythm_mv() -> np.ndarray:
    with open_recording(dicom_file()) as source:
        assert source.info.fs_hz == 1000.0 and source.info.n_leads == 12
        return source.read()


def in_our_band(x_mv: np.ndarray) -> np.ndarray:
    """Rows at 1000 Hz below the 35 Hz in which waves are measured; scipy's filter, not ours."""
    return sosfiltfilt(butter(5, WAVE_BAND_HZ[1], fs=1000.0, output="sos"), x_mv, axis=1)


def test_our_averaged_beat_is_the_recorders():
    """Correlation per lead from P to T at the lag that fits best: 0.98 in each lead outright (0.982 measured in
    aVL, whose small notches live above 35 Hz, 0.99 and more elsewhere); 0.99 in the band the marks are read in."""
    t_ours = (np.arange(LENGTH) - ZERO) / FS
    t_theirs = (np.arange(1200) - 500) / 1000.0
    core = (t_theirs > -0.25) & (t_theirs < 0.45)

    def fits(ours: np.ndarray, theirs: np.ndarray) -> np.ndarray:
        best = np.zeros(12)
        for k in range(12):
            fine = CubicSpline(t_ours, ours[k])
            for lag in np.arange(-0.06, 0.06, 0.001):
                best[k] = max(best[k], np.corrcoef(fine(t_theirs[core] + lag), theirs[k, core])[0, 1])
        return best

    outright = fits(averaged_beats(rhythm_mv(), 1000.0), recorders_median_mv())
    assert np.all(outright >= 0.98), outright.round(4)
    same_band = fits(
        analyse(rhythm_mv(), 1000.0).median_beat_mv.astype(float), in_our_band(recorders_median_mv())
    )
    assert np.all(same_band >= 0.99), same_band.round(4)


def test_amplitudes_are_the_recorders():
    """QRS peak to peak in the same band: within 5 % (IEC 60601-2-25, from memory); measured within 2.2 %."""
    ours = np.ptp(analyse(rhythm_mv(), 1000.0).median_beat_mv[:, ZERO - 20 : ZERO + 21], axis=1)
    theirs = np.ptp(in_our_band(recorders_median_mv())[:, 420:581], axis=1)
    np.testing.assert_allclose(ours / theirs, 1.0, atol=0.05)


def test_the_dicom_recording_is_checked_whole():
    report = check(dicom_file())
    assert report.profile_name == "resting" and report.segments.leads[:3] == ("I", "II", "III")
    assert len(report.beats) == 10  # counted by eye on the rhythm lead
    rate = report.values["rate"].value
    assert rate == pytest.approx(61, abs=2)
    assert not report.patient_first


def test_global_intervals_of_the_dicom_recording_are_those_of_its_median_beat():
    """Intervals read off a plot of the recorder's median beat: QRS about 460 to 555, P from about 315, T to 835 ms."""
    value = analyse_global(rhythm_mv()[None], 1000.0).value[0]
    assert value[0] == pytest.approx(145, abs=30)
    assert value[1] == pytest.approx(95, abs=25)
    assert value[2] == pytest.approx(375, abs=40)


def test_the_three_beats_counted_by_eye_are_found():
    steps = pytest.importorskip("pywt").data.ecg()
    x_mv = np.asarray(steps, float) / 200.0
    assert len(x_mv) == 1024
    report = check(Recording(x_mv, 360.0, "MLII"))
    np.testing.assert_allclose(report.beats / 360.0, [0.53, 1.44, 2.36], atol=0.03)
    assert report.segments.value[0, 0] == pytest.approx(60 * 2 / (2.36 - 0.53), abs=1.5)
    assert not report.patient_first
