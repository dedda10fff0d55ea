"""Lethal rhythms on open records: each marked onset is raised in time, and ordinary records stay quiet.

Marked stretches of the CU Ventricular Tachyarrhythmia Database, by eye (± 2 s; the records carry no annotations
here). False alarms: 10 s segments of the MIT-BIH Arrhythmia Database outside annotated flutter, ventricular
tachycardia, idioventricular rhythm and pauses of 2.9 s. Script:
python -m tests.external.test_patient_first DATA_FOLDER
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from sigguard import check
from sigguard.findings import PatientFirst
from sigguard.readers.wfdb_files import quiet_wfdb

IN_TIME_S = 10.0
MARKED_S = {
    "cu01": ((214, 508),),
    "cu05": ((88, 92), (143, 148), (193, 199), (219, 223), (358, 445)),
    "cu08": ((426, 486),),
    "cu11": ((371, 420),),
    "cu15": ((406, 508),),
    "cu20": ((244, 269),),
    "cu24": ((357, 424),),
    "cu30": ((25, 27), (28, 59)),
    "cu34": ((118, 131), (388, 430)),
}
TRUE_RHYTHMS = ("(VFL", "(VT", "(IVR")
BEATS = set("NLRBAaJSVrFejnE/fQ?!")


def raised(found: tuple[PatientFirst, ...], start_s: float, end_s: float) -> bool:
    """Whether a finding covers the stretch, beginning at most IN_TIME_S after it does."""
    return any(f.start_s <= start_s + IN_TIME_S and f.end_s >= start_s for f in found)


def onsets(folder: Path) -> list[tuple[str, float, bool]]:
    """(record, onset, raised in time) of every marked stretch that is there."""
    out = []
    for name, stretches in MARKED_S.items():
        path = folder / "cudb" / f"{name}.hea"
        if path.is_file():
            found = check(path).patient_first
            out += [(name, float(a), raised(found, a, b)) for a, b in stretches]
    return out


def false_segments(path: Path) -> tuple[int, int]:
    """(10 s segments with an alarm where none is due, segments) of an annotated record."""
    report = check(path)
    fs_hz, n_s = report.info.fs_hz, int(report.info.duration_s) // 10 * 10
    with quiet_wfdb() as wfdb:
        note = wfdb.rdann(str(path.with_suffix("")), "atr")
    due = np.zeros(n_s, dtype=bool)
    changes = [
        (s / fs_hz, t.strip("\x00"))
        for s, t in zip(note.sample, note.aux_note, strict=True)
        if t.startswith("(")
    ]
    for (start, rhythm), (stop, _) in zip(changes, [*changes[1:], (n_s, "")], strict=True):
        if rhythm in TRUE_RHYTHMS:
            due[int(start) : int(np.ceil(stop))] = True
    beats = np.array([s for s, c in zip(note.sample, note.symbol, strict=True) if c in BEATS]) / fs_hz
    for k in np.flatnonzero(np.diff(beats) >= 2.9):
        due[int(beats[k]) : int(beats[k + 1]) + 1] = True
    alarm = _seconds(report.patient_first, n_s)
    wrong = alarm.reshape(-1, 10).any(axis=1) & ~due.reshape(-1, 10).any(axis=1)
    return int(wrong.sum()), len(wrong)


def _seconds(found: tuple[PatientFirst, ...], n_s: int) -> NDArray[np.bool_]:
    out = np.zeros(n_s, dtype=bool)
    for f in found:
        out[int(f.start_s) : int(np.ceil(f.end_s))] = True
    return out


@pytest.mark.usefixtures("no_advice")
def test_every_marked_onset_is_raised_in_time(open_data: Path) -> None:
    rows = onsets(open_data)
    if not rows:
        pytest.skip("no records with malignant rhythms in the open data")
    assert [row for row in rows if not row[2]] == []


@pytest.mark.usefixtures("no_advice")
def test_ordinary_records_stay_quiet(open_data: Path) -> None:
    counts = [false_segments(path) for path in sorted((open_data / "mitdb").glob("*.hea"))[::3]]
    if not counts:
        pytest.skip("no ambulatory records in the open data")
    wrong, total = np.sum(counts, axis=0)
    assert wrong / total <= 0.01  # a third of them; the aim is 0.005 of all


if __name__ == "__main__":
    data = Path(sys.argv[1])
    for name, start_s, hit in onsets(data):
        sys.stdout.write(f"{name} at {start_s:.0f} s: {'raised in time' if hit else 'MISSED'}\n")
    wrong, total = np.sum([false_segments(p) for p in sorted((data / "mitdb").glob("*.hea"))], axis=0)
    sys.stdout.write(f"false alarms: {wrong} of {total} segments, {100 * wrong / total:.2f} %\n")
