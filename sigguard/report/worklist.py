"""The worklist of several recordings: a row each, the most urgent first, as page and as CSV."""

from __future__ import annotations

import os
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from urllib.parse import quote

from sigguard.errors import UsageError
from sigguard.findings import CAUTION
from sigguard.report.document import Report
from sigguard.report.page import environment, measurable_words, style
from sigguard.report.words import FAULT_WORDS, PATTERN_WORDS, VERDICT_WORDS, cell, stretch
from sigguard.writers.atomic import write_text_atomic

UNREADABLE = "unreadable"
COLUMNS = ("patient_first", "state", "name", "to_do", "measurable", "main_fault", "electrode", "link")
_ORDER = (UNREADABLE, "repeat", "accept-in-part", "accept")
_STATE_WORDS = {UNREADABLE: "Could not be read", **VERDICT_WORDS}
_SIGNS = {UNREADABLE: "?", "accept": "✓", "accept-in-part": "◐", "repeat": "↻"}


@dataclass(frozen=True, slots=True)
class WorklistRow:
    """One recording: ``state`` is its verdict or ``unreadable``; ``link`` is relative to the worklist."""

    name: str
    state: str
    to_do: str
    measurable: str = ""
    main_fault: str = ""
    electrode: str = ""
    link: str = ""
    patient_first: bool = False

    def __post_init__(self) -> None:
        if self.state not in _ORDER:
            raise UsageError(f"a worklist row is one of {', '.join(_ORDER)}, found {self.state!r}")


def row_of(report: Report, *, link: str = "") -> WorklistRow:
    """The row of a report that was made."""
    to_do = report.advice_to_tell[0].text if report.advice_to_tell else ""
    if to_do and report.for_next_time:
        to_do = f"Nothing. Next time: {to_do}"
    if report.patient_first:
        alarm = report.patient_first[0]
        to_do = f"Look at the patient: {PATTERN_WORDS.get(alarm.pattern, alarm.pattern)} {stretch(alarm.start_s, alarm.end_s)}."
    elif not to_do and report.verdict == "repeat":
        to_do = "Repeat the recording."
    share: dict[str, float] = {}
    for lead in report.lead_summaries:
        for fault in lead.faults:
            share[fault.kind] = share.get(fault.kind, 0.0) + fault.fraction
    if report.patient_first:
        share = {}  # what may be a lethal rhythm is not listed under what spoils the signal
    electrodes = [e for e in report.electrodes if e.share == e.share]
    return WorklistRow(
        name=report.info.name,
        state=report.verdict,
        to_do=to_do or "Nothing.",
        measurable=measurable_words(report),
        main_fault=FAULT_WORDS[max(share, key=share.__getitem__)] if share else "",
        electrode=max(electrodes, key=lambda e: e.share).electrode if electrodes else "",
        link=link,
        patient_first=bool(report.patient_first),
    )


def unreadable_row(name: str, message: str) -> WorklistRow:
    """The row of a recording that could not be read; ``message`` says why and what to do."""
    return WorklistRow(name=name, state=UNREADABLE, to_do=message)


def by_urgency(rows: Iterable[WorklistRow]) -> list[WorklistRow]:
    """Patient first, could not be read, repeat, in part, accept; within one by name."""
    return sorted(rows, key=lambda row: (not row.patient_first, _ORDER.index(row.state), row.name, row.link))


def worklist_page(rows: Iterable[WorklistRow]) -> str:
    """The worklist as one self-contained page; text is escaped, links stay below the page's own folder."""
    from markupsafe import Markup

    ordered = by_urgency(rows)
    counts = [(_STATE_WORDS[state].lower(), sum(row.state == state for row in ordered)) for state in _ORDER]
    return (
        environment()
        .get_template("worklist.html.j2")
        .render(
            rows=[(row, _STATE_WORDS[row.state], _SIGNS[row.state], href(row.link)) for row in ordered],
            n_first=sum(row.patient_first for row in ordered),
            counts=[(words, count) for words, count in counts if count],
            caution=CAUTION,
            style=Markup(style()),
        )
    )


def worklist_csv(rows: Iterable[WorklistRow]) -> str:
    """The worklist as CSV, the caution in its last column."""
    lines = [",".join((*COLUMNS, "caution"))]
    for row in by_urgency(rows):
        fields = (
            "true" if row.patient_first else "false",
            *(getattr(row, name) for name in COLUMNS[1:]),
            CAUTION,
        )
        lines.append(",".join(cell(text) for text in fields))
    return "\n".join(lines) + "\n"


def write_worklist(rows: Sequence[WorklistRow], folder: str | os.PathLike[str]) -> None:
    """``index.html`` and ``index.csv`` in a folder, each whole or not at all."""
    folder = Path(folder)
    write_text_atomic(folder / "index.html", worklist_page(rows))
    write_text_atomic(folder / "index.csv", worklist_csv(rows))


def href(link: str) -> str:
    """A relative link; anything that could lead elsewhere (a scheme, a root) becomes part of a file name."""
    if not link:
        return ""
    encoded = quote(link.replace(os.sep, "/").encode("utf-8", "surrogateescape"), safe="/")
    return "./" + encoded.lstrip("/")
