"""The map of grades: leads down, time across. Height and hatching say the grade as well as colour."""

from __future__ import annotations

from dataclasses import dataclass
from html import escape

import numpy as np
from numpy.typing import NDArray

from sigguard.fault_summaries import gravest
from sigguard.patient_first import join_to_at_most
from sigguard.report.document import Report
from sigguard.report.words import ALARM_WORDS, FAULT_WORDS, GRADE_WORDS, alarm_between, clean, clock
from sigguard.segments import FAULTS, GRADES, Segments

MAX_COLUMNS = 600
MAX_CELLS = 4800  # of leads times columns: more leads, fewer columns, so that the page stays small
MAX_ALARMS_DRAWN = 200
WORD_COLUMNS = 6  # up to so many columns the cells carry words
LABEL_W, MAP_W, ROW_H, ALARM_H, AXIS_H = 90, 900, 26, 24, 30
NO_DATA = -1
_TICKS_S = (
    1,
    2,
    5,
    10,
    20,
    30,
    60,
    120,
    300,
    600,
    1200,
    1800,
    3600,
    7200,
    10800,
    21600,
    43200,
    86400,
    172800,
)


@dataclass(frozen=True, slots=True, eq=False)
class GradeMap:
    """``grade`` (n_leads, n_columns): index into GRADES, −1 where there is no segment; (n_columns + 1,) edges."""

    leads: tuple[str, ...]
    grade: NDArray[np.int8]
    edges_s: NDArray[np.float64]
    aggregated: bool  # a column covers more than one segment


def grade_map(segments: Segments, *, duration_s: float) -> GradeMap:
    """Grades by lead and time, in at most 600 columns (fewer where there are more than eight leads).

    Where a column covers several segments it shows the grade that at least half of them reach.
    """
    starts = np.unique(segments.start_s)
    most = max(100, min(MAX_COLUMNS, MAX_CELLS // max(len(segments.leads), 1)))
    aggregated = starts.size > most
    if aggregated:
        edges = np.linspace(0.0, duration_s, most + 1)
        middle = (segments.start_s + segments.end_s) / 2
        column = np.clip(np.searchsorted(edges, middle, side="right") - 1, 0, most - 1)
    else:
        edges = (
            np.append(starts, max(duration_s, float(segments.end_s.max())))
            if starts.size
            else np.array([0.0, duration_s])
        )
        column = np.searchsorted(starts, segments.start_s)
    n_leads, n_columns, n_grades = len(segments.leads), edges.size - 1, len(GRADES)
    cell = (segments.lead_index.astype(np.int64) * n_columns + column) * n_grades + segments.grade
    count = np.bincount(cell, minlength=n_leads * n_columns * n_grades).reshape(n_leads, n_columns, n_grades)
    total = count.sum(axis=2)
    # How many segments reach each grade: the grades ascend, so counting from the top.
    reached = count[..., ::-1].cumsum(axis=2)[..., ::-1]
    best = (2 * reached >= total[..., None]).sum(axis=2) - 1
    return GradeMap(segments.leads, np.where(total > 0, best, NO_DATA).astype(np.int8), edges, aggregated)


def map_svg(report: Report) -> str:
    """The map as SVG, with titles; text is escaped."""
    duration_s = report.info.duration_s
    found = grade_map(report.segments, duration_s=duration_s)
    scale = MAP_W / max(duration_s, 1e-9)
    top = ALARM_H if report.patient_first else 4
    bottom = top + ROW_H * len(found.leads)
    few = found.edges_s.size - 1 <= WORD_COLUMNS
    parts = [
        f'<svg class="map" role="img" viewBox="0 0 {LABEL_W + MAP_W + 4} {bottom + AXIS_H}">'
        "<title>What can be measured, by lead and time</title>"
    ]
    for i, lead in enumerate(found.leads):
        y = top + i * ROW_H
        parts.append(
            f'<text class="rowname" x="{LABEL_W - 8}" y="{y + 18}" text-anchor="end">{escape(_short(clean(lead)))}</text>'
        )
        parts.append(_row(found, i, y, scale, words=_words(report, i) if few else None))
    alarms = join_to_at_most(report.patient_first, MAX_ALARMS_DRAWN)
    parts += [_alarm(a.start_s, a.end_s, a.text, scale, top, bottom) for a in alarms]
    parts.append(_axis(duration_s, scale, bottom))
    return "".join(parts) + "</svg>"


def _row(found: GradeMap, i: int, y: int, scale: float, *, words: list[str] | None) -> str:
    """Runs of one grade as one bar each; the higher the bar, the more can be measured."""
    grade = found.grade[i]
    # Words belong to one column each; without words equal neighbours join.
    borders = np.arange(1, grade.size) if words is not None else np.flatnonzero(np.diff(grade)) + 1
    firsts = np.concatenate(([0], borders)).astype(int)
    lasts = np.append(borders, grade.size).astype(int)
    parts = []
    for first, last in zip(firsts.tolist(), lasts.tolist(), strict=True):
        g = int(grade[first])
        if g == NO_DATA:
            continue
        x0 = LABEL_W + found.edges_s[first] * scale
        x1 = LABEL_W + found.edges_s[last] * scale
        name = GRADES[g]
        when = f"{clock(found.edges_s[first])} to {clock(found.edges_s[last])}"
        title = f"<title>{escape(clean(found.leads[i]))}, {when}: {GRADE_WORDS[name]}</title>"
        parts.append(f"<g>{title}{grade_bar(name, x0, x1, y)}")
        if words is not None:
            word = GRADE_WORDS[name] + (f" · {words[first]}" if words[first] and x1 - x0 > 200 else "")
            parts.append(
                f'<rect class="chip" x="{x0 + 6:.1f}" y="{y + 5}" width="{7 * len(word) + 12}" height="16" rx="3"/>'
                f'<text class="cellword" x="{x0 + 12:.1f}" y="{y + 17.5}">{escape(word)}</text>'
            )
        parts.append("</g>")
    return "".join(parts)


def grade_bar(name: str, x0: float, x1: float, y: float, *, height: int = ROW_H - 4) -> str:
    """One cell: a frame, filled from below in quarters; ``none`` is empty with crossing lines."""
    width = max(x1 - x0, 0.5)
    frame = f'<path class="cell" d="M{x0:.1f} {y + 2:g}h{width:.1f}v{height}h-{width:.1f}z"/>'
    if name == "none":
        step, lines = 8, []
        for k in range(int(width // step) + 1):
            run = min(step, width - k * step)
            if run > 1:
                lines.append(f"M{x0 + k * step:.1f} {y + 2 + height:g}l{run:.1f}-{height * run / step:.1f}")
        if len(lines) < 2:
            lines = [f"M{x0:.1f} {y + 2 + height:g}v-{height}"]
        return f'{frame}<path class="g-none" d="{"".join(lines)}"/>'
    filled = {"rhythm": 0.3, "intervals": 0.65, "all": 1.0}[name] * height
    return f'{frame}<path class="g-{name}" d="M{x0:.1f} {y + 2 + height - filled:.1f}h{width:.1f}v{filled:.1f}h-{width:.1f}z"/>'


def legend_svg(name: str) -> str:
    """A small cell for the legend."""
    return f'<svg class="key" width="34" height="22" viewBox="0 0 34 22" aria-hidden="true">{grade_bar(name, 1, 33, -1)}</svg>'


def _words(report: Report, lead: int) -> list[str]:
    """The word of the gravest fault in each segment of a lead, in time order; empty where none.

    Where somebody must look at the patient it says so: what may be a lethal rhythm has no fault.
    """
    mine = report.segments.rows(report.segments.lead_index == lead)
    words = []
    first = gravest(mine).tolist()
    for start_s, end_s, k in zip(mine.start_s.tolist(), mine.end_s.tolist(), first, strict=True):
        name = FAULT_WORDS[FAULTS[k]] if k >= 0 else ""
        words.append(ALARM_WORDS if alarm_between(report.patient_first, start_s, end_s) else name)
    return words


def _alarm(start_s: float, end_s: float, text: str, scale: float, top: int, bottom: int) -> str:
    x0, x1 = LABEL_W + start_s * scale, LABEL_W + max(end_s, start_s) * scale
    middle = (x0 + x1) / 2
    return (
        f"<g><title>Patient first: {escape(clean(text))}</title>"
        f'<path class="alarmframe" d="M{x0:.1f} {top}H{max(x1, x0 + 1):.1f}V{bottom}H{x0:.1f}z"/>'
        f'<path class="alarmmark" d="M{middle - 9:.1f} {top - 2}h18l-9-17z"/>'
        f'<text class="alarmsign" x="{middle:.1f}" y="{top - 4}" text-anchor="middle">!</text></g>'
    )


def _axis(duration_s: float, scale: float, y: int) -> str:
    step = next((s for s in _TICKS_S if duration_s / s <= (10 if duration_s < 3600 else 8)), _TICKS_S[-1])
    parts = [f'<path class="axis" d="M{LABEL_W} {y + 2}h{MAP_W}']
    ticks = np.arange(0, duration_s + 1e-6, step).tolist()
    parts += [f"M{LABEL_W + t * scale:.1f} {y + 2}v5" for t in ticks]
    parts.append('"/>')
    for t in ticks:
        anchor = "start" if t == 0 else "end" if t * scale > MAP_W - 30 else "middle"
        parts.append(
            f'<text class="tick" x="{LABEL_W + t * scale:.1f}" y="{y + 21}" text-anchor="{anchor}">{clock(t)}</text>'
        )
    return "".join(parts)


def _short(text: str) -> str:
    return text if len(text) <= 12 else text[:11] + "…"
