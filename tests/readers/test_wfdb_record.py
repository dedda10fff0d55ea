"""WFDB records: values, facts of the header, many segments, differing rates."""

from __future__ import annotations

import warnings
from datetime import datetime
from pathlib import Path

import numpy as np
import pytest

from readers import made
from sigguard.readers import find_recordings, open_recording


@pytest.fixture(scope="module")
def wfdb():
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # it warns about its own use of pandas
        import wfdb
    return wfdb


WIDTHS = {16: 16, 24: 24, 32: 32, 61: 16, 80: 8, 160: 16, 212: 12, 310: 10, 311: 10}


@pytest.mark.parametrize("fmt", WIDTHS)
def test_stored_steps_come_back_exactly(fmt: int, tmp_path: Path):
    d = made.digits(3, 1001, WIDTHS[fmt])
    with open_recording(made.wfdb_record(tmp_path, d, fmt=fmt)) as opened:
        np.testing.assert_array_equal(opened.read_digital(), d)
        np.testing.assert_array_equal(opened.read_digital(501, 640), d[:, 501:640])


def test_format_8_holds_differences_and_windows_are_right(tmp_path: Path):
    d = np.cumsum(made.digits(2, 500, 6), axis=1)
    steps = np.diff(d, axis=1, prepend=d[:, :1])
    path = made.wfdb_record(tmp_path, d, fmt=16)
    path.write_text(path.read_text().replace("rec.dat 16", "rec.dat 8"))
    (tmp_path / "rec.dat").write_bytes(steps.T.reshape(-1).astype(np.int8).tobytes())
    with open_recording(path) as opened:
        np.testing.assert_array_equal(opened.read_digital(), d)
        np.testing.assert_array_equal(opened.read_digital(200, 300), d[:, 200:300])


@pytest.mark.parametrize("fmt", ["508", "516", "524"])
def test_compressed_formats_equal_what_wfdb_wrote(wfdb, fmt: str, tmp_path: Path):
    pytest.importorskip("soundfile")
    d = made.digits(2, 9000, int(fmt) - 500)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        wfdb.wrsamp(
            "rec",
            fs=500,
            units=["mV"] * 2,
            sig_name=["I", "II"],
            d_signal=d.T.copy(),
            fmt=[fmt] * 2,
            adc_gain=[200.0] * 2,
            baseline=[0] * 2,
            write_dir=str(tmp_path),
        )
    with open_recording(tmp_path / "rec.hea") as opened:
        np.testing.assert_array_equal(opened.read_digital(4000, 5001), d[:, 4000:5001])


@pytest.mark.parametrize("gain", ["200", "200(15)", "2281/mV", "1.052e+04/mV", "1000(-20)/mV", "-200/mV"])
def test_millivolts_equal_those_of_wfdb(wfdb, gain: str, tmp_path: Path):
    path = made.wfdb_record(tmp_path, made.digits(2, 700, 12), fmt=212, gains=[gain] * 2)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        theirs = wfdb.rdrecord(str(path.with_suffix(""))).p_signal.T
    with open_recording(path) as opened:
        np.testing.assert_allclose(opened.read(), theirs, rtol=1e-12)


def test_skew_equals_that_of_wfdb(wfdb, tmp_path: Path):
    path = made.wfdb_record(tmp_path, made.digits(2, 700, 16))
    path.write_text(path.read_text().replace("rec.dat 16", "rec.dat 16:9", 1))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        theirs = wfdb.rdrecord(str(path.with_suffix(""))).p_signal.T
    with open_recording(path) as opened:
        ours = opened.read()
    assert np.isnan(ours[0, -9:]).all()
    np.testing.assert_allclose(ours, theirs, rtol=1e-12)


@pytest.mark.parametrize(
    ("unit", "mv"), [("uV", 1e-3), ("µV", 1e-3), ("μV", 1e-3), ("V", 1e3), ("nV", 1e-6), ("MV", 1.0)]
)
@pytest.mark.parametrize("encoding", ["utf-8", "latin-1"])
def test_units_become_millivolts(unit: str, mv: float, encoding: str, tmp_path: Path):
    d = made.digits(1, 100, 16)
    path = made.wfdb_record(tmp_path, d, gains=[f"2/{unit}"])
    if encoding == "latin-1" and unit == "μV":
        pytest.skip("the Greek letter is not in Latin-1")
    path.write_bytes(path.read_text(encoding="utf-8").encode(encoding))
    with open_recording(path) as opened:
        np.testing.assert_allclose(opened.read(), d / 2 * mv)
        assert opened.info.step_mv == pytest.approx([mv / 2])


def test_rails_follow_the_converter_and_else_the_format(tmp_path: Path):
    path = made.wfdb_record(tmp_path, made.digits(3, 100, 12) // 4 + 1024, fmt=212, gains=["200/mV"] * 3)
    lines = path.read_text().splitlines()
    lines[1] = lines[1].replace("200/mV 0 0", "200/mV 11 1024")  # as the MIT-BIH records state theirs
    lines[2] = lines[2].replace("200/mV 0 0", "200/mV 12 0")
    path.write_text("\n".join(lines))
    rails = open_recording(path).info.rails_mv
    np.testing.assert_allclose(rails, [[-5.12, 5.115], [-2047 / 200, 2047 / 200], [-2047 / 200, 2047 / 200]])


def test_missing_code_is_nan_and_kept_as_a_step(tmp_path: Path):
    d = made.digits(1, 100, 16)
    d[0, 40:50] = -32768
    with open_recording(made.wfdb_record(tmp_path, d)) as opened:
        assert np.flatnonzero(np.isnan(opened.read()[0])).tolist() == list(range(40, 50))
        np.testing.assert_array_equal(opened.read_digital(), d)


def test_what_is_taken_for_granted_is_said(tmp_path: Path):
    d = made.digits(2, 400, 16)
    path = made.wfdb_record(tmp_path, d, gains=["0", "0/mV"])
    lines = path.read_text().splitlines()
    path.write_text("\n".join(["rec 2", lines[1], lines[2].removesuffix(" II")]))
    with open_recording(path) as opened:
        info = opened.info
        text = " ".join(info.assumed)
        assert (info.fs_hz, info.n_samples) == (250.0, 400)
        assert info.leads == ("I", "signal 2")
        for part in (
            "250 Hz",
            "200 steps per mV",
            "No unit is stated for I;",
            "No name is stated for signal 2",
            "no length",
        ):
            assert part in text
        np.testing.assert_allclose(opened.read(), d / 200)
    assert open_recording(path, fs_hz=360).info.fs_hz == 360.0
    assert open_recording(path, units="uV").info.step_mv == pytest.approx([0.005 / 1000, 0.005])


def test_a_stated_rate_goes_before_a_given_one(tmp_path: Path):
    info = open_recording(made.wfdb_record(tmp_path, made.digits(1, 100, 16)), fs_hz=360).info
    assert info.fs_hz == 500.0
    assert "360 Hz given was not used" in info.assumed[0]


@pytest.mark.parametrize(
    ("fs", "tail", "start"),
    [
        ("5e2", "", None),
        ("500/1000(3)", " 13:05:10.25 25/04/1989", datetime(1989, 4, 25, 13, 5, 10, 250_000)),
        ("500", " 0:0:0 0/0/0", None),
        ("500", " 24:00:00 1/1/2000", None),
        ("500", " 10:11:12 1/1/99", None),
        ("500", " [10:11:12 3/2/2001]", datetime(2001, 2, 3, 10, 11, 12)),
        ("500", " 10:11:12", None),
    ],
)
def test_record_lines_that_readers_stumble_over(fs: str, tail: str, start: datetime | None, tmp_path: Path):
    info = open_recording(made.wfdb_record(tmp_path, made.digits(1, 100, 16), fs=fs, tail=tail)).info
    assert (info.fs_hz, info.n_samples, info.start_time) == (500.0, 100, start)


def test_names_with_dots_colons_and_blanks(tmp_path: Path):
    folder = tmp_path / "a::b c"
    folder.mkdir()
    d = made.digits(1, 100, 16)
    path = made.wfdb_record(folder, d, name="x.y-1", names=["ECG lead II"])
    with open_recording(path) as opened:
        assert opened.info.leads == ("II",)
        np.testing.assert_array_equal(opened.read_digital(), d)


def test_what_is_no_ecg_is_left_out_and_named(tmp_path: Path):
    gains = ["1000/mV", "1000/mV", "10/mmHg", "100/NU", "1000/mV", "1/bpm"]
    names = ["II", "V", "ABP", "PLETH", "RESP", "HR"]
    with open_recording(
        made.wfdb_record(tmp_path, made.digits(6, 100, 16), gains=gains, names=names)
    ) as opened:
        assert opened.info.leads == ("II", "V")
        assert opened.info.left_out == ("ABP", "PLETH", "RESP", "HR")
        assert (opened.channels, opened.n_signals) == ((0, 1), 6)


def test_leads_of_a_lower_rate_are_left_out_and_named(tmp_path: Path):
    rng = np.random.default_rng(3)
    frames = rng.integers(-999, 999, size=(300, 4))  # V5, then three samples of II
    (tmp_path / "rec.dat").write_bytes(made.encode(frames.reshape(-1), 16))
    (tmp_path / "rec.hea").write_text(
        "rec 2 125 300\nrec.dat 16 200 12 0 0 0 0 V5\nrec.dat 16x3 200 12 0 0 0 0 II\n"
    )
    with open_recording(tmp_path / "rec.hea") as opened:
        assert (opened.info.leads, opened.info.fs_hz, opened.info.n_samples) == (("II",), 375.0, 900)
        assert opened.info.left_out == ("V5 (125 Hz beside 375 Hz)",)
        np.testing.assert_array_equal(opened.read_digital(100, 200)[0], frames[:, 1:].reshape(-1)[100:200])


def test_segments_in_a_row_with_a_gap(tmp_path: Path):
    a, b = made.digits(2, 400, 16, seed=1), made.digits(2, 300, 16, seed=2)
    made.wfdb_record(tmp_path, a, name="a")
    made.wfdb_record(tmp_path, b, name="b")
    (tmp_path / "all.hea").write_text("all/4 2 500 1200\na 400\n~ 100\nb 300\na 400\n")
    with open_recording(tmp_path / "all") as opened:
        mv = opened.read()
        gap = np.full((2, 100), np.nan)
        np.testing.assert_allclose(mv, np.concatenate([a / 1000, gap, b / 1000, a / 1000], axis=1))
        np.testing.assert_array_equal(opened.read_digital(350, 550)[:, 50:150], -32768)


def test_signals_that_come_and_go_and_change_their_gain(tmp_path: Path):
    a, b = made.digits(2, 400, 16, seed=1), made.digits(1, 300, 16, seed=2)
    made.wfdb_record(tmp_path, a, name="a", names=["II", "V1"])
    made.wfdb_record(tmp_path, b, name="b", names=["II"], gains=["250(7)/mV"])
    (tmp_path / "lay.hea").write_text("lay 2 500 0\n~ 0 1000/mV 0 0 0 0 0 II\n~ 0 1000/mV 0 0 0 0 0 V1\n")
    (tmp_path / "all.hea").write_text("all/3 2 500 700\nlay 0\na 400\nb 300\n")
    with open_recording(tmp_path / "all.hea") as opened:
        mv = opened.read()
        np.testing.assert_allclose(mv[0], np.concatenate([a[0] / 1000, (b[0] - 7) / 250]))
        np.testing.assert_allclose(mv[1, :400], a[1] / 1000)
        assert np.isnan(mv[1, 400:]).all()
        assert opened.scales is None  # one lead, two gains
    assert find_recordings(tmp_path) == [tmp_path / "all.hea"]


def test_a_window_of_a_long_recording_reads_only_the_window(tmp_path: Path):
    """600 MB of zeros that take no place on the disk: reading ten seconds needs a few MB."""
    import tracemalloc

    n = 100_000_000
    path = made.wfdb_record(tmp_path, made.digits(3, 10, 16))
    path.write_text(path.read_text().replace("500 10", f"500 {n}"))
    with (tmp_path / "rec.dat").open("r+b") as file:
        file.truncate(6 * n)
    with open_recording(path, with_sha256=False) as opened:
        opened.read(0, 10)
        tracemalloc.start()
        opened.read(n // 2, n // 2 + 5000)
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
    assert peak < 5_000_000


def test_notes_of_the_header_are_identity(tmp_path: Path):
    path = made.wfdb_record(tmp_path, made.digits(1, 100, 16))
    path.write_text(path.read_text() + "# age: 81\n# Nobody Atall\n")
    assert open_recording(path).info.identity == ()
    assert open_recording(path, with_identity=True).info.identity == (
        ("note", "age: 81"),
        ("note", "Nobody Atall"),
    )


def test_temporary_files_are_gone_after_closing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    import tempfile

    scratch = tmp_path / "scratch"
    scratch.mkdir()
    monkeypatch.setattr(tempfile, "tempdir", str(scratch))
    with open_recording(made.wfdb_record(tmp_path, made.digits(1, 100, 16))) as opened:
        opened.read()
        assert any(scratch.iterdir())
    assert not any(scratch.iterdir())


def test_a_first_sample_beyond_the_stated_resolution_overrules_it(tmp_path: Path):
    d = np.full((1, 100), 3000)
    path = made.wfdb_record(tmp_path, d)
    path.write_text(path.read_text().replace("1000/mV 0", "1000/mV 12"))
    np.testing.assert_allclose(open_recording(path).info.rails_mv, [[-32.767, 32.767]])
