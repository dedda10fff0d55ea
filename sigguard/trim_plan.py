"""Decides what of a recording to keep: from its report and from measuring the pieces again. Writes nothing."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import cache

import numpy as np
from numpy.typing import NDArray

from sigguard.blocks import plan_segments
from sigguard.collecting import Collector
from sigguard.cutting import (
    LONGEST_RR_S,
    MOST_OUTWARDS_S,
    SAME_TIME_S,
    Wanted,
    alarm_stretches,
    between_beats,
    faults_over,
    held,
    outside,
    spoilt,
    to_rest,
    union,
    without,
)
from sigguard.errors import UsageError
from sigguard.profile import Profile
from sigguard.recording import RecordingInfo
from sigguard.report.document import Report
from sigguard.segment_pass import Source, measure_all, shipped_model
from sigguard.segments import GRADES, Segments

Floats = NDArray[np.float64]
Remeasure = Callable[[float, float], Segments]
Judge = Callable[[float, float], tuple[Floats, Floats]]

KEEP = GRADES[1:]
WHOLE_S = 10.0  # a segment, which a part of it is judged with
ROUNDS = 6  # of measuring again; in the last ones a segment that falls short goes whole
WHOLE_FROM = 3
OTHER_STARTS = 4  # beats at which a stretch may begin, tried where it does not hold at once
LONG_S = 600.0  # longer stretches are not tried from other beats: one segment is little of them
# What is shorter is a crumb. 8 s are one segment of 10 s less the beats to which its edges give way; a rhythm strip
# is read from six seconds on (its profile asks for such a run); of a recording of 10 s, 5 s are the least that is graded.
LEAST_S = {"ambulatory": 8.0, "strip": 6.0, "resting": 5.0}


@dataclass(frozen=True, slots=True)
class CutSpan:
    """A stretch of a recording, in samples of its leads, kept or cut, and why; ``file`` once it is written."""

    start: int
    stop: int
    kept: bool
    reason: str
    file: str | None = None


def wanted_of(report: Report, keep: str, leads: str | Sequence[str] | None) -> Wanted:
    """What a kept stretch must offer. UsageError for an unknown grade or lead."""
    if keep not in KEEP:
        raise UsageError(f"keep must be one of {', '.join(KEEP)}, found {keep!r}")
    known = report.info.leads
    if leads is None:
        leads = "all" if report.profile_name == "resting" else "any"
    names = leads.split(",") if isinstance(leads, str) else [str(name) for name in leads]
    if len(names) == 1 and names[0] in ("any", "all"):
        return Wanted(keep, tuple(range(len(known))), names[0] == "all")
    index = {name.casefold(): k for k, name in enumerate(known)}
    chosen = [index.get(name.strip().casefold(), -1) for name in names]
    if not chosen or -1 in chosen:
        missing = names[chosen.index(-1)].strip() if chosen else ""
        raise UsageError(
            f"{report.info.name}: leads must be any, all or some of {', '.join(known)}, found {missing!r}"
        )
    return Wanted(keep, tuple(dict.fromkeys(chosen)), True)


def least_span_s(report: Report, min_span_s: float | None) -> float:
    """The shortest stretch to keep, s; a recording that is shorter may be kept whole."""
    if min_span_s is None:
        min_span_s = LEAST_S.get(report.profile_name, LEAST_S["ambulatory"])
    if not 0 <= min_span_s < 1e9:
        raise UsageError(f"the shortest span must be seconds from 0, found {min_span_s!r}")
    return min(float(min_span_s), report.info.duration_s)


def plan_trim(
    report: Report,
    *,
    wanted: Wanted,
    min_span_s: float,
    remeasure: Remeasure | None = None,
    frame: int = 1,
) -> tuple[CutSpan, ...]:
    """The spans to keep and to cut, in order; they add up to the whole.

    ``remeasure(start_s, end_s)`` gives the table of a stretch measured by itself, times from its start;
    without it what the report says is believed. Edges are multiples of ``frame`` samples. What lies
    under a patient-first alarm is kept whatever its grade or length.
    """
    duration_s = report.info.duration_s
    alarms = alarm_stretches(report.patient_first, duration_s)
    rests_s = between_beats(np.asarray(report.beats, dtype=np.float64) / report.info.fs_hz)
    first_bad = without(spoilt(report.segments, wanted), alarms)
    later_bad = np.zeros((0, 2))
    judge = None if remeasure is None else _judge_of(remeasure, wanted)
    if judge is not None:
        first_bad = _closer(judge, first_bad, duration_s)
    kept, crumbs = _kept(first_bad, alarms, rests_s, duration_s, min_span_s)
    # What is kept from end to end has been measured just so.
    for turn in range(ROUNDS if judge is not None and len(first_bad) else 0):
        assert judge is not None
        found: list[Floats] = []
        for k, (a, b) in enumerate(kept):
            room = (float(kept[k - 1, 1]) if k else 0.0, float(b) - min_span_s)
            kept[k, 0], bad = _from_best_start(
                judge, rests_s, alarms, (float(a), float(b)), room, turn >= WHOLE_FROM
            )
            found.append(bad)
        new = union(found)
        if not len(new):
            break
        later_bad = union([later_bad, new])
        starts = {round(float(b), 6): float(a) for a, b in kept}
        kept, crumbs = _kept(union([first_bad, later_bad]), alarms, rests_s, duration_s, min_span_s)
        kept = _keep_starts(kept, starts)
    return _spans(report, wanted, kept, alarms, first_bad, later_bad, crumbs, min_span_s, frame)


def _kept(
    bad: Floats, alarms: Floats, rests_s: Floats, duration_s: float, min_span_s: float
) -> tuple[Floats, Floats]:
    """What is left to keep between the bad stretches, edges between beats, and the crumbs that are let go."""
    runs = to_rest(outside(union([bad]), 0.0, duration_s), rests_s, duration_s)
    short = runs[:, 1] - runs[:, 0] < min_span_s - SAME_TIME_S
    touched = np.array([bool(((alarms[:, 0] < b) & (alarms[:, 1] > a)).any()) for a, b in runs], dtype=bool)
    crumb = short & ~touched
    return union([runs[~crumb], alarms]), runs[crumb]


def _closer(judge: Judge, bad: Floats, duration_s: float) -> Floats:
    """Segments that went whole, one or two on end, held to the seconds that spoil them.

    From either side the longest part is looked for with which the ten seconds up to there, or from there, hold
    when measured by themselves. Where the parts meet no second is to blame and the stretch stays as it is.
    """
    out = bad.copy()
    for k, (a, b) in enumerate(bad.tolist()):
        if not WHOLE_S - SAME_TIME_S <= b - a <= 2 * WHOLE_S + SAME_TIME_S:
            continue
        left = _longest(judge, a - WHOLE_S, 1.0) if a >= WHOLE_S else 0.0
        right = _longest(judge, b, -1.0) if b <= duration_s - WHOLE_S else 0.0
        if left + right <= b - a - 1.0:
            out[k] = a + left, b - right
    return out


def _longest(judge: Judge, start_s: float, way: float) -> float:
    """How far WHOLE_S from a start may be moved, forth (1) or back (-1), and hold; by halving, in eighths; 0 if not."""
    low, high = 0, 8
    while high - low > 1:
        middle = (low + high) // 2
        at = start_s + way * middle * WHOLE_S / 8
        low, high = (low, middle) if len(judge(at, at + WHOLE_S)[1]) else (middle, high)
    return low * WHOLE_S / 8


def _judge_of(remeasure: Remeasure, wanted: Wanted) -> Judge:
    """What of a stretch falls short when measured by itself, by windows and by whole segments; tables are let go."""

    @cache
    def judge(start_s: float, end_s: float) -> tuple[Floats, Floats]:
        table = remeasure(start_s, end_s)
        return spoilt(table, wanted) + start_s, spoilt(table, wanted, whole=True) + start_s

    return judge


def _keep_starts(kept: Floats, starts: dict[float, float]) -> Floats:
    """A stretch that ends where one did before keeps the start that was found for that one, if it is the same."""
    for k, (a, b) in enumerate(kept):
        before = starts.get(round(float(b), 6))
        if before is not None and abs(before - a) <= LONGEST_RR_S + MOST_OUTWARDS_S:
            kept[k, 0] = before
    return kept


def _from_best_start(
    judge: Judge,
    rests_s: Floats,
    alarms: Floats,
    span: tuple[float, float],
    room: tuple[float, float],
    whole: bool,
) -> tuple[float, Floats]:
    """The start from which most of the stretch holds by itself, and what of it does not.

    Segments are counted from the start, so that a beat more or less changes what falls into each.
    """
    a, b = span

    def tried(start: float) -> tuple[float, Floats]:
        bad = judge(start, b)[int(whole)]
        return float((bad[:, 1] - bad[:, 0]).sum()) + max(start - a, 0.0), without(bad, alarms)

    loss, bad = tried(a)
    if not len(bad) or a <= SAME_TIME_S or b - a > LONG_S or ((alarms[:, 0] <= a) & (alarms[:, 1] > a)).any():
        return a, bad
    low, high = max(room[0] + SAME_TIME_S, a - MOST_OUTWARDS_S), min(room[1], a + LONGEST_RR_S)
    near = rests_s[(rests_s > low) & (rests_s < high) & (np.abs(rests_s - a) > SAME_TIME_S)]
    best = (loss, a, bad)
    for start in near[np.argsort(np.abs(near - a))][:OTHER_STARTS]:
        loss, bad = tried(float(start))
        if loss < best[0]:
            best = (loss, float(start), bad)
    return best[1], best[2]


def _spans(
    report: Report,
    wanted: Wanted,
    kept: Floats,
    alarms: Floats,
    first_bad: Floats,
    later_bad: Floats,
    crumbs: Floats,
    min_span_s: float,
    frame: int,
) -> tuple[CutSpan, ...]:
    info = report.info
    edges = np.rint(kept * info.fs_hz / frame).astype(np.int64) * frame
    edges[kept >= info.duration_s - SAME_TIME_S] = info.n_samples
    out: list[CutSpan] = []
    at = 0
    for start, stop in [*edges.tolist(), (info.n_samples, info.n_samples)]:
        if start > at:
            why = _why_cut(report, wanted, at / info.fs_hz, start / info.fs_hz, first_bad, later_bad, crumbs)
            out.append(CutSpan(at, start, False, why or f"less than {min_span_s:g} s by itself"))
        if stop > start:
            why = _why_kept(report, wanted, start / info.fs_hz, stop / info.fs_hz)
            out.append(CutSpan(start, stop, True, why))
        at = stop
    return tuple(out)


def _why_kept(report: Report, wanted: Wanted, start_s: float, end_s: float) -> str:
    under = [a for a in report.patient_first if a.start_s < end_s and a.end_s > start_s]
    if under:
        named = "; ".join(f"{a.pattern} at {a.start_s:.1f} to {a.end_s:.1f} s" for a in under[:5])
        more = f" and {len(under) - 5} more" if len(under) > 5 else ""
        return f"patient first, kept whatever its grade: {named}{more}"
    return f"{_grade_words(wanted)} {_lead_words(report.info, wanted)}"


def _why_cut(
    report: Report,
    wanted: Wanted,
    start_s: float,
    end_s: float,
    first_bad: Floats,
    later_bad: Floats,
    crumbs: Floats,
) -> str:
    parts = []
    grade = wanted.grade if wanted.grade != "all" else "grade all"
    if _overlap(first_bad, start_s, end_s):
        faults = faults_over(report.segments, wanted, start_s, end_s)
        parts.append(f"below {grade}" + (f": {', '.join(faults)}" if faults else ""))
    if _overlap(later_bad, start_s, end_s):
        parts.append(f"part of it did not hold {grade} when measured by itself")
    rest_s = _overlap(crumbs, start_s, end_s)
    if rest_s:
        parts.append(f"{rest_s:.1f} s of it too short to keep")
    return "; ".join(parts)


def _overlap(stretches: Floats, start_s: float, end_s: float) -> float:
    inner = np.clip(stretches, start_s, end_s)
    return float((inner[:, 1] - inner[:, 0]).sum())


def _grade_words(wanted: Wanted) -> str:
    return "grade all" if wanted.grade == "all" else f"{wanted.grade} or better"


def _lead_words(info: RecordingInfo, wanted: Wanted) -> str:
    if len(wanted.leads) == 1:
        return f"in {info.leads[wanted.leads[0]]}"
    if len(wanted.leads) == info.n_leads:
        return "in every lead" if wanted.every else "in one lead at least"
    return f"in {', '.join(info.leads[k] for k in wanted.leads)}"


# ── measuring a stretch by itself ──


@dataclass(frozen=True, slots=True, eq=False)
class _Window:
    """A stretch of a source as if it were all there is."""

    source: Source
    first: int
    info: RecordingInfo

    def read(self, start: int = 0, stop: int | None = None) -> NDArray[np.float64]:
        stop = self.info.n_samples if stop is None else stop
        return self.source.read(self.first + start, self.first + stop)


def remeasure_of(
    source: Source, profile: Profile, mains_among_hz: tuple[float, ...], segment_s: float
) -> Remeasure:
    """Measures a stretch of the source as ``check`` would measure its copy."""

    def remeasure(start_s: float, end_s: float) -> Segments:
        info = source.info
        first, last = round(start_s * info.fs_hz), min(round(end_s * info.fs_hz), info.n_samples)
        window = _Window(source, first, replace(info, n_samples=max(last - first, 1)))
        plan = plan_segments(window.info.n_samples, info.fs_hz, segment_s)
        collected = Collector(window.info, len(plan) * info.n_leads)
        for part in measure_all(window, plan, shipped_model(), profile, mains_among_hz):
            collected.add(part)
        return collected.segments()

    return remeasure


def holds(table: Segments, wanted: Wanted) -> bool:
    """Whether every segment of a table offers what is wanted."""
    return bool(held(table, wanted)[1].all())
