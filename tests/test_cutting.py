"""Where to cut: finer than a segment, between beats, never under an alarm."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from segment_tables import set_absent, spoil, table, tens

from sigguard.cutting import (
    BETWEEN,
    Wanted,
    alarm_stretches,
    between_beats,
    faults_over,
    outside,
    spoilt,
    to_rest,
    union,
    without,
)
from sigguard.findings import PatientFirst
from sigguard.segments import FAULTS, FaultDetails

ANY, ALL = Wanted("intervals", (0, 1), False), Wanted("intervals", (0, 1), True)
MOTION = FAULTS.index("motion")


def detailed(segments, places: dict[int, list[int]], takes=(1, 2)):
    """Details for a table: motion on these windows of these rows, taking PR and QRS."""
    n = len(segments)
    harms, windows = np.zeros((n, 9, 5), bool), np.zeros((n, 9), np.uint64)
    for row, seconds in places.items():
        harms[row, MOTION, list(takes)] = True
        windows[row, MOTION] = sum(1 << s for s in seconds)
    count = np.rint(segments.end_s - segments.start_s).astype(np.uint8)
    empty = np.zeros((n, 9), np.float32)
    return replace(segments, details=FaultDetails(empty, harms, empty, windows, count))


def test_a_burst_of_two_seconds_costs_two_seconds():
    segments = spoil(table(("I",), tens(3)), "I", ("pr", "qrs"), fault="motion", at=slice(1, 2))
    one = Wanted("intervals", (0,), False)
    assert spoilt(detailed(segments, {1: [3, 4]}), one).tolist() == [[13.0, 15.0]]
    assert spoilt(detailed(segments, {1: [3, 4]}), one, whole=True).tolist() == [[10.0, 20.0]]
    assert spoilt(detailed(segments, {1: [3, 4]}), Wanted("rhythm", (0,), False)).tolist() == []
    # A fault that does not take what is asked, or lies nowhere: the segment goes whole.
    assert spoilt(detailed(segments, {1: [3, 4]}, takes=(4,)), one).tolist() == [[10.0, 20.0]]
    assert spoilt(segments, one).tolist() == [[10.0, 20.0]]


def test_one_lead_is_enough_or_every_lead_counts():
    segments = table(("I", "II"), tens(2))
    spoil(segments, "I", ("pr", "qrs"), fault="motion", at=slice(0, 1))
    spoil(segments, "II", ("pr", "qrs"), fault="motion", at=slice(0, 1))
    segments = detailed(segments, {0: [1, 2, 3], 1: [3, 4]})
    assert spoilt(segments, ANY).tolist() == [[3.0, 4.0]]
    assert spoilt(segments, ALL).tolist() == [[1.0, 5.0]]
    assert spoilt(segments, Wanted("intervals", (1,), True)).tolist() == [[3.0, 5.0]]


def test_an_absent_wave_spoils_nothing():
    segments = set_absent(table(("I", "II"), tens(1)), "I", "pr", "no-wave")
    assert not len(spoilt(segments, ALL))


def test_faults_are_named_by_how_long_they_lie():
    segments = table(("I",), tens(2))
    spoil(segments, "I", ("pr",), fault="motion", fraction=0.2, at=slice(0, 1))
    spoil(segments, "I", ("pr",), fault="muscle", fraction=0.9, at=slice(0, 1))
    one = Wanted("intervals", (0,), False)
    assert faults_over(segments, one, 0, 20) == ("muscle", "motion")
    assert faults_over(segments, one, 10, 20) == ()


STRETCHES = st.lists(st.tuples(st.integers(0, 50), st.integers(0, 50)), max_size=8).map(
    lambda pairs: np.array([sorted(p) for p in pairs], dtype=float).reshape(-1, 2)
)


def on(stretches: np.ndarray) -> np.ndarray:
    middle = np.arange(50) + 0.5
    return ((stretches[:, :1] < middle) & (stretches[:, 1:] > middle)).any(axis=0)


@given(STRETCHES, STRETCHES)
def test_stretches_add_up(a: np.ndarray, b: np.ndarray):
    joined = union([a, b])
    np.testing.assert_array_equal(on(joined), on(a) | on(b))
    assert (joined[1:, 0] > joined[:-1, 1]).all()
    np.testing.assert_array_equal(on(outside(joined, 0, 50)), ~on(joined))
    np.testing.assert_array_equal(on(without(union([a]), union([b]))), on(a) & ~on(b))


def test_edges_lie_between_beats():
    beats = np.arange(0.5, 60)  # one a second
    rests = between_beats(beats)
    np.testing.assert_allclose(rests, beats[:-1] + BETWEEN)
    moved = to_rest(np.array([[0.0, 20.4], [22.5, 60.0]]), rests, 60.0)
    np.testing.assert_allclose(moved, [[0.0, 20.1], [22.1, 60.0]])


def test_a_cut_never_closes():
    rests = between_beats(np.arange(0.5, 60))
    moved = to_rest(np.array([[0.0, 20.05], [20.2, 60.0]]), rests, 60.0)
    assert moved[0, 1] <= 20.05 and moved[1, 0] >= 20.2


def test_without_beats_edges_stay():
    stretches = np.array([[3.0, 20.0]])
    assert to_rest(stretches, np.zeros(0), 60.0).tolist() == stretches.tolist()
    assert not len(between_beats(np.array([0.0, 3.0, 9.0])))
    assert not len(between_beats(np.zeros(0)))


def test_alarms_reach_a_little_further():
    alarms = [
        PatientFirst(("I",), 1.0, 5.0, "standstill", ""),
        PatientFirst(("I",), 8.0, 9.0, "wide-fast", ""),
    ]
    assert alarm_stretches(alarms, 10.0).tolist() == [[0.0, 10.0]]
    assert alarm_stretches([], 10.0).shape == (0, 2)


def test_leads_spoilt_at_different_seconds_spoil_the_segment():
    segments = table(("I", "II"), tens(2))
    spoil(segments, "I", ("pr",), fault="motion", at=slice(0, 1))
    spoil(segments, "II", ("pr",), fault="motion", at=slice(0, 1))
    assert spoilt(detailed(segments, {0: [1], 1: [7]}), ANY).tolist() == [[0.0, 10.0]]


def test_an_empty_table_spoils_nothing():
    assert spoilt(table().rows(np.zeros(0, int)), Wanted("all", (0,), False)).shape == (0, 2)
