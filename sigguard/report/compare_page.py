"""The comparison of takes as one self-contained page, and both its files written."""

from __future__ import annotations

import os
from dataclasses import dataclass
from math import isfinite
from pathlib import Path

from sigguard.findings import CAUTION
from sigguard.report.comparison import Choice, Comparison, Standing, read_bound, read_value
from sigguard.report.page import duration_words, environment, style
from sigguard.report.words import (
    ABSENT_WORDS,
    MEASUREMENT_WORDS,
    PATTERN_WORDS,
    SHORT_WORDS,
    UNIT_WORDS,
    VERDICT_WORDS,
    listing,
    stretch,
)
from sigguard.report.worklist import href
from sigguard.segments import UNITS
from sigguard.writers.atomic import write_text_atomic

MAX_ALARMS_SHOWN = 40
_SIGNS = {"accept": "✓", "accept-in-part": "◐", "repeat": "↻"}


@dataclass(frozen=True, slots=True)
class Cell:
    """One take under one measurement, in words."""

    sign: str
    text: str
    kept: bool
    trusted: bool
    more: str = ""


@dataclass(frozen=True, slots=True)
class Row:
    """One measurement over all takes."""

    name: str
    cells: tuple[Cell, ...]
    keep: str
    because: str


def render_comparison(found: Comparison) -> str:
    """The whole page as HTML. Text from headers and file names is escaped; nothing is loaded from elsewhere."""
    from markupsafe import Markup

    alarms = [
        (take.name, stretch(start_s, end_s), PATTERN_WORDS.get(pattern, pattern))
        for take in found.takes
        for pattern, start_s, end_s in take.patient_first
    ]
    return (
        environment()
        .get_template("compare.html.j2")
        .render(
            found=found,
            alarms=alarms[:MAX_ALARMS_SHOWN],
            more_alarms=max(0, len(alarms) - MAX_ALARMS_SHOWN),
            never=listing(found.must_not_discard),
            keep=listing(found.keep),
            keep_too=listing(name for name in found.must_not_discard if name not in found.keep),
            rows=[_row(choice) for choice in found.choices],
            takes=[
                (
                    take,
                    _SIGNS[take.verdict],
                    VERDICT_WORDS[take.verdict],
                    duration_words(take.duration_s),
                    listing(SHORT_WORDS[m] for m in take.trusted) or "nothing",
                    f"{100 * take.share:.0f} %",
                    href(take.link),
                )
                for take in found.takes
            ],
            caution=CAUTION,
            style=Markup(style()),
        )
    )


def write_comparison(found: Comparison, folder: str | os.PathLike[str]) -> None:
    """``compare.json`` and ``compare.html`` in a folder, each whole or not at all."""
    folder = Path(folder)
    write_text_atomic(folder / "compare.html", render_comparison(found))
    write_text_atomic(folder / "compare.json", found.to_json() + "\n")


def _row(choice: Choice) -> Row:
    alike = " (alike)" if len(choice.keep) > 1 else ""
    return Row(
        MEASUREMENT_WORDS[choice.measurement],
        tuple(_cell(choice, s) for s in choice.standings),
        (listing(choice.keep) or "none") + alike,
        choice.because,
    )


def _cell(choice: Choice, s: Standing) -> Cell:
    unit = UNITS[choice.measurement]
    bound = read_bound(s.bound, unit)
    words = [] if s.value is None else [read_value(s.value, unit)]
    if isfinite(bound):
        words.append(f"± {read_value(bound, unit)}")
    if words:
        words.append(UNIT_WORDS[unit])
    kept = s.take in choice.keep
    if s.absent and not s.reliable:
        return Cell("–", ABSENT_WORDS.get(s.absent, s.absent), kept, False)
    if not words:
        return Cell("–", "no value", kept, False)
    time = f"for {duration_words(s.reliable_s)}" if s.reliable_s > 0 else ""
    n = len(s.leads)
    more = ", ".join(part for part in (time, f"{n} {'lead' if n == 1 else 'leads'}" if n else "") if part)
    return Cell("✓" if s.reliable else "✗", " ".join(words), kept, s.reliable, more if s.reliable else "")
