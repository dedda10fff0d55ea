"""A person's decision beside the program's: both stay in the ledger, with the reason."""

from __future__ import annotations

import sqlite3
import time
from dataclasses import dataclass

from sigguard.errors import LedgerError, UsageError
from sigguard.inbox.ledger import Ledger
from sigguard.report.words import plain

VERDICTS = ("accept", "accept-in-part", "repeat")


@dataclass(frozen=True, slots=True)
class Overruling:
    """One decision; ``original`` is the program's verdict or ``unreadable``."""

    name: str
    original: str
    verdict: str
    because: str
    patient_first: bool


def overrule(ledger: Ledger, name: str, *, verdict: str, because: str) -> Overruling:
    """Enter a decision on a recording, by its name in the inbox or the folder of its report.

    Of several contents of one name the newest is meant. Raises UsageError for an unknown verdict, an
    empty reason or a name that fits several recordings, LedgerError where there is no such recording.
    """
    if verdict not in VERDICTS:
        raise UsageError(f"--verdict {verdict}: expected one of {', '.join(VERDICTS)}")
    reason = plain(" ".join(because.split()))
    if not reason:
        raise UsageError("--because: expected the reason in words, found nothing")
    with ledger.writing():
        row = _find(ledger, name)
        original = row["verdict"] or "unreadable"
        ledger.db.execute(
            "INSERT INTO overruling (recording_id, verdict, original, because, decided_at) VALUES (?, ?, ?, ?, ?)",
            (row["id"], verdict, original, reason, time.time()),
        )
    return Overruling(row["name"], original, verdict, reason, bool(row["patient_first"]))


def _find(ledger: Ledger, name: str) -> sqlite3.Row:
    """The entry meant: report folder, else name in the inbox, else file name with or without its ending."""
    done = "state IN ('checked', 'unreadable')"
    rows = ledger.db.execute(
        f"SELECT * FROM recording WHERE {done} AND name = ? ORDER BY id DESC", (name,)
    ).fetchall()
    rows = (
        rows
        or ledger.db.execute(
            f"SELECT * FROM recording WHERE {done} AND report = ? COLLATE BINARY", (name,)
        ).fetchall()
    )
    rows = rows or [
        row
        for row in ledger.db.execute(f"SELECT * FROM recording WHERE {done} ORDER BY id DESC")
        if name in (last := row["name"].rpartition("/")[2], last.rpartition(".")[0])
    ]
    if not rows:
        raise LedgerError(f"{ledger.path}: expected a checked recording called {name}, found none")
    if len(names := sorted({row["name"] for row in rows})) > 1:
        raise UsageError(f"{name}: fits {len(names)} recordings ({', '.join(names[:4])}); name one in full")
    return rows[0]
