from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from segment_tables import LEADS_12, random_table, set_absent, spoil, table, tens

from sigguard.advice import advise
from sigguard.findings import ElectrodeNoise, PatientFirst, Placement
from sigguard.grading import lead_summaries


def advice(segments, **found):
    return advise(segments, lead_summaries(segments), **found)


def acts(segments, **found):
    return [(a.action, a.target) for a in advice(segments, **found)]


def noise(worst, share=0.85, noise_uv=310.0):
    """One electrode with most of the power, the rest spread evenly."""
    names = ("RA", "LA", "LL", "C1", "C2", "C3", "C4", "C5", "C6")
    other = noise_uv * np.sqrt((1 - share) / share / 8)
    rest = [ElectrodeNoise(name, other, (1 - share) / 8) for name in names if name != worst]
    return [ElectrodeNoise(worst, noise_uv, share), *rest]


def test_nothing_needed_when_all_is_fit():
    (only,) = advice(table(LEADS_12))
    assert (only.rank, only.action, only.target, only.text) == (1, "nothing", None, "Nothing needs doing.")
    assert only.because == ("100 % of all that could be measured can be trusted",)


def test_an_absent_wave_is_nothing_to_mend():
    segments = table(("II",))
    set_absent(segments, "II", "pr", "no-wave")
    assert acts(segments) == [("nothing", None)]


def test_no_segment_and_nothing_found_gives_no_advice():
    assert advice(table().rows(np.zeros(1, bool))) == ()


def test_the_electrode_that_carries_the_disturbance_is_named_with_its_numbers():
    segments = table(LEADS_12)
    for lead in ("I", "III", "aVL"):
        spoil(segments, lead, fault="motion", fraction=0.8)
    (only,) = advice(segments, electrodes=noise("LA"))
    assert (only.action, only.target) == ("reapply-electrode", "LA")
    assert only.text.startswith("Reapply the left arm (LA) electrode: clean and dry")
    assert only.because == (
        "movement in 3 of 12 leads, up to 80 % of I",
        "LA carries 85 % of the disturbance, 310 µV",
        "costs 25 % of all that could be measured",
    )


def test_without_an_outstanding_electrode_the_patient_lies_still():
    segments = table(LEADS_12)
    for lead in LEADS_12[:4]:
        spoil(segments, lead, fault="motion")
    assert acts(segments, electrodes=noise("LA", share=1 / 9)) == [("wait-and-repeat", None)]


@pytest.mark.parametrize(
    ("hit", "target"),
    [
        (("I", "II"), "RA"),
        (("I", "III"), "LA"),
        (("II", "III", "aVF"), "LL"),
        (("V3",), "C3"),
        (("aVF",), "lead aVF"),
    ],
)
def test_without_an_estimate_the_leads_tell_the_electrode(hit, target):
    segments = table(LEADS_12)
    for lead in hit:
        spoil(segments, lead, fault="wander")
    assert acts(segments) == [("reapply-electrode", target)]


@pytest.mark.parametrize(
    ("fault", "action", "word"),
    [
        ("muscle", "relax-muscles", "say so on the tracing: it alters amplitudes"),
        ("mains", "cut-mains", "right-leg electrode"),
        ("clipped", "lower-gain", "Lower the gain of V2"),
        ("flat", "check-wire", "wire of chest electrode C2 (lead V2)"),
        ("missing", "check-wire", "plugged in"),
        ("weak", "check-contact", "the patient's own"),
        ("narrow-band", "record-wider", "0.05 to 150 Hz"),
        (None, "wait-and-repeat", "lie still"),
    ],
)
def test_each_fault_has_its_act(fault, action, word):
    (only,) = advice(spoil(table(LEADS_12), "V2", fault=fault))
    assert only.action == action
    assert word in only.text
    assert only.because[-1] == "costs 8 % of all that could be measured"


def test_a_flat_recording_is_a_matter_of_the_cable():
    segments = table(("I", "II"))
    for lead in ("I", "II"):
        spoil(segments, lead, fault="flat")
    assert acts(segments) == [("check-wire", "patient cable")]


def test_ranked_by_what_would_be_won_back():
    segments = table(LEADS_12, tens(10))
    spoil(segments, "V1", ("st",), fault="wander", fraction=1.0)  # 100 measurement-seconds
    spoil(segments, "V2", fault="mains", at=slice(0, 4))  # 200
    for lead in ("I", "II", "III"):  # 450
        spoil(segments, lead, fault="muscle", at=slice(0, 3))
    assert acts(segments) == [("relax-muscles", None), ("cut-mains", None), ("reapply-electrode", "C1")]


def test_the_larger_fault_of_a_segment_takes_the_loss():
    segments = table(("II",))
    spoil(segments, "II", fault="muscle", fraction=0.3)
    spoil(segments, "II", fault="clipped", fraction=0.6)
    spoil(segments, "II", fault="narrow-band", fraction=1.0)  # lies on all of the lead by its nature
    assert acts(segments) == [("lower-gain", None)]


def test_little_is_not_worth_a_word():
    assert acts(spoil(table(("II",), tens(200)), "II", fault="motion", at=slice(0, 1))) == [("nothing", None)]


def test_the_patient_comes_first_and_what_lies_there_is_no_noise():
    alarm = PatientFirst(("II",), 0, 20, "fibrillation-or-flutter", "looks like fibrillation.")
    segments = spoil(table(("II",), tens(10)), "II", fault="motion", at=slice(0, 2))
    (only,) = advice(segments, patient_first=[alarm])
    assert (only.action, only.target, only.because) == (
        "look-at-patient",
        "patient",
        ("looks like fibrillation.",),
    )
    later = spoil(segments, "II", fault="motion", at=slice(4, 8))
    assert [a[0] for a in acts(later, patient_first=[alarm])] == ["look-at-patient", "reapply-electrode"]


def test_placement_goes_before_noise():
    swap = Placement("LA/RA", 0.93, "LA and RA look exchanged")
    unlikely = Placement("V1/V2", 0.2, "no")
    segments = spoil(table(LEADS_12), "V6", fault="motion")
    first, second = advice(segments, placement=[unlikely, swap])
    assert (first.action, first.target) == ("check-placement", "LA/RA")
    assert first.because == ("LA and RA look exchanged", "probability 93 %")
    assert second.target == "C6"


@settings(max_examples=30, deadline=None)
@given(
    st.builds(random_table, st.integers(1, 12), st.integers(1, 10), st.integers(0, 999)), st.integers(1, 5)
)
def test_at_most_so_many_ranked_from_one_each_place_once(segments, at_most):
    alarm = PatientFirst(("I",), 0, 4, "standstill", "")
    found = advise(segments, lead_summaries(segments), patient_first=[alarm], at_most=at_most)
    assert 1 <= len(found) <= at_most
    assert [a.rank for a in found] == list(range(1, len(found) + 1))
    assert found[0].action == "look-at-patient"
    assert len({(a.action, a.target) for a in found}) == len(found)
    assert all(a.text and a.because for a in found)
