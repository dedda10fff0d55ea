"""The demonstration recordings: what the recipe says is in them, small, readable, reproducible."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import welch

from sigguard.errors import WriteError
from sigguard.readers.wfdb_files import quiet_wfdb
from sigguard.resources import resource_path
from sigguard.simulate.demo import NOTE, make_demo, write_demo


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    folder = tmp_path_factory.mktemp("demo")
    return folder, write_demo(folder)


@pytest.fixture(scope="module")
def made():
    return {recording.name: recording for recording in make_demo()}


def noise_of(recording):
    rows = [recording.ecg.leads.index(lead) for lead in recording.leads]
    return recording.signal_mv - recording.ecg.signal_mv[rows]


def test_eight_small_records_and_nothing_else(written):
    folder, paths = written
    assert len(paths) == 8
    assert sorted(p.name for p in folder.iterdir()) == sorted(
        name for p in paths for name in (p.name, p.with_suffix(".dat").name)
    )
    assert sum(p.stat().st_size for p in folder.iterdir()) < 2_500_000


def test_they_read_back_to_half_a_step(written, made):
    _, paths = written
    for path in paths:
        with quiet_wfdb() as wfdb:
            record = wfdb.rdrecord(str(path.with_suffix("")))
        recording = made[path.stem]
        assert tuple(record.sig_name) == recording.leads
        assert record.units == ["mV"] * len(recording.leads)
        assert record.comments[0] == NOTE
        step = 1 / record.adc_gain[0]
        assert np.abs(record.p_signal.T - recording.signal_mv).max() <= step / 2 + 1e-9


def test_the_resting_ones_are_12_leads_of_10_s_at_500_hz(made):
    resting = [r for r in made.values() if len(r.leads) == 12]
    assert len(resting) == 6
    assert all(r.signal_mv.shape == (12, 5000) and r.ecg.fs_hz == 500.0 for r in resting)


def test_same_seed_same_samples_and_other_seed_other_patients(made):
    for name in ("01-clean", "05-loose-left-arm", "08-fibrillation-begins"):
        (again,), (other,) = make_demo(names=[name]), make_demo(names=[name], seed=99)
        assert np.array_equal(again.signal_mv, made[name].signal_mv)
        assert not np.array_equal(other.signal_mv, made[name].signal_mv)


def test_the_stored_recordings_are_those_of_the_recipe(made):
    """Whoever changes the recipe or the simulator writes synthetic/demo again."""
    folder = resource_path("synthetic", "demo")
    for name, recording in made.items():
        with quiet_wfdb() as wfdb:
            stored = wfdb.rdrecord(str(folder / name))
        assert tuple(stored.sig_name) == recording.leads
        steps = np.abs(stored.p_signal.T - recording.signal_mv) * stored.adc_gain[0]
        assert steps.max() <= 1.01  # rounding may differ by one step from machine to machine


def test_each_holds_the_trouble_in_its_name(made):
    assert noise_of(made["01-clean"]).std(axis=1).max() < 0.01
    f_hz, power = welch(noise_of(made["02-shivering"])[0], 500.0, nperseg=2000)
    assert power[(f_hz > 4) & (f_hz < 12)].sum() > 0.2 * power.sum()
    assert power[f_hz > 20].sum() > 0.15 * power.sum()
    f_hz, power = welch(noise_of(made["03-wandering-baseline"])[1], 500.0, nperseg=5000, detrend=False)
    assert power[f_hz < 0.8].sum() > 0.95 * power.sum()
    f_hz, power = welch(noise_of(made["04-mains-hum"])[1], 500.0, nperseg=2000)
    assert abs(f_hz[power.argmax()] - 50) <= 0.5
    clipped = made["06-clipped"].signal_mv
    assert clipped.max() == 0.3 and (clipped >= 0.3).any(axis=1).sum() >= 6


def test_a_loose_left_arm_is_not_in_lead_ii(made):
    recording = made["05-loose-left-arm"]
    size = dict(zip(recording.leads, noise_of(recording).std(axis=1), strict=True))
    assert size["II"] < 0.02 < 0.2 < size["I"]
    assert size["III"] == pytest.approx(size["I"], rel=0.05)
    assert size["V1"] == pytest.approx(size["I"] / 3, rel=0.1)


def test_the_night_watch_is_bad_from_minute_11_to_16(made):
    recording = made["07-night-watch"]
    rms = noise_of(recording).reshape(2, 30, -1).std(axis=2)
    bad = rms > 0.3
    assert bad[:, 11:16].all()
    assert not bad[:, :11].any() and not bad[1, 16:].any()


def test_fibrillation_begins_at_14_s(made):
    ecg = made["08-fibrillation-begins"].ecg
    assert ecg.patient_first == ((14.0, 30.0, "fibrillation-or-flutter"),)
    assert len(ecg.beats_s) >= 10 and ecg.beats_s.max() < 14


def test_a_folder_that_cannot_be_is_said_so(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(WriteError, match="file"):
        write_demo(tmp_path / "file")
