"""Watching an inbox: look, wait until a recording is whole, claim it, check it, enter it, tell it.

A process that is killed leaves at most the one recording that it had in hand; whoever looks next takes it
up again. Two processes on one inbox share the ledger and so the work.
"""

from __future__ import annotations

import contextlib
import hashlib
import secrets
import shutil
import sqlite3
import tempfile
import threading
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any
from urllib.parse import quote, unquote

from sigguard.errors import LedgerError, ReadError, WriteError
from sigguard.inbox.alerts import TIME_LIMIT_S, AlertSender
from sigguard.inbox.arrivals import Arrival, Inbox, Settling
from sigguard.inbox.entry import entry_of, error_text, line_of, place_of, unreadable_entry
from sigguard.inbox.ledger import LEASE_S, MAX_TRIES, Claim, Entry, Ledger
from sigguard.inbox.owner import is_dead, this_process
from sigguard.inbox.route import copy_to_place, make_places, remove_unfinished
from sigguard.readers.base import sha256_of

SCRATCH = ".watching"
ROUTE_RETRY_S = 30.0


@dataclass(frozen=True, slots=True, kw_only=True)
class WatchSettings:
    """How to watch; ``screening`` goes to ``screen_path`` as it is."""

    folder: Path
    out_dir: Path
    ledger: Path
    route_dir: Path | None = None
    alert_words: tuple[str, ...] = ()
    alert_limit_s: float = TIME_LIMIT_S
    settle_s: float = 3.0
    patience_s: float = 60.0
    every_s: float = 1.0
    lease_s: float = LEASE_S
    screening: Mapping[str, Any] = field(default_factory=dict)


@dataclass(slots=True)
class Tally:
    """What this run came to."""

    n_checked: int = 0
    n_unreadable: int = 0
    n_repeat: int = 0
    n_patient_first: int = 0
    left: dict[str, str] = field(default_factory=dict)  # not checked yet, and what it waits for

    def add(self, entry: Entry) -> None:
        self.n_checked += entry.error is None
        self.n_unreadable += entry.error is not None
        self.n_repeat += entry.verdict == "repeat"
        self.n_patient_first += bool(entry.patient_first)


class StopRequest:
    """Set by a signal handler, which must not touch a lock that the interrupted code may hold: a plain flag."""

    def __init__(self) -> None:
        self._wanted = False

    def set(self) -> None:
        self._wanted = True

    def is_set(self) -> bool:
        return self._wanted

    def wait(self, seconds: float) -> None:
        """Sleep so long, or until it is set."""
        until = time.monotonic() + seconds
        while not self._wanted and (left := until - time.monotonic()) > 0:
            time.sleep(min(left, 0.1))


class Watcher:
    """One process's watch over an inbox; ``tell`` gets each JSON line, ``complain`` what somebody should know."""

    def __init__(
        self, settings: WatchSettings, *, tell: Callable[[str], None], complain: Callable[[str], None]
    ) -> None:
        self.settings, self.tell, self.complain = settings, tell, complain
        self.owner = this_process(secrets.token_hex(4))
        places = [settings.out_dir, settings.ledger, settings.route_dir]
        companions = [settings.ledger.with_name(settings.ledger.name + end) for end in ("-wal", "-shm")]
        self.inbox = Inbox(settings.folder, tuple(p for p in (*places, *companions) if p is not None))
        self.settling = Settling(settings.settle_s, settings.patience_s)
        self.tally = Tally()
        self._done: dict[str, set[str]] = {}
        self._sums: dict[
            str, tuple[str, str]
        ] = {}  # signature and checksum of what another process has in hand
        self._failing: dict[str, tuple[str, float]] = {}
        self._route_next = 0.0
        self._alerts: AlertSender | None = None

    def run(self, stop: StopRequest, *, once: bool = False) -> Tally:
        """Watch until ``stop`` is set, or ``once`` over all that has arrived whole.

        Finishes the recording in hand. Raises LedgerError where the ledger cannot be used, OSError where
        the inbox cannot be read at the start.
        """
        try:
            return self._run(stop, once)
        except sqlite3.Error as err:
            raise LedgerError(f"{self.settings.ledger}: the ledger cannot be used ({err})") from err

    def _run(self, stop: StopRequest, once: bool) -> Tally:
        settings = self.settings
        if settings.route_dir is not None:
            make_places(settings.route_dir)
        with (
            Ledger(settings.ledger) as ledger,
            _scratch(settings.out_dir, self.owner),
            _kept_lease(settings, self.owner),
            self._sending(),
        ):
            self._done = ledger.done_signatures()
            for row in ledger.untold(self.owner):
                self._say(ledger, row["id"], row["line"])
            self._rounds(ledger, stop, once)
        return self.tally

    def _rounds(self, ledger: Ledger, stop: StopRequest, once: bool) -> None:
        arrivals = self.inbox.look()
        self.settling.split(arrivals)
        if once:  # what has not changed for this long is taken for whole; the rest is for the next run
            stop.wait(self.settings.settle_s)
        while not stop.is_set():
            begun = time.monotonic()
            try:
                arrivals = self.inbox.look()
                look_s = time.monotonic() - begun
            except OSError as err:  # a share that is away for a while
                self.complain(f"{self.settings.folder}: cannot be read now ({err.strerror or err})")
                stop.wait(10 * self.settings.every_s)
                continue
            self._round(ledger, arrivals, stop)
            if once:
                return
            stop.wait(max(self.settings.every_s, 3 * look_s))  # a large inbox is not looked at all the time

    def _round(self, ledger: Ledger, arrivals: list[Arrival], stop: StopRequest) -> None:
        """Everything that is ready, once; for the others note what they wait for."""
        for name in ledger.note_gone((a.name for a in arrivals), self.owner):
            self.complain(f"{name}: taken from the inbox before it was checked")
        ready, waiting = self.settling.split(
            a for a in arrivals if a.signature not in self._done.get(a.name, ())
        )
        for arrival in ready:
            if stop.is_set():
                waiting[arrival.name] = "stopped before its turn"
            else:
                trouble = self._one(ledger, arrival)
                if trouble is not None:
                    waiting[arrival.name] = trouble
        self.tally.left = waiting
        if self.settings.route_dir is not None and time.monotonic() >= self._route_next:
            self._route_again(ledger, arrivals)
            self._route_next = time.monotonic() + ROUTE_RETRY_S

    # ── one recording ──

    def _one(self, ledger: Ledger, arrival: Arrival) -> str | None:
        """Claim, check and enter one arrival; why it could not be done now, None if there is no more to do."""
        failure = None
        try:
            known, sha256 = self._sums.pop(arrival.name, ("", ""))
            if known != arrival.signature:
                sha256 = _content_of(arrival)
        except OSError as err:  # it went away, or nobody may read it
            failure = f"cannot be read ({err.strerror or err})"
            if not self._given_up(arrival):
                return failure
            sha256 = hashlib.sha256(f"unread {arrival.signature}".encode()).hexdigest()
        claim = ledger.claim(
            arrival.name,
            sha256,
            owner=self.owner,
            signature=arrival.signature,
            n_bytes=arrival.n_bytes,
            out_dir=self.settings.out_dir,
            lease_s=self.settings.lease_s,
        )
        if claim == "done":
            self._done.setdefault(arrival.name, set()).add(arrival.signature)
        if claim == "held":
            self._sums[arrival.name] = arrival.signature, sha256
        if isinstance(claim, str):
            return "in the hands of another process" if claim == "held" else None
        readable = failure is None and arrival.refused is None
        try:
            reason = failure or arrival.refused
            entry = unreadable_entry(reason) if reason else self._check(arrival, claim)
        except (WriteError, OSError) as err:  # the fault of the disk, not of the recording
            self._give_back(ledger, claim)
            self.complain(f"{arrival.name}: {err}; it will be tried again")
            return str(err)
        if readable and _changed(arrival, sha256):
            self._give_back(ledger, claim)
            return "changed while it was being checked"
        if self.settings.route_dir is not None:
            entry = self._routed(arrival, sha256 if readable else None, claim.report, entry)
        self._enter(ledger, arrival, sha256, claim, entry)
        return None

    def _give_back(self, ledger: Ledger, claim: Claim) -> None:
        """Undo a check that came to nothing; its folder was made for it and holds nobody else's report."""
        shutil.rmtree(self.settings.out_dir / claim.report, ignore_errors=True)
        ledger.release(claim, self.owner)

    def _given_up(self, arrival: Arrival) -> bool:
        """Whether files that are there have refused to be read for as long as patience lasts."""
        signature, first = self._failing.get(arrival.name, ("", 0.0))
        if signature != arrival.signature:
            first = time.monotonic()
            self._failing[arrival.name] = arrival.signature, first
        patient_s = max(time.monotonic() - first, time.time() - arrival.changed_at)
        return patient_s >= self.settings.patience_s and all(part.exists() for part in arrival.parts)

    def _check(self, arrival: Arrival, claim: Claim) -> Entry:
        """Screen one recording; whatever goes wrong with it becomes the reason in the ledger."""
        if claim.tries > MAX_TRIES:
            return unreadable_entry(f"its check was cut off {MAX_TRIES} times; check it by hand")
        remove_unfinished(self.settings.out_dir / claim.report)
        try:
            from sigguard.screening import screen_path

            report = screen_path(
                arrival.path, out_dir=self.settings.out_dir, name=claim.report, **self.settings.screening
            )
            return entry_of(report)
        except (WriteError, OSError):
            raise
        except Exception as err:  # a mistake of ours on one recording must not end the watch over the others
            return unreadable_entry(error_text(err))

    def _enter(self, ledger: Ledger, arrival: Arrival, sha256: str, claim: Claim, entry: Entry) -> None:
        checked_at = time.time()
        folder = None if entry.error is not None else str(self.settings.out_dir / claim.report)
        line = line_of(arrival.name, sha256, entry, report_folder=folder, checked_at=checked_at)
        if not ledger.finish(claim, self.owner, entry, line=line, checked_at=checked_at):
            self.complain(f"{arrival.name}: its claim ran out and another process took it over")
            return
        self._done.setdefault(arrival.name, set()).add(arrival.signature)
        self.tally.add(entry)
        self._say(ledger, claim.id, line)
        if entry.error is not None:
            self.complain(f"{arrival.name}: {entry.error}")
        if entry.alert is not None and self._alerts is not None:
            self._alerts.wake()

    def _say(self, ledger: Ledger, recording_id: int, line: str) -> None:
        self.tell(line)
        ledger.note_told(recording_id)

    # ── copies ──

    def _routed(self, arrival: Arrival, sha256: str | None, report: str, entry: Entry) -> Entry:
        assert self.settings.route_dir is not None
        target = self.settings.route_dir / place_of(entry) / report
        try:
            copy_to_place(
                arrival.parts,
                target,
                sha256=sha256,
                reason=entry.error,
            )
        except (WriteError, OSError) as err:
            self.complain(f"{arrival.name}: not copied ({err}); it will be tried again")
            return replace(entry, route_error=str(err))
        return replace(entry, routed_to=str(target))

    def _route_again(self, ledger: Ledger, arrivals: list[Arrival]) -> None:
        """Copies that failed, while the same content is still in the inbox."""
        by_name = {arrival.name: arrival for arrival in arrivals}
        for row in ledger.not_routed():
            arrival = by_name.get(row["name"])
            if arrival is None or _changed(arrival, row["sha256"]):
                continue
            known = Entry(
                verdict=row["verdict"],
                patient_first=tuple((row["patient_first"] or "").split()),
                error=row["error"],
            )
            again = self._routed(arrival, row["sha256"], row["report"], known)
            ledger.note_routed(row["id"], again.routed_to, again.route_error)

    @contextmanager
    def _sending(self) -> Iterator[None]:
        """A thread that hands over alerts while the block runs; at its end those due are handed over once more."""
        if not self.settings.alert_words:
            yield
            return
        self._alerts = AlertSender(
            self.settings.ledger,
            self.settings.alert_words,
            self.owner,
            self.complain,
            time_limit_s=self.settings.alert_limit_s,
        )
        self._alerts.start()
        try:
            yield
        finally:
            self._alerts.close()
            self._alerts = None


def _content_of(arrival: Arrival) -> str:
    """The checksum over all parts; of a link that must not be followed, that of its reason."""
    if arrival.refused is not None:
        return hashlib.sha256(arrival.refused.encode("utf-8", "surrogateescape")).hexdigest()
    return sha256_of(arrival.parts)


def _changed(arrival: Arrival, sha256: str) -> bool:
    try:
        return _content_of(arrival) != sha256
    except (OSError, ReadError):
        return True


@contextmanager
def _kept_lease(settings: WatchSettings, owner: str) -> Iterator[None]:
    """A thread that renews this process's claims, however long one check takes."""
    done = threading.Event()

    def renew() -> None:
        with Ledger(settings.ledger) as ledger:
            while not done.wait(settings.lease_s / 4):
                with contextlib.suppress(sqlite3.Error):  # the next turn comes before the lease ends
                    ledger.renew(owner, lease_s=settings.lease_s)

    thread = threading.Thread(target=renew, name="lease", daemon=True)
    thread.start()
    try:
        yield
    finally:
        done.set()
        thread.join()


@contextmanager
def _scratch(out_dir: Path, owner: str) -> Iterator[None]:
    """Temporary files of readers go to a folder of this process, so that the next one can clear up after a kill."""
    place = out_dir / SCRATCH
    place.mkdir(parents=True, exist_ok=True)
    for left in place.iterdir():
        if is_dead(unquote(left.name)):
            shutil.rmtree(left, ignore_errors=True)
    own = place / quote(owner, safe="")
    own.mkdir(parents=True)
    before, tempfile.tempdir = tempfile.tempdir, str(own)
    try:
        yield
    finally:
        tempfile.tempdir = before
        shutil.rmtree(own, ignore_errors=True)
        with contextlib.suppress(OSError):  # another watcher is at work
            place.rmdir()
