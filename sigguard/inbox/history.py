"""What the ledger tells: how often a recording must be repeated, why, and where people see it otherwise.

A repeat is a recording with the verdict ``repeat``; what could not be checked is counted apart, in no rate.
The verdicts are the program's own; people's decisions stand beside them and change none.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from sigguard.inbox.ledger import Ledger
from sigguard.leads import STANDARD_LEADS
from sigguard.report.words import cell, plain

SPOILT = 0.5  # a lead in which nothing can be measured for at least this share of the time
GROUPS = ("all", "source", "device", "lead", "electrode", "fault", "day", "overruled")
COLUMNS: tuple[str, ...] = (
    "group",
    "key",
    "recordings",
    "repeats",
    "repeat_rate",
    "of_all_repeats",
    "patient_first",
)
COLUMNS += ("unreadable", "main_fault", "main_electrode", "overruled")


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """One line of the history.

    ``recordings`` counts those checked, ``repeats`` those of them to be repeated. For a lead: the recordings
    that have it and the repeats in which it was spoilt; for an electrode: those in which it is the one to see
    to; for a fault: those that show it. So ``of_all_repeats`` of an electrode is the share of the repeats that
    it causes.
    """

    group: str
    key: str
    recordings: int
    repeats: int
    n_all_repeats: int
    patient_first: int = 0
    unreadable: int = 0
    main_fault: str | None = None
    main_electrode: str | None = None
    overruled: int = 0

    @property
    def repeat_rate(self) -> float | None:
        return self.repeats / self.recordings if self.recordings else None

    @property
    def of_all_repeats(self) -> float | None:
        return self.repeats / self.n_all_repeats if self.n_all_repeats else None


_COUNTS = """SELECT {key} AS key,
    count(*) FILTER (WHERE state = 'checked') AS recordings,
    count(*) FILTER (WHERE verdict = 'repeat') AS repeats,
    count(*) FILTER (WHERE patient_first <> '') AS patient_first,
    count(*) FILTER (WHERE state = 'unreadable') AS unreadable,
    count(*) FILTER (WHERE EXISTS (SELECT 1 FROM overruling o WHERE o.recording_id = r.id
        AND o.id = (SELECT max(id) FROM overruling WHERE recording_id = r.id) AND o.verdict <> o.original))
        AS overruled
    FROM recording r {join} WHERE state IN ('checked', 'unreadable') {where} GROUP BY 1 ORDER BY 1"""
_KEYS = {
    "all": "'all'",
    "source": "r.source",
    "device": "coalesce(r.device, '(not stated)')",
    "day": "date(r.arrived_at, 'unixepoch', 'localtime')",
}


def history_of(ledger: Ledger) -> list[Line]:
    """All lines, group by group in the order of ``GROUPS`` without ``overruled``."""
    db = ledger.db
    n_repeats = db.execute("SELECT count(*) FROM recording WHERE verdict = 'repeat'").fetchone()[0]
    lines: list[Line] = []
    for group in GROUPS[:-1]:
        if group in _KEYS:
            rows = db.execute(_COUNTS.format(key=_KEYS[group], join="", where="")).fetchall()
            causes = {what: _main_causes(ledger, _KEYS[group], what) for what in ("fault", "electrode")}
        else:
            rows, causes = _by_cause(ledger, group), {"fault": {}, "electrode": {}}
        for row in rows:
            lines.append(
                Line(
                    group=group,
                    n_all_repeats=n_repeats,
                    main_fault=causes["fault"].get(row["key"]),
                    main_electrode=causes["electrode"].get(row["key"]),
                    **dict(row),
                )
            )
    return lines


def _by_cause(ledger: Ledger, group: str) -> list[Any]:
    if group == "electrode":
        query = _COUNTS.format(key="r.culprit", join="", where="AND r.culprit IS NOT NULL")
    elif group == "fault":
        join = "JOIN (SELECT DISTINCT recording_id, kind FROM fault) f ON f.recording_id = r.id"
        query = _COUNTS.format(key="f.kind", join=join, where="")
    else:
        query = _COUNTS.format(key="l.lead", join="JOIN lead l ON l.recording_id = r.id", where="")
        spoilt = f"FILTER (WHERE verdict = 'repeat' AND l.spoilt >= {SPOILT})"
        query = query.replace("FILTER (WHERE verdict = 'repeat')", spoilt)
    rows = ledger.db.execute(query).fetchall()
    order = {lead: k for k, lead in enumerate(STANDARD_LEADS if group == "lead" else ())}
    return sorted(rows, key=lambda row: (order.get(row["key"], len(order)), row["key"]))


def _main_causes(ledger: Ledger, key: str, what: str) -> dict[str, str]:
    """Of each key, the fault or electrode that most of its repeats show."""
    if what == "fault":
        cause, join = (
            "f.kind",
            "JOIN (SELECT DISTINCT recording_id, kind FROM fault) f ON f.recording_id = r.id",
        )
    else:
        cause, join = "r.culprit", ""
    rows = ledger.db.execute(
        f"SELECT {key} AS key, {cause} AS cause, count(*) AS n FROM recording r {join}"
        f" WHERE verdict = 'repeat' AND {cause} IS NOT NULL GROUP BY 1, 2 ORDER BY n, cause DESC"
    )
    return {row["key"]: row["cause"] for row in rows}  # the last one, the most frequent, stays


def disagreements_of(ledger: Ledger) -> list[dict[str, Any]]:
    """How often people's last word on a recording stands against the program's, by source and verdicts."""
    rows = ledger.db.execute(
        "SELECT r.source, o.original, o.verdict, count(*) AS n FROM overruling o"
        " JOIN recording r ON r.id = o.recording_id"
        " WHERE o.id = (SELECT max(id) FROM overruling WHERE recording_id = r.id)"
        " GROUP BY 1, 2, 3 ORDER BY n DESC, 1, 2, 3"
    )
    return [dict(row) for row in rows]


def overrulings_of(ledger: Ledger) -> list[dict[str, Any]]:
    """Every decision ever entered, the newest first, beside the verdict that it stands against."""
    rows = ledger.db.execute(
        "SELECT r.name, r.sha256, r.report, o.original, o.verdict, o.because,"
        " strftime('%Y-%m-%dT%H:%M:%SZ', o.decided_at, 'unixepoch') AS decided_at"
        " FROM overruling o JOIN recording r ON r.id = o.recording_id ORDER BY o.id DESC"
    )
    return [dict(row) for row in rows]


def alerts_of(ledger: Ledger) -> dict[str, int]:
    """Alerts delivered and not (yet) delivered."""
    delivered, waiting = ledger.db.execute(
        "SELECT count(delivered_at), count(*) - count(delivered_at) FROM alert"
    ).fetchone()
    return {"delivered": delivered, "undelivered": waiting}


def errors_of(ledger: Ledger) -> list[dict[str, Any]]:
    """What could not be checked, with the reason."""
    rows = ledger.db.execute("SELECT name, state, error FROM recording WHERE error IS NOT NULL ORDER BY id")
    return [dict(row) for row in rows]


def as_dict(ledger: Ledger) -> dict[str, Any]:
    """The whole history as plain JSON types."""
    return {
        "groups": [_fields(line) for line in history_of(ledger)],
        "disagreements": disagreements_of(ledger),
        "overrulings": overrulings_of(ledger),
        "alerts": alerts_of(ledger),
        "errors": errors_of(ledger),
    }


def as_csv(ledger: Ledger) -> str:
    """The lines of all groups as CSV, headed by ``COLUMNS``; a rate is empty where nothing was counted."""
    rows = [",".join(COLUMNS)]
    for line in history_of(ledger):
        found = _fields(line)
        rows.append(",".join("" if found[c] is None else cell(found[c]) for c in COLUMNS))
    return "\n".join(rows) + "\n"


def _fields(line: Line) -> dict[str, Any]:
    found: dict[str, Any] = {name: getattr(line, name) for name in COLUMNS}
    for name in ("repeat_rate", "of_all_repeats"):
        found[name] = None if found[name] is None else round(found[name], 4)
    return found


_TITLES = {
    "all": "All",
    "source": "By source folder",
    "device": "By device",
    "lead": "By lead (repeats: those in which the lead was spoilt)",
    "electrode": "By electrode to see to",
    "fault": "By fault (recordings that show it)",
    "day": "By day of arrival",
}


def as_text(ledger: Ledger) -> str:
    """The history as plain tables for the terminal."""
    lines = history_of(ledger)
    if not lines:
        return "The ledger holds no recording yet.\n"
    out: list[str] = []
    for group, title in _TITLES.items():
        mine = [line for line in lines if line.group == group]
        if mine:
            heads = ("", "recordings", "repeats", "rate", "of all", "first", "unread.", "overruled", "cause")
            out += [title, *_table([heads, *map(_cells, mine)]), ""]
    against = disagreements_of(ledger)
    if against:
        told = [(plain(d["source"]), d["original"], d["verdict"], str(d["n"])) for d in against]
        shown = _table([("source", "program", "person", "recordings"), *told])
        out += ["Decided by people (their last word)", *shown, ""]
    alerts = alerts_of(ledger)
    out.append(f"Alerts: {alerts['delivered']} delivered, {alerts['undelivered']} not delivered")
    return "\n".join(out) + "\n"


def _cells(line: Line) -> tuple[str, ...]:
    causes = ", ".join(filter(None, (line.main_fault, line.main_electrode)))
    counts = (
        str(line.recordings),
        str(line.repeats),
        _percent(line.repeat_rate),
        _percent(line.of_all_repeats),
    )
    rest = (str(line.patient_first), str(line.unreadable), str(line.overruled), causes)
    return (plain(line.key), *counts, *rest)


def _percent(share: float | None) -> str:
    return "" if share is None else f"{100 * share:.1f} %"


def _table(rows: Sequence[tuple[str, ...]]) -> list[str]:
    """Columns as wide as their widest cell: the first and last to the left, numbers to the right."""
    widths = [max(len(row[k]) for row in rows) for k in range(len(rows[0]))]
    last = len(widths) - 1
    return [
        "  "
        + "  ".join(
            text.ljust(width) if k in (0, last) else text.rjust(width)
            for k, (text, width) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in rows
    ]
