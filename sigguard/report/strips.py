"""Stretches of signal drawn on millimetre paper, true to scale: 25 mm/s and 10 mm/mV.

One drawing unit is 0.01 mm. So 1 µV is one unit upwards and 4 ms are ten units to the right, and a
trace is a path of small whole numbers.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from html import escape
from math import ceil

import numpy as np
from numpy.typing import NDArray

from sigguard.fault_summaries import fault_stretches
from sigguard.findings import under_alarm
from sigguard.report.document import Report
from sigguard.report.words import ALARM_WORDS, FAULT_WORDS, GRADE_WORDS, alarm_between, clean, clock, listing
from sigguard.segments import FAULTS, GRADES, Segments

UNITS_PER_S, UNITS_PER_MV = 2500, 1000
STRIP_S = 10.0
MAX_SHORT_TRACES = 16  # a recording of no more 10 s traces than this is shown whole
MAX_POINTS_PER_S = 250.0
KEEP_ALL_HZ = 400.0  # up to this rate every sample is drawn
MARGIN = 900  # room for the reference mark, left of the trace
LOWEST, HIGHEST = 1500, 5000  # height of a strip
GAP = FAULT_WORDS["missing"]
LETTER = 160  # room for a letter of these words
FOOT = 400  # the line under the trace that names what disturbs it


@dataclass(frozen=True, slots=True)
class Disturbed:
    """A disturbed stretch: seconds of the recording, and what is wrong in plain words."""

    start_s: float
    end_s: float
    text: str


@dataclass(frozen=True, slots=True, eq=False)
class StripData:
    """One lead over up to 10 s: ``x_mv`` is (n,), NaN where missing; ``beats`` index into it."""

    lead: str
    start_s: float
    x_mv: NDArray[np.float64]
    fs_hz: float
    beats: NDArray[np.int64]
    disturbed: tuple[Disturbed, ...] = ()
    heading: str = ""
    grade: str | None = None

    @property
    def end_s(self) -> float:
        return self.start_s + self.x_mv.shape[-1] / self.fs_hz


ReadWindow = Callable[[int, int], NDArray[np.floating]]


def choose_strips(report: Report, read: ReadWindow) -> list[StripData]:
    """The stretches worth showing, with their samples.

    ``read(start, stop)`` gives samples as (n_leads, n) mV. A short recording is shown whole; of a
    long one the patient-first stretches (the first three), the best and the worst strip.
    """
    info = report.info
    windows = ceil(info.duration_s / STRIP_S - 0.05)  # a rest of half a second is not worth a strip
    if max(windows, 1) * info.n_leads <= MAX_SHORT_TRACES:
        plan = [(STRIP_S * k, tuple(range(info.n_leads)), "") for k in range(max(windows, 1))]
    else:
        plan = _worth_showing(report)
    strips: list[StripData] = []
    for start_s, leads, heading in plan:
        start = min(max(0, round(start_s * info.fs_hz)), info.n_samples - 1)
        stop = min(info.n_samples, start + ceil(STRIP_S * info.fs_hz))
        block = np.asarray(read(start, stop), dtype=np.float64)
        strips += [_strip(report, block[i], i, start, heading) for i in leads]
    return strips


def _worth_showing(report: Report) -> list[tuple[float, tuple[int, ...], str]]:
    """(start_s, lead indices, heading) of the stretches to show of a long recording."""
    info = report.info
    place = {lead: i for i, lead in enumerate(info.leads)}
    plan = []
    for alarm in report.patient_first[:3]:
        leads = tuple(place[lead] for lead in alarm.leads if lead in place)[:3] or (0,)
        plan.append((alarm.start_s, leads, f"Patient first: from {clock(alarm.start_s)}"))
    if report.best_strip is not None:
        best = report.best_strip
        plan.append(
            (best.start_s, tuple(range(min(12, info.n_leads))), f"Best stretch: from {clock(best.start_s)}")
        )
    if (worst := _worst(report)) is not None:
        start_s, names = worst
        plan.append(
            (
                start_s,
                tuple(sorted(place[lead] for lead in names if lead in place)),
                f"Worst stretch: from {clock(start_s)}",
            )
        )
    return plan


def _worst(report: Report) -> tuple[float, tuple[str, ...]] | None:
    """Where the segments that can be trusted the least begin, and their three worst leads.

    A stretch that may be a lethal rhythm is not the worst: it is told apart. One without any signal
    shows nothing, so it counts only where there is no other.
    """
    segments = report.segments
    rows = np.flatnonzero(~under_alarm(report.patient_first, segments.start_s, segments.end_s))
    there = rows[segments.fault[rows, FAULTS.index("missing")] < 0.5]
    rows = there if len(there) else rows
    if not len(rows):
        return None
    trust = (
        segments.reliable[rows].sum(axis=1)
        + segments.grade[rows] * 10.0
        - segments.fault[rows].sum(axis=1) / 10
    )
    starts, where = np.unique(segments.start_s[rows], return_inverse=True)
    total = np.bincount(where, weights=trust) / np.bincount(where)
    worst = int(np.argmin(total))
    mine = np.flatnonzero(where == worst)
    order = mine[np.argsort(trust[mine], kind="stable")][:3]
    return float(starts[worst]), tuple(segments.leads[i] for i in segments.lead_index[rows[order]])


def _strip(report: Report, x_mv: NDArray[np.float64], lead_index: int, start: int, heading: str) -> StripData:
    info, segments = report.info, report.segments
    lead = info.leads[lead_index]
    start_s, end_s = start / info.fs_hz, (start + x_mv.size) / info.fs_hz
    beats = np.asarray(report.lead_beats.get(lead, report.beats), dtype=np.int64)
    first, last = np.searchsorted(beats, (start, start + x_mv.size))
    disturbed, grade = [], None
    if lead in segments.leads:
        mine = segments.lead_index == segments.leads.index(lead)
        rows = segments.rows(mine & (segments.start_s < end_s - 0.05) & (segments.end_s > start_s + 0.05))
        if len(rows):
            grade = GRADES[int(rows.grade.min())]
        for k in range(len(rows)):
            one = rows.rows(np.array([k]))
            t0, t1 = float(one.start_s[0]), float(one.end_s[0])
            if alarm_between(report.patient_first, max(t0, start_s), min(t1, end_s)):
                found = [(t0, t1, ALARM_WORDS)]
            else:
                found = _fault_texts(one)
            disturbed += [
                Disturbed(max(a, start_s), min(b, end_s), text)
                for a, b, text in found
                if min(b, end_s) - max(a, start_s) > 0.05
            ]
    return StripData(
        lead, start_s, x_mv, info.fs_hz, beats[first:last] - start, tuple(disturbed), heading, grade
    )


def _fault_texts(row: Segments) -> list[tuple[float, float, str]]:
    """(start_s, end_s, ``movement, mains hum``) of the stretches of one row: the costliest first.

    Where the table does not know when a fault lies there, the whole row with the share of each.
    """
    start_s, end_s, faults = float(row.start_s[0]), float(row.end_s[0]), row.fault[0]
    worth = (
        faults if row.details is None else np.where(faults > 0, row.details.weight[0] + 1e-6 * faults, 0.0)
    )
    order = [int(i) for i in np.argsort(-worth, kind="stable") if faults[i] > 0]
    if not order:
        return []
    if row.details is None:
        part = [f" ({max(1, round(100 * float(f)))} %)" if f < 0.95 else "" for f in faults]
        return [(start_s, end_s, ", ".join(FAULT_WORDS[FAULTS[i]] + part[i] for i in order))]
    where = {i: _bridged(fault_stretches(row, np.array([0]), i)) for i in order}
    cuts = sorted({t for stretches in where.values() for stretch in stretches for t in stretch})
    out: list[tuple[float, float, str]] = []
    for a, b in zip(cuts[:-1], cuts[1:], strict=True):
        here = [i for i in order if any(s <= a and b <= e for s, e in where[i])]
        text = ", ".join(FAULT_WORDS[FAULTS[i]] for i in here)
        if not text:
            continue
        if out and out[-1][2] == text and out[-1][1] == a:
            out[-1] = (out[-1][0], b, text)
        else:
            out.append((a, b, text))
    return out


def _bridged(stretches: Sequence[tuple[float, float]]) -> list[tuple[float, float]]:
    """Stretches joined over pauses of about a second, which would only chop the drawing."""
    out: list[tuple[float, float]] = []
    for a, b in stretches:
        if out and a - out[-1][1] < 1.2:
            out[-1] = (out[-1][0], b)
        else:
            out.append((a, b))
    return out


def trace_path(x_uv: NDArray[np.float64], *, fs_hz: float, left: int, zero: float) -> str:
    """The SVG path of a trace (µV, NaN where missing) in drawing units, as relative whole numbers.

    Above 400 samples/s only the lowest and the highest value of each few samples are kept, in
    their order, so that no peak and no pacing spike is lost.
    """
    index = _kept(x_uv, fs_hz)
    x = np.rint(index * (UNITS_PER_S / fs_hz)).astype(np.int64) + left
    kept = x_uv[index]
    there = np.isfinite(kept)
    y = np.rint(zero - np.where(there, kept, 0.0)).astype(np.int64)
    edges = np.flatnonzero(np.diff(np.concatenate(([False], there, [False])).astype(np.int8)))
    parts = []
    for first, last in zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True):
        moves = np.column_stack((np.diff(x[first:last]), np.diff(y[first:last]))).ravel().tolist()
        steps = " ".join(map(str, moves)).replace(" -", "-")
        parts.append(f"M{x[first]} {y[first]}l{steps or '0 0'}")
    return "".join(parts)


def _kept(x: NDArray[np.float64], fs_hz: float) -> NDArray[np.int64]:
    """Indices of the samples to draw: all, or the extremes of each bucket, ascending."""
    bucket = 2 * ceil(fs_hz / MAX_POINTS_PER_S)
    if fs_hz <= KEEP_ALL_HZ or x.size < bucket:
        return np.arange(x.size)
    rows = x[: x.size - x.size % bucket].reshape(-1, bucket)
    known = np.isfinite(rows)
    low = np.where(known, rows, np.inf).argmin(axis=1)
    high = np.where(known, rows, -np.inf).argmax(axis=1)
    # A bucket with a hole keeps the hole, so that a gap stays a gap.
    hole = np.where(known.all(axis=1), low, np.argmin(known, axis=1))
    inside = np.sort(np.column_stack((low, high, hole)), axis=1) + np.arange(rows.shape[0])[:, None] * bucket
    picked = np.concatenate((inside.ravel(), np.arange(rows.size, x.size)))
    return picked[np.diff(picked, prepend=-1) > 0]


def strip_svg(strip: StripData) -> str:
    """One strip as an SVG of its true size in millimetres, with its title; text is escaped."""
    x_uv = np.asarray(strip.x_mv, dtype=np.float64) * 1000.0
    known = x_uv[np.isfinite(x_uv)]
    top, bottom, middle = _extent(known)
    height = int(top + bottom)
    width = MARGIN + max(UNITS_PER_S, round(x_uv.size / strip.fs_hz * UNITS_PER_S))
    zero = top + middle
    foot = FOOT if any(d.text for d in strip.disturbed) else 0
    off = known.size > 0 and bool(np.any((zero - known < 0) | (zero - known > height)))
    parts = [
        f'<svg class="paper" role="img" width="{width / 100:g}mm" height="{(height + foot) / 100:g}mm" '
        f'viewBox="0 0 {width} {height + foot}"><title>{escape(_title(strip))}</title>',
        paper(width, height),
        *[_hatch(strip, d, height, named) for d, named in zip(strip.disturbed, _room(strip), strict=True)],
        *[_hatch(strip, d, height) for d in _gaps(strip)],
        _reference(height),
        # An inner drawing clips what leaves the paper.
        f'<svg width="{width}" height="{height}"><path class="trace" '
        f'd="{trace_path(x_uv, fs_hz=strip.fs_hz, left=MARGIN, zero=zero)}"/></svg>',
        _beat_marks(strip),
        f'<text class="lead" x="60" y="330">{escape(clean(strip.lead))}</text>',
    ]
    if off:
        parts.append(
            f'<text class="note" x="{width - 60}" y="380" text-anchor="end">the trace leaves the paper</text>'
        )
    return "".join(parts) + "</svg>"


def _extent(known: NDArray[np.float64]) -> tuple[float, float, float]:
    """Room above and below the middle of the trace, and its middle, in units (1 µV each)."""
    if known.size == 0:
        return LOWEST / 2, LOWEST / 2, 0.0
    middle = float(np.median(known))
    above = float(known.max()) - middle + 400.0  # the lead's name and beat marks stand above
    below = middle - float(known.min()) + 200.0
    if above + below > HIGHEST:
        half = HIGHEST / 2
        above, below = (
            (above, HIGHEST - above)
            if above < half
            else (HIGHEST - below, below)
            if below < half
            else (half, half)
        )
    above, below = (500.0 * ceil(max(side, LOWEST / 2) / 500.0) for side in (above, below))
    return above, below, middle


def paper(width: int, height: int) -> str:
    """Millimetre paper: lines every 1 mm and 5 mm, each set drawn as one dashed stroke."""
    across, down = f"M0 {height // 2}H{width}", f"M{width // 2} 0V{height}"
    return (
        f'<path class="sheet" d="M0 0H{width}V{height}H0z"/>'
        f'<path class="fine" d="{across}" stroke-width="{height}" stroke-dasharray="6 94"/>'
        f'<path class="fine" d="{down}" stroke-width="{width}" stroke-dasharray="6 94"/>'
        f'<path class="bold" d="{across}" stroke-width="{height}" stroke-dasharray="12 488"/>'
        f'<path class="bold" d="{down}" stroke-width="{width}" stroke-dasharray="12 488"/>'
    )


def _reference(height: int) -> str:
    """The reference mark: 1 mV high, 0.2 s wide."""
    foot = height - 100  # low, so that the lead's name stands clear above it
    return (
        f'<path class="mark" d="M150 {foot}h100v-{UNITS_PER_MV}h{UNITS_PER_S // 5}v{UNITS_PER_MV}h100">'
        "<title>reference mark: 1 mV, 0.2 s</title></path>"
    )


def _beat_marks(strip: StripData) -> str:
    at = np.rint(strip.beats * (UNITS_PER_S / strip.fs_hz)).astype(np.int64) + MARGIN
    if at.size == 0:
        return ""
    return (
        '<path class="beat" d="'
        + "".join(f"M{x - 70} 0h140l-70 150z" for x in at.tolist())
        + '"><title>beats found</title></path>'
    )


def _gaps(strip: StripData) -> list[Disturbed]:
    """Stretches of 0.1 s or more without samples."""
    missing = ~np.isfinite(strip.x_mv)
    edges = np.flatnonzero(np.diff(np.concatenate(([False], missing, [False])).astype(np.int8)))
    return [
        Disturbed(strip.start_s + a / strip.fs_hz, strip.start_s + b / strip.fs_hz, GAP)
        for a, b in zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True)
        if (b - a) / strip.fs_hz >= 0.1
    ]


def _room(strip: StripData) -> list[bool]:
    """Of each disturbed stretch whether its words have room beside those before; its title names it anyway."""
    free_s, out = -np.inf, []
    for d in strip.disturbed:
        out.append(d.start_s >= free_s)
        if out[-1]:
            free_s = d.start_s + LETTER * len(d.text) / UNITS_PER_S
    return out


def _hatch(strip: StripData, d: Disturbed, height: int, named: bool = True) -> str:
    """Slanted lines over a stretch, and what is wrong there in the line under the trace.

    No slanted lines where somebody must look at the patient: that is to be seen, not crossed out.
    """
    left = MARGIN + round((d.start_s - strip.start_s) * UNITS_PER_S)
    right = MARGIN + round((d.end_s - strip.start_s) * UNITS_PER_S)
    if right <= left:
        return ""
    lines = []
    step = 150 if d.text == GAP else 400
    for corner in range(left - left % 400 - height, right, step) if d.text != ALARM_WORDS else ():
        # From (corner, height) up and right to (corner + height, 0), as far as it lies inside.
        x0, x1 = max(corner, left), min(corner + height, right)
        if x1 > x0:
            lines.append(f"M{x0} {height - (x0 - corner)}L{x1} {height - (x1 - corner)}")
    label = ""
    if d.text == GAP:
        # Named inside the gap if it is wide enough, else by its title.
        label = f'<text class="why" x="{(left + right) // 2}" y="{height - 120}" text-anchor="middle">{GAP}</text>'
        label = label if right - left > 1500 else ""
    elif d.text:
        label = f'<path class="extent" d="M{left} {height + 30}v60H{right}v-60"/>'
        if named:
            label += f'<text class="why" x="{left + 40}" y="{height + 310}">{escape(d.text)}</text>'
    title = f"<title>{escape(d.text)}</title>"
    hatch = f'<path class="hatch" d="{"".join(lines)}">{title}</path>' if lines else ""
    return hatch + label


def _title(strip: StripData) -> str:
    words = f"Lead {clean(strip.lead)}, {clock(strip.start_s, decimals=1)} to {clock(strip.end_s, decimals=1)}, 25 mm/s, 10 mm/mV"
    if strip.grade is not None:
        words += f"; can be measured: {GRADE_WORDS[strip.grade]}"
    causes = dict.fromkeys(d.text for d in strip.disturbed)
    faults = [cause for cause in causes if cause != ALARM_WORDS]
    words += f"; {ALARM_WORDS}" if ALARM_WORDS in causes else ""
    return words + (f"; disturbed by {listing(faults)}" if faults else "")


def by_heading(strips: Sequence[StripData]) -> list[tuple[str, list[StripData]]]:
    """The strips in their order, gathered under their headings."""
    groups: dict[str, list[StripData]] = {}
    for strip in strips:
        groups.setdefault(strip.heading, []).append(strip)
    return list(groups.items())
