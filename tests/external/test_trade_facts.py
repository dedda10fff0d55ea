"""What everybody in the trade knows of disturbances must come out of the scores, averaged over many simulated strips.

Facts from common practice (no single source): with a wandering baseline the isoelectric line is hard to place but
the waves can still be measured; shivering or a tapping foot hides the P wave before it hides the QRS; mains hum
is narrow and leaves the waves; and more noise never earns more trust. Needs a trained model.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from simulated import leads_of, qrs_over_t, strips

from sigguard.measure import analyse
from sigguard.segment_pass import shipped_model
from sigguard.segments import MEASUREMENTS
from sigguard.simulate.disturbance import draw_disturbance

LEVELS_MV = (0.02, 0.05, 0.1, 0.2, 0.4, 0.8)
RATE, PR, QRS, QT, ST = range(5)
MORE_NEVER_BY = (
    0.05  # measured 0.047, PR under mains; of a mean over 40 strips, each with the same noise at every level
)
KINDS = ("wander", "tremor", "muscle", "motion", "mains", "pops")


@cache
def carriers() -> np.ndarray:
    """Lead V5 of 40 sinus strips in which the QRS stands twice above T."""
    ecgs = [e for e in strips(70) if qrs_over_t(e, "V5") >= 2][:40]
    return leads_of(ecgs, "V5")


@cache
def judged(kind: str, level_mv: float) -> tuple[np.ndarray, np.ndarray]:
    """(scores (40, 5), reliable (40, 5)) with that much of a disturbance (mV rms) on each carrier; the same noise at every level."""
    x = carriers()
    noise = [
        draw_disturbance(np.random.default_rng(seed), kind, n_samples=x.shape[1], fs_hz=500.0)
        for seed in range(len(x))
    ]
    found = analyse(x + level_mv * np.array(noise), 500.0)
    model = shipped_model()
    score, _ = model.judge(found.features)
    return score, model.reliable(score) & np.isfinite(found.value)


def kept(kind: str, level_mv: float) -> np.ndarray:
    """(5,) share of what was reliable without the disturbance that still is."""
    before, after = judged("mains", 0.0)[1], judged(kind, level_mv)[1]
    return (before & after).sum(axis=0) / before.sum(axis=0)


@pytest.fixture(scope="module", autouse=True)
def trained() -> None:
    if judged("mains", 0.0)[1].mean() < 0.5:
        pytest.skip("the model on disk is a stand-in that calls nothing reliable: sigguard train")


def test_without_disturbance_nearly_all_is_reliable():
    share = judged("mains", 0.0)[1].mean(axis=0)
    assert share[RATE] >= 0.9 and share[QRS] >= 0.9 and share[ST] >= 0.85
    assert share[PR] >= 0.7 and share[QT] >= 0.6


def test_wander_takes_st_and_leaves_rate_and_qrs():
    strong = kept("wander", 0.8)
    assert strong[RATE] >= 0.9 and strong[QRS] >= 0.9
    assert strong[ST] <= 0.65
    assert strong[ST] == strong.min()


def test_light_wander_takes_nothing():
    assert np.all(kept("wander", 0.05) >= 0.9)


def test_tremor_takes_p_before_the_rate():
    for level in (0.02, 0.05, 0.1):
        score = judged("tremor", level)[0].mean(axis=0)
        share = kept("tremor", level)
        assert score[PR] < score[RATE] and score[PR] < score[QRS]
        assert share[PR] < share[RATE]
    assert kept("tremor", 0.1)[PR] <= 0.1


def test_muscle_takes_p_before_qrs_and_the_rate_last():
    score = judged("muscle", 0.2)[0].mean(axis=0)
    assert score[PR] < score[QRS] < score[RATE]
    share = kept("muscle", 0.2)
    assert share[PR] < 0.4 and share[RATE] > 0.8


def test_movement_takes_all_small_waves_before_the_qrs():
    score = judged("motion", 0.2)[0].mean(axis=0)
    # More often lost than kept, while the QRS complex is more often kept than lost.
    assert score[QRS] == score.max() and score[[PR, QT, ST]].max() < 0.5 < score[QRS]


def test_mains_of_a_tenth_of_a_millivolt_takes_next_to_nothing():
    """IEC 60601-2-51 tries measurement with mains of 25 µV; four times that leaves this procedure whole."""
    assert np.all(kept("mains", 0.1) >= 0.85)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("measurement", MEASUREMENTS)
def test_more_noise_never_earns_more_trust(kind, measurement):
    k = MEASUREMENTS.index(measurement)
    score = np.array([judged(kind, level)[0][:, k].mean() for level in (0.0, *LEVELS_MV)])
    reliable = np.array([judged(kind, level)[1][:, k].mean() for level in (0.0, *LEVELS_MV)])
    assert np.all(np.diff(reliable) <= MORE_NEVER_BY), reliable
    # Where the score says "no" it may wobble: 0.1 and 0.2 mean the same.
    assert np.all(np.diff(np.maximum(score, 0.2)) <= MORE_NEVER_BY), score


@pytest.mark.parametrize("kind", ["tremor", "muscle", "motion"])
def test_heavy_noise_leaves_nothing(kind):
    assert judged(kind, 1.6)[1].mean() <= 0.1


@pytest.mark.parametrize("factor", [-1.0, 0.5, 2.0])
def test_sign_and_gain_change_little_of_what_is_trusted(factor):
    """ST scales with the gain and so does what disturbs it; the rest knows no unit."""
    x = carriers()
    model = shipped_model()
    a, b = analyse(x, 500.0), analyse(factor * x, 500.0)
    change = np.abs(model.score(a.features) - model.score(b.features))
    assert np.all(np.median(change, axis=0) < 0.02)
    assert np.all(change.mean(axis=0) < 0.08)


def test_a_shift_in_time_changes_little_of_what_is_trusted():
    ecgs = [e for e in strips(60, duration_s=12.0) if qrs_over_t(e, "V5") >= 2][:40]
    x = leads_of(ecgs, "V5")
    model = shipped_model()
    a, b = analyse(x[:, 185:5185], 500.0), analyse(x[:, 370:5370], 500.0)  # 0.37 s later
    both = np.isfinite(a.value) & np.isfinite(b.value)
    assert both.sum() >= 0.93 * np.isfinite(a.value).sum()
    change = np.abs(a.value - b.value)
    for k, most in ((RATE, 1.0), (PR, 3.0), (QRS, 2.0), (QT, 3.0), (ST, 0.003)):
        assert np.median(change[both[:, k], k]) < most
    moved = np.abs(model.score(a.features) - model.score(b.features))
    assert np.all(np.median(moved, axis=0) < 0.03) and np.all(moved.mean(axis=0) < 0.1)
