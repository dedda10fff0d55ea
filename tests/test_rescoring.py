"""What the check promises to win back, on simulated strips whose disturbance is known."""

from __future__ import annotations

import numpy as np
import pytest
from segment_tables import LEADS_12, spoil, table, tens
from simulated import strip

from sigguard import Recording, check
from sigguard.advice import seconds_lost
from sigguard.by_comparison import common_place, expected_loss, hit_rows, own_electrode, usual_loss
from sigguard.electrodes import ELECTRODES
from sigguard.rescoring import MOST_ROWS
from sigguard.simulate.disturbance import apply_clipping, draw_disturbance, to_leads
from sigguard.spoilt_strips import MOST_STRIPS, choose_slots

FS_HZ, N = 500.0, 5000
QUIET_MV = 0.003


def noise(kind: str, seed: int = 0, n: int = N) -> np.ndarray:
    return draw_disturbance(np.random.default_rng(seed), kind, n_samples=n, fs_hz=FS_HZ)


def carrier(seed: int = 3) -> np.ndarray:
    """Twelve leads with as little muscle noise as a careful recording holds."""
    quiet = np.stack([noise("muscle", 100 + k) for k in range(9)])
    return strip(seed).signal_mv + to_leads(QUIET_MV * quiet)


def at(electrodes: tuple[str, ...], kind: str, rms_mv: float, seed: int = 5) -> np.ndarray:
    put = np.zeros((9, N))
    for k, name in enumerate(electrodes):
        put[ELECTRODES.index(name)] = rms_mv * noise(kind, seed + k)
    return to_leads(put)


def lost_s(report) -> float:
    return float(seconds_lost(report.segments)[0].sum())


SCENES = {
    "loose": (lambda x: x + at(("LA",), "motion", 0.3), ("reapply-electrode", "LA")),
    "shivering": (lambda x: x + at(ELECTRODES, "muscle", 0.06), ("relax-muscles", None)),
    "tremor": (lambda x: x + at(("RA", "LA", "LL"), "tremor", 0.05), ("relax-muscles", None)),
    "hum": (lambda x: x + 2.0 * noise("mains") * np.linspace(0.4, 1, 12)[:, None], ("cut-mains", None)),
    "breathing": (lambda x: x + at(ELECTRODES, "wander", 1.0), ("wait-and-repeat", None)),
    "clipped": (lambda x: apply_clipping(x, low_mv=-0.35, high_mv=0.35), ("lower-gain", None)),
}


@pytest.fixture(scope="module")
def clean_report():
    return check(Recording(carrier(), FS_HZ, LEADS_12))


@pytest.mark.parametrize("name", SCENES)
def test_the_cure_comes_first_and_promises_what_it_wins(clean_report, name):
    spoil_it, cure = SCENES[name]
    report = check(Recording(spoil_it(carrier()), FS_HZ, LEADS_12))
    really_s = lost_s(report) - lost_s(clean_report)
    assert really_s >= 30, "the scene must lose something"
    first = report.advice[0]
    assert (first.action, first.target) == cure
    assert 0.5 * really_s <= first.gain_s <= 1.3 * really_s
    assert first.gain_s <= lost_s(report)
    assert f"win back {first.gain_s:.0f} of {lost_s(report):.0f} measurement-seconds" in first.because[-1]


def test_the_act_that_was_promised_most_for_comes_first_of_two():
    x = carrier() + at(("LA",), "motion", 0.4) + at(("C2",), "motion", 0.3, seed=9)
    acts = [(a.action, a.target) for a in check(Recording(x, FS_HZ, LEADS_12)).advice]
    assert acts[0] == ("reapply-electrode", "LA") and ("reapply-electrode", "C2") in acts


def test_under_an_alarm_nothing_is_called_a_disturbance():
    x = strip(1, rhythm="ventricular-fibrillation").signal_mv + at(ELECTRODES, "muscle", 0.1)
    report = check(Recording(x, FS_HZ, LEADS_12))
    assert report.patient_first and [a.action for a in report.advice] == ["look-at-patient"]


def test_of_a_long_recording_few_stretches_are_scored_again(monkeypatch):
    """Ten minutes of one lead, shivering throughout."""
    import sigguard.rescoring as rescoring

    rows = []
    kept = rescoring.analyse
    monkeypatch.setattr(rescoring, "analyse", lambda x, *a, **k: (rows.append(len(x)), kept(x, *a, **k))[1])
    one = carrier()[1]
    x = np.concatenate([one + 0.2 * noise("muscle", k) for k in range(60)])
    report = check(Recording(x, FS_HZ, "II"))
    first = report.advice[0]
    assert first.action == "relax-muscles" and sum(rows) <= MOST_ROWS
    assert f"from {MOST_STRIPS} of 60 spoilt stretches" in first.because[-1]
    assert 200 < first.gain_s <= lost_s(report)


def test_a_recording_that_lost_nothing_is_not_scored_again(monkeypatch):
    import sigguard.rescoring as rescoring

    monkeypatch.setattr(rescoring, "lay_out", lambda *a, **k: pytest.fail("laid out for nothing"))
    segments = table(LEADS_12)
    assert rescoring.won_back(None, None, segments, None, lead_beats=[], beats=None, common=True) == ()


# ── which stretches, and what can only be compared ──


def test_all_few_stretches_are_chosen_and_of_many_the_worst_and_some_that_stand_for_the_rest():
    assert choose_slots(np.array([0.0, 5.0, 0.0, 9.0])) == [(3, 1.0), (1, 1.0)]
    loss = np.concatenate([np.full(6, 50.0), np.full(94, 10.0), np.zeros(20)])
    chosen = choose_slots(loss)
    assert len(chosen) == MOST_STRIPS and {k for k, _ in chosen[:6]} == set(range(6))
    assert sum(loss[k] * weight for k, weight in chosen) == pytest.approx(loss.sum())


def test_a_flat_lead_is_taken_to_become_as_good_as_the_others():
    segments = table(("I", "II", "V1"))
    spoil(segments, "V1", fault="flat")
    spoil(segments, "I", ("st",))
    hit = hit_rows(segments, "check-wire")
    assert hit.tolist() == [False, False, True]
    gone = np.array([[0, 0, 0, 0, 1], [0, 0, 0, 0, 0], [1, 1, 1, 1, 1]], float)
    after, with_what = expected_loss(gone, hit, ~hit, usual_loss(segments))
    np.testing.assert_allclose(after[2], [0, 0, 0, 0, 0.5])
    np.testing.assert_array_equal(after[:2], gone[:2])
    assert with_what == "the other leads"


def test_where_all_leads_are_flat_they_are_compared_with_themselves_at_other_times():
    segments = spoil(table(("II",), tens(4)), "II", fault="flat", at=slice(0, 1))
    spoil(segments, "II", ("pr",), at=slice(1, 2))
    hit = np.array([True])
    after, with_what = expected_loss(np.ones((1, 5)), hit, ~hit, usual_loss(segments))
    np.testing.assert_allclose(after, [[0, 1 / 3, 0, 0, 0]])
    assert with_what == "the same leads at other times"
    assert expected_loss(np.ones((1, 5)), hit, ~hit, np.full((1, 5), np.nan))[0].sum() == 0


@pytest.mark.parametrize(
    ("hit", "place"),
    [
        (("I", "II"), "RA"),
        (("I", "III"), "LA"),
        (("II", "III", "aVF"), "LL"),
        (LEADS_12, "all leads"),
        (("V3",), None),
    ],
)
def test_the_leads_hit_tell_the_electrode(hit, place):
    assert common_place(hit, LEADS_12) == place


def test_a_chest_lead_has_its_own_electrode():
    assert own_electrode("V3") == "C3" and own_electrode("aVF") == "lead aVF"
