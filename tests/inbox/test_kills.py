"""The watcher killed while recordings arrive; two watchers on one inbox. The long version: tests.benchmarks.kills."""

from __future__ import annotations

import os
import signal
import sqlite3

import pytest
from dropped import drop, environment, start, wait_for
from torture import assert_nothing_lost, torture

pytestmark = pytest.mark.skipif(os.name == "nt", reason="signals of POSIX")


def test_kills_lose_nothing_and_repeat_at_most_the_one_in_hand(tmp_path):
    found = torture(tmp_path, n=60, kills=4, seed=3, pause_s=0.03, sleep_s=0.1, between_s=(0.5, 1.5))
    assert_nothing_lost(found, n=60, kills=4)
    assert sum(found.begun.values()) >= 60


def test_two_watchers_share_the_work(tmp_path):
    for k in range(40):
        drop(tmp_path / "inbox", f"accept-{k:02d}", seed=k)
    env = environment(tmp_path, sleep_s=0.05)
    args = ("--settle", 0.2, "--every", 0.1, "--no-page", "--once")
    both = [start(tmp_path, *args, env=env, out=out) for out in ("one", "two")]
    assert [process.wait(90) for process in both] == [0, 0]
    log = (tmp_path / "quick.log").read_text().splitlines()
    begun = [line for line in log if line.startswith("begin")]
    assert len(begun) == len(set(begun)) == 40
    lines = [len((tmp_path / out).read_text().splitlines()) for out in ("one", "two")]
    assert sum(lines) == 40 and min(lines) > 0
    said = (tmp_path / "one.err").read_text() + (tmp_path / "two.err").read_text()
    assert "lock" not in said and "Traceback" not in said
    with sqlite3.connect(tmp_path / "out" / "ledger.sqlite") as db:
        assert db.execute(
            "SELECT count(*), count(DISTINCT name) FROM recording WHERE state = 'checked'"
        ).fetchone() == (40, 40)


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_polite_stop_finishes_the_one_in_hand(tmp_path, number):
    for k in range(5):
        drop(tmp_path / "inbox", f"accept-{k}", seed=k)
    process = start(tmp_path, "--settle", 0.1, "--every", 0.1, env=environment(tmp_path, sleep_s=1.0))
    log = tmp_path / "quick.log"
    assert wait_for(lambda: log.exists() and "begin" in log.read_text())
    process.send_signal(number)
    assert process.wait(30) == 0
    words = [line.split()[0] for line in log.read_text().splitlines()]
    assert words == ["begin", "end"]
    with sqlite3.connect(tmp_path / "out" / "ledger.sqlite") as db:
        assert db.execute("SELECT name, state, told FROM recording").fetchall() == [
            ("accept-0.hea", "checked", 1)
        ]
    assert not list((tmp_path / "out").glob(".*"))
