"""The table of segments read along time: seconds, summaries, spans of one grade, the best strip.

Everything here is counted from the table alone and vectorised over its rows.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sigguard.fault_summaries import lead_faults
from sigguard.findings import BestStrip, LeadSummary, Span
from sigguard.segments import FAULTS, GRADES, MEASUREMENTS, Segments

MAX_SPANS = 2000
FAULT_SHARE = 0.05  # a span names a fault that lies on at least this share of it
_NO_ROW = 127  # grade of a lead for which the table has no row at that time
_SAME_TIME_S = 1e-6


@dataclass(frozen=True, slots=True, eq=False)
class Grid:
    """The rows laid out as (n_slots, n_leads); a slot is one segment's time."""

    start_s: NDArray[np.float64]  # (n_slots,)
    end_s: NDArray[np.float64]  # (n_slots,)
    slot: NDArray[np.intp]  # (n,) of each row
    lead: NDArray[np.int32]  # (n,) of each row
    n_leads: int

    @classmethod
    def of(cls, segments: Segments) -> Grid:
        step = np.diff(segments.start_s)
        if len(segments) and (step >= 0).all():  # in order of time, as the table is kept
            first = np.concatenate(([0], np.flatnonzero(step) + 1))
            start_s, end_s = segments.start_s[first], np.maximum.reduceat(segments.end_s, first)
            slot = np.repeat(np.arange(len(first)), np.diff(np.append(first, len(segments))))
        else:
            start_s, slot = np.unique(segments.start_s, return_inverse=True)
            end_s = start_s.copy()
            np.maximum.at(end_s, slot, segments.end_s)
        return cls(start_s, end_s, slot, segments.lead_index, len(segments.leads))

    @property
    def length_s(self) -> NDArray[np.float64]:
        return self.end_s - self.start_s

    def spread(self, column: NDArray, fill: float) -> NDArray:
        """A column of the table, (n, ...), as (n_slots, n_leads, ...); ``fill`` where there is no row."""
        out = np.full((len(self.start_s), self.n_leads, *column.shape[1:]), fill, dtype=column.dtype)
        out[self.slot, self.lead] = column
        return out

    def breaks(self) -> NDArray[np.bool_]:
        """(n_slots,): true where a slot does not follow on the one before."""
        joined = np.abs(self.start_s[1:] - self.end_s[:-1]) < _SAME_TIME_S
        return np.concatenate(([True], ~joined)) if len(self.start_s) else np.zeros(0, bool)


def lost(segments: Segments) -> NDArray[np.bool_]:
    """(n, 5): the measurement is neither reliable nor absent."""
    return ~segments.reliable & (segments.absent == 0)


def reliable_seconds(segments: Segments) -> NDArray[np.float64]:
    """(n_leads, 5): seconds for which each measurement is reliable in each lead."""
    seconds = (segments.end_s - segments.start_s)[:, np.newaxis] * segments.reliable
    out = np.zeros((len(segments.leads), len(MEASUREMENTS)))
    for k in range(len(MEASUREMENTS)):
        out[:, k] = np.bincount(segments.lead_index, seconds[:, k], minlength=len(segments.leads))
    return out


def covered_seconds(grid: Grid, column: NDArray[np.bool_]) -> float:
    """Seconds for which a column of the table, (n,), is true in at least one lead."""
    seen = np.zeros(len(grid.start_s), bool)
    seen[grid.slot[column]] = True
    return float(grid.length_s[seen].sum())


@dataclass(frozen=True, slots=True)
class Stretch:
    """A time on end in one lead, or in all of them (``lead`` None)."""

    start_s: float
    end_s: float
    lead: int | None


def longest_stretch(segments: Segments, column: NDArray[np.bool_], *, every: bool = False) -> Stretch | None:
    """The longest time on end for which a column, (n,), is true in one lead, or with ``every`` in all at once.

    None where it never is; the first lead and the earliest time of several as long.
    """
    if not len(segments):
        return None
    grid = Grid.of(segments)
    on, breaks = grid.spread(column, False), grid.breaks()
    best: Stretch | None = None
    for lead in (None,) if every else range(grid.n_leads):
        run = np.asarray(on.all(axis=1) if lead is None else on[:, lead])
        starts = np.flatnonzero(run & (breaks | ~np.concatenate(([False], run[:-1]))))
        ends = np.flatnonzero(run & np.concatenate((breaks[1:] | ~run[1:], [True])))
        if len(starts):
            length = grid.end_s[ends] - grid.start_s[starts]
            k = int(length.argmax())
            if best is None or length[k] > best.end_s - best.start_s:
                best = Stretch(float(grid.start_s[starts[k]]), float(grid.end_s[ends[k]]), lead)
    return best


def longest_run(segments: Segments, column: NDArray[np.bool_]) -> tuple[float, int | None]:
    """The longest time on end for which a column, (n,), is true in one lead, and that lead's index."""
    found = longest_stretch(segments, column)
    return (0.0, None) if found is None else (found.end_s - found.start_s, found.lead)


def lead_summaries(segments: Segments) -> tuple[LeadSummary, ...]:
    """Each lead over the whole table, as shares of its time; a lead without rows is ``none`` throughout.

    Faults come as ``fault_summaries.lead_faults`` orders them: what costs the most first.
    """
    length_s = segments.end_s - segments.start_s
    # One kind of float throughout, or the products below would not go through BLAS.
    bad = lost(segments).astype(np.float64)
    reliable = segments.reliable.astype(np.float64)
    out = []
    for index, lead in enumerate(segments.leads):
        rows = np.flatnonzero(segments.lead_index == index)
        weight = length_s[rows] / max(float(length_s[rows].sum()), 1e-12)
        grades = (
            np.bincount(segments.grade[rows], weight, minlength=len(GRADES)) if len(rows) else np.eye(4)[0]
        )
        out.append(
            LeadSummary(
                lead=lead,
                grade_fraction={name: _share(grades[GRADES.index(name)]) for name in reversed(GRADES)},
                reliable_fraction=dict(zip(MEASUREMENTS, map(_share, weight @ reliable[rows]), strict=True)),
                faults=lead_faults(segments, rows, bad),
            )
        )
    return tuple(out)


def _share(value: float) -> float:
    """A share from 0 to 1 without the last digits that adding up leaves."""
    return round(min(max(float(value), 0.0), 1.0), 9)


# ── spans ──


def spans(segments: Segments, duration_s: float, *, at_most: int = MAX_SPANS) -> tuple[Span, ...]:
    """Neighbouring segments of one grade over the same leads, joined; in order of time.

    At each time every lead lies in exactly one span. Where there would be more than ``at_most``
    (a long recording of changing quality), neighbouring segments are first taken together, two, four,
    eight ... at a time, at their lowest grade: a span never promises more than holds over all of it.
    Whoever needs the exact segments reads the table.
    """
    if not len(segments):
        return ()
    grid = Grid.of(segments)
    grade = grid.spread(segments.grade, _NO_ROW)
    fault_s = grid.spread(segments.fault, 0.0) * grid.length_s[:, np.newaxis, np.newaxis].astype(np.float32)
    start_s, end_s, breaks = grid.start_s, grid.end_s, grid.breaks()
    while True:
        runs = [(level, *_runs(grade == level, breaks)) for level in range(len(GRADES))]
        if sum(len(first) for _, first, _ in runs) <= at_most or len(start_s) == 1:
            break
        pairs = np.arange(0, len(start_s), 2)
        grade = np.minimum.reduceat(grade, pairs, axis=0)
        fault_s = np.add.reduceat(fault_s, pairs, axis=0)
        start_s, end_s = start_s[pairs], end_s[np.minimum(pairs + 1, len(end_s) - 1)]
        breaks = np.logical_or.reduceat(breaks, pairs)
    found: list[tuple[float, int, Span]] = []
    for level, first, last in runs:
        mask = grade == level
        on_leads = np.einsum("sl,slf->sf", mask, fault_s)
        total = np.concatenate((np.zeros((1, len(FAULTS))), np.cumsum(on_leads, axis=0, dtype=np.float64)))
        fault_of = total[last + 1] - total[first]
        for row, begin, end in zip(fault_of, first, last, strict=True):
            here = np.flatnonzero(mask[begin])
            stop_s = min(float(end_s[end]), duration_s)
            share = row / max((stop_s - start_s[begin]) * len(here), 1e-9)
            faults = tuple(FAULTS[k] for k in np.argsort(-share, kind="stable") if share[k] >= FAULT_SHARE)
            leads = tuple(segments.leads[k] for k in here)
            found.append(
                (start_s[begin], here[0], Span(float(start_s[begin]), stop_s, leads, GRADES[level], faults))
            )
    return tuple(span for *_, span in sorted(found, key=lambda item: item[:2]))


def _runs(mask: NDArray[np.bool_], breaks: NDArray[np.bool_]) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """First and last slot of each run over which the same leads, and at least one, are set."""
    change = breaks.copy()
    change[1:] |= (mask[1:] != mask[:-1]).any(axis=1)
    first = np.flatnonzero(change)
    last = np.concatenate((first[1:], [len(mask)])) - 1
    keep = mask[first].any(axis=1)
    return first[keep], last[keep]


# ── best strip ──


def best_strip(
    segments: Segments,
    leads_that_matter: Sequence[str],
    length_s: float = 10.0,
    *,
    every: bool = True,
) -> BestStrip | None:
    """The stretch of about ``length_s`` on which the leads that matter allow the most.

    It starts where a segment starts and is shorter only if the recording is. Ranked by its grade
    (the lowest over its time and, with ``every``, over all these leads; otherwise of the best lead),
    then by the grades of all the leads together, then by the mean score. None where no stretch
    holds a grade above ``none`` in any of the leads.
    """
    wanted = [k for k, name in enumerate(segments.leads) if name in set(leads_that_matter)]
    if not wanted or not len(segments):
        return None
    grid = Grid.of(segments)
    grade = grid.spread(segments.grade, 0)[:, wanted].astype(np.int16)
    score = grid.spread(np.nan_to_num(segments.score).mean(axis=1), 0.0)[:, wanted].mean(axis=1)
    block = np.cumsum(grid.breaks())  # slots of one block follow on each other
    last = np.searchsorted(grid.end_s, grid.start_s + length_s - _SAME_TIME_S)
    whole = (last < len(block)) & (block[np.minimum(last, len(block) - 1)] == block)
    if not whole.any():  # shorter than the strip: each block by itself
        first_of = np.concatenate(([True], block[1:] != block[:-1]))
        whole, last = first_of, np.searchsorted(block, block, side="right") - 1
    begin = np.flatnonzero(whole)
    last = last[begin]
    lowest = grade[begin]
    mean_score = score[begin]
    for step in range(1, int((last - begin).max()) + 1):
        at = np.minimum(begin + step, last)
        lowest = np.minimum(lowest, grade[at])
        mean_score = np.minimum(mean_score, score[at])
    held = lowest.min(axis=1) if every else lowest.max(axis=1)
    pick = np.lexsort((-begin, mean_score, lowest.sum(axis=1), held))[-1]
    if not lowest[pick].any():
        return None
    start = float(grid.start_s[begin[pick]])
    end = min(float(grid.end_s[last[pick]]), start + length_s)
    return BestStrip(start, end, GRADES[int(held[pick])])
