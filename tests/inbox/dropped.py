"""Recordings for an inbox, dropped as copiers and devices do it: in pieces, in any order, or all at once."""

from __future__ import annotations

import os
import random
import subprocess
import sys
import time
from pathlib import Path

import numpy as np

HERE = Path(__file__).resolve().parent
ROOT = HERE.parents[1]


def record_files(name: str, *, seed: int = 0, n: int = 400, device: str | None = None) -> dict[str, bytes]:
    """A WFDB record of two leads as file names with content."""
    d = np.random.default_rng(seed).integers(-900, 900, size=(n, 2)).astype("<i2")
    lines = [f"{name} 2 100 {n}"] + [
        f"{name}.dat 16 1000/mV 16 0 {d[0, k]} 0 0 {('I', 'II')[k]}" for k in (0, 1)
    ]
    lines += [f"# Device: {device}"] if device else []
    return {f"{name}.hea": ("\n".join(lines) + "\n").encode(), f"{name}.dat": d.tobytes()}


def drop(folder: Path, name: str, **facts) -> Path:
    """All files of a record at once; the path of its header."""
    folder.mkdir(parents=True, exist_ok=True)
    for file, data in record_files(name, **facts).items():
        (folder / file).write_bytes(data)
    return folder / f"{name}.hea"


def pieces(names: list[str], *, seed: int) -> list[tuple[str, bytes]]:
    """What to append to which file: every file of every record in two pieces, records and pieces interleaved.

    Within a file the pieces keep their order; which file of a record comes first is left to chance.
    """
    rng = random.Random(seed)
    queues = []
    for k, name in enumerate(names):
        for file, data in record_files(name, seed=k).items():
            cut = rng.randrange(1, len(data))
            queues.append([(file, data[:cut]), (file, data[cut:])])
    out = []
    near: list[list[tuple[str, bytes]]] = []  # files being written now
    rng.shuffle(queues)
    while queues or near:
        while queues and len(near) < 12:
            near.append(queues.pop())
        queue = rng.choice(near)
        out.append(queue.pop(0))
        if not queue:
            near.remove(queue)
    return out


def environment(folder: Path, *, sleep_s: float = 0.0, stand_in: bool = True) -> dict[str, str]:
    """For a watcher as its own process, with the stand-in for the screening put in place."""
    env = {
        **os.environ,
        "QUICK_LOG": str(folder / "quick.log"),
        "QUICK_SLEEP": str(sleep_s),
        "OMP_NUM_THREADS": "1",
    }
    site = folder / "site"
    if stand_in:
        site.mkdir(exist_ok=True)
        (site / "sitecustomize.py").write_text(
            "import importlib.abc, importlib.util, sys\n"
            "class Finder(importlib.abc.MetaPathFinder):\n"  # lazily: the command must start as fast as it does
            "    def find_spec(self, name, path, target=None):\n"
            "        if name == 'sigguard.screening':\n"
            f"            return importlib.util.spec_from_file_location(name, {str(HERE / 'quick_screening.py')!r})\n"
            "sys.meta_path.insert(0, Finder())\n"
        )
    env["PYTHONPATH"] = os.pathsep.join(map(str, (site, ROOT)))
    temporary = folder / "tmp"
    temporary.mkdir(exist_ok=True)
    return env | {"TMPDIR": str(temporary)}


def start(folder: Path, *args: object, env: dict[str, str], out: str = "lines") -> subprocess.Popen:
    """``sigguard watch inbox …`` in this folder; stdout and stderr are appended to files."""
    words = [sys.executable, "-m", "sigguard.cli", "watch", "inbox", "--out", "out", *map(str, args)]
    with (folder / out).open("ab") as stdout, (folder / f"{out}.err").open("ab") as stderr:
        return subprocess.Popen(words, cwd=folder, env=env, stdout=stdout, stderr=stderr)


def wait_for(condition, *, at_most_s: float = 60.0) -> bool:
    give_up = time.monotonic() + at_most_s
    while not condition():
        if time.monotonic() > give_up:
            return False
        time.sleep(0.05)
    return True
