"""Broken lead laws: the cause is told, and a swap never breaks them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy.signal import butter, lfilter

from sigguard import read_recording
from sigguard.electrode_algebra import LEADS_12, swap_matrix
from sigguard.lead_laws import law_breaks, law_findings, scale_notes, usual_breaks
from sigguard.simulate.ecg import draw_scene, simulate

FS = 500.0


@pytest.fixture(scope="module")
def ecg_mv() -> np.ndarray:
    rng = np.random.default_rng(5)
    while True:  # one of ordinary size in all three limb leads
        x = simulate(draw_scene(rng, rhythm="sinus", fs_hz=FS, duration_s=10.0), rng).signal_mv
        if x[:3].std(axis=1).min() > 0.12:
            return x


def causes(x: np.ndarray) -> dict[str, str]:
    return {b.law: b.cause for b in law_breaks(x, FS, LEADS_12)}


@pytest.mark.parametrize("pair", [("RA", "LA"), ("RA", "LL"), ("LA", "LL"), ("RA", "C1"), ("C1", "C2")])
def test_no_swap_is_called_a_broken_law(ecg_mv, pair):
    assert law_breaks(swap_matrix(LEADS_12, *pair) @ ecg_mv, FS, LEADS_12) == ()


def test_rounding_to_coarse_steps_is_no_break(ecg_mv):
    assert law_breaks(np.round(ecg_mv / 0.01) * 0.01, FS, LEADS_12) == ()


@pytest.mark.parametrize("lead, samples", [("II", 5), ("I", -10), ("aVF", 15)])
def test_a_late_lead_is_named_with_its_delay(ecg_mv, lead, samples):
    x = ecg_mv.copy()
    x[LEADS_12.index(lead)] = np.roll(x[LEADS_12.index(lead)], samples)
    (found,) = law_breaks(x, FS, LEADS_12)
    assert (found.cause, found.lead) == ("late", lead)
    assert found.late_ms == pytest.approx(1e3 * samples / FS, abs=2.1)
    (finding,) = law_findings([found])
    assert finding.probability > 0.5 and "swap" not in finding.text and "cannot do this" in finding.text


def test_leads_scaled_apart_get_a_note_and_no_finding(ecg_mv):
    found = law_breaks(np.linspace(0.6, 1.9, 12)[:, None] * ecg_mv, FS, LEADS_12)
    assert {b.cause for b in found} == {"scaled"}
    assert law_findings(found) == () and "scaled apart" in scale_notes(found)[0]
    assert scale_notes(()) == ()


def test_a_filter_or_a_hole_of_its_own_is_corrupt(ecg_mv):
    x = ecg_mv.copy()
    x[0] = lfilter(*butter(2, 3.0, "high", fs=FS), x[0])
    assert causes(x)["Einthoven"] == "corrupt"
    y = ecg_mv.copy()
    y[1, 1000:3000] = 0.0
    assert causes(y)["Einthoven"] == "corrupt"


def test_nothing_is_said_without_the_leads_or_the_samples(ecg_mv):
    assert law_breaks(ecg_mv[:2], FS, LEADS_12[:2]) == ()
    assert law_breaks(np.full((12, 5000), np.nan), FS, LEADS_12) == ()
    flat = ecg_mv.copy()
    flat[:3] = 0.0
    assert "Einthoven" not in causes(flat)


def test_a_passing_break_is_not_that_of_the_recording(ecg_mv):
    broken = law_breaks(np.linspace(0.6, 1.9, 12)[:, None] * ecg_mv, FS, LEADS_12)
    assert usual_breaks([broken, (), (), ()]) == ()
    assert {b.law for b in usual_breaks([broken, broken, ()])} == {"Einthoven", "Goldberger"}


def test_hand_marked_records_are_scaled_apart_and_not_corrupt(open_data: Path) -> None:
    """Each lead of LUDB was brought to a range of 1 mV; the records tried are of the half that serves no tuning."""
    for k in range(3, 200, 8):
        read = read_recording(open_data / "ludb" / f"{k}.hea")
        found = law_breaks(read.signal_mv, read.fs_hz, read.leads)
        assert all(b.cause == "scaled" for b in found), k
