"""Stands in for sigguard.screening where only the bookkeeping of the inbox is tested.

The recording is opened by its real reader; its name says the verdict (``repeat-…``, ``alarm-…``, ``bug-…``,
else accept). Every beginning and end is noted in the file that ``QUICK_LOG`` names.
"""

from __future__ import annotations

import os
import sys
import time
from dataclasses import replace
from pathlib import Path

sys.path.append(str(Path(__file__).resolve().parents[1]))

from report.factory import make_report  # noqa: E402

from sigguard.findings import Advice, Judgement, PatientFirst  # noqa: E402
from sigguard.readers import open_recording  # noqa: E402
from sigguard.report.table import segments_csv  # noqa: E402
from sigguard.writers.atomic import write_text_atomic  # noqa: E402


def note(word: str, path: object) -> None:
    if log := os.environ.get("QUICK_LOG"):
        with open(log, "a", encoding="utf-8") as file:
            file.write(f"{word} {Path(str(path)).name}\n")


def screen_path(path, *, out_dir, name, **settings):
    with open_recording(path) as source:
        info = source.info
    note("begin", path)
    if info.name.startswith("bug"):
        raise ZeroDivisionError("division by zero")
    time.sleep(float(os.environ.get("QUICK_SLEEP", "0")))
    report = make_report(leads=info.leads, fs_hz=info.fs_hz, name=info.name)
    verdict = "repeat" if info.name.startswith(("repeat", "alarm")) else "accept"
    alarm = PatientFirst(info.leads, 0.0, 4.0, "standstill", "No beat for 4 s.")
    advice = Advice(1, "reapply-electrode", "LA", "Reapply the left arm (LA) electrode.")
    report = replace(
        report,
        info=replace(info, identity=()),
        judgement=Judgement(verdict, ("as its name says",)),
        patient_first=(alarm,) if info.name.startswith("alarm") else (),
        advice=(advice,) if verdict == "repeat" else (),
    )
    folder = Path(out_dir) / name
    folder.mkdir(parents=True, exist_ok=True)
    segments_csv(report.segments, folder / "segments.csv")
    write_text_atomic(folder / "report.json", report.to_json(indent=1))
    note("end", path)
    return report
