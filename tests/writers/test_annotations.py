"""Signal-quality annotations, read back by wfdb."""

from __future__ import annotations

import warnings
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from sigguard.errors import UsageError, WriteError
from sigguard.findings import PatientFirst
from sigguard.screening import screen_path
from sigguard.segments import FAULTS, GRADES, MEASUREMENTS, FaultDetails, Segments
from sigguard.writers import annotations, write_quality_annotation

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


LEADS_12 = ("I", "II", "III", "aVR", "aVL", "aVF", "V1", "V2", "V3", "V4", "V5", "V6")


def state_at(ann, sample: int, channel: int) -> str:
    """What a reader of the standard makes of one signal at one sample."""
    state = "clean"
    for at, symbol, subtype, chan, text in zip(
        ann.sample, ann.symbol, ann.subtype, ann.chan, ann.aux_note, strict=True
    ):
        if at > sample or symbol != "~":
            continue
        if subtype == -1:
            state = "unreadable"
        elif channel < 4:
            bits = int(subtype) & 0xFF
            state = "unreadable" if bits >> (4 + channel) & 1 else "noisy" if bits >> channel & 1 else "clean"
        elif chan == channel:
            state = text.split()[-1]
    return state


@pytest.mark.parametrize("n_leads", [1, 2, 3, 4, 5, 12])
def test_any_number_of_signals_comes_back_as_it_was_graded(tmp_path: Path, n_leads: int):
    rng = np.random.default_rng(n_leads)
    leads, n_times = LEADS_12[:n_leads], 40
    grades = [[GRADES[g] for g in rng.integers(0, 4, n_leads)] for _ in range(n_times)]
    grades[7] = grades[20] = ["none"] * n_leads
    grades[6] = grades[19] = ["all"] * n_leads
    ann = written(tmp_path, segments(leads, grades))
    words = {"all": "clean", "none": "unreadable", "rhythm": "noisy", "intervals": "noisy"}
    for k, row in enumerate(grades):
        for channel, grade in enumerate(row):
            for sample in (k * 5000, k * 5000 + 4999):
                assert state_at(ann, sample, channel) == words[grade], (k, channel)
    all_out = [s for s, sub in zip(ann.sample, ann.subtype, strict=True) if sub == -1]
    assert {7 * 5000, 20 * 5000} <= set(all_out)
    assert ann.sample.tolist() == sorted(ann.sample.tolist())


def test_other_signals_between_the_leads_keep_their_numbers(tmp_path: Path):
    """Leads are signals 1, 3, 4 and 6 of seven: bits 1 and 3, channels 4 and 6; never all unreadable."""
    rows = [["all"] * 4, ["none", "rhythm", "none", "intervals"], ["none"] * 4]
    ann = written(tmp_path, segments(("I", "II", "V1", "V5"), rows), channels=(1, 3, 4, 6), n_signals=7)
    found = list(zip(ann.sample.tolist(), ann.chan.tolist(), ann.subtype.tolist(), ann.aux_note, strict=True))
    second = (1 << 3) | (0x10 << 1)
    third = ((0x10 << 1) | (0x10 << 3)) - 256  # stored in a signed byte
    assert found == [
        (0, 0, 0, ""),
        (5000, 0, second, ""),
        (5000, 4, second, "V1 unreadable"),
        (5000, 6, second, "V5 noisy"),
        (10_000, 0, third, ""),
        (10_000, 6, third, "V5 unreadable"),
    ]


def with_windows(table: Segments, **on: int) -> Segments:
    """Each fault called on every row, on the windows (of ten) whose bits are set; those that cost take PR."""
    n = len(table)
    details = FaultDetails(
        weight=np.zeros((n, 9), np.float32),
        harms=np.zeros((n, 9, 5), bool),
        strength=np.full((n, 9), np.nan, np.float32),
        windows=np.zeros((n, 9), np.uint64),
        n_windows=np.full(n, 10, np.uint8),
    )
    for kind, bits in on.items():
        k = FAULTS.index(kind.removesuffix("_harmless"))
        table.fault[:, k] = 0.5
        details.windows[:, k] = bits
        details.harms[:, k, 1] = not kind.endswith("_harmless")
    return replace(table, details=details)


def test_a_burst_is_marked_for_as_long_as_it_lasts(tmp_path: Path):
    table = segments(("II",), [["all"], ["none"], ["all"]])
    # muscle on the 4th and 5th second; drift that takes nothing lies on all of it
    ann = written(tmp_path, with_windows(table, muscle=0b11000, wander_harmless=0b1111111111))
    assert ann.sample.tolist() == [0, int(13 * FS), int(15 * FS)]
    assert ann.subtype.tolist() == [0, -1, 0]


def test_bursts_of_all_faults_that_take_something_count_and_short_pauses_do_not_chop(tmp_path: Path):
    table = segments(("II", "V1"), [["rhythm", "all"]])
    ann = written(tmp_path, with_windows(table, muscle=0b0000000011, motion=0b1011000000))
    assert (ann.sample / FS).tolist() == [0, 2, 6]  # the pause between the 8th and the 10th is one window
    assert ann.subtype.tolist() == [1, 0, 1]


@pytest.mark.parametrize("bits", [{}, {"muscle": 0}, {"weak_harmless": 0b1111111111}])
def test_where_no_time_is_known_the_whole_segment_is_marked(tmp_path: Path, bits):
    ann = written(tmp_path, with_windows(segments(("II",), [["all"], ["rhythm"], ["all"]]), **bits))
    assert ann.sample.tolist() == [0, 5000, 10_000] and ann.subtype.tolist() == [0, 1, 0]


ALARM = PatientFirst(("II", "V1"), 23.0, 41.0, "fibrillation-or-flutter", "looks like it")


def test_what_may_be_a_lethal_rhythm_is_never_marked(tmp_path: Path):
    rows = [["none"] * 5] * 8
    leads = ("I", "II", "III", "aVR", "V1")
    ann = written(tmp_path, segments(leads, rows), patient_first=(ALARM,))
    for sample in range(0, 80 * 500, 100):
        touched = 20 <= sample / FS < 50  # the segments the alarm touches
        for channel in range(5):
            assert state_at(ann, sample, channel) == ("clean" if touched else "unreadable")
    notes = [(s / FS, t) for s, t, y in zip(ann.sample, ann.aux_note, ann.symbol, strict=True) if y == '"']
    assert [t for t, _ in notes] == [23.0, 41.0]
    assert notes[0][1].startswith("PATIENT FIRST") and notes[0][1].endswith("II, V1")


def test_an_alarm_stays_unmarked_when_time_is_taken_in_steps(tmp_path: Path, monkeypatch):
    monkeypatch.setattr(annotations, "MAX_MARKS", 30)
    rows = [["none"] if k % 2 else ["all"] for k in range(400)]
    alarm = replace(ALARM, start_s=1003.0, end_s=1009.0)
    ann = written(tmp_path, segments(("II",), rows), patient_first=(alarm,))
    assert len(ann.sample) <= 32
    assert state_at(ann, int(1005 * FS), 0) == state_at(ann, int(1000 * FS), 0) == "clean"
    for k in range(1, 400, 2):  # nothing unreadable is told clean, the alarm's own segment apart
        assert state_at(ann, int((10 * k + 5) * FS), 0) == "unreadable" or k == 100


def test_a_day_of_changing_leads_stays_small(tmp_path: Path):
    rng = np.random.default_rng(0)
    rows = [[GRADES[g] for g in row] for row in rng.integers(0, 4, (8640, 12))]
    table = with_windows(segments(LEADS_12, rows), muscle=0b0011001100)
    n_samples = int(86_400 * FS)
    path = write_quality_annotation(tmp_path / "day", table, fs_hz=FS, n_samples=n_samples)
    assert path.stat().st_size < 1_000_000
    ann = read_back(path)
    assert len(ann.sample) <= annotations.MAX_MARKS and ann.sample[-1] < n_samples
    for k in rng.integers(0, 8640, 50):
        for channel in range(12):
            if rows[k][channel] == "none":
                assert state_at(ann, int((10 * k + 3) * FS), channel) == "unreadable"


def test_a_crash_leaves_the_file_that_was_there(tmp_path: Path, monkeypatch):
    table = segments(("II",), [["none"]])
    path = write_quality_annotation(tmp_path / "rec", table, fs_hz=FS, n_samples=5000)
    before = path.read_bytes()

    def fail(*_args, **_more):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.replace", fail)
    with pytest.raises(WriteError, match="No space"):
        write_quality_annotation(tmp_path / "rec", segments(("II",), [["all"]]), fs_hz=FS, n_samples=5000)
    assert path.read_bytes() == before and [p.name for p in tmp_path.iterdir()] == ["rec.sgq"]


def mixed_record(folder: Path, *, per_frame: int = 1) -> Path:
    """RESP, II, pressure and V1 over 30 s: the leads at 250 samples/s, II with a burst from 14 to 16 s."""
    fs, seconds = 250, 30
    t = np.arange(fs * seconds) / fs
    beat = np.exp(-0.5 * (((t % 0.8) - 0.3) / 0.012) ** 2) + 0.3 * np.exp(
        -0.5 * (((t % 0.8) - 0.58) / 0.04) ** 2
    )
    noise = np.random.default_rng(2).normal(0, 1, t.size)
    lead = beat + 0.01 * noise
    spoilt = lead + np.where((t >= 14) & (t < 16), 0.3 * noise, 0.0)
    slow = np.sin(0.3 * np.arange(fs // per_frame * seconds) / 25)
    lines = [f"mixed 4 {fs // per_frame} {fs // per_frame * seconds}"]
    frame = f"x{per_frame}" if per_frame > 1 else ""
    for k, (name, unit, x) in enumerate(
        [("RESP", "pm", slow), ("II", "mV", spoilt), ("ABP", "mmHg", slow), ("V1", "mV", lead)]
    ):
        np.round(x * 200).astype("<i2").tofile(folder / f"mixed{k}.dat")
        kind = f"16{frame}" if unit == "mV" else "16"
        lines.append(f"mixed{k}.dat {kind} 200/{unit} 16 0 0 0 0 {name}")
    (folder / "mixed.hea").write_text("\n".join(lines) + "\n")
    return folder / "mixed.hea"


@pytest.mark.parametrize("per_frame", [1, 2])
def test_from_a_record_to_its_marks(tmp_path: Path, per_frame: int):
    """The burst in signal 1 of four comes back on bit 1 alone, in the time base of the record."""
    path = mixed_record(tmp_path, per_frame=per_frame)
    report = screen_path(path, out_dir=tmp_path / "out", page=False, annotate=True)
    assert report.info.leads == ("II", "V1") and report.info.fs_hz == 250
    ann = read_back(tmp_path / "out" / "mixed" / "mixed.sgq")
    frames_per_s = 250 / per_frame
    assert {state_at(ann, int(t * frames_per_s), 3) for t in np.arange(0, 30, 0.5)} == {"clean"}
    spoilt = [t for t in np.arange(0, 30, 0.25) if state_at(ann, int(t * frames_per_s), 1) != "clean"]
    # the seconds of the burst, and little besides, of the ten that the segment has
    assert set(np.arange(14.0, 16.0, 0.25)) <= set(spoilt) and len(spoilt) * 0.25 <= 4.0
    assert not any(int(s) & 0xFF & ~0x22 for s in ann.subtype)


@pytest.mark.parametrize(("record", "first_s", "last_s"), [("cu01", 214, 508), ("cu08", 426, 486)])
def test_recorded_fibrillation_is_neither_noisy_nor_unreadable(
    tmp_path: Path, open_data: Path, record: str, first_s: int, last_s: int
):
    """Stretches marked by eye (to about 2 s), see the README of the open data."""
    path = open_data / "cudb" / f"{record}.hea"
    report = screen_path(path, out_dir=tmp_path, page=False, annotate=True)
    ann = read_back(tmp_path / record / f"{record}.sgq")
    for t in range(first_s + 2, last_s - 2):
        assert state_at(ann, round(t * report.info.fs_hz), 0) == "clean", t
    assert any(
        symbol == '"' and text.startswith("PATIENT FIRST")
        for symbol, text in zip(ann.symbol, ann.aux_note, strict=True)
    )
