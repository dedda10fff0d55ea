"""Text tables: separators, decimal signs, headings, units, time columns, missing values."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path

import numpy as np
import pytest

from readers import made
from sigguard.errors import NoECGLead, ReadError, UsageError
from sigguard.readers import find_recordings, open_recording, read_recording

T = np.arange(400)
MV = np.round(np.stack([np.sin(T / 9), np.cos(T / 7) * 0.8 - 0.1]), 3)


def table(head: str, rows: list[str]) -> str:
    return "\n".join([head, *rows]) + "\n"


def write(folder: Path, text: str, encoding: str = "utf-8") -> Path:
    (folder / "a.csv").write_bytes(text.encode(encoding))
    return folder / "a.csv"


def plain_rows(separator: str = ",", decimal: str = ".", fs_hz: float = 500.0) -> list[str]:
    rows = [separator.join([f"{k / fs_hz:.4f}", f"{a:.3f}", f"{b:.3f}"]) for k, (a, b) in enumerate(MV.T)]
    return [row.replace(".", decimal) for row in rows] if decimal != "." else rows


@pytest.mark.parametrize(
    ("separator", "decimal"),
    [(",", "."), (";", "."), (";", ","), ("\t", "."), ("\t", ","), ("|", "."), (" ", "."), ("   ", ",")],
)
def test_separators_and_decimal_signs(separator: str, decimal: str, tmp_path: Path):
    path = write(
        tmp_path, table(separator.join(["time_s", "II_mV", "V5_mV"]), plain_rows(separator, decimal))
    )
    recording = read_recording(path)
    assert (recording.leads, recording.fs_hz) == (("II", "V5"), 500.0)
    np.testing.assert_allclose(recording.signal_mv, MV, atol=1e-12)


def test_comma_as_separator_and_decimal_sign_is_refused(tmp_path: Path):
    with pytest.raises(ReadError, match="decimal sign a comma too"):
        open_recording(write(tmp_path, table("time_s,II_mV,V5_mV", plain_rows(",", ","))))


@pytest.mark.parametrize(
    ("heading", "unit", "mv"),
    [
        ("II [mV]", None, 1.0),
        ("II(uV)", None, 1e-3),
        ("II_µV", None, 1e-3),
        ("ECG II [μV]", None, 1e-3),
        ("II [V]", None, 1e3),
        ("II", "mV", 1.0),
        ("'MLII (mV)'", None, 1.0),
    ],
)
def test_units_by_heading_or_by_the_caller(heading: str, unit: str | None, mv: float, tmp_path: Path):
    rows = [f"{k},{x}" for k, x in enumerate(MV[0])]
    recording = read_recording(write(tmp_path, table(f"sample,{heading}", rows)), fs_hz=360, units=unit)
    np.testing.assert_allclose(recording.signal_mv[0], MV[0] * mv)
    assert recording.leads[0] in ("II", "MLII")
    assert recording.info is not None and any("taken, as given" in s for s in recording.info.assumed) == (
        unit is not None
    )


def test_latin_1_and_utf_16(tmp_path: Path):
    text = table("time_s;II [µV];V5 [µV]", plain_rows(";"))
    for encoding in ("latin-1", "utf-16", "utf-8-sig"):
        np.testing.assert_allclose(read_recording(write(tmp_path, text, encoding)).signal_mv, MV / 1000)


def test_unknown_unit_is_asked_for_and_never_guessed(tmp_path: Path):
    path = write(tmp_path, table("time_s,II,V5", plain_rows()))
    with pytest.raises(ReadError, match=r"a unit for II, V5, found none \(their size suggests mV\)"):
        open_recording(path)
    with pytest.raises(UsageError, match="units must be"):
        open_recording(path, units="mmHg")


def test_unknown_rate_is_asked_for(tmp_path: Path):
    path = write(tmp_path, table("II [mV]", [str(x) for x in MV[0]]))
    with pytest.raises(ReadError, match="sampling rate"):
        open_recording(path)
    assert open_recording(path, fs_hz=250).info.fs_hz == 250.0


def test_name_row_and_unit_row_in_quotes(tmp_path: Path):
    rows = [f"'0:00.{k * 2:03d}',{a},{b}" for k, (a, b) in enumerate(MV.T[:400])]
    text = table("'Elapsed time','MLII','V1'\n'hh:mm:ss.mmm','mV','uV'", rows)
    recording = read_recording(write(tmp_path, text))
    assert (recording.leads, recording.fs_hz) == (("MLII", "V1"), 500.0)
    np.testing.assert_allclose(recording.signal_mv, MV * [[1.0], [1e-3]])


def test_pairs_above_the_table_state_rate_and_unit_and_hide_names(tmp_path: Path):
    rows = [f"{x}" for x in MV[0] * 1000]
    text = table("Name,Nobody Atall\nDate of birth,1.1.1950\nSample Rate,512 hertz\nUnit,µV\n\nLead II", rows)
    info = read_recording(write(tmp_path, text)).info
    assert info is not None
    assert (info.fs_hz, info.leads, info.identity) == (512.0, ("II",), ())
    assert "Nobody" not in repr(info)
    assert ("Name", "Nobody Atall") in open_recording(tmp_path / "a.csv", with_identity=True).info.identity


def test_comments_may_state_the_rate(tmp_path: Path):
    text = table("# fs = 360\n# units: uV\nII,V5", [f"{a},{b}" for a, b in MV.T * 1000])
    recording = read_recording(write(tmp_path, text))
    assert recording.fs_hz == 360.0
    np.testing.assert_allclose(recording.signal_mv, MV, atol=1e-9)


@pytest.mark.parametrize("word", ["", "NaN", "nan", "NA", "null", "-", "\\N"])
def test_words_for_missing(word: str, tmp_path: Path):
    rows = plain_rows()
    rows[7] = rows[7].rsplit(",", 1)[0] + f",{word}"
    x = read_recording(write(tmp_path, table("time_s,II_mV,V5_mV", rows))).signal_mv
    assert np.argwhere(np.isnan(x)).tolist() == [[1, 7]]


def test_codes_for_missing_only_where_they_stand_out(tmp_path: Path):
    values = (MV[0] * 1000).round()
    values[50:60] = -32768
    path = write(tmp_path, table("II_uV", [f"{v:.0f}" for v in values]))
    info = (recording := read_recording(path, fs_hz=500)).info
    assert np.isnan(recording.signal_mv[0, 50:60]).all()
    assert info is not None and "10 values of -32768" in info.assumed[0]
    values[200] = 20_000
    path = write(tmp_path, table("II_uV", [f"{v:.0f}" for v in values]))
    assert not np.isnan(read_recording(path, fs_hz=500).signal_mv).any()


@pytest.mark.parametrize(("fs_hz", "digits"), [(360.0, 3), (500.0, 3), (250.0, 3), (1000.0, 4), (128.5, 9)])
def test_rate_from_rounded_times(fs_hz: float, digits: int, tmp_path: Path):
    rows = [f"{k / fs_hz:.{digits}f},{x}" for k, x in enumerate(np.tile(MV[0], 20))]
    recording = read_recording(write(tmp_path, table("time_s,II_mV", rows)))
    assert recording.fs_hz == pytest.approx(fs_hz, rel=1e-9)
    assert recording.n_samples == len(rows)


@pytest.mark.parametrize(
    ("heading", "time", "fs_hz"),
    [
        ("time_ms", lambda k: f"{k * 2}", 500.0),
        ("t [s]", lambda k: f"{k * 0.004:.3f}", 250.0),
        ("Timestamp (us)", lambda k: f"{1_600_000_000_000_000 + k * 2000}", 500.0),
        ("time", lambda k: f"2020-02-03T23:59:59.{k * 2:03d}Z", 500.0),
        (
            "time",
            lambda k: (
                f"23:59:{59 + k // 250:02d}.{k % 250 * 4:03d}" if k < 250 else f"0:00:00.{(k - 250) * 4:03d}"
            ),
            250.0,
        ),
    ],
)
def test_kinds_of_time(heading: str, time, fs_hz: float, tmp_path: Path):
    recording = read_recording(
        write(tmp_path, table(f"{heading},II_mV", [f"{time(k)},{x}" for k, x in enumerate(MV[0])]))
    )
    assert (recording.fs_hz, recording.n_samples) == (fs_hz, 400)


def test_start_time_by_date_and_time(tmp_path: Path):
    rows = [f"[10:00:00.{k * 2:03d} 03/02/2001],{x}" for k, x in enumerate(MV[0])]
    info = open_recording(write(tmp_path, table("time,II_mV", rows))).info
    assert (info.start_time, info.fs_hz) == (datetime(2001, 2, 3, 10), 500.0)


def test_gaps_in_time_become_missing_samples(tmp_path: Path):
    rows = plain_rows()
    del rows[100:150]
    recording = read_recording(write(tmp_path, table("time_s,II_mV,V5_mV", rows)))
    expected = MV.copy()
    expected[:, 100:150] = np.nan
    np.testing.assert_allclose(recording.signal_mv, expected)
    assert recording.info is not None and "50 samples count as missing" in recording.info.assumed[0]


def test_gaps_too_long_and_times_out_of_order(tmp_path: Path):
    rows = plain_rows()
    rows[200:] = [f"{float(r.split(',')[0]) + 1e6:.4f},{r.split(',', 1)[1]}" for r in rows[200:]]
    with pytest.raises(ReadError, match="split the file"):
        open_recording(write(tmp_path, table("time_s,II_mV,V5_mV", rows)))
    with pytest.raises(ReadError, match="times that ascend"):
        open_recording(write(tmp_path, table("time_s,II_mV,V5_mV", plain_rows()[::-1])))


def test_time_without_unit_is_read_only_where_it_can_be_one_thing(tmp_path: Path):
    rows = [f"{k * 2},{x}" for k, x in enumerate(MV[0])]
    info = open_recording(write(tmp_path, table("time,II_mV", rows))).info
    assert info.fs_hz == 500.0 and "milliseconds were taken" in info.assumed[0]
    rows = [f"{k},{x}" for k, x in enumerate(MV[0])]
    with pytest.raises(ReadError, match="unit is stated"):
        open_recording(write(tmp_path, table("time,II_mV", rows)))


def test_other_columns_are_left_out_and_named(tmp_path: Path):
    rows = [f"{k},{x},80,1" for k, x in enumerate(MV[0])]
    info = open_recording(
        write(tmp_path, table("sample,II_mV,ABP [mmHg],marker", rows)), fs_hz=500, units="mV"
    ).info
    assert (info.leads, info.left_out) == (("II",), ("ABP [mmHg]", "marker"))
    with pytest.raises(NoECGLead):
        open_recording(
            write(tmp_path, table("sample,ABP", [f"{k},80" for k in range(99)])), fs_hz=500, units="mV"
        )


def test_no_header_row(tmp_path: Path):
    path = write(tmp_path, "\n".join(str(x) for x in MV[0]))
    with pytest.raises(ReadError, match="a header row of lead names"):
        open_recording(path)
    info = open_recording(path, fs_hz=500, units="mV").info
    assert info.leads == ("column 1",) and "no header row" in info.assumed[-2]


def test_two_columns_of_one_name_are_never_merged(tmp_path: Path):
    path = write(tmp_path, table("II_mV,II_mV", [f"{a},{b}" for a, b in MV.T]))
    assert open_recording(path, fs_hz=500).info.leads == ("II", "II#2")


def test_only_tables_of_ecg_are_found_in_folders(tmp_path: Path):
    write(tmp_path, made.csv_text(MV, ["I", "II"]))
    (tmp_path / "labels.csv").write_text("name,label\nA1,N\nA2,~\n")
    (tmp_path / "numbers.csv").write_text("a,b\n1,2\n3,4\n")
    (tmp_path / "segments.csv").write_text("lead,start_s,end_s,grade,faults\nII,0.000,10.000,all,\n")
    (tmp_path / "note.txt").write_text("nothing here\n")
    assert find_recordings(tmp_path) == [tmp_path / "a.csv"]
