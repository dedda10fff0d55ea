"""The report as one self-contained page, for the screen and for paper."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache
from math import isfinite
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeGuard

from sigguard.findings import CAUTION, LeadSummary, Value
from sigguard.report.body import body_svg, common_words, electrode_rows
from sigguard.report.document import Report
from sigguard.report.grademap import grade_map, legend_svg, map_svg
from sigguard.report.hours import LONG_S, hours, hours_svg, longest_rows, worst_words
from sigguard.report.strips import StripData, by_heading, strip_svg
from sigguard.report.table import round_up
from sigguard.report.words import (
    ABSENT_WORDS,
    FAULT_WORDS,
    GRADE_WORDS,
    MEASUREMENT_WORDS,
    PATTERN_WORDS,
    PROFILE_WORDS,
    SHORT_WORDS,
    UNIT_WORDS,
    VERDICT_WORDS,
    clean,
    clock,
    listing,
    strength_words,
    stretch,
)
from sigguard.segments import GRADES

if TYPE_CHECKING:
    from jinja2 import Environment

_SHOWN_DECIMALS = {"1/min": 0, "ms": 0, "mV": 3}
_SIGNS = {"accept": "✓", "accept-in-part": "◐", "repeat": "↻"}
TEMPLATES = Path(__file__).parent / "templates"
ST_COLUMNS = 6
MAX_ROWS = 40  # patient-first stretches named one by one


@dataclass(frozen=True, slots=True)
class MeasurementRow:
    """One line of the table of measurements, in words."""

    name: str
    value: str  # with its bound: 158 ± 9 ms
    span: str
    trusted: bool
    sign: str
    trust: str
    leads: str
    time: str


@dataclass(frozen=True, slots=True)
class LeadRow:
    """One line of the table of leads, in words."""

    lead: str
    grades: tuple[str, ...]
    trusted: tuple[str, ...]
    faults: tuple[str, ...]


def render_page(report: Report, strips: Sequence[StripData] = (), *, with_identity: bool = False) -> str:
    """The whole page as HTML. Text from headers is escaped; nothing is loaded from elsewhere."""
    from markupsafe import Markup

    info = report.info
    found = grade_map(report.segments, duration_s=info.duration_s)
    long = info.duration_s >= LONG_S and len(report.segments) > 0
    by_hour = hours(report) if long else None
    return (
        environment()
        .get_template("report.html.j2")
        .render(
            report=report,
            info=info,
            caution=CAUTION,
            style=Markup(style()),
            sign=_SIGNS[report.verdict],
            verdict_words=VERDICT_WORDS[report.verdict],
            profile_words=PROFILE_WORDS.get(report.profile_name, ""),
            measurable=measurable_words(report),
            duration=duration_words(info.duration_s),
            alarms=[
                (
                    PATTERN_WORDS.get(a.pattern, a.pattern),
                    stretch(a.start_s, a.end_s),
                    listing(a.leads),
                    a.text,
                )
                for a in report.patient_first[:MAX_ROWS]
            ],
            more_alarms=max(0, len(report.patient_first) - MAX_ROWS),
            rows=[_measurement_row(m, v, n_leads=info.n_leads) for m, v in report.values.items()],
            st_tables=_st_tables(report),
            map_svg=Markup(map_svg(report)),
            aggregated=clock((found.edges_s[-1] - found.edges_s[0]) / (found.edges_s.size - 1))
            if found.aggregated
            else "",
            hours_svg=Markup(hours_svg(by_hour)) if by_hour else "",
            hours_each=duration_words(by_hour.bin_s) if by_hour else "",
            longest=longest_rows(report.segments) if long else [],
            longest_lost=worst_words(report) if long else "",
            best=None
            if report.best_strip is None
            else (
                stretch(report.best_strip.start_s, report.best_strip.end_s),
                GRADE_WORDS[report.best_strip.grade],
            ),
            legend=[(Markup(legend_svg(g)), GRADE_WORDS[g]) for g in reversed(GRADES)],
            groups=[(head, [Markup(strip_svg(s)) for s in group]) for head, group in by_heading(strips)],
            whole=sum(s.end_s - s.start_s for s in strips) >= 0.9 * info.duration_s * info.n_leads,
            lead_rows=[_lead_row(summary) for summary in report.lead_summaries],
            electrodes=electrode_rows(report.electrodes),
            common=common_words(report.common_noise),
            body=Markup(body_svg(info.leads, report.electrodes, report.common_noise)),
            placement=[(p.text, _percent(p.probability)) for p in report.placement],
            identity=info.identity if with_identity else (),
        )
    )


def measurable_words(report: Report) -> str:
    """``rate, PR and QRS`` (ST counts if it holds in a lead), or ``nothing``."""
    trusted = [SHORT_WORDS[m] for m, v in report.values.items() if v.reliable and v.value is not None]
    n_st = sum(v.reliable and v.value is not None for v in report.st_by_lead.values())
    if n_st:
        total = len(report.st_by_lead)
        trusted.append("ST" if n_st == total else f"ST in {n_st} of {total} leads")
    return listing(trusted) or "nothing"


def duration_words(duration_s: float) -> str:
    """``10 s``, ``9.6 s``, ``5 min 3 s``, ``13 d 2 h``."""
    if duration_s < 60:
        return f"{round(duration_s, 1):g} s"
    units = ((86400, "d"), (3600, "h"), (60, "min"), (1, "s"))
    rest, words = round(duration_s), []
    for size, unit in units:
        count, rest = divmod(rest, size)
        if count:
            words.append(f"{count} {unit}")
        elif words:
            break
    return " ".join(words[:2])


@cache
def environment() -> Environment:
    """Templates with autoescape on."""
    from jinja2 import Environment, FileSystemLoader

    return Environment(
        loader=FileSystemLoader(TEMPLATES),
        autoescape=True,
        trim_blocks=True,
        lstrip_blocks=True,
        auto_reload=False,
        finalize=_finalize,
    )


@cache
def style() -> str:
    """The style sheet that goes into each page."""
    return (TEMPLATES / "style.css").read_text(encoding="utf-8")


def _finalize(value: Any) -> Any:
    """Odd file names must not break the encoding of the page."""
    return clean(value) if type(value) is str else value


def _measurement_row(m: str, v: Value, *, n_leads: int = 0, with_unit: bool = True) -> MeasurementRow:
    decimals, unit = _SHOWN_DECIMALS[v.unit], f" {UNIT_WORDS[v.unit]}" if with_unit else ""
    value, span = "—", ""
    if _known(v.value):
        bound = (
            f" ± {float(round_up(v.bound_95, decimals=decimals)):.{decimals}f}" if _known(v.bound_95) else ""
        )
        value = f"{_shown(v.value, decimals)}{bound}{unit}"
    if _known(v.low) and _known(v.high) and v.low != v.high:
        span = f"{_shown(v.low, decimals)} to {_shown(v.high, decimals)}"
    trusted = v.reliable and _known(v.value)
    if v.absent:
        sign, trust = "–", ABSENT_WORDS.get(v.absent, v.absent)
    elif not _known(v.value):
        sign, trust = "–", "no value"
    else:
        sign, trust = ("✓", "yes") if trusted else ("✗", "no")
    leads = f"all {n_leads}" if len(v.leads) == n_leads > 3 else ", ".join(v.leads)
    time = duration_words(v.reliable_s) if v.reliable_s > 0 else ""
    return MeasurementRow(MEASUREMENT_WORDS[m], value, span, trusted, sign, trust, leads, time)


def _st_tables(report: Report) -> list[list[tuple[str, MeasurementRow]]]:
    """ST by lead, six leads to a table so that it fits a narrow page."""
    cells = [(lead, _measurement_row("st", v, with_unit=False)) for lead, v in report.st_by_lead.items()]
    return [cells[k : k + ST_COLUMNS] for k in range(0, len(cells), ST_COLUMNS)]


def _lead_row(summary: LeadSummary) -> LeadRow:
    faults = []
    for f in summary.faults:
        harms = listing(SHORT_WORDS.get(m, m) for m in f.harms)
        size = f", {strength_words(f.strength, f.unit)}" if f.strength is not None else ""
        faults.append(
            f"{FAULT_WORDS[f.kind]}{size}, {_percent(f.fraction)}" + (f": harms {harms}" if harms else "")
        )
    return LeadRow(
        summary.lead,
        tuple(_percent(summary.grade_fraction.get(g, 0.0)) for g in reversed(GRADES)),
        tuple(_percent(summary.reliable_fraction.get(m, 0.0)) for m in ("rate", "pr", "qrs", "qt", "st")),
        tuple(faults),
    )


def _known(x: float | None) -> TypeGuard[float]:
    return x is not None and isfinite(x)


def _shown(x: float | None, decimals: int) -> str:
    if x is None or not isfinite(x):
        return "—"
    return f"{round(x, decimals) + 0.0:.{decimals}f}".replace("-", "−")


def _percent(x: float | None) -> str:
    """Whole percent; what is neither none nor all never reads as 0 % or 100 %."""
    if x is None or not isfinite(x):
        return "—"
    if 0 < x < 0.01:
        return "under 1 %"
    return f"{min(99, round(100 * x)) if x < 1 else 100} %"
