"""Where to cut: from the table of segments to stretches worth keeping, finer than a segment.

A segment below the grade asked for is spoilt only in those of its windows, of about 1 s, on which a fault
lies that takes what is asked. What the table cannot place within a segment spoils all of it. Pure
arithmetic on times; measuring again and writing are for ``trim_plan`` and ``trimming``.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sigguard.findings import PatientFirst
from sigguard.segments import FAULTS, GRADES, MEASUREMENTS, Segments
from sigguard.spans import Grid, lost

Floats = NDArray[np.float64]

AROUND_ALARM_S = 2.0  # the ends of an alarm are known to about that
BETWEEN = 0.6  # of the way from one R to the next: behind T and before P from about 40 to 120 /min
# An edge is moved outwards at most so far; further, it takes in what is to be cut.
MOST_OUTWARDS_S = 0.5
LONGEST_RR_S = 2.0  # beyond it beats were missed or there are none: the edge stays where it is
SAME_TIME_S = 1e-6
ALL_WINDOWS = 2**64 - 1
# The measurements of each grade, in the order of GRADES.
NEEDED = np.array(
    [[False] * 5, [m == "rate" for m in MEASUREMENTS], [m != "st" for m in MEASUREMENTS], [True] * 5]
)


@dataclass(frozen=True, slots=True)
class Wanted:
    """What a stretch must offer: a grade in one or in every one of some leads."""

    grade: str  # of GRADES
    leads: tuple[int, ...]  # indices of the leads that count
    every: bool

    @property
    def level(self) -> int:
        return GRADES.index(self.grade)


def held(segments: Segments, wanted: Wanted) -> tuple[Grid, NDArray[np.bool_]]:
    """The slots of a table, and of each whether it has the grade: (n_slots,)."""
    grid = Grid.of(segments)
    fit = grid.spread(segments.grade, 0)[:, list(wanted.leads)] >= wanted.level
    return grid, np.asarray(fit.all(axis=1) if wanted.every else fit.any(axis=1))


def spoilt(segments: Segments, wanted: Wanted, *, whole: bool = False) -> Floats:
    """(m, 2): begin and end, s, of the stretches that do not offer what is wanted; sorted, apart.

    With ``whole`` a segment that falls short counts as spoilt from end to end.
    """
    if not len(segments):
        return np.zeros((0, 2))
    grid, ok = held(segments, wanted)
    if whole or segments.details is None:
        return union([np.column_stack((grid.start_s, grid.end_s))[~ok]])
    windows = grid.spread(_spoilt_windows(segments, wanted), ALL_WINDOWS)[:, list(wanted.leads)]
    join = np.bitwise_or if wanted.every else np.bitwise_and
    bits = join.reduce(windows, axis=1)
    # Leads that are spoilt at different seconds, so that no second is to blame: the whole segment.
    bits = np.where(ok, np.uint64(0), np.where(bits == 0, np.uint64(ALL_WINDOWS), bits))
    count = grid.spread(segments.details.n_windows, 1).max(axis=1).astype(np.int64)
    slots = np.flatnonzero(~ok)
    place = np.arange(64)
    on = ((bits[slots, None] >> place.astype(np.uint64)) & np.uint64(1)).astype(bool)
    row, k = np.nonzero(on & (place < count[slots, None]))
    width = (grid.length_s / count)[slots][row]
    begin = grid.start_s[slots][row] + k * width
    return union([np.column_stack((begin, begin + width))])


def _spoilt_windows(segments: Segments, wanted: Wanted) -> NDArray[np.uint64]:
    """(n,): bit k set where the k-th window of the row does not offer the grade; none on a row that does."""
    details = segments.details
    assert details is not None
    missed = lost(segments) & NEEDED[wanted.level]
    takes = (details.harms & missed[:, np.newaxis, :]).any(axis=2) & (np.asarray(segments.fault) > 0)
    bits = np.bitwise_or.reduce(np.where(takes, details.windows, np.uint64(0)), axis=1)
    # A fault that lies nowhere in particular, or none at all: the whole row.
    unplaced = (takes & (details.windows == 0)).any(axis=1) | (bits == 0)
    bits = np.where(unplaced, np.uint64(ALL_WINDOWS), bits)
    return np.where(segments.grade >= wanted.level, np.uint64(0), bits)


def faults_over(segments: Segments, wanted: Wanted, start_s: float, end_s: float) -> tuple[str, ...]:
    """The faults that lie on the leads wanted between two times, what lies longest first; at most three."""
    chosen = np.isin(segments.lead_index, wanted.leads)
    rows = np.flatnonzero(chosen & (segments.start_s < end_s) & (segments.end_s > start_s))
    rows = rows[segments.grade[rows] < wanted.level]
    over = np.minimum(segments.end_s[rows], end_s) - np.maximum(segments.start_s[rows], start_s)
    seconds = over @ np.asarray(segments.fault)[rows].astype(np.float64)
    return tuple(FAULTS[k] for k in np.argsort(-seconds, kind="stable")[:3] if seconds[k] > 0)


# ── stretches: (m, 2) arrays of begin and end, s, sorted and apart ──


def union(parts: Iterable[Floats]) -> Floats:
    """All stretches together; those that touch are one."""
    stack = np.concatenate([np.zeros((0, 2)), *parts])
    stack = stack[stack[:, 1] > stack[:, 0] + SAME_TIME_S]
    if not len(stack):
        return stack
    stack = stack[np.argsort(stack[:, 0], kind="stable")]
    reach = np.maximum.accumulate(stack[:, 1])
    first = np.concatenate(([True], stack[1:, 0] > reach[:-1] + SAME_TIME_S))
    last = np.concatenate((np.flatnonzero(first)[1:] - 1, [len(stack) - 1]))
    return np.column_stack((stack[first, 0], reach[last]))


def outside(stretches: Floats, start_s: float, end_s: float) -> Floats:
    """What of the time from start to end lies in none of the stretches."""
    inner = np.clip(stretches, start_s, end_s)
    inner = inner[inner[:, 1] > inner[:, 0] + SAME_TIME_S]
    begin = np.concatenate(([start_s], inner[:, 1]))
    end = np.concatenate((inner[:, 0], [end_s]))
    return np.column_stack((begin, end))[end > begin + SAME_TIME_S]


def without(stretches: Floats, kept: Floats) -> Floats:
    """The stretches less what of them lies in ``kept``."""
    return np.concatenate([np.zeros((0, 2)), *(outside(kept, a, b) for a, b in stretches)])


def alarm_stretches(alarms: Sequence[PatientFirst], duration_s: float) -> Floats:
    """The time under alarms, with AROUND_ALARM_S to either side."""
    found = np.array([(a.start_s, a.end_s) for a in alarms]).reshape(-1, 2)
    return union([np.clip(found + (-AROUND_ALARM_S, AROUND_ALARM_S), 0.0, duration_s)])


def between_beats(beats_s: Floats) -> Floats:
    """Points of rest between neighbouring beats, s; none where two beats lie far apart."""
    rr = np.diff(beats_s)
    points = beats_s[:-1] + BETWEEN * rr
    return points[rr <= LONGEST_RR_S]


def to_rest(stretches: Floats, rests_s: Floats, duration_s: float) -> Floats:
    """The stretches with their edges at points of rest: the nearest, but outwards by MOST_OUTWARDS_S at most.

    Edges at the ends of the recording, and those with no point of rest within LONGEST_RR_S, stay. A cut
    between two stretches never closes; a stretch of which nothing would remain is left out.
    """
    begin, end = stretches[:, 0].copy(), stretches[:, 1].copy()
    for k, (a, b) in enumerate(stretches):
        if a > SAME_TIME_S:
            begin[k] = _nearest(rests_s, a, a - MOST_OUTWARDS_S, a + LONGEST_RR_S)
        if b < duration_s - SAME_TIME_S:
            end[k] = _nearest(rests_s, b, b - LONGEST_RR_S, b + MOST_OUTWARDS_S)
    closed = begin[1:] <= end[:-1] + SAME_TIME_S
    for gap in np.flatnonzero(closed).tolist():  # give way on both sides
        before, after = stretches[gap, 1], stretches[gap + 1, 0]
        end[gap] = _nearest(rests_s, before, before - LONGEST_RR_S, before)
        begin[gap + 1] = _nearest(rests_s, after, after, after + LONGEST_RR_S)
    left = end > begin + SAME_TIME_S
    return np.column_stack((begin[left], end[left]))


def _nearest(points: Floats, at: float, low: float, high: float) -> float:
    near = points[np.searchsorted(points, low) : np.searchsorted(points, high, side="right")]
    return float(near[np.abs(near - at).argmin()]) if len(near) else at
