"""The commands watch, history and overrule: options, exit codes, what goes to which stream."""

from __future__ import annotations

import csv
import io
import json
import subprocess
import sys
from pathlib import Path

import pytest

INBOX_TESTS = str(Path(__file__).resolve().parents[1] / "inbox")


@pytest.fixture
def inbox(tmp_path, monkeypatch):
    """Drops stand-in recordings whose name says the verdict: ``inbox("repeat-a")``."""
    monkeypatch.syspath_prepend(INBOX_TESTS)
    import dropped
    import quick_screening

    monkeypatch.setitem(sys.modules, "sigguard.screening", quick_screening)
    monkeypatch.delenv("QUICK_LOG", raising=False)

    def drop(*names: str) -> Path:
        folder = tmp_path / "inbox"
        folder.mkdir(exist_ok=True)
        for k, name in enumerate(names):
            if name == "unreadable":
                (folder / "odd.bin").write_bytes(bytes(range(256)))
            else:
                dropped.drop(folder, name, seed=k)
        return folder

    return drop


def options(tmp_path: Path) -> list[object]:
    return ["--out", tmp_path / "out", "--once", "--settle", 0, "--patience", 0]


@pytest.mark.parametrize(
    ("names", "code", "with_exit_zero"),
    [
        (("accept-a",), 0, 0),
        (("accept-a", "repeat-b"), 3, 0),
        (("repeat-a", "unreadable"), 1, 1),
        (("alarm-a", "unreadable", "repeat-b"), 4, 4),
        ((), 0, 0),
    ],
)
def test_exit_codes_of_one_run_are_those_of_check(sigguard, inbox, tmp_path, names, code, with_exit_zero):
    folder = inbox(*names)
    ran = sigguard("watch", folder, *options(tmp_path))
    assert ran.code == code and len(ran.out) == len(names)
    assert sigguard("watch", folder, *options(tmp_path)).code == 0, "nothing new"
    other = [*options(tmp_path), "--ledger", tmp_path / "other.sqlite", "--exit-zero"]
    assert sigguard("watch", folder, *other).code == with_exit_zero


def test_lines_go_to_stdout_and_talk_to_stderr(sigguard, inbox, tmp_path):
    ran = sigguard("watch", inbox("accept-a", "unreadable"), *options(tmp_path))
    assert [json.loads(line)["name"] for line in ran.out] == ["accept-a.hea", "odd.bin"]
    assert len(ran.err) == 1 and ran.err[0].startswith("odd.bin:")


@pytest.mark.parametrize(
    "wrong",
    [
        ["--settle", "-1"],
        ["--settle", "nan"],
        ["--every", "0"],
        ["--on-alert", "no-such-program-here"],
        ["--segment", "2"],
        ["--route", "SAME"],
    ],
)
def test_wrong_usage(sigguard, inbox, tmp_path, wrong):
    folder = inbox("accept-a")
    words = [folder if word == "SAME" else word for word in wrong]
    ran = sigguard("watch", folder, *options(tmp_path), *words)
    assert ran.code == 2 and ran.out == [] and len(ran.err) == 1


def test_an_inbox_that_is_not_there(sigguard, tmp_path):
    assert sigguard("watch", tmp_path / "none", *options(tmp_path)).code == 2


def test_history_and_overrule_go_together(sigguard, inbox, tmp_path):
    sigguard("watch", inbox("accept-a", "repeat-b", "alarm-c"), *options(tmp_path))
    ledger = tmp_path / "out" / "ledger.sqlite"
    ran = sigguard("overrule", ledger, "repeat-b", "--verdict", "accept", "--because", "good enough")
    assert ran.code == 0 and "repeat overruled: accept" in ran.out[0]
    told = json.loads(sigguard("history", ledger, "--json").out[0])
    assert (
        told["overrulings"][0]["because"] == "good enough" and told["overrulings"][0]["original"] == "repeat"
    )
    assert told["disagreements"] == [{"source": ".", "original": "repeat", "verdict": "accept", "n": 1}]
    rows = list(csv.DictReader(io.StringIO("\n".join(sigguard("history", ledger, "--csv").out))))
    assert (rows[0]["group"], rows[0]["recordings"], rows[0]["repeats"]) == ("all", "3", "2")
    shown = "\n".join(sigguard("history", ledger).out)
    assert "By electrode" in shown and "LA" in shown and "Decided by people" in shown
    first = sigguard("overrule", ledger, "alarm-c", "--verdict", "accept", "--because", "seen")
    assert "patient-first" in first.err[0]


def test_errors_of_history_and_overrule(sigguard, tmp_path):
    assert sigguard("history", tmp_path / "none.sqlite").code == 1
    assert not (tmp_path / "none.sqlite").exists()
    (tmp_path / "text").write_text("no ledger")
    ran = sigguard("history", tmp_path / "text")
    assert ran.code == 1 and len(ran.err) == 1
    assert sigguard("history", tmp_path / "text", "--csv", "--json").code == 2
    assert sigguard("overrule", tmp_path / "text", "a", "--verdict", "accept", "--because", "x").code == 1


def test_a_closed_pipe_stops_the_watch_and_loses_nothing(inbox, tmp_path):
    folder = inbox("accept-a", "accept-b")
    sys.path.insert(0, INBOX_TESTS)
    from dropped import environment

    words = [sys.executable, "-m", "sigguard.cli", "watch", folder, *options(tmp_path)]
    with subprocess.Popen(
        [*map(str, words)], env=environment(tmp_path), stdout=subprocess.PIPE, stderr=subprocess.PIPE
    ) as process:
        process.stdout.close()
        said = process.stderr.read().decode()
        assert process.wait(60) == 1
    assert "Traceback" not in said and "stdout" in said
    done = subprocess.run(
        [*map(str, words)], env=environment(tmp_path), capture_output=True, text=True, timeout=60, check=False
    )
    assert sorted(json.loads(line)["name"] for line in done.stdout.splitlines()) == [
        "accept-a.hea",
        "accept-b.hea",
    ]
