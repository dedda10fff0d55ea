"""Claims and leases, and ledgers that are none."""

from __future__ import annotations

import os
import sqlite3
import subprocess
import sys
import threading
from pathlib import Path

import pytest
from dropped import ROOT

from sigguard.errors import LedgerError
from sigguard.inbox.ledger import Claim, Entry, Ledger
from sigguard.inbox.owner import is_dead, this_process

FACTS = {"signature": "s", "n_bytes": 1}


@pytest.fixture
def ledger(tmp_path):
    with Ledger(tmp_path / "ledger.sqlite") as opened:
        yield opened


def claim(ledger, name="a.hea", sha="0" * 64, owner="x", **more):
    return ledger.claim(name, sha, owner=owner, out_dir=Path("none"), **FACTS, **more)


def test_a_claim_is_exclusive_until_its_lease_ends(ledger):
    mine = claim(ledger, owner="x")
    assert isinstance(mine, Claim)
    assert claim(ledger, owner="y") == "held"
    ledger.renew("x", lease_s=-1.0)
    taken = claim(ledger, owner="y")
    assert isinstance(taken, Claim) and taken.tries == 2 and taken.report == mine.report
    assert not ledger.finish(mine, "x", Entry(verdict="accept"), line="{}", checked_at=1.0)
    assert ledger.finish(taken, "y", Entry(verdict="accept"), line="{}", checked_at=1.0)
    assert claim(ledger, owner="x") == "done"


def test_the_claim_of_a_dead_process_is_free_at_once(ledger):
    code = "from sigguard.inbox.owner import *; print(this_process('x'))"
    env = {**os.environ, "PYTHONPATH": str(ROOT)}
    dead = subprocess.run([sys.executable, "-c", code], env=env, capture_output=True, text=True, check=True)
    assert is_dead(dead.stdout.strip()) and not is_dead(this_process("x")) and not is_dead("elsewhere|1||x")
    claim(ledger, owner=dead.stdout.strip())
    assert isinstance(claim(ledger, owner="y"), Claim)


def test_an_entry_and_its_alert_come_together_or_not_at_all(ledger):
    mine = claim(ledger)
    twice = (("II", 0.1), ("II", 0.2))  # breaks the table's key
    with pytest.raises(sqlite3.IntegrityError):
        ledger.finish(
            mine, "x", Entry(verdict="repeat", leads=twice, alert="repeat"), line="{}", checked_at=1.0
        )
    assert ledger.db.execute("SELECT state FROM recording").fetchone()[0] == "claimed"
    assert ledger.db.execute("SELECT count(*) FROM alert").fetchone()[0] == 0
    assert ledger.finish(mine, "x", Entry(verdict="repeat", alert="repeat"), line="{}", checked_at=1.0)
    assert ledger.db.execute("SELECT count(*) FROM alert").fetchone()[0] == 1


def test_foreign_keys_and_wal_are_on(ledger):
    assert ledger.db.execute("PRAGMA foreign_keys").fetchone()[0] == 1
    assert ledger.db.execute("PRAGMA journal_mode").fetchone()[0] == "wal"
    with pytest.raises(sqlite3.IntegrityError):
        ledger.db.execute("INSERT INTO lead VALUES (77, 'II', 0.0)")


def test_report_folders_never_meet_not_even_on_disks_that_ignore_case(ledger, tmp_path):
    (tmp_path / "b").mkdir()
    names = ["a.hea", "x/A.hea", "y/a.csv", "b.hea", "index.html.hea"]
    found = [ledger.claim(name, "0" * 64, owner="x", out_dir=tmp_path, **FACTS).report for name in names]
    assert found == ["a", "A-2", "a-3", "b-2", "index.html-2"]


def test_many_threads_opening_and_claiming_meet_no_lock(tmp_path):
    taken, trouble = [], []

    def work(k: int) -> None:
        try:
            with Ledger(tmp_path / "ledger.sqlite") as ledger:
                for n in range(10):
                    if isinstance(claim(ledger, name=f"{n}.hea", owner=f"w{k}"), Claim):
                        taken.append(n)
        except Exception as err:
            trouble.append(err)

    threads = [threading.Thread(target=work, args=(k,)) for k in range(6)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert trouble == [] and sorted(taken) == list(range(10))


def test_files_that_are_no_ledger_are_refused_and_left_as_they_are(tmp_path):
    text = tmp_path / "text"
    text.write_text("no database at all, but long enough to look at" * 50)
    other = tmp_path / "other.sqlite"
    with sqlite3.connect(other) as db:
        db.execute("CREATE TABLE recording (x)")
    db.close()
    newer = tmp_path / "newer.sqlite"
    Ledger(newer).close()
    with sqlite3.connect(newer) as db:
        db.execute("PRAGMA user_version = 99")
    db.close()
    for path, word in ((text, "not a database"), (other, "no ledger"), (newer, "newer")):
        with pytest.raises(LedgerError, match=word):
            Ledger(path)
    assert text.read_text().startswith("no database")
    with pytest.raises(LedgerError, match="no such file"):
        Ledger(tmp_path / "absent", must_exist=True)
    assert not (tmp_path / "absent").exists()
