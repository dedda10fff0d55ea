"""One folder for each recording, so that no report overwrites that of another recording."""

from __future__ import annotations

import json
from collections.abc import Sequence
from pathlib import Path

_INDEX = ("index.html", "index.csv")  # written beside the folders


def assign_folders(recordings: Sequence[Path], out_dir: Path) -> list[str]:
    """A folder name under ``out_dir`` for each recording, in their order.

    The recording's own name (its file name without extension); where another recording of this run
    has it, or a report already there is of another file, the name gets ``-2``, ``-3`` and so on. Checking
    the same file again lands in its own folder again. Upper and lower case count as one, as they do
    on some disks.
    """
    taken = {name.casefold() for name in _INDEX}
    names = []
    for path in recordings:
        base = path.stem or path.name or "recording"
        name, n = base, 1
        while name.casefold() in taken or not _free_for(path, out_dir / name):
            n += 1
            name = f"{base}-{n}"
        taken.add(name.casefold())
        names.append(name)
    return names


def _free_for(path: Path, folder: Path) -> bool:
    """Whether the folder holds no report, or the report of this very file."""
    report = folder / "report.json"
    if not report.exists():
        return not folder.is_file()
    try:
        owner = json.loads(report.read_bytes())["recording"]["path"]
        return owner is not None and Path(owner).resolve() == path.resolve()
    except (OSError, ValueError, KeyError, TypeError, RuntimeError):
        return False  # whatever it is, it is not known to be ours


def leave_out_reports(recordings: Sequence[Path], out_dir: Path) -> list[Path]:
    """The recordings without the tables of earlier reports, which may lie in a searched folder."""
    out = out_dir.resolve()

    def is_report(path: Path) -> bool:
        real = path.resolve()
        beside_report = real.parent.parent == out and (real.parent / "report.json").exists()
        return (beside_report and real.name == "segments.csv") or (
            real.parent == out and real.name == "index.csv"
        )

    return [path for path in recordings if not is_report(path)]
