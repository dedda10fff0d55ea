"""Recordings dropped in pieces while the watcher is killed again and again; what must be true afterwards."""

from __future__ import annotations

import json
import random
import sqlite3
import time
from collections import Counter
from dataclasses import dataclass
from pathlib import Path
from subprocess import Popen

from dropped import environment, pieces, start, wait_for


@dataclass(frozen=True)
class Outcome:
    entries: Counter
    reports_whole: int
    integrity: str
    foreign: int
    strays: list[str]
    begun: Counter
    lines: set[str]
    claimed: int
    in_hand: int  # recordings that a kill met in hand, by the ledger
    errors: str
    took_s: float


def torture(
    folder: Path,
    *,
    n: int,
    kills: int,
    seed: int,
    pause_s: float,
    sleep_s: float,
    between_s: tuple,
    stand_in: bool = True,
) -> Outcome:
    """Drop ``n`` recordings in pieces; kill with SIGKILL ``kills`` times; then let one watcher finish."""
    begun = time.monotonic()
    rng = random.Random(seed)
    inbox = folder / "inbox"
    inbox.mkdir()
    ledger = folder / "out" / "ledger.sqlite"
    names = [f"{rng.choice(('accept', 'repeat', 'alarm'))}-{k:04d}" for k in range(n)]
    env = environment(folder, sleep_s=sleep_s, stand_in=stand_in)
    args = ("--settle", 0.5, "--every", 0.1, "--patience", 600, "--route", "routed", "--no-page")
    process = start(folder, *args, env=env)
    next_kill = time.monotonic() + rng.uniform(*between_s)
    done = 0

    def again(process: Popen) -> Popen:
        """Kill: every other time wherever it is, else while it has a recording in hand; then start anew."""
        nonlocal done
        if done % 2 == 0:
            wait_for(lambda: _in_hand(ledger, process.pid), at_most_s=15)
            # the first one surely in the middle of a check, the others anywhere up to past its end
            time.sleep(rng.uniform(0.0, sleep_s / 2 if done == 0 else sleep_s + 0.05))
        process.kill()
        process.wait()
        done += 1
        return start(folder, *args, env=env)

    for file, data in pieces(names, seed=seed):
        with (inbox / file).open("ab") as out:
            out.write(data)
        time.sleep(pause_s)
        if done < kills and time.monotonic() > next_kill:
            process = again(process)
            next_kill = time.monotonic() + rng.uniform(*between_s)
    while done < kills:
        time.sleep(rng.uniform(*between_s))
        process = again(process)

    def n_checked() -> int:
        with sqlite3.connect(ledger, timeout=30) as db:
            return db.execute(
                "SELECT count(*) FROM recording WHERE state = 'checked' AND told = 1"
            ).fetchone()[0]

    wait_for(lambda: n_checked() >= n, at_most_s=120 + 0.2 * n)
    process.terminate()
    assert process.wait(60) == 0
    return _look(folder, ledger, names, begun)


def _in_hand(ledger: Path, pid: int) -> bool:
    """Whether this process has a recording in hand just now."""
    if not ledger.exists():
        return False
    db = sqlite3.connect(ledger, timeout=30)
    try:
        rows = db.execute("SELECT owner FROM recording WHERE state = 'claimed'").fetchall()
        return any(owner.split("|")[1] == str(pid) for (owner,) in rows)
    except sqlite3.OperationalError:  # its tables are not there yet
        return False
    finally:
        db.close()


def _look(folder: Path, ledger: Path, names: list[str], begun: float) -> Outcome:
    with sqlite3.connect(ledger) as db:
        entries = Counter(row[0] for row in db.execute("SELECT name FROM recording WHERE state = 'checked'"))
        integrity = db.execute("PRAGMA integrity_check").fetchone()[0]
        foreign = len(db.execute("PRAGMA foreign_key_check").fetchall())
        claimed = db.execute("SELECT count(*) FROM recording WHERE state <> 'checked'").fetchone()[0]
        in_hand = db.execute("SELECT coalesce(sum(tries - 1), 0) FROM recording").fetchone()[0]
        folders = [row[0] for row in db.execute("SELECT report FROM recording")]
        routed = {row[0]: row[1] for row in db.execute("SELECT name, routed_to FROM recording")}
    whole = 0
    for name, report in zip(names, sorted(folders, key=lambda f: f[-4:]), strict=False):
        found = json.loads((folder / "out" / report / "report.json").read_text(encoding="utf-8"))
        copied = folder / routed[f"{name}.hea"]
        same = all(
            (copied / f"{name}{e}").read_bytes() == (folder / "inbox" / f"{name}{e}").read_bytes()
            for e in (".hea", ".dat")
        )
        whole += found["recording"]["name"] == name == report and same
    hidden = [str(p.relative_to(folder)) for place in ("out", "routed", "tmp") for p in (folder / place).rglob("*")
              if p.name.startswith(".") or p.suffix == ".part" or place == "tmp"]  # fmt: skip
    quick_log = folder / "quick.log"
    log = quick_log.read_text().splitlines() if quick_log.exists() else []
    lines = {
        json.loads(line)["name"] for line in (folder / "lines").read_text().splitlines() if line.endswith("}")
    }
    return Outcome(
        entries=entries,
        reports_whole=whole,
        integrity=integrity,
        foreign=foreign,
        strays=hidden,
        begun=Counter(line.split()[1] for line in log if line.startswith("begin")),
        lines=lines,
        claimed=claimed,
        in_hand=in_hand,
        errors=(folder / "lines.err").read_text(),
        took_s=time.monotonic() - begun,
    )


def assert_nothing_lost(found: Outcome, *, n: int, kills: int) -> None:
    assert len(found.entries) == n and set(found.entries.values()) == {1}
    assert found.claimed == 0
    assert found.reports_whole == n
    assert found.integrity == "ok" and found.foreign == 0
    assert found.strays == []
    assert found.lines == set(found.entries)
    assert max(1, kills // 5) <= found.in_hand <= kills, (
        "or the kills met nothing, and the test shows nothing"
    )
    assert sum(found.begun.values()) - n <= found.in_hand, "a kill repeats at most the one in hand"
    assert found.errors == ""
