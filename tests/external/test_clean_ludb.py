"""Clean 12-lead recordings pass under ``resting``: the hand-marked records of LUDB.

Script: python -m tests.external.test_clean_ludb DATA_FOLDER
"""

from __future__ import annotations

import sys
from collections import Counter
from pathlib import Path

import pytest

from sigguard import check
from sigguard.report.document import Report


def run(folder: Path) -> dict[str, Report]:
    names = sorted((p.stem for p in folder.glob("*.hea")), key=int)
    return {name: check(folder / f"{name}.hea", profile="resting") for name in names}


@pytest.mark.usefixtures("no_advice")
def test_clean_recordings_pass(open_data: Path) -> None:
    reports = run(open_data / "ludb")
    if not reports:
        pytest.skip("no hand-marked records in the open data")
    verdicts = Counter(report.verdict for report in reports.values())
    passed = verdicts["accept"] + verdicts["accept-in-part"]
    assert passed / len(reports) >= 0.85
    assert verdicts["repeat"] / len(reports) <= 0.10  # the goal is 0.03: not reached, 8 of 100 (README)
    # "In part" has to say why.
    assert all(r.judgement.reasons for r in reports.values() if r.verdict != "accept")


if __name__ == "__main__":
    found = run(Path(sys.argv[1]) / "ludb")
    for name, report in found.items():
        if report.verdict != "accept":
            sys.stdout.write(f"{name}: {report.verdict}: {' '.join(report.judgement.reasons)}\n")
    sys.stdout.write(
        f"{dict(Counter(r.verdict for r in found.values()))}, patient first {sum(bool(r.patient_first) for r in found.values())}\n"
    )
