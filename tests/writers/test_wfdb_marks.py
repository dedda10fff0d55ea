"""Annotation files, held against the wfdb package."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sigguard.readers.wfdb_files import quiet_wfdb
from sigguard.writers.wfdb_marks import Mark, MarkFile, beside, cut, encode, parse, read_marks

SYMBOLS = ["N", "V", "+", '"', "N", "~", "A"]
SAMPLES = [3, 900, 2500, 2600, 90_000, 200_000, 200_001]
NOTES = ["", "", "(AFIB", "odd", "", "", "even"]


@pytest.fixture
def written(tmp_path: Path) -> Path:
    with quiet_wfdb() as wfdb:
        wfdb.wrann(
            "r",
            "atr",
            np.array(SAMPLES),
            symbol=SYMBOLS,
            subtype=np.array([0, 0, 0, 0, 1, -1, 0]),
            chan=np.array([0, 1, 1, 0, 0, 0, 2]),
            num=np.array([0, 0, 5, 5, 0, 0, 3]),
            aux_note=NOTES,
            write_dir=str(tmp_path),
        )
    return tmp_path / "r.atr"


def test_what_wfdb_wrote_is_read_in_full(written: Path) -> None:
    found = read_marks(written)
    assert found is not None and found.ticks_hz is None
    assert [m.time for m in found.marks] == SAMPLES
    assert [m.chn for m in found.marks] == [0, 1, 1, 0, 0, 0, 2]
    assert [m.num for m in found.marks] == [0, 0, 5, 5, 0, 0, 3]
    assert [m.aux.decode() for m in found.marks] == NOTES
    assert [m.sub or 0 for m in found.marks] == [0, 0, 0, 0, 1, -1, 0]


def test_wfdb_reads_a_cut_with_all_its_fields(written: Path, tmp_path: Path) -> None:
    found = read_marks(written)
    assert found is not None
    part = cut(found, 2000, 200_001, frame_hz=360.0)
    (tmp_path / "c.atr").write_bytes(encode(part))
    with quiet_wfdb() as wfdb:
        copy = wfdb.rdann(str(tmp_path / "c"), "atr")
    assert (copy.sample + 2000).tolist() == SAMPLES[2:6]
    assert copy.symbol == SYMBOLS[2:6]
    assert copy.chan.tolist() == [1, 0, 0, 0] and copy.num.tolist() == [5, 5, 0, 0]
    assert [n.rstrip("\0") for n in copy.aux_note] == NOTES[2:6]


MARKS = st.builds(
    Mark,
    time=st.integers(0, 1 << 30),
    code=st.integers(1, 49),
    sub=st.none() | st.integers(-128, 127),
    num=st.integers(-128, 127),
    chn=st.integers(0, 255),
    aux=st.binary(max_size=60),
)


@settings(deadline=None)
@given(st.lists(MARKS, max_size=20))
def test_read_again_equals_written(marks: list[Mark]) -> None:
    assert parse(encode(marks)) == marks


@settings(deadline=None)
@given(st.binary(max_size=80))
def test_any_bytes_are_marks_or_none(data: bytes) -> None:
    marks = parse(data)
    assert marks is None or parse(encode(marks)) == marks


def test_ticks_of_their_own_are_followed_and_said_again() -> None:
    head = Mark(0, 22, None, 0, 0, b"## time resolution: 720")
    file = MarkFile("atr", (head, Mark(100, 1, None, 0, 0, b""), Mark(1000, 1, None, 0, 0, b"")), 720.0)
    assert cut(file, 360, 720, frame_hz=360.0) == [head, Mark(280, 1, None, 0, 0, b"")]


def test_only_annotations_of_the_record_count(written: Path) -> None:
    folder = written.parent
    (folder / "r.hea").write_text("r 1 360 300000\n")
    for name in ("r.pdf", "r.qrs", "rr.atr", "r.notes"):
        (folder / name).write_bytes(b"\x01\x04\0\0" if name != "r.notes" else b"no annotations at all")
    (folder / "r.old").write_bytes(written.read_bytes())
    found = beside(folder / "r.hea", {(folder / "r.old").resolve()}, n_frames=300_000)
    assert [p.name for p in found] == ["r.atr", "r.qrs"]
    assert beside(folder / "r.hea", set(), n_frames=1000) == [folder / "r.qrs"]
