"""The page, the line and the worklist: whole, bounded, calm, and deaf to hostile text."""

from __future__ import annotations

import csv
import io
import re
from html.parser import HTMLParser

import numpy as np
import pytest

from sigguard.errors import UsageError
from sigguard.findings import CAUTION, Advice, Judgement
from sigguard.report.grademap import MAX_COLUMNS, NO_DATA, grade_map, map_svg
from sigguard.report.page import duration_words, measurable_words, render_page
from sigguard.report.strips import UNITS_PER_S, StripData, choose_strips, strip_svg, trace_path
from sigguard.report.text import one_line
from sigguard.report.words import clock, listing
from sigguard.report.worklist import (
    WorklistRow,
    by_urgency,
    row_of,
    unreadable_row,
    worklist_csv,
    worklist_page,
    write_worklist,
)

from .factory import alarm_report, empty_report, make_report, make_segments, make_signal, nan_report

EVIL = (
    "<script>alert(1)</script>",
    '"><img src=x onerror=alert(1)>',
    "II' onload='x",
    "{{ 7*7 }}",
    "</title></svg>",
)


class Outline(HTMLParser):
    """Tags and attributes that a browser would see, the text, and whether every tag is closed."""

    VOID = {"meta", "br", "link", "img", "input", "hr"}

    def __init__(self, page: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict]] = []
        self.stack: list[str] = []
        self.text = ""
        self.feed(page)
        self.close()
        assert self.stack == []

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        if tag not in self.VOID:
            self.stack.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        assert self.stack and self.stack[-1] == tag, (tag, self.stack)
        self.stack.pop()

    def handle_data(self, data):
        if self.stack[-1:] != ["style"]:
            self.text += data


def page_of(report, signal=None) -> str:
    if signal is None:
        signal = make_signal(report.info.leads, duration_s=report.info.duration_s, fs_hz=report.info.fs_hz)
    return render_page(report, choose_strips(report, lambda a, b: signal[:, a:b]))


def test_a_page_is_bounded_self_contained_and_well_formed():
    page = page_of(make_report())
    outline = Outline(page)
    assert len(page.encode()) < 1_000_000
    tags = {tag for tag, _ in outline.tags}
    assert not tags & {"script", "link", "img", "iframe", "object", "form"}
    assert not re.search(r"https?://|url\(|@import", page)
    assert sum(attrs.get("class") == "paper" for _, attrs in outline.tags) == 12
    assert all(
        "<title>" in svg for svg in re.findall(r'<svg class="(?:paper|map)".*?</svg>', page, re.DOTALL)
    )


def test_the_worst_page_stays_bounded():
    rng = np.random.default_rng(5)
    noise = rng.normal(0, 2.0, (16, 100_000))  # 16 leads of 10 s at 10 kHz, all noise
    leads = tuple(f"L{i}" for i in range(16))
    assert len(page_of(make_report(leads=leads, fs_hz=10_000.0), noise).encode()) < 1_000_000


def test_a_long_recording_shows_a_choice_and_an_aggregated_map():
    leads = ("I", "II", "V5")
    report = alarm_report(leads=leads, duration_s=86_400.0, fs_hz=250.0)
    asked = []

    def read(start, stop):
        asked.append((start, stop))
        return make_signal(leads, duration_s=(stop - start) / 250.0, fs_hz=250.0)

    strips = choose_strips(report, read)
    assert sum(stop - start for start, stop in asked) <= 5 * 2500
    heads = list(dict.fromkeys(s.heading.split(":")[0] for s in strips))
    assert heads == ["Patient first", "Best stretch", "Worst stretch"]
    page = render_page(report, strips)
    assert len(page.encode()) < 1_000_000 and "at least half" in Outline(page).text


def test_order_of_the_page():
    text = Outline(page_of(alarm_report())).text
    order = [
        "Patient first",
        "What to do now",
        CAUTION,
        "Repeat the recording",
        "Measurements",
        "lead by lead",
        "Tracing",
        "How this was decided",
        CAUTION,
    ]
    at = 0
    for words in order:
        at = text.index(words, at) + 1


@pytest.mark.parametrize("make", [make_report, empty_report, nan_report, alarm_report])
def test_caution_in_every_output(make, tmp_path):
    report = make()
    assert Outline(page_of(report)).text.count(CAUTION) == 2
    assert report.to_dict()["caution"] == CAUTION
    write_worklist([row_of(report)], tmp_path)
    assert CAUTION in (tmp_path / "index.html").read_text(encoding="utf-8")
    assert CAUTION in (tmp_path / "index.csv").read_text(encoding="utf-8")


@pytest.mark.parametrize("make", [empty_report, nan_report])
def test_what_is_unknown_never_reads_as_nan(make):
    report = make()
    signal = np.full((report.info.n_leads, report.info.n_samples), np.nan)
    assert not re.search(r"\b(nan|NaN|inf|None)\b", page_of(report, signal))
    assert measurable_words(empty_report()) == "nothing"


def test_hostile_names_stay_text():
    report = make_report(
        leads=EVIL,
        name=EVIL[1],
        profile_name=EVIL[0],
        notes=EVIL,
        advice=(Advice(1, "x", EVIL[0], EVIL[0], EVIL),),
    )
    page = page_of(report)
    clean, outline = (
        Outline(page_of(make_report(leads=("a", "b", "c", "d", "e"), notes=EVIL[:5]))),
        Outline(page),
    )
    assert {tag for tag, _ in outline.tags} <= {tag for tag, _ in clean.tags}
    assert not any(name.startswith("on") for _, attrs in outline.tags for name in attrs)
    for name in EVIL:
        assert name in outline.text
    rows = worklist_page([row_of(report, link=EVIL[1]), unreadable_row(EVIL[0], EVIL[2])])
    assert not {tag for tag, _ in Outline(rows).tags} & {"script", "img"}


def test_links_cannot_lead_elsewhere():
    rows = [
        WorklistRow(str(i), "accept", "", link=link)
        for i, link in enumerate(("javascript:alert(1)", "//far/away", "a b/report.html"))
    ]
    links = [attrs["href"] for tag, attrs in Outline(worklist_page(rows)).tags if tag == "a"]
    assert links == ["./javascript%3Aalert%281%29", "./far/away", "./a%20b/report.html"]


def test_identity_only_when_asked_for():
    report = make_report()
    assert "Inparticular" not in page_of(report) and "Inparticular" not in one_line(report)
    assert "Inparticular" in render_page(report, [], with_identity=True)


def test_odd_file_names_can_be_encoded():
    assert page_of(make_report(leads=("\udc80",), name="a\udcff")).encode("utf-8")


def decode(path: str) -> list[np.ndarray]:
    """Absolute points of each part of a path of the form ``Mx yl dx dy …``."""
    parts = []
    for start, steps in re.findall(r"M(-?\d+ -?\d+)l([^M]*)", path):
        moves = np.array(re.findall(r"-?\d+", steps), int).reshape(-1, 2)
        parts.append(np.cumsum(np.vstack((np.array(start.split(), int), moves)), axis=0))
    return parts


def test_trace_is_true_to_scale():
    fs_hz = 250.0
    x_uv = np.round(1000 * make_signal(("II",), fs_hz=fs_hz)[0])
    (points,) = decode(trace_path(x_uv, fs_hz=fs_hz, left=900, zero=1500.0))
    # One unit is 0.01 mm: 25 mm/s is 2500 units a second, 10 mm/mV is one unit a microvolt.
    np.testing.assert_array_equal(points[:, 0], 900 + np.arange(x_uv.size) * 10)
    np.testing.assert_array_equal(1500 - points[:, 1], x_uv)
    svg = strip_svg(StripData("II", 0.0, x_uv / 1000, fs_hz, np.zeros(0, np.int64)))
    width_mm, height_mm, box = re.search(
        r'width="([\d.]+)mm" height="([\d.]+)mm" viewBox="([^"]+)"', svg
    ).groups()
    _, _, width, height = map(float, box.split())
    assert (
        float(width_mm) * 100 == width
        and float(height_mm) * 100 == height
        and width == 900 + 10 * UNITS_PER_S
    )
    assert "v-1000h500v1000" in svg  # the reference mark: 1 mV high, 0.2 s wide


@pytest.mark.parametrize("fs_hz", [500.0, 1000.0, 977.0, 10_000.0])
def test_thinning_keeps_every_spike_and_every_gap(fs_hz):
    x_uv = np.zeros(round(10 * fs_hz))
    spikes = np.random.default_rng(2).choice(x_uv.size // 50, 30, replace=False) * 50 + 7
    x_uv[spikes] = 3000.0  # one sample wide, as a pacing spike can be
    gap = slice(x_uv.size // 2 + 8, x_uv.size // 2 + 8 + round(0.2 * fs_hz))
    x_uv[gap] = np.nan
    parts = decode(trace_path(x_uv, fs_hz=fs_hz, left=0, zero=0.0))
    assert len(parts) == 2
    seen = np.concatenate(parts)
    wanted = np.rint(spikes[np.isfinite(x_uv[spikes])] * 2500 / fs_hz)
    np.testing.assert_array_equal(np.unique(seen[seen[:, 1] == -3000, 0]), np.unique(wanted))
    assert len(seen) <= 10 * 400


def test_trace_without_samples():
    assert trace_path(np.full(100, np.nan), fs_hz=250.0, left=0, zero=0.0) == ""
    assert "<title>" in strip_svg(StripData("II", 0.0, np.full(100, np.nan), 250.0, np.zeros(0, np.int64)))


def test_short_recording_is_shown_whole_in_rows_of_ten_seconds():
    report = make_report(leads=("ECG",), duration_s=30.0, fs_hz=300.0)
    signal = make_signal(("ECG",), duration_s=30.0, fs_hz=300.0)
    strips = choose_strips(report, lambda a, b: signal[:, a:b])
    np.testing.assert_array_equal(np.concatenate([s.x_mv for s in strips]), signal[0])
    beats = np.concatenate([s.beats + round(s.start_s * 300) for s in strips])
    np.testing.assert_array_equal(beats, report.lead_beats["ECG"])


def test_map_shows_the_grade_that_half_reach():
    table = make_segments(("II", "V1"), duration_s=MAX_COLUMNS * 40.0)
    table.grade[:] = 3
    table.grade[:16:2] = [0, 0, 3, 3, 0, 1, 1, 1]  # lead II, the first two columns of four segments each
    found = grade_map(table, duration_s=MAX_COLUMNS * 40.0)
    assert found.aggregated and found.grade.shape == (2, MAX_COLUMNS)
    assert found.grade[0, :3].tolist() == [3, 1, 3] and (found.grade[1] == 3).all()


def test_map_leaves_holes_open_and_takes_an_empty_table():
    table = make_segments(("II",), duration_s=50.0)
    holed = table.rows(np.array([True, True, False, True, True]))
    assert grade_map(holed, duration_s=50.0).grade.shape == (1, 4)
    assert page_of(make_report(leads=("II",), segments=table.rows(np.zeros(5, bool))))
    long = make_segments(("II",), duration_s=MAX_COLUMNS * 40.0)
    hole = (long.start_s > 4000) & (long.start_s < 8000)
    found = grade_map(long.rows(~hole), duration_s=MAX_COLUMNS * 40.0)
    assert (found.grade[0] == NO_DATA).sum() >= 95


def test_one_line():
    line = one_line(make_report())
    assert line.startswith(
        "morning: accept in part; can be trusted: rate, PR, QRS and ST in 3 of 12 leads; Reapply"
    )
    alarmed = one_line(alarm_report(judgement=Judgement("accept", ())))
    assert alarmed.startswith("PATIENT FIRST: looks like fibrillation")
    assert "after that accept" in alarmed and "after that" not in line
    page = page_of(alarm_report(judgement=Judgement("accept", ())))
    assert "<title>Patient first: " in page and "Patient first, after that: Accept" in page
    assert "Patient first" not in page_of(make_report())
    hostile = one_line(make_report(name="x\n\x1b[2Jy\u202e"))
    assert "\n" not in hostile and "\x1b" not in hostile and "\u202e" not in hostile


def test_worklist_order_and_csv():
    rows = [WorklistRow(s, s, "") for s in ("accept", "accept-in-part", "repeat")]
    rows += [
        unreadable_row("bad", "bad.dat: cannot be read"),
        WorklistRow("now", "accept", "see", patient_first=True),
    ]
    assert [row.name for row in by_urgency(rows)] == ["now", "bad", "repeat", "accept-in-part", "accept"]
    back = list(csv.DictReader(io.StringIO(worklist_csv(rows), newline="")))
    assert [row["name"] for row in back] == ["now", "bad", "repeat", "accept-in-part", "accept"]
    assert back[0]["patient_first"] == "true" and all(row["caution"] == CAUTION for row in back)
    row = row_of(make_report())
    assert row.electrode == "LA" and row.to_do.startswith("Reapply") and row.main_fault
    with pytest.raises(UsageError):
        WorklistRow("x", "reject", "")


def test_words():
    assert [clock(t) for t in (4, 125, 3725, 183_600)] == ["4 s", "2:05", "1:02:05", "2 d 03:00:00"]
    assert clock(9.96, decimals=1) == "10 s" and clock(125.25, decimals=1) in ("2:05.2", "2:05.3")
    assert [duration_words(t) for t in (9.6, 303, 3600, 1_130_400)] == [
        "9.6 s",
        "5 min 3 s",
        "1 h",
        "13 d 2 h",
    ]
    assert (listing([]), listing("a"), listing("abc")) == ("", "a", "a, b and c")


def test_what_was_accepted_is_not_to_be_recorded_again():
    wait = Advice(1, "wait-and-repeat", None, "Lie still, then record again.")
    mains = Advice(2, "cut-mains", None, "Keep the mains cable away.")
    fine = make_report(judgement=Judgement("accept"), advice=(wait, mains))
    assert one_line(fine).endswith("next time: Keep the mains cable away")
    assert row_of(fine).to_do == "Nothing. Next time: Keep the mains cable away."
    assert "record again" not in Outline(page_of(fine)).text
    alone = make_report(judgement=Judgement("accept"), advice=(wait,))
    assert row_of(alone).to_do == "Nothing." and "record again" not in one_line(alone)
    again = make_report(judgement=Judgement("repeat"), advice=(wait, mains))
    assert one_line(again).endswith("Lie still, then record again")


def test_no_fault_is_named_where_somebody_must_look_at_the_patient():
    assert row_of(make_report()).main_fault and not row_of(alarm_report()).main_fault
    assert "movement" in map_svg(make_report()) and "movement" not in map_svg(alarm_report())
    assert "patient first" in map_svg(alarm_report())
    report = alarm_report()
    strips = choose_strips(report, lambda first, last: make_signal()[:, first:last])
    assert {d.text for strip in strips for d in strip.disturbed} == {"patient first"}


def test_the_page_tells_once_to_look_at_the_patient():
    look = Advice(1, "look-at-patient", "patient", "Look at the patient now, before the leads.", ("why.",))
    text = Outline(page_of(alarm_report(advice=(look,)))).text
    assert text.count("Look at the patient now, before the leads.") == 1
