"""A long recording at a glance: what can be measured hour by hour and lead by lead, and what spoilt how many minutes."""

from __future__ import annotations

from dataclasses import dataclass
from html import escape

import numpy as np
from numpy.typing import NDArray

from sigguard.findings import under_alarm
from sigguard.report.document import Report
from sigguard.report.words import ALARM_WORDS, FAULT_WORDS, GRADE_WORDS, SHORT_WORDS, clean, clock
from sigguard.segments import FAULTS, GRADES, MEASUREMENTS, Segments
from sigguard.spans import Stretch, longest_stretch

LONG_S = 1800.0  # a recording from this length on gets this view
MOST_BINS = 26  # a day by the hour, its minutes in figures
MOST_CELLS = 1200  # of leads times bins, so that the page stays small with many leads
LABEL_W, MAP_W, ROW_H, BAR_H, AXIS_H = 150, 840, 30, 28, 26
FAULT_H, FIGURE_H = 38, 12  # of a row of faults, and of the line of figures above its bars
WORD_W = 30  # from this width on a cell says its minutes
_BINS_S = (300, 600, 1800, 3600, 7200, 14400, 43200, 86400, 172800, 604800, 1209600, 2419200)


@dataclass(frozen=True, slots=True, eq=False)
class Hours:
    """Seconds in bins of equal length (the last may be shorter); bins run from k·bin_s."""

    bin_s: float
    leads: tuple[str, ...]
    length_s: NDArray[np.float64]  # (n_bins,)
    grade_s: NDArray[np.float64]  # (n_bins, n_leads, n_grades)
    fault_s: NDArray[np.float64]  # (n_bins, n_faults): on at least one lead, outside patient-first stretches
    alarm_s: NDArray[np.float64]  # (n_bins,): under a patient-first stretch


def bin_length_s(duration_s: float, n_leads: int) -> float:
    """The shortest usual length that gives few enough bins."""
    most = max(8, min(MOST_BINS, MOST_CELLS // max(n_leads, 1)))
    return float(next((b for b in _BINS_S if duration_s / b <= most), duration_s / most))


def hours(report: Report) -> Hours:
    """The table of segments gathered into bins by the time of each segment's middle.

    The seconds of a fault are those of the lead it lies on the longest in each segment. Segments that a
    patient-first stretch touches have no faults here: what may be a lethal rhythm is not told under what spoils.
    """
    segments, duration_s = report.segments, report.info.duration_s
    bin_s = bin_length_s(duration_s, len(segments.leads))
    n_bins = max(1, int(np.ceil(duration_s / bin_s - 1e-9)))
    edges = np.minimum(np.arange(n_bins + 1) * bin_s, duration_s)
    length_s = segments.end_s - segments.start_s
    at = np.clip(((segments.start_s + segments.end_s) / 2 // bin_s).astype(np.int64), 0, n_bins - 1)
    n_leads, n_grades = len(segments.leads), len(GRADES)
    cell = (at * n_leads + segments.lead_index) * n_grades + segments.grade
    grade_s = np.bincount(cell, length_s, minlength=n_bins * n_leads * n_grades).astype(np.float64)
    alarm_s = np.zeros(n_bins)
    for first, last in _united([(a.start_s, a.end_s) for a in report.patient_first]):
        alarm_s += np.maximum(np.minimum(edges[1:], last) - np.maximum(edges[:-1], first), 0.0)
    return Hours(
        bin_s,
        segments.leads,
        np.diff(edges),
        grade_s.reshape(n_bins, n_leads, n_grades),
        _fault_seconds(report, at, n_bins),
        alarm_s,
    )


def _fault_seconds(report: Report, at: NDArray[np.int64], n_bins: int) -> NDArray[np.float64]:
    segments = report.segments
    out = np.zeros((n_bins, len(FAULTS)))
    if not len(segments):
        return out
    told = ~under_alarm(report.patient_first, segments.start_s, segments.end_s)
    seconds = segments.fault * ((segments.end_s - segments.start_s) * told)[:, np.newaxis]
    _, first, slot = np.unique(segments.start_s, return_index=True, return_inverse=True)
    worst = np.zeros((len(first), len(FAULTS)))
    np.maximum.at(worst, slot, seconds)
    np.add.at(out, at[first], worst)
    return out


def _united(stretches: list[tuple[float, float]]) -> list[tuple[float, float]]:
    out: list[tuple[float, float]] = []
    for first, last in sorted(stretches):
        if out and first <= out[-1][1]:
            out[-1] = (out[-1][0], max(out[-1][1], last))
        else:
            out.append((first, last))
    return out


# ── the longest fit stretches ──


@dataclass(frozen=True, slots=True)
class LongestRow:
    """The longest time on end for which something can be measured, in words."""

    what: str
    in_one: str
    in_all: str


def longest_rows(segments: Segments) -> list[LongestRow]:
    """For each grade and each measurement: in one lead, and in all leads at once."""
    intervals = GRADES.index("intervals")
    asked = [(GRADE_WORDS["all"], segments.grade > intervals), ("all intervals", segments.grade >= intervals)]
    asked += [(SHORT_WORDS[m], segments.reliable[:, k]) for k, m in enumerate(MEASUREMENTS)]
    every = len(segments.leads) > 1
    return [
        LongestRow(
            what,
            _where(longest_stretch(segments, column), segments),
            _where(longest_stretch(segments, column, every=True), segments) if every else "",
        )
        for what, column in asked
    ]


def worst_words(report: Report) -> str:
    """The longest time on end without a heart rate in any lead, outside patient-first stretches; empty if never."""
    from sigguard.report.page import duration_words

    segments = report.segments
    told = ~under_alarm(report.patient_first, segments.start_s, segments.end_s)
    found = longest_stretch(segments, ~segments.reliable[:, 0] & told, every=True)
    if found is None:
        return ""
    return f"{duration_words(found.end_s - found.start_s)}, from {clock(found.start_s)}"


def _where(found: Stretch | None, segments: Segments) -> str:
    from sigguard.report.page import duration_words

    if found is None:
        return "never"
    lead = "" if found.lead is None else f" in {segments.leads[found.lead]}"
    return f"{duration_words(found.end_s - found.start_s)}{lead}, from {clock(found.start_s)}"


# ── drawn ──


def hours_svg(found: Hours) -> str:
    """Leads by time as stacked columns, and under them a row of bars for each fault; text is escaped."""
    n_bins = len(found.length_s)
    width = MAP_W / n_bins
    kinds = [k for k in np.argsort(-found.fault_s.sum(axis=0), kind="stable") if found.fault_s[:, k].any()]
    rows: list[str] = []
    y = 4
    for i, lead in enumerate(found.leads):
        rows.append(_name(_short(clean(lead)), y + 20))
        rows += [_column(found, i, k, LABEL_W + k * width, width, y) for k in range(n_bins)]
        y += ROW_H
    y += 10
    if found.alarm_s.any():
        rows.append(_name(ALARM_WORDS, y + 28))
        rows.append(_bars(found, found.alarm_s, ALARM_WORDS, "alarmbar", width, y))
        y += FAULT_H
    for kind in kinds:
        words = FAULT_WORDS[FAULTS[kind]]
        rows.append(_name(words, y + 28))
        rows.append(_bars(found, found.fault_s[:, kind], words, "faultbar", width, y))
        y += FAULT_H
    return (
        f'<svg class="map hours" role="img" viewBox="0 0 {LABEL_W + MAP_W + 4} {y + AXIS_H}">'
        "<title>What can be measured and what spoils it, by time</title>"
        + "".join(rows)
        + _axis(found, width, y)
        + "</svg>"
    )


def _column(found: Hours, lead: int, k: int, x: float, width: float, y: float) -> str:
    """One lead in one bin: how much of it allows what, the best below; what allows nothing stays empty."""
    seconds = found.grade_s[k, lead]
    total = float(seconds.sum())
    x0, w = x + 0.5, max(width - 1.0, 0.5)
    frame = f'<path class="cell" d="M{x0:.1f} {y}h{w:.1f}v{BAR_H}h-{w:.1f}z"/>'
    if total <= 0:
        return frame
    parts, foot = [], float(y + BAR_H)
    for g in range(len(GRADES) - 1, 0, -1):
        high = BAR_H * float(seconds[g]) / total
        if high >= 0.3:
            foot -= high
            parts.append(
                f'<path class="g-{GRADES[g]}" d="M{x0:.1f} {foot:.1f}h{w:.1f}v{high:.1f}h-{w:.1f}z"/>'
            )
    shares = ", ".join(
        f"{GRADE_WORDS[GRADES[g]]} {minutes_words(float(seconds[g]))}"
        for g in range(len(GRADES) - 1, -1, -1)
        if seconds[g] > 0
    )
    title = f"<title>{escape(clean(found.leads[lead]))}, {_when(found, k)}: {shares}</title>"
    return f"<g>{title}{frame}{''.join(parts)}</g>"


def _bars(found: Hours, seconds: NDArray[np.float64], words: str, style: str, width: float, y: float) -> str:
    """A row of bars as high as the share of each bin, with the minutes in figures where they fit."""
    parts, foot, most = [], y + FAULT_H - 2, FAULT_H - FIGURE_H - 2
    for k in np.flatnonzero(seconds > 0).tolist():
        x0, w = LABEL_W + k * width + 0.5, max(width - 1.0, 0.5)
        high = max(most * min(float(seconds[k] / found.length_s[k]), 1.0), 1.0)
        parts.append(
            f"<g><title>{words}, {_when(found, k)}: {minutes_words(float(seconds[k]))}</title>"
            f'<path class="{style}" d="M{x0:.1f} {foot - high:.1f}h{w:.1f}v{high:.1f}h-{w:.1f}z"/>'
        )
        if width >= WORD_W:
            parts.append(
                f'<text class="minutes" x="{x0 + w / 2:.1f}" y="{foot - high - 2:.1f}" text-anchor="middle">'
                f"{_figure(float(seconds[k]))}</text>"
            )
        parts.append("</g>")
    return f'<path class="axis" d="M{LABEL_W} {foot}h{MAP_W}"/>' + "".join(parts)


def minutes_words(seconds: float) -> str:
    """``14 min``, ``under 1 min``; tenths below ten."""
    return f"{_figure(seconds)} min" if seconds >= 3 else "under 0.1 min"


def _figure(seconds: float) -> str:
    minutes = seconds / 60
    if minutes < 0.05:
        return "&lt;0.1"  # as it stands in the drawing
    return f"{minutes:.0f}" if minutes >= 9.95 else f"{minutes:.1f}"


def _when(found: Hours, k: int) -> str:
    return f"{clock(k * found.bin_s)} to {clock(k * found.bin_s + float(found.length_s[k]))}"


def _axis(found: Hours, width: float, y: float) -> str:
    every = max(1, int(np.ceil(len(found.length_s) / 8)))
    ticks = range(0, len(found.length_s) + 1, every)
    parts = [f'<path class="axis" d="{"".join(f"M{LABEL_W + k * width:.1f} {y}v5" for k in ticks)}"/>']
    for k in ticks:
        if 0 < (ticks[-1] - k) * width < 110:
            continue  # no room beside the last
        t_s = min(k * found.bin_s, float(found.length_s.sum()))
        anchor = "start" if k == 0 else "end" if k * width > MAP_W - 30 else "middle"
        parts.append(
            f'<text class="tick" x="{LABEL_W + k * width:.1f}" y="{y + 20}" text-anchor="{anchor}">{clock(t_s)}</text>'
        )
    return "".join(parts)


def _name(text: str, y: float) -> str:
    return f'<text class="rowname" x="{LABEL_W - 8}" y="{y}" text-anchor="end">{escape(text)}</text>'


def _short(text: str) -> str:
    return text if len(text) <= 18 else text[:17] + "…"
