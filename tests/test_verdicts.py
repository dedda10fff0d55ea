"""From scores to the table: absences, limits of the recording, faults, silence. With a model made up for it."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest

from sigguard.features import FEATURE_NAMES
from sigguard.reliability import LEARNED_FAULTS
from sigguard.segments import ABSENT, FAULTS, MEASUREMENTS
from sigguard.verdicts import (
    HIGH_PASS_TAKES_ST_HZ,
    MAINS_UV,
    SMALL_UV,
    WANDER_UV,
    WEAK_UV,
    agreeing_leads,
    fault_rows,
    hardly_there,
    judge_rows,
    lift_agreed_rate,
    limit_by_recording,
    silence_under,
    small_here,
)

NO_WAVE, NO_RELATION, SMALL = 1, 2, 3
RATE, PR, QRS, QT, ST = range(5)


class MadeUp:
    """Scores as handed in; a bound of (1 - score) times 100; absence holds from a score of 0.8 on."""

    fault_threshold = np.array([0.5, 0.5, 0.9, 0.5])

    def __init__(self, scores: np.ndarray) -> None:
        self.scores = scores

    def judge(self, features):
        return self.scores, np.zeros((len(features), 4))

    def bound(self, scores):
        return np.where(scores < 0.2, np.inf, (1 - scores) * 100)

    def reliable(self, scores, tolerance):
        within = self.bound(scores) <= np.asarray(tolerance)
        within[:, 0] = scores[:, 0] >= 0.9
        return within

    def absence_holds(self, scores):
        return scores >= 0.8


def test_judging_names_and_order():
    assert ABSENT[NO_WAVE] == "no-wave" and ABSENT[NO_RELATION] == "no-fixed-relation"
    assert ABSENT[SMALL] == "too-small-here" and MEASUREMENTS == ("rate", "pr", "qrs", "qt", "st")


def test_rows_are_judged_by_value_score_and_calibration():
    scores = np.array([[0.95, 0.9, 0.9, 0.9, 0.9999], [0.5, 0.1, 0.7, 0.9, 0.5], [0.95, 0.9, 0.5, 0.85, 0.9]])
    value = np.array([[70, 160, 90, 400, 0.01], [70, 160, 90, 400, 0.01], [np.nan, np.nan, 90, np.nan, 0.0]])
    absent = np.array(
        [[0, 0, 0, 0, 0], [0, NO_WAVE, 0, 0, 0], [0, NO_WAVE, NO_WAVE, NO_RELATION, 0]], np.int8
    )
    analysis = SimpleNamespace(value=value, absent=absent, features=np.zeros((3, 2)))
    tolerance = np.array([np.nan, 20, 20, 30, 0.025])
    score, bound, reliable, named, _ = judge_rows(MadeUp(scores), analysis, tolerance)
    np.testing.assert_array_equal(score, scores)
    np.testing.assert_array_equal(reliable, [[1, 1, 1, 1, 1], [0, 0, 0, 1, 0], [0, 0, 0, 0, 0]])
    # No bound without a value, and none where the calibration gives none.
    np.testing.assert_array_equal(np.isnan(bound), [[0, 0, 0, 0, 0], [0, 1, 0, 0, 0], [1, 1, 0, 1, 0]])
    assert not np.isinf(bound).any()
    # An absence stands where there is no value and the calibration trusts such names.
    np.testing.assert_array_equal(named, [[0] * 5, [0] * 5, [0, NO_WAVE, 0, NO_RELATION, 0]])


def test_a_wave_seen_in_another_lead_at_the_time_is_too_small_here():
    absent = np.zeros((6, 5), np.int8)
    absent[0, PR] = absent[3, PR] = absent[2, QT] = NO_WAVE
    absent[5, PR] = NO_RELATION
    reliable = np.zeros((6, 5), bool)
    value = np.full((6, 5), np.nan)
    reliable[1, PR], value[1, PR] = True, 150.0  # same time as row 0
    reliable[4, QT], value[4, QT] = True, 400.0  # another time than row 2
    out = small_here(absent, reliable, value, 3)
    assert out[0, PR] == SMALL
    assert out[3, PR] == NO_WAVE and out[2, QT] == NO_WAVE and out[5, PR] == NO_RELATION
    assert (out != absent).sum() == 1


def test_an_unreliable_value_elsewhere_proves_no_wave():
    absent = np.zeros((2, 5), np.int8)
    absent[0, PR] = NO_WAVE
    value = np.full((2, 5), 150.0)
    assert small_here(absent, np.zeros((2, 5), bool), value, 2)[0, PR] == NO_WAVE


@pytest.mark.parametrize(
    ("band", "lost"),
    [
        ((0.05, 150.0), ()),
        ((np.nan, np.nan), ()),
        ((0.5, 150.0), (ST,)),  # a 0.5 Hz analogue high-pass distorts ST (Kligfield et al. 2007)
        ((0.67, 40.0), (ST,)),
        ((0.05, 25.0), (QRS,)),
        ((1.0, 20.0), (QRS, ST)),
    ],
)
def test_the_recorded_band_takes_what_it_takes(band, lost):
    reliable = np.ones((2, 5), bool)
    out, limited = limit_by_recording(reliable, np.array([0, 1]), 500.0, np.array([band, (0.05, 150.0)]))
    np.testing.assert_array_equal(np.flatnonzero(~out[0]), sorted(lost))
    assert out[1].all() and limited.tolist() == [bool(lost), False]
    assert reliable.all()  # not altered in place


def test_without_a_known_band_nothing_is_taken():
    out, limited = limit_by_recording(np.ones((1, 5), bool), np.array([0]), 250.0, None)
    assert out.all() and not limited.any()
    assert 0.05 <= HIGH_PASS_TAKES_ST_HZ < 0.5


@pytest.mark.parametrize(
    ("fs_hz", "kept"), [(60.0, [RATE]), (90.0, [RATE, QT, ST]), (100.0, [0, 1, 2, 3, 4])]
)
def test_too_coarse_a_rate_leaves_the_rate(fs_hz, kept):
    out, limited = limit_by_recording(np.ones((1, 5), bool), np.array([0]), fs_hz, None)
    np.testing.assert_array_equal(np.flatnonzero(out[0]), kept)
    assert limited[0] == (len(kept) < 5)


def features_with(**columns: float) -> np.ndarray:
    row = np.zeros((1, len(FEATURE_NAMES)), np.float32)
    row[0, FEATURE_NAMES.index("qrs_pp_uv")] = 1000.0
    for name, value in columns.items():
        row[0, FEATURE_NAMES.index(name)] = value
    return row


def faults(features: np.ndarray, p=(0, 0, 0, 0), *, limited=False, length_s=10.0) -> dict[str, float]:
    out = fault_rows(MadeUp(np.zeros((1, 5))), features, np.array([p]), np.array([limited]), length_s)
    return {name: float(v) for name, v in zip(FAULTS, out[0], strict=True) if v}


def test_faults_are_called_each_by_its_own_rule():
    assert faults(features_with()) == {}
    for k, name in enumerate(LEARNED_FAULTS):
        p = np.zeros(4)
        p[k] = MadeUp.fault_threshold[k]
        assert faults(features_with(), p) == {name: 1.0}
        p[k] -= 1e-6
        assert faults(features_with(), p) == {}
    assert faults(features_with(missing_s=2.5)) == {"missing": 0.25}
    assert faults(features_with(flat_s=4.0)) == {"flat": pytest.approx(0.4)}
    assert faults(features_with(flat_s=0.1)) == {}  # the line between two beats may rest for a moment
    assert faults(features_with(clipped_s=1.0)) == {"clipped": pytest.approx(0.1)}
    assert faults(features_with(clipped_s=30.0)) == {"clipped": 1.0}
    assert faults(features_with(qrs_pp_uv=WEAK_UV - 1)) == {"weak": 1.0}
    assert faults(features_with(), limited=True) == {"narrow-band": 1.0}


def test_no_beat_is_not_a_weak_beat():
    assert faults(features_with(qrs_pp_uv=np.nan)) == {}


@pytest.mark.parametrize("pattern", ["fibrillation-or-flutter", "standstill"])
def test_nothing_is_reliable_under_an_alarm(pattern):
    start, end = np.arange(0, 50, 10.0), np.arange(10, 60, 10.0)
    out = silence_under(np.ones((5, 5), bool), start, end, [(12.0, 30.0, pattern)])
    np.testing.assert_array_equal(out.all(axis=1), [True, False, False, True, True])
    assert not out[1].any() and not out[2].any()


def test_a_wide_fast_rhythm_can_still_be_measured():
    out = silence_under(
        np.ones((2, 5), bool), np.array([0.0, 10.0]), np.array([10.0, 20.0]), [(0.0, 20.0, "wide-fast")]
    )
    assert out.all()


def beats_of(lists):
    """An analysis that knows beats only, from one list of seconds a row."""
    row = np.repeat(np.arange(len(lists)), [len(x) for x in lists])
    return SimpleNamespace(value=np.zeros((len(lists), 5)), beat_row=row, beat_s=np.concatenate(lists))


def test_leads_agree_when_their_beats_are_the_common_ones():
    common = np.array([0.5, 1.5, 2.5, 3.5])
    late, edge = (
        common + 0.14,
        np.array([0.5, 1.5, 2.5, 3.5, 9.95]),
    )  # a beat at the very edge may fall either way
    missed, invented, off = common[[0, 1, 3]], np.append(common, 5.0), common + [0, 0.2, 0, 0]
    lists = [common, late, edge, missed, invented, off]
    agree = agreeing_leads(beats_of(lists), np.zeros(4, int), common, len(lists), 10.0)
    np.testing.assert_array_equal(agree, [[True, True, True, False, False, False]])
    assert not agreeing_leads(
        beats_of([np.zeros(0), np.array([1.0])]), np.zeros(0, int), np.zeros(0), 2, 10.0
    ).any()


def test_agreement_lifts_the_rate_only_among_four_leads_or_more():
    model = SimpleNamespace(least_reliable_rate=lambda: 0.96)
    scores = np.full((5, 5), 0.5)
    four = lift_agreed_rate(model, scores, np.array([[True, True, True, True, False]]))
    np.testing.assert_array_equal(four[:, RATE], [0.96, 0.96, 0.96, 0.96, 0.5])
    np.testing.assert_array_equal(four[:, 1:], scores[:, 1:])
    three = lift_agreed_rate(model, scores, np.array([[True, True, True, False, False]]))
    np.testing.assert_array_equal(three, scores)


def test_a_wave_under_half_a_millimetre_is_hardly_there_only_where_it_is_quiet():
    features = np.zeros((4, len(FEATURE_NAMES)), np.float32)
    p, p_error = FEATURE_NAMES.index("p_height_uv"), FEATURE_NAMES.index("p_error_uv")
    features[:, p] = [SMALL_UV - 1, SMALL_UV + 1, SMALL_UV - 1, SMALL_UV - 1]
    features[:, p_error] = [5, 5, 30, 5]
    features[:, FEATURE_NAMES.index("t_fall_uv")] = 300
    reliable = np.zeros((4, 5), bool)
    reliable[3, PR] = True
    np.testing.assert_array_equal(hardly_there(features, reliable)[:, PR], [True, False, False, False])
    assert not hardly_there(features, reliable)[:, [RATE, QRS, QT, ST]].any()


def test_hum_and_drift_are_named_outright():
    features = np.zeros((3, len(FEATURE_NAMES)), np.float32)
    features[1, FEATURE_NAMES.index("mains_uv")] = MAINS_UV + 1
    features[2, FEATURE_NAMES.index("wander_range_uv")] = WANDER_UV + 1
    found = fault_rows(MadeUp(np.zeros((3, 5))), features, np.zeros((3, 4)), np.zeros(3, bool), 10.0)
    np.testing.assert_array_equal(found[:, FAULTS.index("mains")], [0, 1, 0])
    np.testing.assert_array_equal(found[:, FAULTS.index("wander")], [0, 0, 1])
