"""Real recordings read whole, against wfdb's own reading; skipped where they are absent."""

from __future__ import annotations

import warnings
from datetime import datetime
from pathlib import Path

import numpy as np
import pytest

from sigguard.leads import STANDARD_LEADS
from sigguard.readers import find_recordings, open_recording


def theirs(path: Path):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import wfdb

        return wfdb.rdrecord(str(path.with_suffix("")))


def first_of(folder: Path, count: int = 1) -> list[Path]:
    paths = sorted(folder.glob("*.hea"))[:count]
    if not paths:
        pytest.skip(f"no recordings in {folder.name}")
    return paths


@pytest.mark.parametrize("name", ["mitdb", "ludb", "cinc2017", "cudb", "nstdb", "misc"])
def test_values_equal_those_of_wfdb(open_data: Path, name: str):
    for path in first_of(open_data / name, 3):
        record = theirs(path)
        with open_recording(path) as opened:
            ours = opened.read()
            assert opened.info.fs_hz == record.fs
            np.testing.assert_allclose(
                ours, record.p_signal[:, list(opened.channels)].T, rtol=1e-12, atol=1e-12
            )
            n = opened.info.n_samples
            np.testing.assert_array_equal(opened.read(n // 3, n // 2), ours[:, n // 3 : n // 2])


def test_every_recording_opens(open_data: Path):
    paths = find_recordings(open_data)
    assert len(paths) > 50
    for path in paths:
        with open_recording(path, with_sha256=False) as opened:
            assert 1 <= opened.info.n_leads <= 15


def test_rails_of_an_eleven_bit_converter(open_data: Path):
    for path in first_of(open_data / "mitdb"):
        rails = open_recording(path).info.rails_mv
        np.testing.assert_allclose(rails, [[-5.12, 5.115]] * 2)  # 0 to 2047, zero at 1024, 200 steps per mV


def test_fifteen_leads(open_data: Path):
    info = open_recording(open_data / "misc" / "s0010_re").info
    assert info.leads == (*STANDARD_LEADS, "X", "Y", "Z")
    assert (info.fs_hz, info.n_samples) == (1000.0, 38_400)
    assert "mV was taken" in info.assumed[0]
    assert info.identity == ()


@pytest.mark.parametrize(("name", "left_out"), [("a103l", ("PLETH",)), ("v102s", ("PLETH", "RESP"))])
def test_pulse_and_breathing_are_left_out(open_data: Path, name: str, left_out: tuple[str, ...]):
    info = open_recording(open_data / "misc" / name).info
    assert (info.leads, info.left_out) == (("II", "V"), left_out)


def test_hand_held_recording_in_a_matlab_file(open_data: Path):
    with open_recording(open_data / "cinc2017" / "A00021.mat") as opened:
        assert opened.info.start_time == datetime(2000, 5, 1, 5, 5)
        assert opened.read_digital(0, 1)[0, 0] == 400  # as the header's initial value says
