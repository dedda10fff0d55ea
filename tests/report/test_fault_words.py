"""What a report says of faults: strength and stretches in the document, on the page and over the strips."""

from __future__ import annotations

from dataclasses import replace

import jsonschema
import numpy as np
import pytest

from report.factory import make_report
from sigguard.findings import Fault
from sigguard.report.document import load_schema
from sigguard.report.page import _lead_row
from sigguard.report.strips import choose_strips, strip_svg
from sigguard.report.words import strength_words
from sigguard.segments import FAULTS, STRENGTH_UNITS, FaultDetails

MUSCLE, MOTION = FAULTS.index("muscle"), FAULTS.index("motion")


def with_bursts():
    """Lead I: muscle from 2 to 4 s, movement from 3 to 4 and from 7 to 8 s; nothing elsewhere."""
    report = make_report()
    segments = report.segments
    n = len(segments)
    fault = np.zeros_like(segments.fault)
    fault[0, [MUSCLE, MOTION]] = 0.2, 0.2
    windows = np.zeros((n, 9), np.uint64)
    windows[0, MUSCLE], windows[0, MOTION] = 0b1100, 0b10001000
    weight = np.zeros((n, 9), np.float32)
    weight[0, [MUSCLE, MOTION]] = 0.1, 2.0
    details = FaultDetails(
        weight=weight,
        harms=np.zeros((n, 9, 5), bool),
        strength=np.full((n, 9), 40.0, np.float32),
        windows=windows,
        n_windows=np.full(n, 10, np.uint8),
    )
    return replace(report, segments=replace(segments, fault=fault, details=details), patient_first=())


def test_strips_hatch_the_seconds_of_each_fault_costliest_first():
    report = with_bursts()
    info = report.info
    strips = choose_strips(report, lambda a, b: np.zeros((info.n_leads, b - a)))
    first = next(s for s in strips if s.lead == info.leads[0] and s.start_s == 0)
    assert [(d.start_s, d.end_s, d.text) for d in first.disturbed] == [
        (2.0, 3.0, "muscle or tremor"),
        (3.0, 4.0, "movement, muscle or tremor"),
        (7.0, 8.0, "movement"),
    ]
    svg = strip_svg(first)
    assert svg.count('class="extent"') == 3 and "<title>movement, muscle or tremor</title>" in svg
    # Words that would run into those before are left to the title.
    assert svg.count('class="why"') == 2


def test_strength_and_stretches_are_in_the_document_and_validate():
    report = make_report()
    summary = replace(
        report.lead_summaries[0],
        faults=(
            Fault("muscle", 0.2, ("pr",), 41.23456, "uV rms", ((2.0, 4.0),)),
            Fault("narrow-band", 1.0),
        ),
    )
    found = replace(report, lead_summaries=(summary, *report.lead_summaries[1:])).to_dict()
    jsonschema.validate(found, load_schema())
    muscle, narrow = found["leads"][0]["faults"]
    assert muscle == {
        "kind": "muscle", "fraction": 0.2, "harms": ["pr"], "strength": 41.235, "unit": "uV rms", "when": [[2.0, 4.0]],
    }  # fmt: skip
    assert set(narrow) == {"kind", "fraction", "harms"}
    assert _lead_row(summary).faults[0] == "muscle or tremor, 41 µV rms, 20 %: harms PR"


def test_the_schema_knows_every_unit():
    known = load_schema()["properties"]["leads"]["items"]["properties"]["faults"]["items"]["properties"][
        "unit"
    ]
    assert set(known["enum"]) == set(STRENGTH_UNITS) - {""}


@pytest.mark.parametrize(
    ("value", "unit", "words"),
    [(25.4, "uV rms", "25 µV rms"), (2.34, "uV rms", "2.3 µV rms"), (1234, "uV range", "1.2 mV range"), (2.04, "s", "2.0 s")],
)  # fmt: skip
def test_strength_in_words(value, unit, words):
    assert strength_words(value, unit) == words
