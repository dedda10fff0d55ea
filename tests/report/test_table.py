"""segments.csv: read back with the csv module it gives the table again."""

from __future__ import annotations

import csv
import io
from dataclasses import replace

import numpy as np
import pytest

from sigguard.errors import WriteError
from sigguard.report.table import SegmentTable, segments_csv
from sigguard.segments import ABSENT, FAULTS, GRADES, MEASUREMENTS

from .factory import FEATURES, make_segments

EVIL = ("I", 'a,"b"\nc', "=cmd|' /C calc'!A0", "-aVR", "nan", "x,nan")


def read_back(segments) -> list[dict[str, str]]:
    out = io.StringIO()
    segments_csv(segments, out)
    return list(csv.DictReader(io.StringIO(out.getvalue(), newline="")))


def test_header_as_promised():
    row = read_back(make_segments())[0]
    expected = ["lead", "start_s", "end_s", "grade", "faults"]
    for m in MEASUREMENTS:
        expected += [m, f"{m}_score", f"{m}_bound", f"{m}_reliable", f"{m}_absent"]
    assert list(row) == expected + list(FEATURES)


@pytest.mark.parametrize("duration_s", [10.0, 95.0, 60_000.0])
def test_parses_back(duration_s):
    table = make_segments(("II", "V1"), duration_s=duration_s)
    table.absent[0, 1] = 2
    rows = read_back(table)
    assert len(rows) == len(table)

    def column(name):
        return np.array([float(row[name]) if row[name] else np.nan for row in rows])

    assert [row["lead"] for row in rows] == [table.leads[i] for i in table.lead_index]
    assert [row["grade"] for row in rows] == [GRADES[g] for g in table.grade]
    assert [row["faults"] for row in rows] == [
        ";".join(f for f, x in zip(FAULTS, part, strict=True) if x > 0) for part in table.fault
    ]
    np.testing.assert_allclose(column("start_s"), table.start_s, atol=5e-4)
    for i, m in enumerate(MEASUREMENTS):
        step = 1e-4 if m == "st" else 0.1
        np.testing.assert_allclose(column(m), table.value[:, i], atol=step / 2 + 1e-9)
        np.testing.assert_allclose(column(f"{m}_score"), table.score[:, i], atol=1e-4)
        over = column(f"{m}_bound") - table.bound[:, i]
        known = np.isfinite(table.bound[:, i])
        assert np.array_equal(np.isfinite(over), known)
        assert np.all((over[known] >= -1e-6) & (over[known] <= step))
        assert [row[f"{m}_reliable"] for row in rows] == [
            "true" if x else "false" for x in table.reliable[:, i]
        ]
        assert [row[f"{m}_absent"] for row in rows] == [ABSENT[k] for k in table.absent[:, i]]
    for j, name in enumerate(FEATURES):
        np.testing.assert_allclose(column(name), table.features[:, j], rtol=1e-5)


def test_three_decimals_and_no_nan_text():
    table = make_segments(duration_s=30.0)
    out = io.StringIO()
    segments_csv(table, out)
    assert "nan" not in out.getvalue().lower() and "inf" not in out.getvalue().lower()
    assert out.getvalue().splitlines()[1].split(",")[1:3] == ["0.000", "10.000"]


def test_not_finite_is_an_empty_field():
    table = make_segments()
    table.features[:] = np.inf
    table.value[:] = -np.inf
    row = read_back(table)[0]
    assert row["rate"] == row["st"] == row[FEATURES[0]] == row[FEATURES[-1]] == ""


def test_hostile_lead_names_stay_text():
    rows = read_back(make_segments(EVIL))
    assert [row["lead"] for row in rows] == [*EVIL[:2], "'" + EVIL[2], *EVIL[3:]]  # no formula is left to run


def test_empty_table_is_a_header_only():
    table = make_segments()
    assert read_back(table.rows(np.zeros(len(table), bool))) == []


def test_to_csv_writes_whole_or_not_at_all(tmp_path):
    table = SegmentTable.of(make_segments())
    table.to_csv(tmp_path / "segments.csv")
    out = io.StringIO()
    table.to_csv(out)
    assert (tmp_path / "segments.csv").read_text(encoding="utf-8") == out.getvalue()
    with pytest.raises(WriteError, match=r"segments\.csv"):
        table.to_csv(tmp_path / "segments.csv" / "below.csv")  # a file stands where a folder should
    # A table that breaks half-way leaves the old file and nothing beside it.
    broken = replace(table, grade=table.grade + np.int8(9))
    with pytest.raises(IndexError):
        broken.to_csv(tmp_path / "segments.csv")
    assert (tmp_path / "segments.csv").read_text(encoding="utf-8") == out.getvalue()
    assert [p.name for p in tmp_path.iterdir()] == ["segments.csv"]
