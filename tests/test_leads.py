"""Lead names in all their spellings."""

from __future__ import annotations

import pytest

from sigguard.leads import STANDARD_LEADS, normalise_lead, normalise_leads


@pytest.mark.parametrize("lead", STANDARD_LEADS)
@pytest.mark.parametrize(
    "spelling", ["{}", "ECG {}", "lead {}", "MDC_ECG_LEAD_{}", "EKG_{}", "{} [mV]", " {} ", "ECG lead {}"]
)
@pytest.mark.parametrize("case", [str, str.lower, str.upper])
def test_standard_leads_in_any_dress(lead: str, spelling: str, case):
    assert normalise_lead(spelling.format(case(lead))) == lead


@pytest.mark.parametrize(
    ("name", "lead"),
    [
        ("MLII", "MLII"),
        ("ML II", "MLII"),
        ("ml2", "MLII"),
        ("modified II", "MLII"),
        ("DII", "II"),
        ("a-VR", "aVR"),
        ("-aVR", "-aVR"),
        ("ECG -aVR", "-aVR"),
        ("MDC_ECG_LEAD_AVRneg", "-aVR"),
        ("V01", "V1"),
        ("v3r", "V3R"),
        ("rV4", "V4R"),
        ("V2R", "V2R"),
        ("\N{MINUS SIGN}aVR", "-aVR"),
        ("vx", "X"),
        ("MCL-1", "MCL1"),
        ("CM-5", "CM5"),
        ("Lead I (Einthoven)", "I"),
        ("MDC_ECG_LEAD_dI", "dI"),
        ("dI", "dI"),
        ("DI", "I"),
        ("VR", "VR"),
    ],
)
def test_aliases(name: str, lead: str):
    assert normalise_lead(name) == lead


@pytest.mark.parametrize(
    "name", ["V", "ECG", "ECG1", "A", "D", "F", "noise1", "NASA", "Lead 1", "D3", "L1", "C3", "MV5", "R"]
)
def test_names_that_tell_nothing_stay(name: str):
    assert normalise_lead(name) == name


def test_control_characters_and_length():
    assert normalise_lead("II\x1b[31m\n") != "" and all(
        c.isprintable() for c in normalise_lead("x\x1b[31m\ny")
    )
    assert len(normalise_lead("x" * 500)) == 40


def test_sets_of_leads():
    assert normalise_leads(["D1", "D2", "D3"]) == ("I", "II", "III")
    assert normalise_leads(["D3", "CM5"]) == ("D3", "CM5")
    assert normalise_leads(["I", "C1", "C2"]) == ("I", "V1", "V2")
    assert normalise_leads(["C3", "C4"]) == ("C3", "C4")
    assert normalise_leads(["II", "ii", "DII"]) == ("II", "II#2", "II#3")


@pytest.mark.parametrize("lead", [*STANDARD_LEADS, "MLII", "X", "-aVR", "CM5", "dI", "V7", "ECG", "V"])
def test_normalising_twice_changes_nothing(lead: str):
    assert normalise_lead(normalise_lead(lead)) == normalise_lead(lead)
