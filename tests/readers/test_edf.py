"""EDF, EDF+ and BDF: against pyedflib's reading of the same files, and where that refuses, against what was written."""

from __future__ import annotations

import time
from datetime import datetime
from pathlib import Path

import numpy as np
import pyedflib
import pytest

from readers import made
from sigguard.errors import NoECGLead, ReadError
from sigguard.readers import open_recording, read_recording
from sigguard.readers.edf_annotations import annotations_in, record_start

THEIRS = Path(pyedflib.__file__).parent / "tests" / "data"


def ecg(n: int = 2000, *, bits: int = 16, **kind) -> dict:
    return {"label": "ECG II", "steps": made.digits(1, n, bits)[0]} | kind


def refused(path: Path, **options) -> str:
    with pytest.raises(ReadError) as caught:
        read_recording(path, **options)
    assert "\n" not in str(caught.value)
    return str(caught.value)


def spoilt(path: Path, at: int, field: str, width: int = 8) -> Path:
    """The file with one header field written over."""
    data = bytearray(path.read_bytes())
    data[at : at + width] = field.encode().ljust(width)
    path.write_bytes(data)
    return path


def same_as_theirs(path: Path) -> None:
    with pyedflib.EdfReader(str(path)) as reader, open_recording(path) as opened:
        n = min(5000, opened.info.n_samples)
        for lead, channel in enumerate(opened.channels):
            scale = {"uV": 1e-3, "mV": 1.0, "V": 1e3}[reader.getPhysicalDimension(channel)]
            np.testing.assert_allclose(
                opened.read(0, n)[lead], reader.readSignal(channel, 0, n) * scale, rtol=1e-9, atol=1e-9
            )
            theirs = reader.readSignal(channel, 0, opened.info.n_samples, digital=True)
            np.testing.assert_array_equal(opened.read_digital()[lead], theirs)
            assert reader.getSampleFrequency(channel) == opened.info.fs_hz
            assert reader.getNSamples()[channel] == opened.info.n_samples
        start = opened.info.start_time
        assert start is not None
        assert start.replace(microsecond=0) == reader.getStartdatetime().replace(microsecond=0)


@pytest.mark.parametrize(
    "name",
    [
        "test_generator.edf",
        "test_generator.bdf",
        "test_generator_datarec_generator_0_5.bdf",
        "test_generator_datarec_generator_2.bdf",
        "test_legacy.edf",
    ],
)
def test_files_made_by_others(name: str):
    """Written by the generators of another project; skipped where the installed package lacks them."""
    if not (THEIRS / name).is_file():
        pytest.skip("the installed pyedflib carries no test files")
    same_as_theirs(THEIRS / name)


@pytest.mark.parametrize("name", ["test_subsecond.edf", "test_utf8.edf"])
def test_a_scalp_electrode_is_no_ecg_until_it_is_called_one(name: str, tmp_path: Path):
    """Both begin within a second: ``+0.3945312`` stands in the first record."""
    if not (THEIRS / name).is_file():
        pytest.skip("the installed pyedflib carries no test files")
    path = tmp_path / name
    path.write_bytes((THEIRS / name).read_bytes())
    with pytest.raises(NoECGLead, match="Fp1"):
        open_recording(path)
    same_as_theirs(spoilt(path, 256, "ECG II", 16))
    assert b"+0.3945312\x14\x14" in path.read_bytes()[768:1500]
    start = open_recording(path).info.start_time
    assert start is not None and start.microsecond == 394_531
    same_annotations(path)


@pytest.mark.parametrize("name", ["test_generator.edf", "test_generator.bdf", "test_legacy.edf"])
def test_annotations_of_files_made_by_others(name: str):
    if not (THEIRS / name).is_file():
        pytest.skip("the installed pyedflib carries no test files")
    same_annotations(THEIRS / name)


def same_annotations(path: Path) -> None:
    with pyedflib.EdfReader(str(path)) as reader:
        onsets, durations, texts = reader.readAnnotations()
    with open_recording(path) as opened:
        ours = opened.annotations()
    np.testing.assert_allclose([a.start_s for a in ours], onsets, atol=1e-6)
    assert [-1 if a.duration_s is None else a.duration_s for a in ours] == list(durations)
    assert [a.text for a in ours] == list(texts)


@pytest.mark.parametrize(("bits", "kind"), [(16, ""), (16, "+C"), (24, ""), (24, "+C")])
def test_files_made_here_are_read_alike_by_both(bits: int, kind: str, tmp_path: Path):
    half = 1 << (bits - 1)
    signals = [
        ecg(bits=bits, physical=(-3.2, 4.1), unit="mV"),
        ecg(bits=bits, label="ECG I", physical=(half // 2, -half)),
    ]
    same_as_theirs(
        made.edf_file(
            tmp_path / "a.edf", signals, bits=bits, kind=kind, recording="Startdate 02-JAN-2020 X X X"
        )
    )


def test_gaps_are_missing_at_the_right_time(tmp_path: Path):
    """The reference is the formula: what record k holds begins at its stated time less that of the first."""
    starts = [0.5, 1.5, 5.75, 6.75, 20.5]
    steps = made.digits(1, 2500, 16)[0]
    note = b"+5.75\x150.5\x14cough\x14\0"
    path = made.edf_file(tmp_path / "a.edf", [ecg(steps=steps)], kind="+D", starts_s=starts, texts={2: note})
    with open_recording(path) as opened:
        expected = np.full(500 * 21, np.nan)
        for k, start in enumerate(starts):
            at = round((start - 0.5) * 500)
            expected[at : at + 500] = steps[k * 500 : (k + 1) * 500] / 1000
        np.testing.assert_allclose(opened.read()[0], expected, rtol=1e-12)
        np.testing.assert_allclose(opened.read(2400, 2700)[0], expected[2400:2700], rtol=1e-12)
        assert opened.info.start_time == datetime(2020, 1, 2, 3, 4, 5, 500_000)
        assert "2 gaps" in opened.info.assumed[0]
        (cough,) = opened.annotations()
        assert (cough.start_s, cough.duration_s, cough.text) == (5.25, 0.5, "cough")


def test_times_rounded_by_less_than_a_sample_make_no_gap(tmp_path: Path):
    starts = [0.0, 1.001, 1.999, 3.002]
    path = made.edf_file(tmp_path / "a.edf", [ecg()], kind="+D", starts_s=starts)
    opened = open_recording(path)
    assert opened.info.n_samples == 2000 and not opened.info.assumed


@pytest.mark.parametrize(
    ("starts", "words"),
    [
        ([0, 1, 0.5, 2], "order of their times"),
        ([0, 1, 2, 9e8], "split the recording"),
        ([0, 1, 2, 4000], "split the recording"),
    ],
)
def test_times_that_cannot_be(starts: list[float], words: str, tmp_path: Path):
    assert words in refused(made.edf_file(tmp_path / "a.edf", [ecg()], kind="+D", starts_s=starts))


def test_discontinuous_without_times(tmp_path: Path):
    path = spoilt(made.edf_file(tmp_path / "a.edf", [ecg()]), 192, "EDF+D", 44)
    assert "keeps the time" in refused(path)
    path = made.edf_file(tmp_path / "b.edf", [ecg()], kind="+D")
    data = bytearray(path.read_bytes())
    data[768 + 1000] = 0  # first byte of the first record's time
    path.write_bytes(data)
    assert "data record 1: expected the time" in refused(path)


@pytest.mark.parametrize("encoding", ["latin-1", "utf-8"])
@pytest.mark.parametrize(("unit", "mv"), [("µV", 1e-3), ("uV", 1e-3), ("mV", 1.0), ("V", 1e3), ("nV", 1e-6)])
def test_units(unit: str, mv: float, encoding: str, tmp_path: Path):
    steps = np.arange(-500, 500)
    path = made.edf_file(tmp_path / "a.edf", [ecg(steps=steps, unit=unit)], encoding=encoding)
    recording = read_recording(path)
    np.testing.assert_allclose(recording.signal_mv[0], steps * mv, rtol=1e-12)
    assert recording.info is not None and recording.info.assumed == ()


def test_no_unit_is_refused_unless_given(tmp_path: Path):
    path = made.edf_file(tmp_path / "a.edf", [ecg(unit="")])
    assert "no unit" in refused(path)
    info = read_recording(path, units="uV").info
    assert info is not None and "uV was taken, as given" in info.assumed[0]


def test_what_is_no_ecg_or_slower_is_left_out_and_named(tmp_path: Path):
    signals = [
        ecg(label="EEG C3-A2"),
        ecg(),
        ecg(label="SaO2", unit="%"),
        ecg(1000, label="ECG V1", fs_hz=250),
        ecg(label="ECG adu", unit="adu"),
        ecg(label="C4"),
    ]
    with open_recording(made.edf_file(tmp_path / "a.edf", signals, kind="+C")) as opened:
        assert opened.info.leads == ("II",) and opened.channels == (1,) and opened.n_signals == 7
        assert opened.info.left_out == ("EEG C3-A2", "SaO2", "ECG V1 (250 Hz beside 500 Hz)", "ECG adu", "C4")
    with pytest.raises(NoECGLead, match=r"SaO2 \(%\)"):
        read_recording(made.edf_file(tmp_path / "b.edf", [ecg(label="SaO2", unit="%")]))


def test_where_ecg_is_marked_other_voltages_are_something_else(tmp_path: Path):
    """As in sleep recordings, where legs and chin are voltages too; names of leads need no mark."""
    labels = ["ECG II", "Leg L", "Chin1-Chin2", "V5", "EKG2"]
    signals = [ecg(label=label) for label in labels]
    info = open_recording(made.edf_file(tmp_path / "a.edf", signals)).info
    assert info.leads == ("II", "V5", "EKG2")
    assert info.left_out == ("Leg L (not marked as ECG)", "Chin1-Chin2 (not marked as ECG)")
    unmarked = made.edf_file(tmp_path / "b.edf", signals[1:4])
    assert open_recording(unmarked).info.n_leads == 3


def test_corners_and_identity(tmp_path: Path):
    signals = [ecg(prefilter="HP: 0.05Hz LP:150Hz N:50Hz"), ecg(label="ECG I", prefilter="HP:DC LP:0,5 kHz")]
    path = made.edf_file(tmp_path / "a.edf", signals, patient="S-17 F 07-JUN-1950 Some_Body")
    info = open_recording(path).info
    np.testing.assert_array_equal(info.band_hz, [[0.05, 150.0], [np.nan, np.nan]])
    assert info.identity == () and "Body" not in repr(info)
    assert dict(open_recording(path, with_identity=True).info.identity)["patient"].endswith("Some_Body")


@pytest.mark.parametrize(
    ("start", "recording", "kind", "expected"),
    [
        ("31.12.8423.59.59", "X", "", datetime(2084, 12, 31, 23, 59, 59)),
        ("31.12.8523.59.59", "X", "", datetime(1985, 12, 31, 23, 59, 59)),
        ("31.12.8523.59.59", "Startdate 31-DEC-2085 X X X", "+C", datetime(2085, 12, 31, 23, 59, 59)),
        ("00.00.0000.00.00", "X", "", None),
        ("\0\0\0", "X", "", None),
    ],
)
def test_dates(start: str, recording: str, kind: str, expected: datetime | None, tmp_path: Path):
    path = made.edf_file(tmp_path / "a.edf", [ecg()], start=start, recording=recording, kind=kind)
    assert open_recording(path).info.start_time == expected


def test_length_not_stated_and_bytes_behind(tmp_path: Path):
    path = made.edf_file(tmp_path / "a.edf", [ecg()], n_stated=-1)
    path.write_bytes(path.read_bytes() + b"\0" * 77)
    info = open_recording(path).info
    assert info.n_samples == 2000 and "size of the file" in info.assumed[0]
    path = made.edf_file(tmp_path / "b.edf", [ecg()], n_stated=3)
    info = open_recording(path).info
    assert info.n_samples == 1500 and "1000 more bytes" in info.assumed[0]


@pytest.mark.parametrize(
    ("at", "field", "words"),
    [
        (236, "99999999", "cut short"),
        (236, "5", "expected 5, as the header says, found 4 whole ones"),
        (236, "many", "'many'"),
        (184, "256", "header length"),
        (184, "99999999", "header length"),
        (244, "0", "more than 0 s"),
        (244, "nan", "duration"),
        (244, "-1", "duration"),
        (244, "1e-300", "sampling rate"),
        (256 + 104, "32767", "physical limits of II"),
        (256 + 104, "1e999", "physical limits of II"),
        (256 + 104, "low", "physical limits of II"),
        (256 + 120, "32767", "digital limits of II"),
        (256 + 120, "-40000", "digital limits of II"),
        (256 + 120, "0.5", "digital limits of II"),
        (256 + 216, "99999999", "cut short"),
        (256 + 216, "0", "found 0 whole ones"),
        (256 + 216, "1", "sampling rate"),
        (256 + 216, "-7", "samples per data record"),
    ],
)
def test_header_fields_that_cannot_be(at: int, field: str, words: str, tmp_path: Path):
    assert words in refused(spoilt(made.edf_file(tmp_path / "a.edf", [ecg()]), at, field))


@pytest.mark.parametrize("keep", [9, 255, 256, 400, 511, 512, 600, -1])
def test_cut_files(keep: int, tmp_path: Path):
    path = made.edf_file(tmp_path / "a.edf", [ecg()])
    path.write_bytes(path.read_bytes()[:keep])
    refused(path)


def test_control_characters_in_names(tmp_path: Path):
    path = made.edf_file(
        tmp_path / "a.edf", [ecg(label="\x1b[2J\nII\0"), ecg(label="Resp\x07", unit="Ohm\r")]
    )
    info = open_recording(path).info
    assert all(text.isprintable() for text in (*info.leads, *info.left_out))


def test_annotation_lists_by_the_book():
    """Examples in the manner of the specification: several texts at one time, duration, no duration."""
    stored = b"+0\x14\x14\0+180\x14Lights off\x14Close door\x14\0+1800.2\x1525.5\x14Apnea\x14\0\0\0"
    assert record_start(stored) == 0.0
    found = annotations_in(stored, zero_s=0.0, keeps_time=True)
    assert [(a.start_s, a.duration_s, a.text) for a in found] == [
        (180.0, None, "Lights off"),
        (180.0, None, "Close door"),
        (1800.2, 25.5, "Apnea"),
    ]
    for junk in (b"", b"\0\0", b"180\x14\x14\0", b"+1e9\x14\x14", b"+" + b"9" * 500 + b"\x14", b"\x14\x14"):
        assert record_start(junk) is None and annotations_in(junk, zero_s=0.0, keeps_time=True) == []


def test_headers_of_the_other_width(tmp_path: Path):
    for bits, mark in ((16, "24BIT"), (16, "BDF+C"), (24, "EDF+C")):
        path = spoilt(made.edf_file(tmp_path / "a.edf", [ecg(bits=bits)], bits=bits), 192, mark, 44)
        assert "reserved field" in refused(path)
    path = made.edf_file(tmp_path / "a.edf", [ecg(bits=16)])
    path.write_bytes(b"\xffBIOSEMI" + path.read_bytes()[8:])
    assert "cut short" in refused(path)


def test_records_longer_than_a_block(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """A whole recording in one data record: windows are read without the rest of it."""
    signals = [ecg(6000), ecg(6000, label="ECG V1", steps=made.digits(2, 6000, 16)[1])]
    for kind in ("", "+D"):
        path = made.edf_file(tmp_path / "a.edf", signals, record_s=4, kind=kind, starts_s=[0, 5, 9])
        whole = read_recording(path).signal_mv
        monkeypatch.setattr("sigguard.readers.edf._BLOCK_BYTES", 100)
        with open_recording(path) as opened:
            np.testing.assert_array_equal(opened.read(), whole)
            np.testing.assert_array_equal(opened.read(1999, 4600), whole[:, 1999:4600])
        monkeypatch.undo()


def test_many_gaps_take_no_long_time(tmp_path: Path):
    """20 000 records with a gap after each, 400 windows: what a window costs must not grow with their number."""
    n = 20_000
    starts = [0.02 * k for k in range(n)]
    path = made.edf_file(tmp_path / "a.edf", [ecg(5 * n)], record_s=0.01, kind="+D", starts_s=starts)
    began = time.process_time()
    with open_recording(path, with_sha256=False) as opened:
        assert opened.info.n_samples == 10 * n - 5
        for k in range(400):
            assert np.isnan(opened.read(k * 400, k * 400 + 50)).sum() == 25
    assert time.process_time() - began < 5.0
