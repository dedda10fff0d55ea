"""Which take to keep, decided on made-up reports of known standing."""

from __future__ import annotations

import json
from dataclasses import replace

import pytest
from jsonschema import Draft202012Validator

from sigguard.compare import compare
from sigguard.errors import UsageError
from sigguard.findings import CAUTION, PatientFirst, Value
from sigguard.report.compare_page import render_comparison, write_comparison
from sigguard.report.comparison import load_compare_schema, one_line
from tests.report.factory import empty_report, make_report, make_values

FIB = PatientFirst(("II",), 2.0, 9.0, "fibrillation-or-flutter", "looks like it")


def take(leads=("I", "II"), *, duration_s=10.0, **change):
    """A report whose five measurements are all reliable; ``change`` replaces values by measurement."""
    values = {
        m: replace(v, reliable=True, reliable_s=duration_s, bound_95=10.0, leads=leads)
        for m, v in make_values(leads, duration_s=duration_s).items()
    }
    st = {
        lead: Value("mV", 0.01, None, None, 0.02, True, None, (lead,), duration_s) for lead in leads
    } | change.pop("st", {})
    values |= {m: replace(values[m], **facts) for m, facts in change.pop("values", {}).items()}
    return make_report(leads=leads, duration_s=duration_s, values=values, st_by_lead=st, **change)


def choice(found, measurement):
    return next(c for c in found.choices if c.measurement == measurement)


def test_reliable_before_bound_before_time_before_leads():
    doubt = {"reliable": False, "bound_95": 1.0}
    a = take(
        values={"pr": doubt, "qrs": {"bound_95": 6.0}, "qt": {"reliable_s": 30.0}, "rate": {"leads": ("I",)}}
    )
    b = take(values={"qrs": {"bound_95": 11.0}})
    found = compare([("a", a), ("b", b)])
    assert {m: choice(found, m).keep for m in ("pr", "qrs", "qt", "rate")} == {
        "pr": ("b",),
        "qrs": ("a",),
        "qt": ("a",),
        "rate": ("b",),
    }
    assert "the only one" in choice(found, "pr").because
    assert choice(found, "qrs").because == "± 6 ms against ± 11 ms (b)"
    assert choice(found, "qt").because == "± 10 ms alike, trusted for 30 s against trusted for 10 s (b)"
    assert choice(found, "rate").because.endswith("on 2 leads against on 1 lead (a)")


def test_order_of_the_takes_decides_nothing():
    a, b = (
        take(values={"qrs": {"bound_95": 6.0}}),
        take(values={"pr": {"bound_95": 3.0}, "qt": {"bound_95": 3.0}}),
    )
    one, other = compare([("a", a), ("b", b)]), compare([("b", b), ("a", a)])
    assert one.keep == other.keep == ("b",)
    assert [c.keep for c in one.choices] == [tuple(reversed(c.keep)) for c in other.choices]


def test_ties_are_named_as_ties():
    # 9.8 and 10.0 ms are both read as ± 10 ms
    found = compare([("a", take()), ("b", take(values={"pr": {"bound_95": 9.8}})), ("c", empty_report())])
    assert choice(found, "pr").keep == found.keep == ("a", "b")
    assert found.because.startswith("alike") and choice(found, "pr").because.startswith("alike")
    assert "a and b alike" in one_line(found)
    assert "Any one of them will do" in render_comparison(found)


def test_st_goes_by_the_number_of_leads_first():
    few = take(("I", "II"), st={"II": Value("mV", 0.0, bound_95=0.001)})
    found = compare([("few", few), ("many", take(("I", "II", "V1")))])
    st = choice(found, "st")
    assert st.keep == ("many",) and st.because == "on 3 leads against on 1 lead (few)"
    assert any("leads differ" in note and "I, II" in note for note in found.notes)


def test_a_take_with_a_patient_first_stretch_is_first_and_never_discarded():
    bad = empty_report(patient_first=(FIB,))
    found = compare([("good", take()), ("bad", bad)])
    assert found.keep == ("good",) and found.must_not_discard == ("bad",)
    line, page = one_line(found), render_comparison(found)
    assert (
        line.startswith("PATIENT FIRST: bad looks like fibrillation") and "discard nothing of bad |" in line
    )
    assert page.index("Discard nothing of bad") < page.index("takes compared") < page.index("Keep bad too")
    assert found.to_dict()["patient_first"][0]["take"] == "bad"


def test_values_apart_by_more_than_both_bounds_are_named():
    a = take(values={"qrs": {"value": 90.0, "bound_95": 6.0}, "pr": {"value": 150.0, "bound_95": 6.0}})
    b = take(values={"qrs": {"value": 103.0, "bound_95": 6.0}, "pr": {"value": 162.0, "bound_95": 6.0}})
    c = take(
        values={
            "qrs": {"value": 140.0, "bound_95": 6.0, "reliable": False},
            "pr": {"value": 155.0, "bound_95": 9.0},
        }
    )
    found = compare([("a", a), ("b", b), ("c", c)])
    assert [d.measurement for d in found.disagreements] == [
        "qrs"
    ]  # 12 of PR is what the bounds allow; c is not trusted
    assert (
        found.disagreements[0].takes == ("a", "b")
        and "13.0 apart, both bounds allow 12.0" in found.disagreements[0].text
    )
    assert "two patients, or a changed state" in one_line(found)


def test_an_st_level_that_moved_is_named_by_its_lead():
    low = {"II": Value("mV", -0.15, bound_95=0.02, reliable=True, leads=("II",), reliable_s=10.0)}
    found = compare([("a", take()), ("b", take(st=low))])
    (d,) = found.disagreements
    assert (d.measurement, d.lead, d.n_more) == ("st", "II", 0) and "−0.150" in d.text


def test_a_wave_that_one_take_has_and_the_other_not():
    gone = {"value": None, "bound_95": None, "reliable": False, "absent": "no-wave", "reliable_s": 0.0}
    found = compare([("a", take()), ("b", take(values={"pr": gone}))])
    assert [d.measurement for d in found.disagreements] == ["pr"] and "no such wave" in found.disagreements[
        0
    ].text
    both = compare([("a", take(values={"pr": gone})), ("b", take(values={"pr": gone}))])
    assert not both.disagreements and "no such wave" in choice(both, "pr").because
    assert len(both.keep) == 2  # an absent wave is no fault


def test_takes_of_different_length():
    short, long = take(values={"pr": {"bound_95": 5.0}}), take(duration_s=3600.0, profile_name="ambulatory")
    found = compare([("short", short), ("long", long)])
    assert choice(found, "pr").because == "± 5 ms against ± 10 ms (long), though for 10 s only, long for 1 h"
    assert any("differ in length" in n for n in found.notes) and any(
        "different rules" in n for n in found.notes
    )


def test_nothing_to_keep_and_one_take_alone():
    found = compare([("a", empty_report()), ("b", empty_report())])
    assert found.keep == () and "no take can be trusted" in one_line(found)
    alone = compare([("a", take())], unreadable=[("b", "b.hea: no signal")])
    assert alone.keep == ("a",) and "nothing to hold it against" in alone.notes[0]
    assert "b.hea: no signal" in render_comparison(alone)
    for wrong in ([], [("a", take()), ("a", take())]):
        with pytest.raises(UsageError):
            compare(wrong)


def test_the_document_validates_and_hostile_names_stay_text(tmp_path):
    evil = "<script>alert(1)</script>"
    found = compare([(evil, take()), ("b", empty_report(patient_first=(FIB,) * 60)), ("c", take(("V9",)))])
    write_comparison(found, tmp_path)
    document = json.loads((tmp_path / "compare.json").read_text(encoding="utf-8"))
    Draft202012Validator(load_compare_schema()).validate(document)
    page = (tmp_path / "compare.html").read_text(encoding="utf-8")
    assert document["caution"] == CAUTION and page.count(CAUTION) == 2
    assert evil not in page and "&lt;script&gt;" in page and "and 20 more such stretches" in page
    assert "http:" not in page and "https:" not in page
    assert [t["take"] for t in document["takes"]] == [evil, "b", "c"]
    bent = document | {"overall": {"keep": "b"}}
    assert not Draft202012Validator(load_compare_schema()).is_valid(bent)
