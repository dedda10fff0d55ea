"""Files that cannot be read: one clear sentence each, whatever is wrong, and nothing else."""

from __future__ import annotations

import os
import socket
import tracemalloc
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from readers import made
from sigguard.errors import NoECGLead, ReadError
from sigguard.readers import open_recording, read_recording


@pytest.fixture(autouse=True)
def no_network(monkeypatch: pytest.MonkeyPatch):
    def refuse(*_: object, **__: object):
        raise AssertionError("a reader tried to reach the network")

    monkeypatch.setattr(socket.socket, "connect", refuse)
    monkeypatch.setattr(socket, "getaddrinfo", refuse)


def sentence(path: Path | str, **options: object) -> str:
    with pytest.raises(ReadError) as caught:
        read_recording(path, **options)
    text = str(caught.value)
    assert "\n" not in text and "Traceback" not in text
    assert all((caught.value.where, caught.value.expected, caught.value.found, caught.value.remedy))
    return text


def header(folder: Path, text: str, data: bytes | None = b"\0" * 400) -> Path:
    if data is not None:
        (folder / "rec.dat").write_bytes(data)
    (folder / "rec.hea").write_text(text)
    return folder / "rec.hea"


GOOD_LINE = "rec.dat 16 1000/mV 16 0 0 0 0 II"


def test_missing_signal_file(tmp_path: Path):
    text = sentence(header(tmp_path, f"rec 1 500 200\n{GOOD_LINE}\n", data=None))
    assert "the file rec.dat beside the header" in text


@pytest.mark.parametrize("fmt", [16, 24, 32, 80, 212, 310, 311])
def test_truncated_signal_file_is_refused(fmt: int, tmp_path: Path):
    path = made.wfdb_record(tmp_path, made.digits(2, 300, 8), fmt=fmt)
    data = (tmp_path / "rec.dat").read_bytes()
    (tmp_path / "rec.dat").write_bytes(data[:-5])
    text = sentence(path)
    assert "expected 300 samples, as rec.hea says" in text and "cut short" in text


def test_truncation_within_segments_is_refused(tmp_path: Path):
    made.wfdb_record(tmp_path, made.digits(1, 300, 16), name="a")
    (tmp_path / "all.hea").write_text("all/1 1 500 400\na 400\n")
    assert "expected 400 samples" in sentence(tmp_path / "all.hea")


@pytest.mark.parametrize("n", [10**9, 10**15, 10**18])
@pytest.mark.parametrize("what", ["plain", "null segment", "dicom"])
def test_huge_counts_allocate_nothing(n: int, what: str, tmp_path: Path):
    if what == "plain":
        path = header(tmp_path, f"rec 1 500 {n}\n{GOOD_LINE}\n")
    elif what == "null segment":
        made.wfdb_record(tmp_path, made.digits(1, 300, 16), name="a")
        path = tmp_path / "all.hea"
        path.write_text(f"all/2 1 500 {n + 300}\na 300\n~ {n}\n")
    else:
        n_stated = min(n, 2**32 - 1)
        group = {"steps": made.digits(1, 300, 12).T, "leads": [{"code": "2:2"}], "n_stated": n_stated}
        path = made.dicom_file(tmp_path / "a.dcm", [group])
    tracemalloc.start()
    sentence(path)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 50_000_000


@pytest.mark.parametrize("fs", ["0", "-250", "1e9", "20", "nan", "inf", "fast", "1_000"])
def test_absurd_sampling_rate(fs: str, tmp_path: Path):
    assert "Hz" in sentence(header(tmp_path, f"rec 1 {fs} 200\n{GOOD_LINE}\n"))


def test_zero_leads(tmp_path: Path):
    assert "at least one signal" in sentence(header(tmp_path, "rec 0 500 200\n"))


@pytest.mark.parametrize(
    "line",
    ["rec.dat 16 10/mmHg 16 0 0 0 0 ABP", "rec.dat 16 10/mV 16 0 0 0 0 RESP", "rec.dat 16 1/NU 0 0 0 0 0 II"],
)
def test_no_ecg_lead(line: str, tmp_path: Path):
    path = header(tmp_path, f"rec 1 500 200\n{line}\n")
    with pytest.raises(NoECGLead, match="ECG lead"):
        open_recording(path)


def test_one_sample(tmp_path: Path):
    assert "at least two samples, found one" in sentence(
        header(tmp_path, f"rec 1 500 1\n{GOOD_LINE}\n", data=b"\1\0")
    )
    (tmp_path / "a.csv").write_text("time_s,II [mV]\n0,1\n")
    assert "two rows" in sentence(tmp_path / "a.csv")
    (tmp_path / "b.csv").write_text("II [mV]\n1\n")
    assert "at least two samples, found one" in sentence(tmp_path / "b.csv", fs_hz=500)


@pytest.mark.parametrize(
    "name",
    [
        "../outside.dat",
        "/etc/passwd",
        "..",
        "sub/x.dat",
        "http://example.org/x.dat",
        "s3://x/y.dat",
        "-",
        "C:\\x.dat",
        ".",
    ],
)
def test_signal_file_outside_its_folder(name: str, tmp_path: Path):
    (tmp_path / "outside.dat").write_bytes(b"\0" * 400)
    inner = tmp_path / "inner"
    (inner / "sub").mkdir(parents=True)
    (inner / "sub" / "x.dat").write_bytes(b"\0" * 400)
    text = sentence(header(inner, f"rec 1 500 200\n{name} 16 1000/mV 16 0 0 0 0 II\n"))
    assert "own folder" in text


def test_signal_file_that_is_a_link_out_of_the_folder(tmp_path: Path):
    (tmp_path / "outside.dat").write_bytes(b"\0" * 400)
    inner = tmp_path / "inner"
    inner.mkdir()
    path = header(inner, f"rec 1 500 200\n{GOOD_LINE}\n", data=None)
    (inner / "rec.dat").symlink_to(tmp_path / "outside.dat")
    assert "own folder" in sentence(path)
    (inner / "rec.dat").unlink()
    (inner / "same.dat").write_bytes(b"\0" * 400)
    (inner / "rec.dat").symlink_to("same.dat")  # a link that stays inside is fine
    assert read_recording(path).n_samples == 200


def test_signal_file_that_is_a_pipe_or_a_loop(tmp_path: Path):
    path = header(tmp_path, f"rec 1 500 200\n{GOOD_LINE}\n", data=None)
    os.mkfifo(tmp_path / "rec.dat")
    assert "no such file" in sentence(path)
    (tmp_path / "rec.dat").unlink()
    (tmp_path / "rec.dat").symlink_to("rec.dat")
    sentence(path)


@pytest.mark.parametrize("segment", ["../a", "/etc/hosts", "all", "none"])
def test_segments_outside_or_nested_or_missing(segment: str, tmp_path: Path):
    (tmp_path / "all.hea").write_text(f"all/1 1 500 300\n{segment} 300\n")
    sentence(tmp_path / "all.hea")


@pytest.mark.parametrize("name", ["rec.hea", "rec.dcm", "rec.csv", "rec.edf", "rec.xml", "rec"])
@pytest.mark.parametrize(
    "content", [b"", b"\0" * 5000, bytes(range(256)) * 20, b"\x89PNG\r\n\x1a\n" + b"\1\2" * 99]
)
def test_empty_and_binary_junk_of_any_name(name: str, content: bytes, tmp_path: Path):
    (tmp_path / name).write_bytes(content)
    text = sentence(tmp_path / name)
    assert ("an empty file" in text) == (content == b"")


def test_dicom_mark_with_junk_behind(tmp_path: Path):
    (tmp_path / "a.dcm").write_bytes(b"\0" * 128 + b"DICM" + bytes(range(256)) * 20)
    sentence(tmp_path / "a.dcm")


def test_names_that_are_no_file(tmp_path: Path):
    assert "found nothing" in sentence(tmp_path / "absent.hea")
    assert "found a folder" in sentence(tmp_path)
    (tmp_path / "rec.hea").mkdir()
    assert "found a folder" in sentence(tmp_path / "rec.hea")
    for url in ("http://example.org/100.hea", "s3://bucket/100", "a\0b"):
        sentence(url)


@pytest.mark.parametrize(
    "text",
    [
        "rec",
        "rec one 500 200",
        "rec 999999 500 200",
        "rec 2 500 200\n" + GOOD_LINE,
        "rec 1 500 -3\n" + GOOD_LINE,
        "rec 1 500 200\nrec.dat",
        "rec 1 500 200\nrec.dat 17 200",
        "rec 1 500 200\nrec.dat 16x0 200",
        "rec 1 500 200\nrec.dat 16 nan/mV 16 0 0 0 0 II",
        "rec 1 500 200\nrec.dat 16 200(x)/mV 16 0 0 0 0 II",
        "rec 1 500 200\nrec.dat 16 200/mV sixteen",
        "rec 2 500 100\nrec.dat 16 200 16 0 0 0 0 I\nrec.dat 212 200 16 0 0 0 0 II",
        "rec/0 1 500 200",
        "# only a comment",
        "rec 1 500 " + "9" * 5000 + "\n" + GOOD_LINE,
    ],
)
def test_malformed_headers(text: str, tmp_path: Path):
    assert "rec.hea" in sentence(header(tmp_path, text))


def test_text_instead_of_numbers(tmp_path: Path):
    (tmp_path / "a.csv").write_text("time_s,II [mV]\n0,1\n0.002,two\n0.004,3\n")
    text = sentence(tmp_path / "a.csv")
    assert "line 3: expected a number, found 'two'" in text
    (tmp_path / "b.csv").write_text("time_s,II [mV]\n0,1\n0.002\n0.004,3\n")
    assert "line 3: expected 2 fields, found 1" in sentence(tmp_path / "b.csv")
    (tmp_path / "c.txt").write_text("Dear colleague,\nplease find enclosed.\n")
    assert "no row of numbers" in sentence(tmp_path / "c.txt")


def test_constant_and_missing_leads_are_no_error(tmp_path: Path):
    d = np.zeros((2, 500), dtype=int)
    d[1] = -32768
    recording = read_recording(made.wfdb_record(tmp_path, d))
    assert (recording.signal_mv[0] == 0).all() and np.isnan(recording.signal_mv[1]).all()


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    cut=st.integers(0, 200),
    at=st.integers(0, 199),
    junk=st.binary(min_size=0, max_size=6),
    kind=st.sampled_from(["hea", "csv", "dcm"]),
)
def test_whatever_is_changed_the_answer_is_a_recording_or_a_sentence(tmp_path: Path, cut, at, junk, kind):
    """Bytes inserted and cut anywhere in the first 200: no other error escapes."""
    path = _sound(tmp_path, kind)
    data = path.read_bytes()
    spoilt = data[:at] + junk + data[at + (cut % 7) :]
    other = path.with_name(f"spoilt.{kind}")
    other.write_bytes(spoilt)
    try:
        with open_recording(other) as opened:
            opened.read(0, 2)
    except ReadError as err:
        assert "\n" not in str(err)


def _sound(folder: Path, kind: str) -> Path:
    path = folder / f"sound.{kind}"
    if not path.exists():
        if kind == "hea":
            made.wfdb_record(
                folder, made.digits(2, 60, 16), name="sound", fs="360/720(5)", tail=" 10:00:00 1/2/2003"
            )
        elif kind == "csv":
            path.write_text(made.csv_text(np.round(made.digits(2, 60, 12) / 1000, 3), ["I", "II"]))
        else:
            made.dicom_file(path, [{"steps": made.digits(1, 60, 12).T, "leads": [{"code": "2:2"}]}])
    return path


def test_a_segment_used_again_and_again_is_bounded(tmp_path: Path):
    made.wfdb_record(tmp_path, made.digits(1, 100_000, 16), name="a")
    n = 200_000
    (tmp_path / "all.hea").write_text(f"all/{n} 1 500 {n * 100_000}\n" + "a 100000\n" * n)
    assert "where 100000 are stored" in sentence(tmp_path / "all.hea")


def test_compressed_file_that_claims_more_than_it_can_hold(tmp_path: Path):
    claimed = (1 << 36) - 1
    info = bytes(10) + ((500 << 44) | (15 << 36) | claimed).to_bytes(8, "big") + bytes(16)
    flac = b"fLaC" + bytes([0x80, 0, 0, 34]) + info
    path = header(
        tmp_path, f"rec 1 500 {claimed}\nrec.dat 516 1000/mV 16 0 0 0 0 II\n", data=flac + bytes(200)
    )
    assert "cut short" in sentence(path)


def test_a_very_long_heading_takes_no_long_time(tmp_path: Path):
    (tmp_path / "a.csv").write_text("time_s," + "_" * 1_000_000 + "V\n0,1\n0.002,2\n")
    sentence(tmp_path / "a.csv")


@pytest.mark.parametrize("lines", ["~ 0 200/mV 12 0 0 0 0 II", GOOD_LINE + "\n~ 0 200/mV 12 0 0 0 0 V1"])
def test_signals_without_samples(lines: str, tmp_path: Path):
    n_signals = len(lines.splitlines())
    assert "format 0" in sentence(header(tmp_path, f"rec {n_signals} 500 {10**12}\n{lines}\n"))


def test_files_in_turn(tmp_path: Path):
    (tmp_path / "b.dat").write_bytes(b"\0" * 400)
    lines = [
        f"{name} 16 1000/mV 16 0 0 0 0 {lead}"
        for name, lead in zip(("rec.dat", "b.dat", "rec.dat"), "XYZ", strict=True)
    ]
    assert "follow each other" in sentence(header(tmp_path, "rec 3 500 50\n" + "\n".join(lines)))


def test_a_segment_used_again_at_greater_length(tmp_path: Path):
    made.wfdb_record(tmp_path, made.digits(1, 300, 16), name="a")
    (tmp_path / "all.hea").write_text("all/2 1 500 700\na 300\na 400\n")
    assert "segment a: expected 400 samples, found 300" in sentence(tmp_path / "all.hea")


def test_a_segment_whose_lead_turns_into_a_pressure(tmp_path: Path):
    made.wfdb_record(tmp_path, made.digits(1, 300, 16), name="a")
    made.wfdb_record(tmp_path, made.digits(1, 300, 16), name="b", gains=["10/mmHg"])
    (tmp_path / "all.hea").write_text("all/2 1 500 600\na 300\nb 300\n")
    assert "units of another kind" in sentence(tmp_path / "all.hea")
