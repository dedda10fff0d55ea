"""Which faults, what they take, in which order: with a model made up for it, and on simulated strips."""

from __future__ import annotations

import numpy as np
import pytest
from simulated import strip

from sigguard import Recording, check
from sigguard.fault_windows import KINDS
from sigguard.faults import SUSPECT, held, judge_faults, still_beside_others
from sigguard.measure import analyse
from sigguard.reliability import HARM_FAULTS, LEARNED_FAULTS
from sigguard.segments import FAULTS, MEASUREMENTS
from sigguard.simulate.disturbance import draw_disturbance
from sigguard.simulate.recorded import qrs_peak_to_peak_mv

FS_HZ = 500.0
RATE, PR, QRS, QT, ST = range(5)


class MadeUp:
    """Harm as handed in by fault; thresholds of a half."""

    fault_threshold = np.full(4, 0.5)

    def __init__(self, **harm) -> None:
        self.table = np.zeros((len(HARM_FAULTS), 5))
        for fault, p in harm.items():
            self.table[HARM_FAULTS.index(fault)] = p

    def harm(self, features, fault):
        return self.table[fault]


def judged(model, p, lost, *, x_mv=None):
    """One clean simulated lead (or another row) with fault probabilities and lost measurements as given."""
    x_mv = strip(3).signal_mv[1:2] if x_mv is None else np.atleast_2d(x_mv)
    gone = np.zeros((1, 5), bool)
    gone[0, list(lost)] = True
    fraction, details = judge_faults(
        model,
        analyse(x_mv, FS_HZ),
        x_mv,
        FS_HZ,
        fault_p=np.array([p], dtype=float),
        lost=gone,
        limited=np.zeros(1, bool),
        n_leads=1,
    )
    order = [FAULTS[k] for k in np.argsort(-details.weight[0], kind="stable") if fraction[0, k] > 0]
    harms = {
        name: [MEASUREMENTS[m] for m in np.flatnonzero(details.harms[0, FAULTS.index(name)])]
        for name in order
    }
    return order, harms, fraction[0], details


def test_the_fault_that_takes_what_is_lost_comes_first():
    model = MadeUp(wander=[0, 0, 0, 0, 0.9], muscle=[0, 0.9, 0, 0, 0])
    p = (0.9, 0.8, 0, 0)
    order, harms, *_ = judged(model, p, [PR])
    assert order == ["muscle", "wander"] and harms == {"muscle": ["pr"], "wander": []}
    order, harms, *_ = judged(model, p, [ST])
    assert order == ["wander", "muscle"] and harms == {"muscle": [], "wander": ["st"]}
    assert judged(model, p, [])[1] == {"muscle": [], "wander": []}  # nothing lost, nothing harmed


def test_a_lost_measurement_is_always_laid_to_the_likeliest_of_what_is_called():
    model = MadeUp(wander=[0.1] * 5, muscle=[0.2] * 5)
    _, harms, *_ = judged(model, (0.9, 0.9, 0, 0), [PR, QT])
    assert harms == {"muscle": ["pr", "qt"], "wander": []}


def test_less_evidence_is_enough_where_something_is_lost():
    model = MadeUp(motion=[0.5] * 5, muscle=[0.5] * 5)
    p = (0, 0.9, 0, 0.5 * SUSPECT + 0.01)
    assert judged(model, p, [])[0] == ["muscle"]
    assert judged(model, p, [QRS])[0] == ["muscle", "motion"]
    assert judged(model, (0, 0, 0.02, 0.15), [QRS])[0] == ["motion"]  # the likeliest, if nothing else
    assert judged(model, (0, 0, 0, 0.05), [QRS])[0] == []  # but not out of the blue
    assert judged(model, (0, 0, 0, 0.15), [])[0] == []


def test_details_fit_the_fractions():
    order, _, fraction, details = judged(MadeUp(muscle=[0.5] * 5), (0, 0.9, 0, 0), [PR])
    k = FAULTS.index("muscle")
    assert order == ["muscle"] and details.n_windows[0] == 10
    assert fraction[k] == pytest.approx(int(details.windows[0, k]).bit_count() / 10)
    assert np.isfinite(details.strength[0, k]) and np.isnan(np.delete(details.strength[0], k)).all()
    assert not np.delete(details.windows[0], k).any()


def test_a_gap_is_measured_to_the_sample_and_shown_by_the_second():
    x = np.array(strip(3).signal_mv[1])
    x[int(4.2 * FS_HZ) : int(5.7 * FS_HZ)] = np.nan
    _, harms, fraction, details = judged(MadeUp(missing=[0.9] * 5), (0, 0, 0, 0), [RATE], x_mv=x)
    k = FAULTS.index("missing")
    assert fraction[k] == pytest.approx(0.15, abs=1e-6) and details.strength[0, k] == pytest.approx(1.5)
    assert details.windows[0, k] == 0b110000 and harms["missing"] == ["rate"]


# ── leads without contact, values held ──


def noise(shape, uv=2.0, seed=0):
    return 1e-3 * uv * np.random.default_rng(seed).standard_normal(shape)


def test_a_lead_without_contact_is_told_from_a_heart_that_pauses():
    x = np.array(strip(3).signal_mv[:6]) + noise((6, 5000))
    off = x.copy()
    off[2, 2000:4000] = noise(2000, seed=1)
    found = still_beside_others(off, FS_HZ, 6)
    assert found is not None and not np.delete(found, 2, axis=0).any()
    assert found[2].sum() / FS_HZ == pytest.approx(4.0, abs=0.5)
    pause = x.copy()
    pause[:, 2000:4000] = noise((6, 2000), seed=1)
    assert still_beside_others(pause, FS_HZ, 6) is None
    assert still_beside_others(off[2:3], FS_HZ, 1) is None  # a lead alone cannot tell
    assert still_beside_others(x, FS_HZ, 6) is None


def test_a_held_value_is_found_where_noise_cannot_rest():
    x = np.round((strip(3).signal_mv[1:2] + noise((1, 5000), uv=5.0)) / 0.001) * 0.001
    assert held(x, FS_HZ) is None
    x[0, 1000:1100] = x[0, 1000]
    found = held(x, FS_HZ)
    assert found is not None and found.sum() == pytest.approx(100, abs=2) and found[0, 1000:1100].all()


def test_pauses_of_coarse_quiet_signals_are_not_held():
    coarse = np.round(strip(3).signal_mv / 0.02) * 0.02
    found = held(coarse, FS_HZ)
    assert found is None or found.mean() < 0.02
    assert held(np.zeros((1, 5000)), FS_HZ) is None  # never moves: flat by the other rule
    assert held(np.full((1, 5000), np.nan), FS_HZ) is None


# ── end to end ──


def test_a_burst_on_one_lead_is_named_with_its_size_and_seconds():
    ecg = strip(5)
    x = np.array(ecg.signal_mv)
    size = qrs_peak_to_peak_mv(x[7], ecg.beats_s, FS_HZ)
    rng = np.random.default_rng(1)
    x[7, 2000:3000] += 0.8 * size * draw_disturbance(rng, "muscle", n_samples=1000, fs_hz=FS_HZ)
    report = check(Recording(x, FS_HZ, ecg.leads))
    faults = {s.lead: s.faults for s in report.lead_summaries}[ecg.leads[7]]
    assert faults and faults[0].kind == "muscle" and faults[0].harms
    assert 0.2 <= faults[0].fraction <= 0.4
    assert faults[0].strength == pytest.approx(800 * size, rel=0.35) and faults[0].unit == "uV rms"
    assert faults[0].when[0][0] in (3.0, 4.0) and faults[0].when[-1][1] in (6.0, 7.0)
    other = [f for s in report.lead_summaries if s.lead != ecg.leads[7] for f in s.faults]
    assert not any(f.kind == "muscle" and f.harms for f in other)


def test_learned_faults_are_those_of_the_windows():
    assert KINDS[:4] == LEARNED_FAULTS and set(KINDS) == set(HARM_FAULTS) and set(KINDS) < set(FAULTS)
