"""Misplaced electrodes: the algebra of swaps, what may and may not change the judgement, silence where nothing can be told."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import sigguard
from sigguard.electrodes import LEADS_12, einthoven_error, goldberger_error, swap_matrix
from sigguard.errors import ModelError
from sigguard.global_values import analyse_global
from sigguard.placement import find_placement
from sigguard.placement_model import (
    CHEST_HYPOTHESES,
    LIMB_HYPOTHESES,
    PlacementModel,
    restoring,
    shipped_placement_model,
)
from sigguard.simulate.misplacement import electrode_potentials, misplaced, misplaced_potentials

CLEAN = Path(__file__).resolve().parents[1] / "synthetic" / "demo" / "01-clean.hea"
RNG = np.random.default_rng(3)
LEADS = np.linalg.qr(RNG.standard_normal((500, 8)))[0].T
TRANSPOSITIONS = [name for name in LIMB_HYPOTHESES[1:4]]


def twelve(independent: np.ndarray) -> np.ndarray:
    """(12, N) leads that obey the laws, out of I, II, V1 to V6."""
    i, ii = independent[:2]
    limb = [i, ii, ii - i, -(i + ii) / 2, i - ii / 2, ii - i / 2]
    return np.concatenate([limb, independent[2:]])


@pytest.fixture(scope="module")
def clean() -> tuple[np.ndarray, float]:
    recording = sigguard.read_recording(CLEAN)
    order = [list(recording.leads).index(name) for name in LEADS_12]
    return recording.signal_mv[order], recording.fs_hz


def findings(x_mv: np.ndarray, fs_hz: float, leads=LEADS_12, fit=None) -> dict[str, float]:
    found = analyse_global(x_mv[None], fs_hz)
    fit = np.ones(len(leads), dtype=bool) if fit is None else fit
    return {
        p.finding: p.probability for p in find_placement(found.beat_mv[0], found.marks_ms[0], leads, fit=fit)
    }


# ── laws of the simulated swaps ──


@pytest.mark.parametrize("name", LIMB_HYPOTHESES)
def test_swapped_limb_leads_still_obey_einthoven_and_goldberger(name: str) -> None:
    y = misplaced(twelve(LEADS), name)
    assert einthoven_error(y, LEADS_12) < 1e-9
    assert goldberger_error(y, LEADS_12) < 1e-9


@pytest.mark.parametrize("name", [*TRANSPOSITIONS, *CHEST_HYPOTHESES[1:]])
def test_the_same_swap_twice_gives_the_original(name: str) -> None:
    x = twelve(LEADS)
    assert np.allclose(misplaced(misplaced(x, name), name), x, atol=1e-12)
    assert not np.allclose(misplaced(x, name), x, atol=1e-3)


def test_the_same_rotation_thrice_gives_the_original_and_the_other_undoes_it() -> None:
    x, one, other = twelve(LEADS), *LIMB_HYPOTHESES[4:6]
    assert np.allclose(misplaced(misplaced(misplaced(x, one), one), one), x)
    assert np.allclose(misplaced(misplaced(x, one), other), x)


@pytest.mark.parametrize("name", TRANSPOSITIONS)
def test_swaps_agree_with_the_lead_algebra(name: str) -> None:
    first, second = name.split()[0].split("/")
    x = twelve(LEADS)
    assert np.allclose(misplaced(x, name), swap_matrix(LEADS_12, first, second) @ x)


@pytest.mark.parametrize("hypothesis", range(6))
def test_restoring_undoes_what_was_simulated(hypothesis: int) -> None:
    e = electrode_potentials(twelve(LEADS))
    seen = misplaced_potentials(e, hypothesis)
    assert np.allclose(restoring(hypothesis, np.zeros((2, 9, 9))) @ seen, e)


@pytest.mark.parametrize(("name", "flat", "kept"), [("RA/RL swapped", 1, 2), ("LA/RL swapped", 2, 1)])
def test_a_wire_on_the_right_leg_leaves_a_remainder(name: str, flat: int, kept: int) -> None:
    x = twelve(LEADS)
    y = misplaced(x, name, remainder=0.05)
    assert np.allclose(y[flat], 0.05 * x[flat])
    assert np.allclose(y[kept], x[kept])
    assert not np.allclose(y[6:], x[6:], atol=1e-3), "Wilson's terminal moves with the wire"


def test_a_finding_that_is_none_is_refused() -> None:
    with pytest.raises(ValueError, match="expected one of"):
        misplaced(twelve(LEADS), "V1/V6 swapped")


# ── the judgement ──


def test_a_clean_recording_gives_no_finding(clean) -> None:
    assert findings(*clean) == {}


@pytest.mark.parametrize(
    "name",
    ["LA/RA swapped", "RA/LL swapped", "RA/RL swapped", "LA/RL swapped", "V1/V2 swapped", "V3/V4 swapped"],
)
def test_swaps_of_a_clean_recording_are_named(clean, name: str) -> None:
    x, fs_hz = clean
    assert list(findings(misplaced(x, name), fs_hz)) == [name]


@pytest.mark.parametrize("lead", LEADS_12)
def test_an_inverted_lead_is_named(clean, lead: str) -> None:
    x, fs_hz = clean
    y = x.copy()
    y[LEADS_12.index(lead)] *= -1
    assert list(findings(y, fs_hz)) == [f"inverted lead {lead}"]


def test_a_copied_lead_is_named_and_no_swap_beside_it(clean) -> None:
    x, fs_hz = clean
    y = x.copy()
    y[8] = y[9]
    assert list(findings(y, fs_hz)) == ["duplicate leads V3 and V4"]


def test_gain_time_and_order_of_leads_change_nothing(clean) -> None:
    x, fs_hz = clean
    y = misplaced(x, "LA/RA swapped")
    found = analyse_global(y[None], fs_hz)
    beat, marks, fit = found.beat_mv[0].astype(float), found.marks_ms[0], np.ones(12, dtype=bool)
    usual = find_placement(beat, marks, LEADS_12, fit=fit)
    louder = find_placement(3.7 * beat, marks, LEADS_12, fit=fit)
    turned = find_placement(beat[::-1], marks, LEADS_12[::-1], fit=fit)
    for other in (louder, turned):
        assert [p.finding for p in other] == [p.finding for p in usual] == ["LA/RA swapped"]
        assert [p.probability for p in other] == pytest.approx([p.probability for p in usual], abs=1e-9)
    later = findings(np.roll(y, 137, axis=1)[:, 200:], fs_hz)
    assert list(later) == ["LA/RA swapped"]


def test_unfit_leads_do_not_count(clean) -> None:
    x, fs_hz = clean
    y = misplaced(x, "V3/V4 swapped")
    y[9] = 0.3 * np.random.default_rng(1).standard_normal(y.shape[1])
    fit = np.ones(12, dtype=bool)
    fit[9] = False
    assert findings(y, fs_hz, fit=fit) == {}
    assert findings(misplaced(x, "LA/RA swapped"), fs_hz, fit=np.zeros(12, dtype=bool)) == {}


def test_silent_where_the_leads_cannot_tell(clean) -> None:
    x, fs_hz = clean
    y = misplaced(x, "LA/RA swapped")
    for names in (("I",), ("aVR",), ("V1", "V2", "V3", "V4", "V5", "V6"), ("X", "Y", "Z")):
        rows = [LEADS_12.index(n) if n in LEADS_12 else k for k, n in enumerate(names)]
        assert findings(y[rows], fs_hz, names) == {}
    assert list(findings(y[:3], fs_hz, ("I", "II", "III"))) == ["LA/RA swapped"]


def test_a_broken_sum_that_nothing_mends_is_no_swap(clean) -> None:
    x, fs_hz = clean
    y = misplaced(x, "LA/RA swapped")
    y[:6] = y[[6, 8, 10, 7, 9, 11]]  # no limb leads at all
    assert not [f for f in findings(y, fs_hz) if "swapped" in f]


def test_no_beats_no_finding() -> None:
    empty = np.full(5, np.nan)
    assert find_placement(np.zeros((12, 291)), empty, LEADS_12, fit=np.ones(12, dtype=bool)) == ()
    marks = np.array([np.nan, np.nan, -50.0, 50.0, np.nan])
    assert find_placement(np.zeros((12, 291)), marks, LEADS_12, fit=np.ones(12, dtype=bool)) == ()
    missing = np.full((12, 291), np.nan)
    assert find_placement(missing, marks, LEADS_12, fit=np.ones(12, dtype=bool)) == ()


def test_the_report_names_it_and_advises(clean) -> None:
    x, fs_hz = clean
    report = sigguard.check(sigguard.Recording(misplaced(x, "LA/RA swapped"), fs_hz, LEADS_12))
    assert [p["finding"] for p in report.to_dict()["placement"]] == ["LA/RA swapped"]
    assert "dextrocardia" in report.placement[0].text
    assert report.advice[0].action == "check-placement"


def test_a_damaged_model_is_refused() -> None:
    arrays = shipped_placement_model().arrays()
    assert PlacementModel.from_arrays(arrays).limb_weight.shape == arrays["limb_weight"].shape
    with pytest.raises(ModelError, match="limb_weight"):
        PlacementModel.from_arrays(arrays | {"limb_weight": arrays["limb_weight"][:-1]})
    with pytest.raises(ModelError, match="usual_mean"):
        PlacementModel.from_arrays({k: v for k, v in arrays.items() if k != "usual_mean"})
