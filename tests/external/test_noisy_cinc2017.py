"""Too noisy to read: hand-held recordings that people called so, nothing of which the model has seen.

Labels (version 3) of the PhysioNet/CinC Challenge 2017: N sinus, A atrial fibrillation, O other, ~ too noisy.
One score per recording: the mean over its segments of the scores for rate and QRS, the two
measurements that make a rhythm strip readable. Run as a script for the figures:
python -m tests.external.test_noisy_cinc2017 DATA_FOLDER
"""

from __future__ import annotations

import csv
import sys
from pathlib import Path

import numpy as np
import pytest

from sigguard import check
from sigguard.report.document import Report


def auc(worse: np.ndarray, better: np.ndarray) -> float:
    """Area under the ROC curve: P(score of a worse one < score of a better one), ties halved (Mann and Whitney 1947)."""
    return float((worse[:, None] < better).mean() + 0.5 * (worse[:, None] == better).mean())


def score_of(report: Report) -> float:
    table = report.segments
    length_s = table.end_s - table.start_s
    return float(np.average(table.score[:, [0, 2]].mean(axis=1), weights=length_s))


def run(folder: Path, *, every: int = 1) -> dict[str, tuple[str, float, str, bool]]:
    """name → (label, score, verdict, patient first)."""
    with (folder / "labels.csv").open(newline="") as file:
        labels = {row["record"]: row["label"] for row in csv.DictReader(file)}
    out = {}
    for name, label in list(labels.items())[::every]:
        report = check(folder / f"{name}.hea")
        out[name] = (label, score_of(report), report.verdict, bool(report.patient_first))
    return out


def figures(rows: dict[str, tuple[str, float, str, bool]]) -> dict[str, float]:
    label = np.array([r[0] for r in rows.values()])
    score = np.array([r[1] for r in rows.values()])
    repeat = np.array([r[2] == "repeat" for r in rows.values()])
    alarm = np.array([r[3] for r in rows.values()])
    out = {
        "auc_noisy_against_rest": auc(score[label == "~"], score[label != "~"]),
        "auc_noisy_against_af": auc(score[label == "~"], score[label == "A"]),
    }
    for kind in ("N", "A", "O", "~"):
        out[f"repeat_{kind}"] = float(repeat[label == kind].mean())
        out[f"patient_first_{kind}"] = float(alarm[label == kind].mean())
    return out


@pytest.mark.usefixtures("no_advice")
def test_noisy_recordings_score_lower(open_data: Path) -> None:
    folder = open_data / "cinc2017"
    if not (folder / "labels.csv").is_file():
        pytest.skip("no hand-held recordings in the open data")
    found = figures(run(folder, every=3))
    # A third of the recordings, for speed; the goals are 0.975 and 0.95 on all: not reached (README).
    assert found["auc_noisy_against_rest"] >= 0.94
    assert found["auc_noisy_against_af"] >= 0.87


if __name__ == "__main__":
    for name, value in figures(run(Path(sys.argv[1]) / "cinc2017")).items():
        sys.stdout.write(f"{name:26s} {value:.4f}\n")
