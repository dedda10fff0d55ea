"""How fast a check is, beside what wfdb needs to read the same record and to find its beats; and the command.

Run from the checkout: ``python -m tests.benchmarks.bench_check [HEADER]``. Without HEADER: the clean demonstration
recording (12 leads, 10 s, 500/s). Everything is timed in this one run, so that figures compare; the least of several
repeats is what the machine can do, the median what one gets.
"""

from __future__ import annotations

import os
import statistics
import subprocess
import sys
import tempfile
import time
import warnings
from collections.abc import Callable
from pathlib import Path

os.environ.setdefault("OMP_NUM_THREADS", "1")
ROOT = Path(__file__).resolve().parents[2]
GOAL_MS = {"sigguard.check, loaded": 80.0, "command, start to written report": 2000.0, "help": 400.0}


def timed(work: Callable[[], object], repeats: int) -> tuple[float, float]:
    """(least, median) wall time in ms; once before, not counted."""
    work()
    spent = []
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        spent.append(1e3 * (time.perf_counter() - start))
    return min(spent), statistics.median(spent)


def command(*arguments: str) -> None:
    env = {**os.environ, "PYTHONPATH": str(ROOT)}
    done = subprocess.run(
        [sys.executable, "-m", "sigguard.cli", *arguments],
        env=env,
        capture_output=True,
        text=True,
        check=False,
    )
    if done.returncode not in (0, 3, 4):
        raise SystemExit(done.stderr)


def measure(header: Path) -> dict[str, tuple[float, float]]:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import wfdb
        from wfdb.processing import xqrs_detect

    import sigguard

    name = str(header.with_suffix(""))
    record = wfdb.rdrecord(name)
    row = min(1, record.n_sig - 1)
    recording = sigguard.read_recording(header)
    with tempfile.TemporaryDirectory() as folder:
        return {
            "wfdb.rdrecord": timed(lambda: wfdb.rdrecord(name), 15),
            "wfdb xqrs_detect, one lead": timed(
                lambda: xqrs_detect(record.p_signal[:, row], fs=record.fs, verbose=False), 5
            ),
            "sigguard.check, loaded": timed(lambda: sigguard.check(recording), 15),
            "sigguard.check, from the file": timed(lambda: sigguard.check(header), 15),
            "command, start to written report": timed(
                lambda: command("check", str(header), "--out", folder), 5
            ),
            "help": timed(lambda: command("--help"), 5),
        }


def main() -> None:
    header = Path(sys.argv[1]) if len(sys.argv) > 1 else ROOT / "synthetic" / "demo" / "01-clean.hea"
    found = measure(header)
    base = found["wfdb xqrs_detect, one lead"][0]
    for what, (least, median) in found.items():
        goal = f"  goal {GOAL_MS[what]:.0f}" if what in GOAL_MS else ""
        sys.stdout.write(
            f"{what:34s} least {least:7.1f} ms  median {median:7.1f} ms  {least / base:5.2f} × xqrs{goal}\n"
        )


if __name__ == "__main__":
    main()
