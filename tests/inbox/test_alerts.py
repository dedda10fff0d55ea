"""Alerts reach the command, come again when it fails, and nothing of a recording becomes a command."""

from __future__ import annotations

import json
import os
import shlex
import subprocess
import sys
import time

import pytest
from dropped import drop

from sigguard.errors import UsageError
from sigguard.inbox.alerts import AlertSender, run_command, split_command
from sigguard.inbox.ledger import Ledger

COLLECT = (sys.executable, "-c", "import sys; open('got', 'a').write(sys.stdin.read())")
FAIL = (sys.executable, "-c", "import sys; print('no line\\x1b[31m', file=sys.stderr); sys.exit(7)")


@pytest.fixture(autouse=True)
def here(station, monkeypatch):
    monkeypatch.chdir(station.root)


def got(station) -> list[dict]:
    path = station.root / "got"
    return (
        [json.loads(line) for line in path.read_text(encoding="utf-8").splitlines()] if path.exists() else []
    )


def test_only_what_somebody_must_act_upon_is_told_with_the_line_itself(station):
    for k, name in enumerate(("accept-a", "repeat-b", "alarm-c")):
        drop(station.inbox, name, seed=k)
    (station.inbox / "odd.bin").write_bytes(bytes(range(256)))
    lines, _ = station.once(alert_words=COLLECT)
    told = {line["name"]: line for line in got(station)}
    assert {name: line["alert"] for name, line in told.items()} == {
        "repeat-b.hea": "repeat",
        "alarm-c.hea": "patient-first",
        "odd.bin": "unreadable",
    }
    assert all(told[line["name"]] == line for line in lines if line["alert"])
    station.once(alert_words=COLLECT)
    assert len(got(station)) == 3
    assert station.rows("SELECT count(*) FROM alert WHERE delivered_at IS NULL") == [(0,)]


def test_a_failure_is_said_kept_and_tried_again_later(station):
    drop(station.inbox, "repeat-a")
    station.once(alert_words=FAIL)
    (said,) = station.said
    assert "ended with 7: no line?[31m" in said and "kept" in said
    assert station.rows("SELECT tries, last_error FROM alert WHERE delivered_at IS NULL") == [
        (1, "ended with 7: no line?[31m")
    ]
    station.once(alert_words=COLLECT)
    assert got(station) == []  # not at once again
    with Ledger(station.ledger) as ledger:
        assert ledger.db.execute("SELECT next_try - ? FROM alert", (time.time(),)).fetchone()[0] <= 5.0
        ledger.db.execute("UPDATE alert SET next_try = 0")
    station.once(alert_words=COLLECT)
    assert [line["name"] for line in got(station)] == ["repeat-a.hea"]
    assert station.rows("SELECT tries, last_error, delivered_at IS NOT NULL FROM alert") == [(2, None, 1)]


def test_waits_between_tries_grow(station):
    drop(station.inbox, "repeat-a")
    station.once()
    sender = AlertSender(station.ledger, FAIL, "me", lambda text: None)
    waits = []
    with Ledger(station.ledger) as ledger:
        for _ in range(4):
            ledger.db.execute("UPDATE alert SET next_try = 0")
            sender.deliver_due(ledger)
            waits.append(ledger.db.execute("SELECT next_try FROM alert").fetchone()[0] - time.time())
    assert waits == pytest.approx([5, 10, 20, 40], abs=0.5)


def test_a_command_that_hangs_is_ended_with_all_that_it_started(station):
    words = ("sh", "-c", "sleep 300 & echo $! > child; sleep 300")
    begun = time.monotonic()
    assert "did not end within 0.5 s" in str(run_command(words, "{}", time_limit_s=0.5))
    assert time.monotonic() - begun < 10
    child = int((station.root / "child").read_text())
    time.sleep(0.2)
    state = subprocess.run(
        ["ps", "-o", "stat=", "-p", str(child)], capture_output=True, text=True, check=False
    )
    assert state.stdout.strip()[:1] in ("", "Z")


def test_a_command_that_reads_nothing_is_no_failure(station):
    assert run_command(("true",), "x" * 1_000_000, time_limit_s=20) is None


def test_hostile_text_runs_nothing_but_the_command(station):
    hostile = "$(touch pwned) `touch pwned`; touch pwned | touch pwned && touch pwned\x1b[2J ' \" \\"
    path = drop(station.inbox, "repeat-a", device=hostile)
    text = path.read_text().replace(" I\n", f" I {hostile}\n")
    path.write_text(text)
    name = "repeat-$(touch pwned);`touch pwned`&& touch pwned"
    drop(station.inbox, name, seed=2)
    command = shlex.join(COLLECT)
    station.once(alert_words=split_command(command))
    assert len(got(station)) == 2 and not (station.root / "pwned").exists()
    assert sorted(line["name"] for line in got(station)) == sorted(["repeat-a.hea", f"{name}.hea"])
    assert {p.name for p in station.root.iterdir()} == {"inbox", "out", "routed", "got", "quick.log"}
    assert station.rows("SELECT device FROM recording WHERE name = 'repeat-a.hea'")[0][0].startswith(
        "$(touch pwned)"
    )


def test_the_command_is_words_and_no_shell():
    assert split_command("echo 'a b' $(id) ; rm") == ("echo", "a b", "$(id)", ";", "rm")
    for wrong in ("", "   ", "echo 'open", "no-such-program-here -x"):
        with pytest.raises(UsageError, match="--on-alert"):
            split_command(wrong)


def test_two_senders_do_not_deliver_twice(station):
    for k in range(6):
        drop(station.inbox, f"repeat-{k}", seed=k)
    station.once()
    senders = [
        AlertSender(station.ledger, COLLECT, f"host|{os.getpid()}||{k}", lambda text: None) for k in (1, 2)
    ]
    for sender in senders:
        sender.start()
    for sender in senders:
        sender.close()
    assert sorted(line["name"] for line in got(station)) == [f"repeat-{k}.hea" for k in range(6)]
