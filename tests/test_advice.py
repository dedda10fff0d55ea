from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from segment_tables import LEADS_12, random_table, set_absent, spoil, table, tens

from sigguard.advice import advise, seconds_lost
from sigguard.findings import PatientFirst, Placement, WonBack


def acts(segments, won=(), **found):
    return [(a.action, a.target) for a in advise(segments, won, **found)]


def test_nothing_needed_when_all_is_fit():
    (only,) = advise(table(LEADS_12))
    assert (only.rank, only.action, only.target, only.text) == (1, "nothing", None, "Nothing needs doing.")
    assert only.because == ("100 % of all that could be measured can be trusted",)
    assert only.gain_s is None


def test_an_absent_wave_is_nothing_to_mend():
    segments = table(("II",))
    set_absent(segments, "II", "pr", "no-wave")
    assert acts(segments) == [("nothing", None)]


def test_no_segment_and_nothing_found_gives_no_advice():
    assert advise(table().rows(np.zeros(1, bool))) == ()


def test_seconds_lost_are_counted_from_the_table_by_hand():
    segments = spoil(table(("I", "II"), tens(3)), "II", ("pr", "st"), at=slice(0, 2))
    seconds, whole_s = seconds_lost(segments)
    assert seconds.tolist() == [0, 20, 0, 20, 0, 0] and whole_s == 2 * 30 * 5
    alarm = PatientFirst(("II",), 4, 9, "standstill", "")
    seconds, whole_s = seconds_lost(segments, [alarm])
    assert seconds.sum() == 20 and whole_s == 2 * 20 * 5


def test_an_act_keeps_its_rank_its_seconds_and_its_reason():
    segments = spoil(table(LEADS_12), "V2")
    won = (
        WonBack("reapply-electrode", "LA", 250.0, ("I",), ("LA carries 310 µV",)),
        WonBack("cut-mains", None, 40.0, ("II",), ("hum of 80 µV",)),
    )
    first, second = advise(segments, won)
    assert (first.rank, first.action, first.target, first.gain_s) == (1, "reapply-electrode", "LA", 250.0)
    assert first.text.startswith("Reapply the left arm (LA) electrode: clean and dry")
    assert first.because == ("LA carries 310 µV",)
    assert (second.rank, second.action, second.gain_s) == (2, "cut-mains", 40.0)


@pytest.mark.parametrize(
    ("action", "target", "word"),
    [
        ("relax-muscles", None, "say so on the tracing: it alters amplitudes"),
        ("cut-mains", None, "right-leg electrode"),
        ("lower-gain", None, "Lower the gain of V2"),
        ("check-wire", "C2", "wire of chest electrode C2 (lead V2)"),
        ("check-wire", "patient cable", "wire of the patient cable"),
        ("check-contact", "C2", "the patient's own"),
        ("record-wider", None, "0.05 to 150 Hz"),
        ("wait-and-repeat", None, "lie still and breathe quietly"),
        ("reapply-electrode", "lead aVF", "the electrodes of lead aVF"),
    ],
)
def test_each_act_has_its_words(action, target, word):
    (only,) = advise(spoil(table(LEADS_12), "V2"), [WonBack(action, target, 50.0, ("V2",), ("why",))])
    assert word in only.text


def test_what_wins_too_little_is_not_given():
    segments = spoil(table(("II",), tens(200)), "II", at=slice(0, 40))
    assert acts(segments, [WonBack("cut-mains", None, 99.0, ("II",))]) == [("wait-and-repeat", None)]
    assert acts(segments, [WonBack("cut-mains", None, 101.0, ("II",))]) == [("cut-mains", None)]


def test_loss_that_no_act_wins_back_is_said_to_be_so():
    (only,) = advise(spoil(table(LEADS_12), "V2"))
    assert (only.action, only.gain_s) == ("wait-and-repeat", None)
    assert only.because[0] == "8 % of all that could be measured cannot be trusted"
    assert "the patient's own" in only.because[1]


def test_little_is_not_worth_a_word():
    assert acts(spoil(table(("II",), tens(200)), "II", fault="motion", at=slice(0, 1))) == [("nothing", None)]


def test_the_patient_comes_first_then_the_placement():
    alarm = PatientFirst(("II",), 0, 20, "fibrillation-or-flutter", "looks like fibrillation.")
    swap = Placement("LA/RA", 0.93, "LA and RA look exchanged")
    unlikely = Placement("V1/V2", 0.2, "no")
    segments = spoil(table(("II",), tens(10)), "II", fault="motion", at=slice(0, 2))
    (only,) = advise(segments, patient_first=[alarm])
    assert (only.action, only.target, only.because) == (
        "look-at-patient",
        "patient",
        ("looks like fibrillation.",),
    )
    later = spoil(segments, "II", at=slice(4, 8))
    won = [WonBack("reapply-electrode", "C6", 150.0, ("II",), ("x",))]
    found = advise(later, won, patient_first=[alarm], placement=[unlikely, swap])
    assert [a.action for a in found] == ["look-at-patient", "check-placement", "reapply-electrode"]
    assert found[1].because == ("LA and RA look exchanged", "probability 93 %")


@settings(max_examples=30, deadline=None)
@given(
    st.builds(random_table, st.integers(1, 12), st.integers(1, 10), st.integers(0, 999)),
    st.integers(0, 7),
    st.integers(1, 5),
)
def test_at_most_so_many_ranked_from_one(segments, n_acts, at_most):
    alarm = PatientFirst(("I",), 0, 4, "standstill", "")
    won = [WonBack("reapply-electrode", f"C{k}", 1e4 - k, ("I",), ("x",)) for k in range(n_acts)]
    found = advise(segments, won, patient_first=[alarm], at_most=at_most)
    assert 1 <= len(found) <= at_most
    assert [a.rank for a in found] == list(range(1, len(found) + 1))
    assert found[0].action == "look-at-patient"
    assert all(a.text and a.because for a in found)
