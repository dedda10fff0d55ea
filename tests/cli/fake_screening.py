"""Stands in for sigguard.screening where only the command line is tested: the file says what comes out.

Content of a "recording": a verdict, ``alarm``, ``unreadable``, ``bug``, ``killed``, or ``slow SECONDS``.
"""

from __future__ import annotations

import json
import os
import time

CALLS: list[dict] = []


def screen_path(path, *, out_dir, name, **settings):
    from sigguard.errors import ReadError
    from sigguard.writers.atomic import write_text_atomic

    CALLS.append({"path": path, "out_dir": out_dir, "name": name, **settings})
    word, *rest = path.read_text().split()
    if word == "unreadable":
        raise ReadError(
            str(path), where="line 1", expected="samples", found="a\x1b[31m\nword", remedy="export again"
        )
    if word == "bug":
        raise ZeroDivisionError("division by zero")
    if word == "killed":
        os.kill(os.getpid(), 9)
    if word == "slow":
        (path.parent / f"{path.stem}.begun").touch()
        time.sleep(float(rest[0]))
        word = "accept"
    report = _report(path, word, threads=os.environ.get("OMP_NUM_THREADS"))
    write_text_atomic(out_dir / name / "report.json", json.dumps({"recording": {"path": str(path)}}))
    return report


def _report(path, word, *, threads):
    from segment_tables import table

    from sigguard.findings import Advice, Judgement, PatientFirst
    from sigguard.grading import combine_values, lead_summaries
    from sigguard.recording import RecordingInfo
    from sigguard.report.document import Report

    segments = table()
    values, st_by_lead = combine_values(segments)
    alarm = PatientFirst(("II",), 0.0, 10.0, "standstill", "No beat for 10 s.")
    return Report(
        software_version="0",
        model_sha256=None,
        profile_name="strip",
        profile_sha256=None,
        info=RecordingInfo(path.stem, ("II",), 100.0, 1000, path=str(path)),
        judgement=Judgement("repeat" if word == "alarm" else word, (f"threads {threads}",)),
        values=values,
        st_by_lead=st_by_lead,
        lead_summaries=lead_summaries(segments),
        segments=segments,
        patient_first=(alarm,) if word == "alarm" else (),
        advice=(Advice(1, "nothing", None, "Nothing needs doing."),),
    )
