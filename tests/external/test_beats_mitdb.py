"""Beats on the open ambulatory records, against their annotations, with wfdb's own comparison.

Source of truth: MIT-BIH Arrhythmia Database, beat annotations; match window ±150 ms (ANSI/AAMI EC57).
Run as a script for the figures record by record: python -m tests.external.test_beats_mitdb DATA_FOLDER
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

from sigguard.blocks import batches, plan_segments, rows_of
from sigguard.collecting import merge_beats
from sigguard.measure import between, prepare
from sigguard.readers import open_recording
from sigguard.readers.wfdb_files import quiet_wfdb

BEAT_SYMBOLS = set("NLRBAaJSVrFejnE/fQ?")


def beats_of(path: Path) -> tuple[np.ndarray, float]:
    """Sample indices of the beats of the first lead, found segment by segment as a check does, and the rate."""
    with open_recording(path) as source:
        fs_hz = source.info.fs_hz
        plan = plan_segments(source.info.n_samples, fs_hz)
        parts = []
        for batch in batches(plan, 1):
            rows = rows_of(batch, source.read(batch.read_start, batch.read_stop)[:1])
            ready = prepare(rows, fs_hz)
            scale = ready.work.fs_work_hz / fs_hz
            found = between(ready.found, batch.margin[0] * scale, (batch.margin[0] + batch.size) * scale)
            start = plan.start[batch.first + found.row]
            parts.append(np.rint(found.at / scale).astype(np.int64) - batch.margin[0] + start)
    return merge_beats(parts, fs_hz), fs_hz


def reference(path: Path) -> tuple[np.ndarray, list[tuple[int, int]]]:
    """(beat samples, flutter stretches) of an annotated record."""
    with quiet_wfdb():
        import wfdb

        note = wfdb.rdann(str(path.with_suffix("")), "atr")
    beats = np.array([s for s, c in zip(note.sample, note.symbol, strict=True) if c in BEAT_SYMBOLS])
    flutter, begun = [], None
    for sample, symbol in zip(note.sample, note.symbol, strict=True):
        if symbol == "[":
            begun = int(sample)
        elif symbol == "]" and begun is not None:
            flutter.append((begun, int(sample)))
            begun = None
    return beats, flutter


def compare(path: Path) -> tuple[int, int, int]:
    """(matched, missed, invented) of one record, flutter left out."""
    with quiet_wfdb():
        from wfdb.processing import compare_annotations

    found, fs_hz = beats_of(path)
    beats, flutter = reference(path)
    for first, last in flutter:
        found = found[(found < first) | (found > last)]
        beats = beats[(beats < first) | (beats > last)]
    result = compare_annotations(beats, found, int(0.15 * fs_hz))
    return int(result.tp), int(result.fn), int(result.fp)


def test_beats_are_found_on_open_ambulatory_records(open_data: Path) -> None:
    total = np.zeros(3, dtype=int)
    for path in sorted((open_data / "mitdb").glob("*.hea")):
        total += compare(path)
    if not total.any():
        pytest.skip("no ambulatory records in the open data")
    tp, fn, fp = total
    assert tp / (tp + fn) >= 0.998, f"sensitivity {tp / (tp + fn):.4f}"
    assert tp / (tp + fp) >= 0.998, f"positive predictivity {tp / (tp + fp):.4f}"


def main(folder: str) -> None:
    total = np.zeros(3, dtype=int)
    for path in sorted((Path(folder) / "mitdb").glob("*.hea")):
        row = compare(path)
        total += row
        sys.stdout.write(f"{path.stem}  matched {row[0]}  missed {row[1]}  invented {row[2]}\n")
    tp, fn, fp = total
    sys.stdout.write(
        f"Se {100 * tp / (tp + fn):.3f} %  PPV {100 * tp / (tp + fp):.3f} %  ({fn} missed, {fp} invented)\n"
    )


if __name__ == "__main__":
    main(sys.argv[1])
