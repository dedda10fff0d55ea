"""Hours of signal: time and memory of a whole check with its report, beside finding the beats with wfdb's xqrs.

A record is made from ambulatory records (MIT-BIH) by resampling and tiling, format 16, and removed afterwards. Both
are timed in one run, because a shared machine is never equally fast twice; the ratio is what counts.

    python -m tests.benchmarks.bench_holter DATA [--hours 24] [--leads 3] [--fs 250] [--jobs 2] [--xqrs-hours 24]

``--xqrs-hours`` runs xqrs over fewer hours and scales its time up (it is proportional to the length); 0 leaves it out.
"""

from __future__ import annotations

import argparse
import os
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

RECORDS = ("101", "106", "108", "112", "114", "115", "116", "118", "119", "122", "124", "201")
NAMES = ("I", "II", "V1", "III", "aVR", "aVL", "aVF", "V2", "V3", "V4", "V5", "V6")
PER_MV = 200


def tile(folder: Path, fs_hz: int, n_leads: int) -> np.ndarray:
    """(n, n_leads) steps: the half hours of the records one after the other, at ``fs_hz``."""
    import wfdb
    from scipy.signal import resample_poly

    parts = []
    for name in RECORDS:
        if (folder / "mitdb" / f"{name}.hea").is_file():
            record = wfdb.rdrecord(str(folder / "mitdb" / name), physical=True)
            parts.append(resample_poly(record.p_signal, fs_hz, round(record.fs), axis=0)[: fs_hz * 1800])
    two = np.concatenate(parts)
    leads = np.stack([two[:, k % 2] * (1 - 0.1 * (k // 2)) for k in range(n_leads)], axis=1)
    return np.clip(np.rint(leads * PER_MV), -32000, 32000).astype("<i2")


def write(folder: Path, steps: np.ndarray, fs_hz: int, hours: float) -> Path:
    need = round(hours * 3600 * fs_hz)
    with (folder / "long.dat").open("wb") as out:
        left = need
        while left > 0:
            out.write(steps[:left].tobytes())
            left -= min(left, len(steps))
    lines = [f"long {steps.shape[1]} {fs_hz} {need}"]
    lines += [f"long.dat 16 {PER_MV} 16 0 0 0 0 {name}" for name in NAMES[: steps.shape[1]]]
    (folder / "long.hea").write_text("\n".join(lines) + "\n")
    return folder / "long.hea"


def checked(path: Path, out: Path, jobs: int) -> tuple[float, float, float]:
    """(seconds, highest resident MB of the first process, of all its processes together)."""
    command = [
        sys.executable,
        "-m",
        "sigguard.cli",
        "check",
        str(path),
        "--out",
        str(out),
        "--jobs",
        str(jobs),
    ]
    began = time.monotonic()
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL)
    first = together = 0.0
    while process.poll() is None:
        sizes = resident_mb(process.pid)
        first, together = max(first, sizes[0] if sizes else 0.0), max(together, sum(sizes))
        time.sleep(0.2)
    if process.returncode not in (0, 3, 4):
        raise SystemExit(f"the check left with {process.returncode}")
    return time.monotonic() - began, first, together


def resident_mb(pid: int) -> list[float]:
    """Resident memory of a process and of all below it (Linux); the process itself first."""
    out = []
    try:
        for line in Path(f"/proc/{pid}/status").read_text().splitlines():
            if line.startswith("VmRSS"):
                out.append(int(line.split()[1]) / 1024)
        for task in Path(f"/proc/{pid}/task").iterdir():
            for child in (task / "children").read_text().split():
                out += resident_mb(int(child))
    except OSError:  # it ended while it was looked at
        pass
    return out


def xqrs_seconds(steps: np.ndarray, fs_hz: int, hours: float) -> float:
    from wfdb.processing import xqrs_detect

    need = round(hours * 3600 * fs_hz)
    signal = np.resize(steps, (need, steps.shape[1])) / PER_MV
    began = time.monotonic()
    for lead in range(steps.shape[1]):
        xqrs_detect(signal[:, lead], fs_hz, verbose=False)
    return time.monotonic() - began


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("data", type=Path)
    parser.add_argument("--hours", type=float, default=24.0)
    parser.add_argument("--leads", type=int, default=3)
    parser.add_argument("--fs", type=int, default=250)
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--xqrs-hours", type=float, default=24.0)
    asked = parser.parse_args()
    os.environ["OMP_NUM_THREADS"] = "1"
    steps = tile(asked.data, asked.fs, asked.leads)
    folder = Path(tempfile.mkdtemp(prefix="holter-"))
    try:
        path = write(folder, steps, asked.fs, asked.hours)
        seconds, first, together = checked(path, folder / "out", asked.jobs)
        page = (folder / "out" / "long" / "report.html").stat().st_size / 1e6
    finally:
        shutil.rmtree(folder)
    print(f"{asked.hours:g} h x {asked.leads} leads x {asked.fs} Hz, {asked.jobs} processes")
    print(
        f"check with its report {seconds:.1f} s, {asked.hours * 3600 / seconds:.0f} times real time, page {page:.2f} MB"
    )
    print(f"memory: first process {first:.0f} MB, all together {together:.0f} MB")
    if asked.xqrs_hours > 0:
        hours = min(asked.xqrs_hours, asked.hours)
        xqrs = xqrs_seconds(steps, asked.fs, hours) * asked.hours / hours
        print(
            f"xqrs on the same leads {xqrs:.1f} s, measured over {hours:g} h: {xqrs / seconds:.1f} times as long"
        )


if __name__ == "__main__":
    main()
