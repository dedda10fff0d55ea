"""The ledger: what came, when, what became of it. One SQLite file that several watchers may share.

A recording is claimed before it is checked and the claim is a lease: it ends by itself, or at once when
its process is known to have died. What was found goes in with one transaction, the alert it calls for
included, so that there is never the one without the other. No name, number or birth date of a patient
comes here.
"""

from __future__ import annotations

import os
import sqlite3
import time
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from sigguard.errors import LedgerError
from sigguard.inbox.owner import is_dead
from sigguard.inbox.schema import MIGRATIONS

BUSY_S = 60.0
LEASE_S = 60.0
MAX_TRIES = 8  # checks that were cut off before a recording is taken for what ends them
_FOLDERS_TAKEN = ("index.html", "index.csv")


@dataclass(frozen=True, slots=True)
class Claim:
    """A recording in hand: its row, the folder for its report, how often it was begun."""

    id: int
    report: str
    tries: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Entry:
    """What was found on a recording, as the ledger keeps it; ``error`` instead where it could not be checked."""

    verdict: str | None = None
    patient_first: tuple[str, ...] = ()
    format: str | None = None
    device: str | None = None
    fs_hz: float | None = None
    duration_s: float | None = None
    profile: str | None = None
    software: str | None = None
    model_sha256: str | None = None
    culprit: str | None = None
    leads: tuple[tuple[str, float], ...] = ()  # lead, share of it in which nothing can be measured
    faults: tuple[tuple[str, str, float], ...] = ()  # lead, kind, fraction
    electrodes: tuple[tuple[str, float | None, float | None], ...] = ()  # electrode, noise in µV, share
    advice: tuple[tuple[int, str, str | None, str], ...] = ()  # rank, action, target, text
    error: str | None = None
    routed_to: str | None = None
    route_error: str | None = None
    alert: str | None = None  # kind of the alert it calls for


class Ledger:
    """An open ledger; a context manager. Not to be shared between threads: each opens its own.

    Raises LedgerError where the file cannot be opened, is none of ours or of a newer program.
    """

    def __init__(self, path: str | os.PathLike[str], *, must_exist: bool = False) -> None:
        self.path = Path(path)
        if must_exist and not self.path.is_file():
            raise LedgerError(f"{self.path}: expected a ledger, found no such file; check the name")
        try:
            if not must_exist:
                self.path.parent.mkdir(parents=True, exist_ok=True)
            self.db = sqlite3.connect(self.path, timeout=BUSY_S, isolation_level=None)
        except (sqlite3.Error, OSError) as err:
            raise LedgerError(f"{self.path}: the ledger cannot be opened ({err})") from err
        try:
            self.db.row_factory = sqlite3.Row
            self._set_up()
        except sqlite3.Error as err:
            self.db.close()
            raise LedgerError(f"{self.path}: expected a ledger of sigguard, found: {err}") from err
        except LedgerError:
            self.db.close()
            raise

    def __enter__(self) -> Ledger:
        return self

    def __exit__(self, *error: object) -> None:
        self.close()

    def close(self) -> None:
        self.db.close()

    def _set_up(self) -> None:
        self.db.execute("PRAGMA foreign_keys = ON")
        self._to_wal()
        self.db.execute("PRAGMA synchronous = FULL")
        if self._version() == len(MIGRATIONS):
            return
        with self.writing():
            version = self._version()  # another process may have been faster
            if version > len(MIGRATIONS):
                raise LedgerError(f"{self.path}: written by a newer version of sigguard; use that one")
            if version == 0 and self.db.execute("SELECT count(*) FROM sqlite_master").fetchone()[0]:
                raise LedgerError(f"{self.path}: a database, but no ledger of sigguard; name another file")
            for number, statements in enumerate(MIGRATIONS[version:], start=version + 1):
                for statement in statements:
                    self.db.execute(statement)
                self.db.execute(f"PRAGMA user_version = {number}")

    def _version(self) -> int:
        return int(self.db.execute("PRAGMA user_version").fetchone()[0])

    def _to_wal(self) -> None:
        """SQLite does not wait for others when it changes the journal, so this does."""
        give_up = time.monotonic() + BUSY_S
        while True:
            try:
                self.db.execute("PRAGMA journal_mode = WAL")
                return
            except sqlite3.OperationalError as err:
                if "locked" not in str(err) or time.monotonic() > give_up:
                    raise
                time.sleep(0.05)

    @contextmanager
    def writing(self) -> Iterator[None]:
        """One transaction that has the right to write from its first moment: all of it or nothing."""
        self.db.execute("BEGIN IMMEDIATE")
        try:
            yield
        except BaseException:
            self.db.execute("ROLLBACK")
            raise
        self.db.execute("COMMIT")

    # ── claims ──

    def done_signatures(self) -> dict[str, set[str]]:
        """Of each name, the signatures with which it is done: those files need not be read again."""
        found: dict[str, set[str]] = {}
        for row in self.db.execute(
            "SELECT name, signature FROM recording WHERE state IN ('checked', 'unreadable')"
        ):
            found.setdefault(row["name"], set()).add(row["signature"])
        return found

    def claim(
        self,
        name: str,
        sha256: str,
        *,
        owner: str,
        signature: str,
        n_bytes: int,
        out_dir: Path,
        lease_s: float = LEASE_S,
    ) -> Claim | str:
        """Take a recording in hand; ``"done"`` if it is in the ledger already, ``"held"`` if another has it."""
        now = time.time()
        with self.writing():
            row = self.db.execute(
                "SELECT * FROM recording WHERE name = ? AND sha256 = ?", (name, sha256)
            ).fetchone()
            if row is None:
                report = self._free_folder(name, out_dir)
                source = name.rpartition("/")[0] or "."
                cursor = self.db.execute(
                    "INSERT INTO recording (name, source, sha256, signature, n_bytes, arrived_at, state, owner,"
                    " lease_until, report) VALUES (?, ?, ?, ?, ?, ?, 'claimed', ?, ?, ?)",
                    (name, source, sha256, signature, n_bytes, now, owner, now + lease_s, report),
                )
                return Claim(int(cursor.lastrowid or 0), report, 1)
            if row["state"] in ("checked", "unreadable"):
                self.db.execute("UPDATE recording SET signature = ? WHERE id = ?", (signature, row["id"]))
                return "done"
            if row["state"] == "claimed" and not _is_free(row, owner, now):
                return "held"
            tries = row["tries"] + 1 if row["state"] == "claimed" else 1
            self.db.execute(
                "UPDATE recording SET state = 'claimed', owner = ?, lease_until = ?, signature = ?, tries = ?,"
                " error = NULL WHERE id = ?",
                (owner, now + lease_s, signature, tries, row["id"]),
            )
            return Claim(row["id"], row["report"], tries)

    def _free_folder(self, name: str, out_dir: Path) -> str:
        """A folder for the report that no other recording has, and nothing on the disk either."""
        last = name.rpartition("/")[2]
        base = Path(last).stem or last
        wanted, n = base, 1
        while (
            wanted.casefold() in _FOLDERS_TAKEN
            or os.path.lexists(out_dir / wanted)
            or self.db.execute("SELECT 1 FROM recording WHERE report = ?", (wanted,)).fetchone()
        ):
            n += 1
            wanted = f"{base}-{n}"
        return wanted

    def renew(self, owner: str, *, lease_s: float = LEASE_S) -> None:
        """Hold on to all that is in this owner's hands."""
        until = time.time() + lease_s
        with self.writing():
            self.db.execute(
                "UPDATE recording SET lease_until = ? WHERE owner = ? AND state = 'claimed'", (until, owner)
            )

    def release(self, claim: Claim, owner: str) -> None:
        """Give back a recording that changed while it was being checked: it will come again."""
        with self.writing():
            self.db.execute(
                "DELETE FROM recording WHERE id = ? AND owner = ? AND state = 'claimed'", (claim.id, owner)
            )

    def finish(self, claim: Claim, owner: str, entry: Entry, *, line: str, checked_at: float) -> bool:
        """Enter what was found, with the alert it calls for; False where the claim was lost meanwhile."""
        state = "unreadable" if entry.error is not None else "checked"
        with self.writing():
            done = self.db.execute(
                "UPDATE recording SET state = ?, checked_at = ?, verdict = ?, patient_first = ?, format = ?,"
                " device = ?, fs_hz = ?, duration_s = ?, profile = ?, software = ?, model_sha256 = ?, culprit = ?,"
                " error = ?, routed_to = ?, route_error = ?, line = ?, told = 0"
                " WHERE id = ? AND owner = ? AND state = 'claimed'",
                (state, checked_at, entry.verdict, " ".join(entry.patient_first), entry.format, entry.device)
                + (entry.fs_hz, entry.duration_s, entry.profile, entry.software, entry.model_sha256)
                + (entry.culprit, entry.error, entry.routed_to, entry.route_error, line, claim.id, owner),
            )
            if done.rowcount != 1:
                return False
            for table, rows in (
                ("lead", entry.leads),
                ("fault", entry.faults),
                ("electrode", entry.electrodes),
                ("advice", entry.advice),
            ):
                self._insert(table, claim.id, rows)
            if entry.alert is not None:
                self.db.execute(
                    "INSERT INTO alert (recording_id, kind, payload, created_at, next_try) VALUES (?, ?, ?, ?, ?)",
                    (claim.id, entry.alert, line, checked_at, checked_at),
                )
        return True

    def _insert(self, table: str, recording_id: int, rows: Sequence[tuple]) -> None:
        if rows:
            marks = ", ".join("?" * (len(rows[0]) + 1))
            self.db.executemany(
                f"INSERT INTO {table} VALUES ({marks})", [(recording_id, *row) for row in rows]
            )

    def note_gone(self, present: Iterable[str], owner: str) -> list[str]:
        """Enter as gone what somebody took from the inbox after its checker had died; their names."""
        there = set(present)
        now = time.time()
        with self.writing():
            rows = self.db.execute("SELECT * FROM recording WHERE state = 'claimed'").fetchall()
            gone = [row for row in rows if row["name"] not in there and _is_free(row, owner, now)]
            self.db.executemany(
                "UPDATE recording SET state = 'gone', error = 'taken from the inbox before it was checked'"
                " WHERE id = ?",
                [(row["id"],) for row in gone],
            )
        return [row["name"] for row in gone]

    # ── telling and routing ──

    def untold(self, owner: str) -> list[sqlite3.Row]:
        """Entries whose line was not printed because their process died just before; they are now this owner's."""
        with self.writing():
            rows = self.db.execute(
                "SELECT id, line, owner FROM recording WHERE told = 0 AND line IS NOT NULL ORDER BY id"
            ).fetchall()
            mine = [row for row in rows if row["owner"] == owner or is_dead(row["owner"])]
            self.db.executemany(
                "UPDATE recording SET owner = ? WHERE id = ?", [(owner, row["id"]) for row in mine]
            )
        return mine

    def note_told(self, recording_id: int) -> None:
        with self.writing():
            self.db.execute("UPDATE recording SET told = 1 WHERE id = ?", (recording_id,))

    def not_routed(self) -> list[sqlite3.Row]:
        """Entries of which the copy failed."""
        return self.db.execute(
            "SELECT * FROM recording WHERE routed_to IS NULL AND route_error IS NOT NULL ORDER BY id"
        ).fetchall()

    def note_routed(self, recording_id: int, routed_to: str | None, error: str | None) -> None:
        with self.writing():
            self.db.execute(
                "UPDATE recording SET routed_to = ?, route_error = ? WHERE id = ?",
                (routed_to, error, recording_id),
            )


def _is_free(row: sqlite3.Row, owner: str, now: float) -> bool:
    return row["owner"] == owner or row["lease_until"] < now or is_dead(row["owner"])
