"""ISHNE Holter files, and SCP-ECG, which is only recognised."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path

import numpy as np
import pytest

from readers import made
from sigguard.errors import NoECGLead, ReadError
from sigguard.readers import find_recordings, open_recording, read_recording

D = made.digits(3, 1000, 16)
CODES = [6, 11, 2]


def refused(path: Path) -> str:
    with pytest.raises(ReadError) as caught:
        read_recording(path)
    assert "\n" not in str(caught.value)
    return str(caught.value)


def spoilt(path: Path, at: int, value: int, width: int = 2) -> Path:
    data = bytearray(path.read_bytes())
    data[at : at + width] = value.to_bytes(width, "little", signed=True)
    path.write_bytes(data)
    return path


def test_checksum_of_the_published_check_value():
    assert made.crc_ccitt(b"123456789") == 0x29B1  # CRC-16 with 0x1021 from 0xFFFF, not reflected


def test_values_leads_and_start(tmp_path: Path):
    path = made.ishne_file(tmp_path / "a.bin", D, codes=CODES, nv=[1000, 2500, 40_000], note=b"note \xe4")
    recording = read_recording(path)
    np.testing.assert_allclose(recording.signal_mv, D * [[0.001], [0.0025], [0.04]], rtol=1e-12)
    info = recording.info
    assert info is not None and info.assumed == () and recording.leads == ("II", "V1", "X")
    assert (info.fs_hz, info.start_time) == (500.0, datetime(2020, 1, 2, 3, 4, 5))
    assert info.identity == () and "Somebody" not in repr(info)
    known = dict(open_recording(path, with_identity=True).info.identity)
    assert known["first name"] == "Somebody" and known["birth date"] == "1950-06-07"
    assert known["note"] == "note ä"


def test_missing_samples(tmp_path: Path):
    d = D.copy()
    d[0, 10:20] = -32768
    signal = read_recording(made.ishne_file(tmp_path / "a.ecg", d, codes=CODES)).signal_mv
    assert np.isnan(signal[0, 10:20]).all() and np.isfinite(signal).sum() == 2990


def test_a_wrong_checksum_is_said(tmp_path: Path):
    path = made.ishne_file(tmp_path / "a.ecg", D, codes=CODES, crc=0x1234)
    assert "checksum" in open_recording(path).info.assumed[0]
    for at in range(10, 522, 5):  # and a changed byte of the header is noticed, or the file refused
        made.ishne_file(path, D[:, :20], codes=CODES)
        data = bytearray(path.read_bytes())
        data[at] ^= 0x10
        path.write_bytes(data)
        try:
            with open_recording(path, with_sha256=False) as opened:
                assert "checksum" in opened.info.assumed[0]
        except ReadError:
            pass


@pytest.mark.parametrize(
    ("stated", "n", "words"),
    [(3000, 1000, "all leads together"), (900, 900, "100 more samples"), (0, 1000, "size of the file")],
)
def test_number_of_samples(stated: int, n: int, words: str, tmp_path: Path):
    info = open_recording(made.ishne_file(tmp_path / "a.ecg", D, codes=CODES, n_stated=stated)).info
    assert info.n_samples == n and words in info.assumed[0]


def test_leads_that_say_little(tmp_path: Path):
    path = made.ishne_file(tmp_path / "a.ecg", D, codes=[0, 8, -9], nv=[1000, 1000, 0])
    with open_recording(path) as opened:
        assert opened.info.leads == ("lead 1", "aVR") and opened.channels == (0, 1) and opened.n_signals == 3
        assert opened.info.left_out == ("lead 3 (no resolution stated)",)
        assert "augmented" in opened.info.assumed[0] and "lead 1" in opened.info.assumed[1]
    with pytest.raises(NoECGLead):
        read_recording(made.ishne_file(tmp_path / "b.ecg", D, codes=CODES, nv=0))


def test_dates_not_known(tmp_path: Path):
    for date in ((0, 0, 0), (-9, -9, -9), (2, 1, 99), (31, 2, 2020)):
        path = made.ishne_file(tmp_path / "a.ecg", D, codes=CODES, date=date)
        assert open_recording(path).info.start_time is None


@pytest.mark.parametrize(
    ("at", "value", "width", "words"),
    [
        (10, -1, 4, "variable block"),
        (10, 2**31 - 1, 4, "variable block"),
        (14, 2**31 - 1, 4, "cut short"),
        (14, 1001, 4, "expected 1001 of each lead, as the header says, found 1000"),
        (22, 2**31 - 1, 4, "offset of the samples"),
        (22, -5, 4, "offset of the samples"),
        (22, 100, 4, "offset of the samples"),
        (156, 0, 2, "number of leads"),
        (156, 13, 2, "number of leads"),
        (156, -1, 2, "number of leads"),
        (272, 0, 2, "sampling rate"),
        (272, -1, 2, "sampling rate"),
    ],
)
def test_headers_that_cannot_be(at: int, value: int, width: int, words: str, tmp_path: Path):
    assert words in refused(spoilt(made.ishne_file(tmp_path / "a.ecg", D, codes=CODES), at, value, width))


@pytest.mark.parametrize("keep", [8, 100, 521, 522, 530, -1])
def test_cut_files(keep: int, tmp_path: Path):
    path = made.ishne_file(tmp_path / "a.ecg", D, codes=CODES)
    path.write_bytes(path.read_bytes()[:keep])
    assert "cut short" in refused(path)


def test_beat_annotations_are_no_recording(tmp_path: Path):
    (tmp_path / "a.ann").write_bytes(b"ANN  1.0" + bytes(600))
    assert "beat annotations" in refused(tmp_path / "a.ann")


@pytest.mark.parametrize("marked", [True, False])
def test_scp_is_recognised_and_refused(marked: bool, tmp_path: Path):
    """Layout from memory: checksum, length, then section 0 with its own header."""
    body = (
        bytes(2) + bytes(2) + (136).to_bytes(4, "little") + b"\x14\x14" + (b"SCPECG" if marked else bytes(6))
    )
    data = bytes(2) + (6 + 136).to_bytes(4, "little") + body.ljust(136, b"\0")
    path = tmp_path / "a.bin"
    path.write_bytes(data)
    text = refused(path)
    assert "an SCP-ECG file, which is not read" in text and "export" in text
    if marked:  # a recording that was not checked is reported, not passed over
        made.wfdb_record(tmp_path, made.digits(1, 100, 16))
        assert path in find_recordings(tmp_path)


@pytest.mark.parametrize(("share", "name", "said"), [(1 / 2, "aVR", 0), (1 / 3, "VR", 0), (0.8, "aVR", 1)])
def test_augmented_or_not_is_told_by_the_limb_leads(share: float, name: str, said: int, tmp_path: Path):
    """Goldberger's aVR is -(I + II) / 2; Wilson's VR two thirds of that. The format has one code for both."""
    one, two = made.digits(2, 1000, 12)
    d = np.stack([one, two, np.rint(-share * (one + two) * 0.5).astype(int)])
    path = made.ishne_file(tmp_path / "a.ecg", d, codes=[5, 6, 8], nv=[1000, 1000, 2000])
    info = open_recording(path).info
    assert info.leads == ("I", "II", name) and len(info.assumed) == said
    d[2] = made.digits(1, 1000, 12, seed=9)[0]  # nothing to do with the others
    assert "augmented" in open_recording(made.ishne_file(path, d, codes=[5, 6, 8])).info.assumed[0]
