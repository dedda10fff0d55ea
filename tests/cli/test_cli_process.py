"""The command line as its own process: start-up, several jobs, Ctrl-C, odd terminals."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

HERE = Path(__file__).parent
COMMAND = [sys.executable, "-m", "sigguard.cli"]
HEAVY = ("numpy", "scipy", "wfdb", "jinja2", "sklearn", "joblib", "pandas", "pydicom")


@pytest.fixture
def environment(tmp_path):
    """Every Python started with it, workers too, finds the stand-in for screening."""
    site = tmp_path / "site"
    site.mkdir()
    (site / "sitecustomize.py").write_text(
        "import sys, fake_screening\nsys.modules['sigguard.screening'] = fake_screening\n"
    )
    paths = [site, HERE, HERE.parent, HERE.parents[1]]
    return {**os.environ, "PYTHONPATH": os.pathsep.join(map(str, paths)), "OMP_NUM_THREADS": ""}


def run(*args, env, **options):
    done = subprocess.run(
        [*COMMAND, *map(str, args)], env=env, capture_output=True, timeout=60, check=False, **options
    )
    return done.returncode, done.stdout.decode().splitlines(), done.stderr.decode().splitlines()


def test_help_imports_nothing_heavy():
    code = (
        "import sys; sys.argv = ['sigguard', '--help']\n"
        "from sigguard.cli import main\n"
        "try: main()\n"
        "except SystemExit: pass\n"
        f"print([m for m in {HEAVY!r} if m in sys.modules])"
    )
    env = {**os.environ, "PYTHONPATH": str(HERE.parents[1])}
    done = subprocess.run(
        [sys.executable, "-c", code], env=env, capture_output=True, text=True, timeout=60, check=True
    )
    assert done.stdout.splitlines()[-1] == "[]"
    for command in ("check", "trim", "compare", "watch", "history", "overrule", "demo", "train"):
        assert command in done.stdout


def test_help_is_there_at_once():
    env = {**os.environ, "PYTHONPATH": str(HERE.parents[1])}
    took = []
    for _ in range(4):
        begin = os.times()
        subprocess.run([*COMMAND, "--help"], env=env, capture_output=True, timeout=60, check=True)
        end = os.times()  # of the children: time of the processor, whatever else the machine does
        took.append(end.children_user + end.children_system - begin.children_user - begin.children_system)
    assert min(took) < 0.4


@pytest.mark.parametrize(
    "command", ["check", "trim", "compare", "watch", "history", "overrule", "demo", "train"]
)
def test_help_of_each_command(environment, command):
    code, out, err = run(command, "--help", env=environment)
    assert code == 0 and err == [] and out[0].startswith(f"Usage: sigguard {command}")


def test_version(environment):
    code, out, _ = run("--version", env=environment)
    assert code == 0 and len(out) == 1 and out[0].startswith("sigguard ")


def test_jobs_give_the_same_in_the_same_order_with_one_thread_each(environment, recordings, tmp_path):
    paths = recordings(a="slow 0.5", b="accept", c="unreadable", d="repeat", e="accept")
    code, lines, _ = run("check", *paths, "--out", tmp_path / "one", env=environment)
    jobs_code, reports, _ = run(
        "check", *paths, "--out", tmp_path / "two", "--jobs", 2, "--json", env=environment
    )
    assert jobs_code == code == 1
    found = [json.loads(report) for report in reports]
    assert (
        [r["recording"]["name"] for r in found]
        == [line.split(":")[0] for line in lines]
        == ["a", "b", "d", "e"]
    )
    assert [r["reasons"] for r in found] == [["threads 1"]] * 4
    assert (tmp_path / "one" / "index.csv").read_text() == (tmp_path / "two" / "index.csv").read_text()


def test_a_killed_worker_costs_its_own_recording_only(environment, recordings, tmp_path):
    paths = recordings(a="accept", b="killed", c="accept", d="accept", e="accept")
    code, out, err = run("check", *paths, "--out", tmp_path / "out", "--jobs", 2, env=environment)
    assert code == 1
    assert [line.split(":")[0] for line in out] == ["a", "c", "d", "e"]
    (error,) = [line for line in err if "want of memory" in line]
    assert error.startswith(str(paths[1]))
    assert "Traceback" not in " ".join(err)


@pytest.mark.skipif(os.name == "nt", reason="signals of POSIX")
@pytest.mark.parametrize("jobs", [1, 2])
def test_ctrl_c_leaves_whole_files_only(environment, recordings, tmp_path, jobs):
    names = {f"r{k}": "slow 1" if k else "accept" for k in range(8)}
    paths, out = recordings(**names), tmp_path / "out"
    args = ["check", *map(str, paths), "--out", str(out), "--jobs", str(jobs)]
    # A session of its own, so that the signal reaches all its processes as Ctrl-C does, and only these.
    process = subprocess.Popen(
        [*COMMAND, *args],
        env=environment,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        start_new_session=True,
        # Whoever runs the tests in the background has Ctrl-C ignored, and a child would inherit that.
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),  # noqa: PLW1509
    )
    give_up = time.monotonic() + 40
    while not (tmp_path / "r1.begun").exists() and time.monotonic() < give_up:
        time.sleep(0.02)
    os.killpg(process.pid, signal.SIGINT)
    stdout, stderr = process.communicate(timeout=40)
    assert process.returncode == 130
    assert "Traceback" not in stderr.decode()
    done = len(stdout.decode().splitlines())
    assert f"Stopped: {done} of 8 done" in stderr.decode()
    assert 1 <= done < 8
    assert not list(out.rglob("*.part"))
    for report in out.glob("*/report.json"):
        json.loads(report.read_text())


def test_a_name_the_terminal_cannot_show_stops_nothing(environment, tmp_path):
    path = tmp_path / "Übung.txt"
    path.write_text("accept")
    environment |= {"PYTHONIOENCODING": "ascii", "PYTHONUTF8": "0"}
    code, out, _ = run("check", path, "--out", tmp_path / "out", env=environment)
    assert code == 0 and out[0].startswith("\\xdcbung:")


@pytest.mark.skipif(sys.platform == "win32", reason="needs a pseudo-terminal")
def test_the_bar_goes_to_the_terminal_and_the_lines_to_the_pipe(environment, recordings, tmp_path):
    master, terminal = os.openpty()
    args = ["check", *map(str, recordings(a="accept", b="repeat")), "--out", str(tmp_path / "out")]
    done = subprocess.run(
        [*COMMAND, *args],
        env=environment | {"TERM": "xterm"},
        stdout=subprocess.PIPE,
        stderr=terminal,
        timeout=60,
    )
    os.close(terminal)
    shown = os.read(master, 100_000).decode()
    os.close(master)
    assert done.returncode == 3
    assert [line.split(":")[0] for line in done.stdout.decode().splitlines()] == ["a", "b"]
    assert "\x1b" not in done.stdout.decode()
    assert "/2" in shown and "accept" not in shown
