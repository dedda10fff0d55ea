"""The faults of a lead from a made-up table: order, harm, strength, when."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from segment_tables import spoil, table, tens

from sigguard.fault_summaries import fault_stretches, gravest, lead_faults
from sigguard.segments import FAULTS, FaultDetails, Segments
from sigguard.spans import lost

WANDER, MUSCLE, FLAT = FAULTS.index("wander"), FAULTS.index("muscle"), FAULTS.index("flat")


def detailed(segments: Segments) -> Segments:
    """With details that say nothing yet: change their arrays."""
    n = len(segments)
    return replace(
        segments,
        details=FaultDetails(
            weight=np.zeros((n, 9), np.float32),
            harms=np.zeros((n, 9, 5), bool),
            strength=np.full((n, 9), np.nan, np.float32),
            windows=np.zeros((n, 9), np.uint64),
            n_windows=np.full(n, 10, np.uint8),
        ),
    )


def made() -> Segments:
    """Three segments of one lead: wander on all of the first, on it a muscle burst; muscle on half of the third."""
    segments = detailed(table(("II",), tens(3)))
    spoil(segments, "II", ("pr", "st"), fault="wander", at=[0])
    segments.fault[0, MUSCLE], segments.fault[2, MUSCLE] = 0.2, 0.5
    d = segments.details
    assert d is not None
    d.weight[0, [WANDER, MUSCLE]], d.weight[2, MUSCLE] = (0.1, 1.5), 0.01
    d.harms[0, MUSCLE, 1], d.harms[0, WANDER, 4] = True, True
    d.strength[0, [WANDER, MUSCLE]], d.strength[2, MUSCLE] = (800.0, 30.0), 10.0
    d.windows[0, WANDER], d.windows[0, MUSCLE] = 0b1111111111, 0b1100000000
    d.windows[2, MUSCLE] = 0b0000011111
    return segments


def faults_of(segments):
    return lead_faults(segments, np.arange(len(segments)), lost(segments).astype(float))


def test_what_costs_the_most_comes_first_whatever_its_fraction():
    first, second = faults_of(made())
    assert (first.kind, first.harms) == ("muscle", ("pr",))
    assert (second.kind, second.harms) == ("wander", ("st",))
    assert first.fraction == pytest.approx((0.2 + 0.5) / 3) and second.fraction == pytest.approx(1 / 3)
    assert gravest(made()).tolist() == [MUSCLE, -1, MUSCLE]


def test_strength_is_the_mean_of_squares_over_the_time_of_the_fault():
    first, second = faults_of(made())
    assert first.strength == pytest.approx(np.sqrt((2 * 30**2 + 5 * 10**2) / 7)) and first.unit == "uV rms"
    assert second.strength == pytest.approx(800.0) and second.unit == "uV range"


def test_seconds_add_up():
    segments = detailed(table(("II",), tens(2)))
    segments.fault[:, FLAT] = 0.15, 0.3
    segments.details.strength[:, FLAT] = 1.5, 3.0
    fault = faults_of(segments)[0]
    assert (fault.strength, fault.unit) == (pytest.approx(4.5), "s")


def test_stretches_join_over_seams():
    first, second = faults_of(made())
    assert first.when == ((8.0, 10.0), (20.0, 25.0)) and second.when == ((0.0, 10.0),)
    segments = made()
    segments.fault[1, MUSCLE], segments.details.windows[1, MUSCLE] = 0.1, 0b1
    assert faults_of(segments)[0].when[0] == (8.0, 11.0)


def test_many_stretches_are_joined_over_the_shortest_pauses():
    segments = detailed(table(("II",), tens(4)))
    segments.fault[:, MUSCLE] = 0.3
    segments.details.windows[:, MUSCLE] = 0b0100000101
    rows = np.arange(4)
    every = fault_stretches(segments, rows, MUSCLE)
    few = fault_stretches(segments, rows, MUSCLE, at_most=8)
    assert len(every) == 12 and len(few) == 8
    assert few[0] == (0.0, 3.0) and few[-1] == every[-1]


def test_what_is_not_called_says_nothing():
    segments = made()
    segments.fault[:] = 0  # as under a patient-first stretch
    assert faults_of(segments) == () and (gravest(segments) == -1).all()
    assert fault_stretches(segments, np.arange(3), MUSCLE) == ()


def test_without_details_the_largest_fraction_comes_first_and_takes_what_is_lost():
    segments = replace(made(), details=None)
    first, second = faults_of(segments)
    assert (first.kind, first.harms, first.strength, first.when) == ("wander", ("pr", "st"), None, ())
    assert second.kind == "muscle"
    assert gravest(segments)[0] == WANDER


def test_rows_of_a_table_keep_their_details():
    picked = made().rows(np.array([2]))
    assert picked.details.windows.tolist() == made().details.windows[[2]].tolist()
    joined = FaultDetails.join([made().details, picked.details])
    assert joined.weight.shape == (4, 9) and joined.n_windows.tolist() == [10] * 4
