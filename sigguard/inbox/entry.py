"""A report as the ledger and the line on stdout have it: facts for somebody who must act, no identity."""

from __future__ import annotations

import json
from dataclasses import replace
from datetime import UTC, datetime
from typing import Any

from sigguard.electrodes import ELECTRODES
from sigguard.errors import SigguardError
from sigguard.findings import CAUTION
from sigguard.inbox.ledger import Entry
from sigguard.readers.base import printable
from sigguard.report.document import Report, number
from sigguard.report.words import clean

PLACES = ("accept", "accept-in-part", "repeat", "patient-first", "unreadable")


def entry_of(report: Report) -> Entry:
    """What the ledger keeps of a report.

    Where somebody must look at the patient, no fault and no electrode is kept: what may be a lethal rhythm
    is not counted under what spoils the signal.
    """
    info = report.info
    told = not report.patient_first
    entry = Entry(
        verdict=report.verdict,
        patient_first=tuple(dict.fromkeys(p.pattern for p in report.patient_first)),
        format=clean(info.format),
        device=None if info.device is None else clean(info.device),
        fs_hz=number(info.fs_hz, 6),
        duration_s=number(info.duration_s, 3),
        profile=clean(report.profile_name),
        software=clean(report.software_version),
        model_sha256=report.model_sha256,
        culprit=culprit_of(report) if told else None,
        leads=tuple((clean(s.lead), float(s.grade_fraction.get("none", 0.0))) for s in report.lead_summaries),
        faults=tuple(
            (clean(s.lead), fault.kind, float(fault.fraction))
            for s in report.lead_summaries
            for fault in s.faults
            if told
        ),
        electrodes=tuple(
            (clean(e.electrode), number(e.noise_uv, 1), number(e.share, 3)) for e in report.electrodes if told
        ),
        advice=tuple((a.rank, clean(a.action), _text(a.target), clean(a.text)) for a in report.advice),
    )
    return replace(entry, alert=_alert_of(entry))


def unreadable_entry(error: str) -> Entry:
    """What the ledger keeps of a recording that could not be checked; one printable line says why."""
    return Entry(error=clean(printable(" ".join(error.split()))), alert="unreadable")


def culprit_of(report: Report) -> str | None:
    """The electrode that causes the trouble: the one that the first advice names, None if it names another act."""
    first = min(report.advice, default=None, key=lambda a: a.rank)
    return first.target if first is not None and first.target in ELECTRODES else None


def _alert_of(entry: Entry) -> str | None:
    if entry.patient_first:
        return "patient-first"
    return "repeat" if entry.verdict == "repeat" else None


def place_of(entry: Entry) -> str:
    """Where a copy of the recording belongs."""
    if entry.error is not None or entry.verdict is None:
        return "unreadable"
    return "patient-first" if entry.patient_first else entry.verdict


def line_of(name: str, sha256: str, entry: Entry, *, report_folder: str | None, checked_at: float) -> str:
    """The one JSON line about a recording, for stdout and for alerts."""
    first = min(entry.advice, default=None, key=lambda a: a[0])
    faults: dict[str, list[str]] = {}
    for lead, kind, _ in entry.faults:
        faults.setdefault(kind, []).append(lead)
    found: dict[str, Any] = {
        "name": name,
        "sha256": sha256,
        "state": "unreadable" if entry.error is not None else "checked",
        "verdict": entry.verdict,
        "patient_first": list(entry.patient_first),
        "alert": entry.alert,
        "faults": faults,
        "electrode": entry.culprit,
        "advice": None if first is None else first[3],
        "error": entry.error,
        "report": report_folder,
        "routed_to": entry.routed_to,
        "route_error": entry.route_error,
        "checked_at": datetime.fromtimestamp(checked_at, UTC).isoformat(timespec="milliseconds"),
        "caution": CAUTION,
    }
    return json.dumps(found, ensure_ascii=False, allow_nan=False)


def error_text(err: BaseException) -> str:
    """Why a recording could not be checked, for whatever went wrong with it."""
    if isinstance(err, SigguardError):
        return str(err)
    if isinstance(err, MemoryError):
        return "not enough memory to check it"
    return f"could not be checked, a fault of the program: {type(err).__name__}: {err}; please report it"


def _text(text: str | None) -> str | None:
    return None if text is None else clean(text)
