"""More patient-first stretches than can be told one by one are told joined, and none is lost."""

from __future__ import annotations

import json

import numpy as np

from sigguard.findings import PatientFirst, under_alarm
from sigguard.patient_first import join_to_at_most
from sigguard.report.document import MAX_ALARMS
from tests.report.factory import make_report

PATTERNS = ("fibrillation-or-flutter", "wide-fast", "standstill")


def many(n: int) -> list[PatientFirst]:
    rng = np.random.default_rng(7)
    starts = np.sort(rng.uniform(0, 86_400, n))
    return [
        PatientFirst(("II",), float(t), float(t) + 4.0, PATTERNS[int(k)], "text")
        for t, k in zip(starts, rng.integers(0, 3, n), strict=True)
    ]


def test_all_time_and_every_pattern_stay_covered():
    found = many(4000)
    joined = join_to_at_most(found, 200)
    assert 3 <= len(joined) <= 200
    for pattern in PATTERNS:
        mine = [a for a in joined if a.pattern == pattern]
        for a in found:
            if a.pattern == pattern:
                assert any(b.start_s <= a.start_s and a.end_s <= b.end_s for b in mine)
    middle = np.array([a.start_s + 2.0 for a in found])
    assert under_alarm(joined, middle, middle + 0.01).all()


def test_the_shortest_pauses_go_first_and_the_text_counts():
    starts = (0.0, 10.0, 30.0, 31.0, 60.0)
    found = [
        PatientFirst((lead,), t, t + 5.0, "standstill", "no beat")
        for lead, t in zip("abcde", starts, strict=True)
    ]
    joined = join_to_at_most(found, 3)
    assert [(a.start_s, a.end_s, a.leads) for a in joined] == [
        (0.0, 15.0, ("a", "b")),
        (30.0, 36.0, ("c", "d")),
        (60.0, 65.0, ("e",)),
    ]
    assert joined[0].text.startswith("2 stretches: ") and joined[2].text == "no beat"


def test_evenly_spread_ones_are_not_all_made_one():
    found = [PatientFirst(("II",), 20.0 * k, 20.0 * k + 5.0, "standstill", "no beat") for k in range(4000)]
    assert len(join_to_at_most(found, 200)) == 200


def test_few_are_left_as_they_are():
    found = many(12)
    assert join_to_at_most(found, 12) == found
    assert make_report(patient_first=tuple(found)).patient_first_to_tell == tuple(found)


def test_the_document_stays_bounded():
    report = make_report(patient_first=tuple(many(20_000)), duration_s=86_400.0, leads=("II",), fs_hz=100.0)
    assert len(report.to_dict()["patient_first"]) <= MAX_ALARMS
    assert len(json.dumps(report.to_dict()["patient_first"])) < 150_000
