"""Stretches that look like a lethal rhythm or standstill: look at the patient before the leads.

Three patterns: fibrillation or flutter of the ventricles for 4 s; wide complexes (120 ms or more) at 120/min
or more for 10 s; no beat for 3 s. Each is judged on windows of 4 s, one every second. Movement can look
like fibrillation and a fallen-off lead like standstill: both are ruled out only by another lead that shows
a steady rhythm at the same time. What cannot be told apart is reported.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from sigguard.findings import PatientFirst
from sigguard.rhythm_beats import Train, find_trains
from sigguard.rhythm_gaps import at_rest, beats_as_before, beats_beneath, contact
from sigguard.rhythm_shape import SHAPE_NAMES, WINDOW_S, Work, prepare, shape_indices
from sigguard.rhythm_sharp import sharp_beats
from sigguard.vf_score import SMALLEST_RMS_MV, fibrillation_score

Floats = NDArray[np.floating]
Bools = NDArray[np.bool_]

MARGIN_S = 30.0  # blocks with this much more on both sides find what the whole finds
# log odds above which a window counts as fibrillation or flutter: alone, or on average with both its neighbours
SURE_LIMIT = 1.0
LASTING_LIMIT = 0.0
HOLD_S = 15.0  # an alarm goes on over so long without one where no lead shows a steady rhythm
FAST_RR_S = 0.505  # mean RR of 120/min, with 1 % for rounding to samples
WIDE_MS = 120.0
STEADY_RR_S = 0.33  # a plausible steady rhythm stays below 180/min,
STEADY_SCORE = -2.0  # does not look half like fibrillation,
STEADY_FULLNESS = 0.8  # and rests between its beats: a sine has 0.9 (rhythm_shape), narrow beats under 0.5
SLOW_RR_S = 0.6
MOST = 0.6  # share of a window's beats that must be wide, or alike
WIDE_FAST_S = 10.0
STANDSTILL_S = 3.0
EDGE_S = 1.5
CLEARING_SHARE = 0.5  # a lead with beats stands for two without
ALIKE = 0.8  # correlation of neighbouring complexes of one rhythm
SMALL_SHARE = 0.4  # of the usual height and steepness: lesser deflections are no beats
USUAL_S = 8  # seconds to either side that tell the usual size
LEAST_MV = 0.08  # deflections that are alike count as beats from here on,
SURE_MV = 0.1  # others from here on

TEXT = {
    "fibrillation-or-flutter": "looks like fibrillation or flutter of the ventricles",
    "wide-fast": "wide complexes at 120/min or more",
    "standstill": "no beat to be seen for 3 s or more",
}


@dataclass(frozen=True, slots=True, eq=False)
class _States:
    """All leads over time: (n_leads, n_windows), but for ``quiet``, (n_leads, n) at the working rate."""

    wavy: Bools  # looks like fibrillation or flutter
    wide_fast: Bools
    steady: Bools  # a plausible rhythm that is neither
    slow: Bools  # steady, and too slow for any fast rhythm to hide behind it
    quiet: Bools  # within a stretch of STANDSTILL_S or more without any beat


def find_patient_first(
    x_mv: Floats,
    fs_hz: float,
    leads: Sequence[str],
    *,
    lead_beats_s: Sequence[Floats],
    qrs_ms: Sequence[Floats] | None = None,
    lead_has_data: Sequence[bool] | Bools | None = None,
    rest_tells: Bools | None = None,
) -> list[PatientFirst]:
    """Stretches that need a look at the patient, in order of time.

    ``x_mv`` (n_leads, n_samples), mV, NaN where missing. ``lead_beats_s`` holds for each lead the times of
    the beats the ordinary detector found, in s from the start of ``x_mv``; they may be wrong. ``qrs_ms``:
    for each lead the QRS duration of each of those beats, NaN where unknown. ``lead_has_data``: for each
    lead whether any sample of it exists in the whole recording, where ``x_mv`` is a part; ``rest_tells``: what
    ``rhythm_gaps.contact`` says of the whole recording.

    Missing samples are no standstill, unless no lead holds data at all. A recording under 3 s gives an
    empty list; one under 4 s can only show standstill.
    """
    x = np.asarray(x_mv, dtype=np.float64)
    duration_s = x.shape[1] / fs_hz
    if duration_s < STANDSTILL_S:
        return []
    has_data = np.isfinite(x).any(axis=1) if lead_has_data is None else np.asarray(lead_has_data, dtype=bool)
    if not has_data.any():
        return [_finding(leads, range(len(leads)), 0.0, duration_s, "standstill")]
    rest = at_rest(x, fs_hz)
    if rest.any():
        rest &= (contact(x, fs_hz).rest_tells if rest_tells is None else rest_tells)[:, None]
    work = prepare(x, fs_hz, lost=rest)
    shape, rms_mv = shape_indices(work)
    states = _judge(work, shape, rms_mv, lead_beats_s, qrs_ms)
    cleared = np.any(states.steady, axis=0)
    if (states.wavy & ~cleared).any():
        cleared |= np.any(sharp_beats(work), axis=0)
    wavy = states.wavy & ~cleared
    held = _held(np.any(wavy, axis=0), cleared, round(HOLD_S * work.fs_hz / work.step))
    found = _runs(wavy, work, leads, "fibrillation-or-flutter", 1, within=held)
    found += _runs(_wide_fast_anywhere(states), work, leads, "wide-fast", _windows_in(WIDE_FAST_S, work))
    found += _standstill_findings(states, work, leads)
    return sorted(found, key=lambda f: (f.start_s, f.end_s, f.pattern))


def cut_findings(
    found: Sequence[PatientFirst], *, offset_s: float, start_s: float, end_s: float
) -> list[PatientFirst]:
    """Findings of a block that began at ``offset_s`` of the recording, as far as they lie from start_s to end_s.

    A block has to begin at a multiple of ``rhythm_shape.grid_samples(fs_hz)`` samples, and to hold MARGIN_S more than
    the stretch asked for on either side. The parts of all blocks are put together by join_findings.
    """
    cut = []
    for f in found:
        begin, end = max(f.start_s + offset_s, start_s), min(f.end_s + offset_s, end_s)
        if end > begin:
            cut.append(replace(f, start_s=begin, end_s=end, text=_text(f.leads, f.pattern, begin, end)))
    return cut


def join_findings(parts: Sequence[PatientFirst], *, gap_s: float = 0.0) -> list[PatientFirst]:
    """Findings of one pattern that overlap or touch (within ``gap_s``) made one; the leads are united."""
    joined: list[PatientFirst] = []
    for part in sorted(parts, key=lambda f: (f.pattern, f.start_s)):
        last = joined[-1] if joined else None
        if last is not None and last.pattern == part.pattern and part.start_s <= last.end_s + gap_s + 1e-9:
            leads = last.leads + tuple(lead for lead in part.leads if lead not in last.leads)
            end_s = max(last.end_s, part.end_s)
            joined[-1] = replace(
                last, leads=leads, end_s=end_s, text=_text(leads, part.pattern, last.start_s, end_s)
            )
        else:
            joined.append(part)
    return sorted(joined, key=lambda f: (f.start_s, f.end_s, f.pattern))


def join_to_at_most(found: Sequence[PatientFirst], at_most: int) -> list[PatientFirst]:
    """Findings of one pattern joined over the shortest pauses until no more than ``at_most`` (three or more) are left.

    Nothing of what was found is lost: a joined one covers its parts and the pauses between, and its text says how
    many they are.
    """
    ordered = sorted(found, key=lambda f: (f.pattern, f.start_s, f.end_s))
    if len(ordered) <= at_most:
        return list(found)
    ends = np.array([f.end_s for f in ordered])
    pauses = np.array([f.start_s for f in ordered[1:]]) - ends[:-1]
    same = np.array([f.pattern == g.pattern for f, g in zip(ordered[:-1], ordered[1:], strict=True)])
    order = np.argsort(np.where(same, pauses, np.inf), kind="stable")
    joins = np.zeros(len(ordered), dtype=bool)
    joins[1 + order[: len(ordered) - max(at_most, len(TEXT))]] = True
    joins[1:] &= same
    out = []
    for part in np.split(np.arange(len(ordered)), np.flatnonzero(~joins)[1:]):
        first, end_s = ordered[part[0]], max(ordered[k].end_s for k in part)
        if len(part) > 1:
            leads = tuple(dict.fromkeys(lead for k in part for lead in ordered[k].leads))
            text = f"{len(part)} stretches: {_text(leads, first.pattern, first.start_s, end_s)}"
            first = replace(first, leads=leads, end_s=end_s, text=text)
        out.append(first)
    return sorted(out, key=lambda f: (f.start_s, f.end_s, f.pattern))


def _windows_in(span_s: float, work: Work) -> int:
    """How many windows in a row cover a span."""
    return 1 + int(np.ceil((span_s - WINDOW_S) * work.fs_hz / work.step - 1e-6))


def _judge(
    work: Work, shape: Floats, rms_mv: Floats, lead_beats_s: Sequence[Floats], qrs_ms: Sequence[Floats] | None
) -> _States:
    score, fullness = fibrillation_score(shape), shape[..., SHAPE_NAMES.index("fullness")]
    own, given = find_trains(work, lead_beats_s)
    trains = (own,) if given is own else (own, given)
    begin = np.arange(score.shape[1]) * work.step
    there = _presence(work)
    usable = there[:, begin + work.length] - there[:, begin] >= 0.5 * work.length if begin.size else score > 0
    wavy = looks_wavy(np.where(usable & (rms_mv >= SMALLEST_RMS_MV), score, -np.inf))
    tables = [_window_table(train, work, begin) for train in trains]
    wide_fast = usable & np.any([t.fast & t.wide & t.alike for t in tables], axis=0)
    if qrs_ms is not None:
        reported = np.stack(
            [_reported_wide(t, q, begin / work.fs_hz) for t, q in zip(lead_beats_s, qrs_ms, strict=True)]
        )
        wide_fast |= usable & tables[-1].fast & tables[-1].alike & reported
    regular = usable & (score < STEADY_SCORE) & (fullness < STEADY_FULLNESS)
    steady = regular & ~wide_fast & np.any([t.steady for t in tables], axis=0)
    slow = steady & np.any([t.steady & t.slow for t in tables], axis=0)
    return _States(wavy, wide_fast, steady, slow, _quiet(work, trains))


def looks_wavy(score: Floats, *, sure: float = SURE_LIMIT, lasting: float = LASTING_LIMIT) -> Bools:
    """(n_leads, n_windows) log odds, -inf where none → windows that look like fibrillation or flutter.

    A window far above the limit counts alone: four seconds fill but one. Else three in a row decide together.
    """
    if score.shape[1] < 3:  # short recordings
        return (score > sure) | (score > lasting).all(axis=1, keepdims=True)
    three = np.full_like(score, -np.inf)
    three[:, 1:-1] = (score[:, :-2] + score[:, 1:-1] + score[:, 2:]) / 3
    mean = three > lasting
    out: Bools = (score > sure) | mean
    out[:, :-1] |= mean[:, 1:]
    out[:, 1:] |= mean[:, :-1]
    return out


def _presence(work: Work) -> Floats:
    """(n_leads, n + 1): samples present before each sample."""
    return np.concatenate([np.zeros((len(work.present), 1)), np.cumsum(work.present, axis=1)], axis=1)


@dataclass(frozen=True, slots=True, eq=False)
class _Table:
    """One beat train over the windows, (n_leads, n_windows) each."""

    fast: Bools
    wide: Bools
    alike: Bools
    steady: Bools
    slow: Bools


def _window_table(train: Train, work: Work, begin: NDArray[np.int64]) -> _Table:
    n_leads, n = work.y_mv.shape
    if len(train) < 2:
        return _Table(*(np.zeros((n_leads, begin.size), bool) for _ in range(5)))
    tape = train.row * n + train.at  # leads end to end: no window reaches over the end of its lead
    starts = np.arange(n_leads)[:, None] * n + begin
    low, high = np.searchsorted(tape, starts), np.searchsorted(tape, starts + work.length)
    count = high - low
    first, last = np.minimum(low, len(train) - 1), np.maximum(high - 1, 0)
    mean_rr = (tape[last] - tape[first]) / np.maximum(count - 1, 1) / work.fs_hz

    def mostly(flag: Bools) -> Bools:
        total = np.concatenate([[0], np.cumsum(flag)])
        return total[high] - total[low] >= MOST * np.maximum(count, 1)

    fast = (count >= 6) & (mean_rr <= FAST_RR_S)
    wide = mostly(train.width_ms >= WIDE_MS)
    steady = (count >= 2) & mostly(train.kinship >= ALIKE) & (mean_rr >= STEADY_RR_S) & ~(wide & fast)
    return _Table(fast, wide, mostly(train.likeness >= ALIKE), steady, mean_rr >= SLOW_RR_S)


def _reported_wide(beats_s: Floats, qrs_ms: Floats, starts_s: Floats) -> Bools:
    """Where at least MOST of the given widths are wide (windows without any known width: not)."""
    known = np.isfinite(qrs_ms)
    t, wide = np.asarray(beats_s)[known], np.asarray(qrs_ms)[known] >= WIDE_MS
    low, high = np.searchsorted(t, starts_s), np.searchsorted(t, starts_s + WINDOW_S)
    total = np.concatenate([[0], np.cumsum(wide)])
    return (high > low) & (total[high] - total[low] >= MOST * (high - low))


def _quiet(work: Work, trains: Sequence[Train]) -> Bools:
    """(n_leads, n): stretches of STANDSTILL_S or more, present, without anything that may be a beat."""
    n_leads, n = work.y_mv.shape
    names = ("row", "at", "height_mv", "steep_mv", "kinship", "company")
    row, at, height, steep, kinship, company = (
        np.concatenate([getattr(t, name) for t in trains]) for name in names
    )
    alike = kinship >= ALIKE

    real = height >= np.where(alike, LEAST_MV, SURE_MV)
    shape = (n_leads, n // work.step + 1)
    for size in (height, steep):  # a P wave may be high, but never steep
        usual = _usual(row, at // work.step, np.where(company >= ALIKE, size, 0.0), shape)
        alone = _usual(row, at // work.step, np.where(alike, size, 0.0), shape)
        usual = np.where(usual > 0, usual, alone)
        real &= size >= SMALL_SHARE * usual
    quiet = np.zeros((n_leads, n), bool)
    there = _presence(work)
    least = STANDSTILL_S * work.fs_hz - 1
    for lead in range(n_leads):
        sure = np.unique(at[real & (row == lead)])
        edges = np.concatenate([[0], sure, [n]])
        for k in np.flatnonzero(np.diff(edges) >= least):
            inner = beats_beneath(work, lead, edges[k], edges[k + 1], sure)
            if not len(inner):
                again = np.unique(at[(company >= ALIKE) & (row == lead)])
                inner = beats_as_before(work, lead, edges[k], edges[k + 1], again)
            inner_edges = np.concatenate([[edges[k]], inner, [edges[k + 1]]])
            for start, end in zip(inner_edges[:-1], inner_edges[1:], strict=True):
                present = there[lead, end] - there[lead, start]
                if end - start >= least and present >= (STANDSTILL_S - 0.05) * work.fs_hz:
                    quiet[lead, start:end] = True
    return quiet


def _usual(row: NDArray[np.int64], second: NDArray[np.int64], size: Floats, shape: tuple[int, int]) -> Floats:
    """Upper quartile, at each candidate, of the highest values (above 0) of the 17 s around it; 0 without any."""
    largest = np.zeros((shape[0], shape[1] + 2 * USUAL_S))
    np.maximum.at(largest, (row, second + USUAL_S), size)
    around = np.sort(sliding_window_view(largest, 2 * USUAL_S + 1, axis=1), axis=2)
    count = (around > 0).sum(axis=2, keepdims=True)
    place = around.shape[2] - 1 - np.minimum(count // 4, np.maximum(count - 1, 0))
    return np.take_along_axis(around, place, axis=2)[row, second, 0]


def _wide_fast_anywhere(states: _States) -> Bools:
    """Wide and fast where no lead shows a slow rhythm and at least as many leads agree as show a steady one."""
    agreed = states.wide_fast.sum(axis=0) >= states.steady.sum(axis=0)
    return states.wide_fast & agreed & ~np.any(states.slow, axis=0)


def _standstill_findings(states: _States, work: Work, leads: Sequence[str]) -> list[PatientFirst]:
    """Stretches in which some lead shows no beat for long and too few others show a steady rhythm.

    A lead that is restless without a steady rhythm clears nothing: movement goes on over a still heart. One steady
    lead among many still ones does not either: P waves may go on, and be high in it. Windows at
    either end of a pause still see the beats around it, so the middle decides and EDGE_S beside it follow.
    """
    silent = np.any(states.quiet, axis=0)
    if not silent.any():
        return []
    n = work.y_mv.shape[1]
    n_windows = states.steady.shape[1]
    centre = np.clip(
        np.round((np.arange(n) - work.length / 2) / work.step).astype(int), 0, max(n_windows - 1, 0)
    )
    beating = states.steady[:, centre] & ~states.quiet if n_windows else np.zeros_like(states.quiet)
    cleared = beating.sum(axis=0) >= CLEARING_SHARE * states.quiet.sum(axis=0)
    edge = round(EDGE_S * work.fs_hz)
    found = []
    for start, end in _true_runs(silent):
        for first, last in _true_runs(~cleared[start:end]):
            begin, stop = max(start + first - edge, start), min(start + last + edge, end)
            if stop - begin >= STANDSTILL_S * work.fs_hz - 1:
                shown = np.flatnonzero(np.any(states.quiet[:, begin:stop], axis=1))
                found.append(_finding(leads, shown, begin / work.fs_hz, stop / work.fs_hz, "standstill"))
    return join_findings(found)


def _held(raised: Bools, cleared: Bools, most: int) -> Bools:
    """(n_windows,): raised, with the pauses of up to ``most`` windows in which nothing clears the alarm."""
    out = raised.copy()
    for start, end in _true_runs(~raised):
        between = start > 0 and end < len(raised) and end - start <= most
        out[start:end] = between and not cleared[start:end].any()
    return out


def _runs(
    flags: Bools, work: Work, leads: Sequence[str], pattern: str, need: int, *, within: Bools | None = None
) -> list[PatientFirst]:
    """Runs of at least ``need`` windows in which any lead is flagged, or of ``within``, as findings."""
    found = []
    for start, end in _true_runs(np.any(flags, axis=0) if within is None else within):
        if end - start >= need:
            shown = np.flatnonzero(flags[:, start:end].any(axis=1))
            last = ((end - 1) * work.step + work.length) / work.fs_hz
            found.append(_finding(leads, shown, start * work.step / work.fs_hz, last, pattern))
    return join_findings(found)


def _true_runs(flags: Bools) -> list[tuple[int, int]]:
    edges = np.flatnonzero(np.diff(np.concatenate([[0], flags.astype(np.int8), [0]])))
    return [(int(a), int(b)) for a, b in edges.reshape(-1, 2)]


def _finding(
    leads: Sequence[str], shown: Iterable[int], start_s: float, end_s: float, pattern: str
) -> PatientFirst:
    names = tuple(leads[int(i)] for i in shown)
    return PatientFirst(names, float(start_s), float(end_s), pattern, _text(names, pattern, start_s, end_s))


def _text(leads: Sequence[str], pattern: str, start_s: float, end_s: float) -> str:
    return f"Look at the patient first: {', '.join(leads)} {TEXT[pattern]} ({start_s:.0f} to {end_s:.0f} s)."
