"""Signal-quality annotations, read back by wfdb."""

from __future__ import annotations

import warnings
from pathlib import Path

import numpy as np
import pytest

from sigguard.errors import UsageError
from sigguard.segments import FAULTS, GRADES, MEASUREMENTS, Segments
from sigguard.writers import write_quality_annotation

FS = 500.0


def segments(leads: tuple[str, ...], grades: list[list[str]], seconds: float = 10.0) -> Segments:
    """One row for each stretch and lead; ``grades[k]`` are those of stretch k."""
    n_times, n_leads = len(grades), len(leads)
    n, m = n_times * n_leads, len(MEASUREMENTS)
    start = np.repeat(np.arange(n_times) * seconds, n_leads)
    return Segments(
        leads=leads,
        feature_names=(),
        lead_index=np.tile(np.arange(n_leads, dtype=np.int32), n_times),
        start_s=start,
        end_s=start + seconds,
        value=np.full((n, m), np.nan),
        score=np.zeros((n, m)),
        bound=np.full((n, m), np.nan),
        reliable=np.zeros((n, m), dtype=bool),
        absent=np.zeros((n, m), dtype=np.int8),
        grade=np.array([GRADES.index(g) for row in grades for g in row], dtype=np.int8),
        fault=np.zeros((n, len(FAULTS)), dtype=np.float32),
        features=np.zeros((n, 0), dtype=np.float32),
    )


def read_back(path: Path):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import wfdb

        return wfdb.rdann(str(path.with_suffix("")), path.suffix[1:])


def written(folder: Path, table: Segments, **more: object):
    n_samples = int(round(float(table.end_s.max()) * FS))
    return read_back(
        write_quality_annotation(folder / "rec.hea", table, fs_hz=FS, n_samples=n_samples, **more)
    )


def test_every_state_of_the_first_four_signals(tmp_path: Path):
    rows = [
        ["all", "all", "all", "all"],
        ["intervals", "all", "all", "all"],
        ["all", "rhythm", "none", "all"],
        ["all", "all", "all", "none"],
        ["rhythm", "none", "rhythm", "none"],
        ["none", "none", "none", "none"],
        ["all", "all", "all", "all"],
    ]
    ann = written(tmp_path, segments(("I", "II", "III", "aVR"), rows))
    assert ann.sample.tolist() == [int(k * 10 * FS) for k in range(7)]
    assert ann.symbol == ["~"] * 7
    # bit s noisy, bit 4 + s unreadable; 0x80 is stored in a signed byte; -1: all unreadable
    assert [s & 0xFF for s in ann.subtype.tolist()] == [0, 0x01, 0x42, 0x80, 0xA5, 0xFF, 0]


def test_only_changes_are_written(tmp_path: Path):
    ann = written(tmp_path, segments(("II",), [["all"], ["all"], ["rhythm"], ["intervals"], ["all"]]))
    assert ann.sample.tolist() == [0, 10_000, 20_000]
    assert ann.subtype.tolist() == [0, 1, 0]


def test_signals_beyond_the_fourth_have_channel_and_text(tmp_path: Path):
    leads = ("I", "II", "III", "aVR", "aVL", "V1")
    good = ["all"] * 6
    ann = written(tmp_path, segments(leads, [good, ["rhythm", *good[:3], "none", "all"], good]))
    found = list(zip(ann.sample.tolist(), ann.chan.tolist(), ann.subtype.tolist(), ann.aux_note, strict=True))
    assert found == [
        (0, 0, 0, ""),
        (5000, 0, 1, ""),
        (5000, 4, 1, "aVL unreadable"),
        (10_000, 0, 0, ""),
        (10_000, 4, 0, "aVL clean"),
    ]


def test_leads_keep_their_numbers_among_all_signals(tmp_path: Path):
    ann = written(tmp_path, segments(("II", "V"), [["none", "none"]]), channels=(1, 2), n_signals=4)
    assert [s & 0xFF for s in ann.subtype.tolist()] == [0x60]  # two of four: not "all unreadable"
    with pytest.raises(UsageError):
        written(tmp_path, segments(("II", "V"), [["none", "none"]]), channels=(1,))


def test_days_fit_and_times_come_back(tmp_path: Path):
    rows = [["all"] if k % 3 else ["none"] for k in range(2000)]
    ann = written(tmp_path, segments(("II",), rows, seconds=300.0))
    expected = [k * 150_000 for k in range(2000) if k == 0 or rows[k] != rows[k - 1]]
    assert ann.sample.tolist() == expected


def test_no_segments_give_an_empty_file(tmp_path: Path):
    table = segments(("II",), [["all"]]).rows(np.zeros(1, dtype=bool))
    path = write_quality_annotation(tmp_path / "rec", table, fs_hz=FS, n_samples=100)
    assert path.name == "rec.sgq"
    assert path.read_bytes() == b"\0\0"


def test_names_that_one_byte_cannot_hold(tmp_path: Path):
    leads = ("I", "II", "III", "aVR", "отведение" * 30)
    ann = written(tmp_path, segments(leads, [["all"] * 4 + ["none"]]))
    assert ann.chan.tolist() == [0, 4]
    assert len(ann.aux_note[1]) <= 200
