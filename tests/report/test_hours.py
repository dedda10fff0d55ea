"""The view of a long recording: minutes that add up, the longest fit time, nothing told as a fault under an alarm."""

from __future__ import annotations

import json
import re
import xml.etree.ElementTree as ET
from dataclasses import replace

import numpy as np
import pytest
from segment_tables import random_table, regrade, spoil, table, tens

from sigguard.findings import PatientFirst
from sigguard.report.hours import bin_length_s, hours, hours_svg, longest_rows, minutes_words, worst_words
from sigguard.report.page import render_page
from sigguard.report.strips import choose_strips
from sigguard.segments import FAULTS, GRADES, FaultDetails
from sigguard.spans import Stretch, lead_summaries, longest_run, longest_stretch, spans

from .factory import make_report, make_signal

MUSCLE = FAULTS.index("muscle")
ALARM = PatientFirst(("II",), 4000.0, 4100.0, "standstill", "no beat")


def report_of(segments, **change):
    duration_s = float(segments.end_s.max())
    return make_report(leads=segments.leads, duration_s=duration_s, fs_hz=100.0, segments=segments, **change)


def test_seconds_add_up_and_faults_count_once_over_leads():
    segments = table(("I", "II"), tens(720))  # 2 h, bins of 5 min
    spoil(segments, "I", ("pr",), fault="muscle", fraction=0.5, at=slice(0, 60))
    spoil(segments, "II", ("rate",), fault="muscle", fraction=1.0, at=slice(30, 90))
    found = hours(report_of(segments))
    assert found.bin_s == 300.0 and found.length_s.tolist() == [300.0] * 24
    assert np.allclose(found.grade_s.sum(axis=2), 300.0)
    assert (
        found.grade_s[1, 1, GRADES.index("none")] == 300.0
        and found.grade_s[0, 0, GRADES.index("rhythm")] == 300.0
    )
    # first bin: half of each segment of I; second: all of II, which I does not add to
    assert found.fault_s[:4, MUSCLE].tolist() == [150.0, 300.0, 300.0, 0.0]


def test_what_may_be_a_lethal_rhythm_is_not_under_what_spoils():
    segments = spoil(table(("II",), tens(720)), "II", fault="muscle")
    found = hours(report_of(segments, patient_first=(ALARM, replace(ALARM, start_s=4050.0, end_s=4110.0))))
    assert found.alarm_s.sum() == pytest.approx(110.0)  # overlaps count once
    assert found.fault_s[:, MUSCLE].sum() == pytest.approx(7200.0 - 110.0)
    assert "patient first, 1:05:00 to 1:10:00: 1.8 min" in hours_svg(found)


def test_a_last_bin_that_is_short_and_a_table_with_a_hole():
    times = tuple(t for t in tens(190) if not 600 <= t[0] < 900)
    found = hours(report_of(table(("II",), times)))
    assert found.length_s[-1] == pytest.approx(1900 - 6 * 300) and found.grade_s[2].sum() == 0.0
    assert ET.fromstring(hours_svg(found)) is not None


@pytest.mark.parametrize("n_leads", [1, 3, 12, 64])
@pytest.mark.parametrize("duration_s", [1800.0, 7200.0, 86_400.0, 14 * 86_400.0, 400 * 86_400.0])
def test_few_enough_bins(n_leads, duration_s):
    n = np.ceil(duration_s / bin_length_s(duration_s, n_leads))
    assert 6 <= n <= 26 and n * n_leads <= 1300


def test_the_longest_stretch_by_hand():
    segments = table(("I", "II"), tens(10))
    segments.reliable[:] = False
    on = np.array([0, 1, 1, 1, 0, 1, 1, 0, 0, 1], bool)
    also = np.array([1, 0, 1, 1, 0, 1, 1, 1, 1, 0], bool)
    segments.reliable[::2, 0], segments.reliable[1::2, 0] = on, also
    column = segments.reliable[:, 0]
    assert longest_stretch(segments, column) == Stretch(50.0, 90.0, 1)
    assert longest_run(segments, column) == (40.0, 1)
    assert longest_stretch(segments, column, every=True) == Stretch(20.0, 40.0, None)
    assert longest_stretch(segments, column & False) is None and longest_run(segments, column & False) == (
        0.0,
        None,
    )
    rows = {row.what: row for row in longest_rows(regrade(segments))}
    assert rows["rate"].in_one == "40 s in II, from 50 s" and rows["rate"].in_all == "20 s, from 20 s"
    assert rows["everything"].in_one == "never"


def test_the_longest_time_without_a_rate_leaves_alarms_out():
    segments = spoil(table(("I", "II"), tens(720)), "I", ("rate",), at=slice(350, 500))
    assert worst_words(report_of(segments)) == ""
    spoil(segments, "II", ("rate",), at=slice(380, 430))  # 3800 to 4300 s, the alarm from 4000 to 4100
    assert worst_words(report_of(segments)) == "8 min 20 s, from 1:03:20"
    assert worst_words(report_of(segments, patient_first=(ALARM,))) == "3 min 20 s, from 1:03:20"


def test_the_worst_stretch_shown_is_no_alarm_and_has_a_signal():
    segments = table(("II",), tens(720))
    spoil(segments, "II", fault="muscle", at=[100])
    spoil(segments, "II", fault="missing", at=[200, 201])
    spoil(segments, "II", at=slice(400, 410))  # under the alarm
    segments.fault[400:410] = 1.0
    strips = choose_strips(
        report_of(segments, patient_first=(ALARM,)),
        lambda a, b: make_signal(("II",), duration_s=(b - a) / 100.0, fs_hz=100.0),
    )
    assert [s.heading for s in strips if s.heading.startswith("Worst")] == ["Worst stretch: from 16:40"]


def test_minutes():
    assert [minutes_words(s) for s in (1.0, 30.0, 594.0, 600.0)] == [
        "under 0.1 min",
        "0.5 min",
        "9.9 min",
        "10 min",
    ]


def test_only_a_long_recording_has_the_view():
    assert 'class="map hours"' not in render_page(make_report(duration_s=600.0, fs_hz=100.0))
    page = render_page(make_report(duration_s=3600.0, fs_hz=100.0, leads=("I", "<b>II")))
    assert 'class="map hours"' in page and "Longest on end" in page and "<b>II" not in page


def worst_day(n_leads: int, seed: int):
    """A day on which everything changes all the time, every fault on and off by the second."""
    rng = np.random.default_rng(seed)
    segments = random_table(n_leads, 8640, seed)
    segments.fault[:] = rng.random(segments.fault.shape).astype(np.float32)
    n = len(segments)
    details = FaultDetails(
        weight=rng.random((n, 9)).astype(np.float32),
        harms=rng.random((n, 9, 5)) < 0.5,
        strength=rng.random((n, 9)).astype(np.float32),
        windows=rng.integers(0, 1023, (n, 9)).astype(np.uint64),
        n_windows=np.full(n, 10, np.uint8),
    )
    return replace(segments, details=details)


@pytest.mark.parametrize("n_leads", [3, 12])
def test_the_worst_day_stays_bounded(n_leads):
    segments = worst_day(n_leads, 1)
    alarms = tuple(
        PatientFirst(
            (segments.leads[0],), 20.0 * k, 20.0 * k + 5.0, "standstill", "no beat to be seen for 3 s or more"
        )
        for k in range(4320)
    )
    report = report_of(
        segments,
        lead_summaries=lead_summaries(segments),
        spans=spans(segments, 86_400.0),
        patient_first=alarms,
    )
    rng = np.random.default_rng(0)
    strips = choose_strips(report, lambda a, b: rng.normal(0, 2.0, (n_leads, b - a)))
    assert len(render_page(report, strips).encode()) < 1_500_000
    text = report.to_json(indent=1)
    assert len(text.encode()) < 4_000_000 and len(json.loads(text)["spans"]) <= 2000
    lists = [f.get("when", []) for lead in report.to_dict()["leads"] for f in lead["faults"]]
    assert len(lists) == 9 * n_leads and max(map(len, lists)) <= 200
    assert not re.search(r"\bNaN\b", text)
