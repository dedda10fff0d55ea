"""From paths to recordings: folders, records of several files, what is passed over."""

from __future__ import annotations

from pathlib import Path

import pytest

from readers import made
from sigguard.errors import ReadError
from sigguard.readers import find_recordings, open_recording


@pytest.fixture
def record(tmp_path: Path) -> Path:
    return made.wfdb_record(tmp_path, made.digits(1, 100, 16), name="100")


def test_a_record_counts_once_whichever_file_is_given(record: Path, tmp_path: Path):
    ways = [record, record.with_suffix(".dat"), record.with_suffix(""), tmp_path, str(record)]
    assert find_recordings(ways) == [record]
    for way in ways[:3]:
        assert open_recording(way).info.name == "100"


def test_signal_file_of_another_stem(tmp_path: Path):
    path = made.wfdb_record(tmp_path, made.digits(1, 100, 16), name="100")
    (tmp_path / "100.dat").rename(tmp_path / "signals.bin")
    path.write_text(path.read_text().replace("100.dat", "signals.bin"))
    assert find_recordings(tmp_path / "signals.bin") == [path]


def test_folders_are_searched_with_all_below_in_order(tmp_path: Path):
    for name in ("b", "a", "a/deep"):
        (tmp_path / name).mkdir()
        made.wfdb_record(tmp_path / name, made.digits(1, 100, 16))
    found = [path.relative_to(tmp_path).as_posix() for path in find_recordings(tmp_path)]
    assert found == ["a/rec.hea", "a/deep/rec.hea", "b/rec.hea"]


def test_what_is_no_recording_is_passed_over_in_folders_only(record: Path, tmp_path: Path):
    for name, data in {
        "100.atr": b"\0\0",
        "README.md": b"# read me\n",
        "x.bin": b"\0\1" * 99,
        ".hidden.hea": b"x",
    }.items():
        (tmp_path / name).write_bytes(data)
    (tmp_path / "folder.hea").mkdir()
    assert find_recordings(tmp_path) == [record]
    for name in ("100.atr", "README.md", "x.bin"):
        assert find_recordings(tmp_path / name) == [tmp_path / name]
        with pytest.raises(ReadError):
            open_recording(tmp_path / name)


def test_a_broken_header_in_a_folder_is_not_lost(record: Path, tmp_path: Path):
    (tmp_path / "200.hea").write_bytes(b"\0" * 99)
    assert find_recordings(tmp_path) == [record, tmp_path / "200.hea"]


def test_an_empty_folder_and_an_absent_path_come_back(tmp_path: Path):
    assert find_recordings([tmp_path, tmp_path / "none"]) == [tmp_path, tmp_path / "none"]
    for path in (tmp_path, tmp_path / "none"):
        with pytest.raises(ReadError):
            open_recording(path)


def test_segments_count_with_their_record(tmp_path: Path):
    made.wfdb_record(tmp_path, made.digits(1, 300, 16), name="a")
    (tmp_path / "all.hea").write_text("all/2 1 500 600\na 300\na 300\n")
    assert find_recordings(tmp_path) == [tmp_path / "all.hea"]
    assert find_recordings(tmp_path / "a.hea") == [tmp_path / "a.hea"]  # named: as asked


def test_folders_that_link_in_a_circle(record: Path, tmp_path: Path):
    (tmp_path / "loop").symlink_to(tmp_path)
    assert find_recordings(tmp_path) == [record]


def test_every_format_is_found_by_content(tmp_path: Path):
    d = made.digits(2, 1000, 12)
    leads = [{"label": "ECG I", "steps": d[0]}, {"label": "ECG II", "steps": d[1]}]
    written = [
        made.edf_file(tmp_path / "a", leads),
        made.edf_file(tmp_path / "b.txt", leads, bits=24),
        made.ishne_file(tmp_path / "c.dat", d, codes=[5, 6]),
        made.aecg_file(tmp_path / "d.csv", [made.aecg_set(d, ["I", "II"])]),
    ]
    (tmp_path / "page.xml").write_text("<html><body>no ECG</body></html>")
    (tmp_path / "beats.ann").write_bytes(b"ANN  1.0" + bytes(600))
    assert find_recordings(tmp_path) == written
    assert [open_recording(path).info.format for path in written] == ["EDF", "BDF", "ISHNE", "aECG"]


@pytest.mark.parametrize("name", ["x.edf", "x.BDF"])
def test_a_broken_file_called_edf_is_reported_not_passed_over(name: str, tmp_path: Path):
    (tmp_path / name).write_bytes(bytes(3000))
    assert find_recordings(tmp_path) == [tmp_path / name]
    with pytest.raises(ReadError, match="no known format"):
        open_recording(tmp_path / name)
