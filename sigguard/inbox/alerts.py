"""Alerts: a command of the user's that gets the JSON line on its stdin, until it has taken it.

No shell is involved and nothing of a recording becomes part of the command: the words of the command are
fixed before the first recording is read. Alerts wait in the ledger, so that one that failed is tried again,
after a crash too; a command can therefore get the same alert twice, never none.
"""

from __future__ import annotations

import contextlib
import os
import shlex
import shutil
import signal
import sqlite3
import subprocess
import threading
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path

from sigguard.errors import UsageError
from sigguard.inbox.ledger import Ledger
from sigguard.inbox.owner import is_dead
from sigguard.readers.base import printable

TIME_LIMIT_S = 30.0
FIRST_RETRY_S, LONGEST_RETRY_S = 5.0, 600.0
_SAID = 300  # characters kept of what a failing command said


def split_command(command: str) -> tuple[str, ...]:
    """The words of a command; UsageError if it has none, open quotes, or a program that is not there."""
    try:
        words = shlex.split(command, posix=os.name != "nt")
    except ValueError as err:
        raise UsageError(f"--on-alert {command}: expected a command, found {err}") from err
    if not words:
        raise UsageError("--on-alert: expected a command, found nothing")
    if shutil.which(words[0]) is None:
        raise UsageError(f"--on-alert {command}: there is no program {words[0]}")
    return tuple(words)


def run_command(words: Sequence[str], payload: str, *, time_limit_s: float) -> str | None:
    """Run the command with the payload on its stdin; None if it ended with 0, else what went wrong."""
    try:
        process = subprocess.Popen(
            words,
            stdin=subprocess.PIPE,
            stdout=subprocess.DEVNULL,  # stdout belongs to the lines about recordings
            stderr=subprocess.PIPE,
            start_new_session=True,  # Ctrl-C is for the watcher, and all that it starts can be ended together
        )
    except (OSError, ValueError) as err:
        return printable(f"could not be started: {err}")
    try:
        _, said = process.communicate((payload + "\n").encode(), timeout=time_limit_s)
    except subprocess.TimeoutExpired:
        _end(process)
        return f"did not end within {time_limit_s:g} s and was stopped"
    if process.returncode == 0:
        return None
    text = printable(" ".join(said.decode(errors="replace").split()))[-_SAID:]
    return f"ended with {process.returncode}" + (f": {text}" if text else "")


def _end(process: subprocess.Popen[bytes]) -> None:
    """End a command and whatever it started; its pipes are not waited for."""
    with contextlib.suppress(OSError):
        if os.name == "nt":
            process.kill()
        else:
            os.killpg(process.pid, signal.SIGKILL)
    process.wait()
    for pipe in (process.stdin, process.stderr):
        if pipe is not None:
            with contextlib.suppress(OSError):
                pipe.close()


@dataclass(slots=True)
class AlertSender:
    """Hands over what waits in the ledger; ``start`` does so in a thread, beside the checking."""

    ledger_path: Path
    words: tuple[str, ...]
    owner: str
    report_failure: Callable[[str], None]
    time_limit_s: float = TIME_LIMIT_S
    first_retry_s: float = FIRST_RETRY_S
    _wake: threading.Event = field(default_factory=threading.Event)
    _stop: threading.Event = field(default_factory=threading.Event)
    _thread: threading.Thread | None = None

    def start(self) -> None:
        self._thread = threading.Thread(target=self._run, name="alerts", daemon=True)
        self._thread.start()

    def wake(self) -> None:
        """There may be something new."""
        self._wake.set()

    def close(self) -> None:
        """Hand over what is due, once, and end; what fails stays in the ledger."""
        if self._thread is not None:
            self._stop.set()
            self._wake.set()
            self._thread.join()
            self._thread = None

    def _run(self) -> None:
        with Ledger(self.ledger_path) as ledger:
            while True:
                last = self._stop.is_set()
                self._wake.clear()
                try:
                    self.deliver_due(ledger, for_s=self.time_limit_s if last else None)
                except sqlite3.Error as err:
                    self.report_failure(f"{self.ledger_path}: alerts cannot be looked up ({err})")
                if last:
                    return
                self._wake.wait(1.0)

    def deliver_due(self, ledger: Ledger, *, for_s: float | None = None) -> None:
        """Each alert that is due and in nobody's hands, patient first before all others; none is begun after ``for_s``."""
        tried: set[int] = set()
        until = None if for_s is None else time.monotonic() + for_s
        while (until is None or time.monotonic() < until) and (
            alert := self._claim(ledger, tried)
        ) is not None:
            tried.add(alert[0])
            self._deliver(ledger, *alert)

    def _claim(self, ledger: Ledger, tried: set[int]) -> tuple[int, str, str, int] | None:
        now = time.time()
        with ledger.writing():
            rows = ledger.db.execute(
                "SELECT alert.*, recording.name FROM alert JOIN recording ON recording.id = recording_id"
                " WHERE delivered_at IS NULL AND next_try <= ? ORDER BY kind = 'patient-first' DESC, alert.id",
                (now,),
            )
            for row in rows:
                free = not row["owner"] or row["owner"] == self.owner
                free = free or row["lease_until"] < now or is_dead(row["owner"])
                if row["id"] in tried or not free:
                    continue
                ledger.db.execute(
                    "UPDATE alert SET owner = ?, lease_until = ? WHERE id = ?",
                    (self.owner, now + 2 * self.time_limit_s, row["id"]),
                )
                return row["id"], row["name"], row["payload"], row["tries"]
        return None

    def _deliver(self, ledger: Ledger, alert_id: int, name: str, payload: str, tries: int) -> None:
        failure = run_command(self.words, payload, time_limit_s=self.time_limit_s)
        now = time.time()
        with ledger.writing():
            if failure is None:
                ledger.db.execute(
                    "UPDATE alert SET delivered_at = ?, tries = ?, owner = '', last_error = NULL WHERE id = ?",
                    (now, tries + 1, alert_id),
                )
            else:
                wait_s = min(self.first_retry_s * 2 ** min(tries, 20), LONGEST_RETRY_S)
                ledger.db.execute(
                    "UPDATE alert SET tries = ?, next_try = ?, last_error = ?, owner = '' WHERE id = ?",
                    (tries + 1, now + wait_s, failure, alert_id),
                )
        if failure is not None:
            self.report_failure(f"{name}: the alert was not delivered, the command {failure}; it is kept")
