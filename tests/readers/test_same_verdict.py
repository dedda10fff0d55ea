"""One twelve-lead recording in seven formats: equal within the resolution of each, and judged alike."""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from pathlib import Path

import numpy as np
import pytest

from readers import made
from sigguard.leads import STANDARD_LEADS
from sigguard.readers import read_recording
from sigguard.screening import check

DEMO = Path(__file__).resolve().parents[2] / "synthetic" / "demo"
NAMES = ["01-clean", "02-shivering", "05-loose-left-arm"]
STEP_MV = 0.001
MDC = [1, 2, 61, 62, 63, 64, *range(3, 9)]


@cache
def source(name: str) -> np.ndarray:
    """(12, n) steps of 1 µV at 500 Hz, the missing code kept out."""
    recording = read_recording(DEMO / f"{name}.hea")
    assert recording.leads == STANDARD_LEADS and recording.fs_hz == 500
    return np.rint(recording.signal_mv / STEP_MV).astype(int).clip(-32767, 32767)


def _edf(path: Path, d: np.ndarray, bits: int) -> Path:
    signals = [{"label": f"ECG {lead}", "steps": x} for lead, x in zip(STANDARD_LEADS, d, strict=True)]
    return made.edf_file(path, signals, bits=bits, kind="+C")


def _dicom(path: Path, d: np.ndarray) -> Path:
    leads = [{"code": f"2:{code}", "sensitivity": 1.0} for code in MDC]
    return made.dicom_file(path, [{"steps": d.T, "leads": leads}])


def _csv(path: Path, d: np.ndarray) -> Path:
    path.write_text(made.csv_text(d * STEP_MV, list(STANDARD_LEADS)))
    return path


WRITERS: dict[str, Callable[[Path, np.ndarray], Path]] = {
    "WFDB": lambda p, d: made.wfdb_record(p.parent, d, name=p.name, names=list(STANDARD_LEADS)),
    "DICOM": _dicom,
    "CSV": _csv,
    "EDF+C": lambda p, d: _edf(p, d, 16),
    "BDF+C": lambda p, d: _edf(p, d, 24),
    "ISHNE": lambda p, d: made.ishne_file(p, d, codes=list(range(5, 17))),
    "aECG": lambda p, d: made.aecg_file(p, [made.aecg_set(d, list(STANDARD_LEADS))]),
}


@pytest.mark.parametrize("name", NAMES)
def test_the_same_signal_gets_the_same_verdict(name: str, tmp_path: Path):
    d = source(name)
    told = {}
    for fmt, write in WRITERS.items():
        path = write(tmp_path / f"rec-{fmt}", d)
        recording = read_recording(path)
        assert recording.info is not None and recording.info.format == fmt
        assert recording.leads == STANDARD_LEADS and recording.fs_hz == 500
        np.testing.assert_allclose(recording.signal_mv, d * STEP_MV, rtol=0, atol=STEP_MV / 1000)
        told[fmt] = _told(path)
    for fmt, answer in told.items():
        assert answer == told["WFDB"], fmt


def _told(path: Path) -> dict:
    """Of the report what must not depend on the format: all but name, file, checksum and provenance."""
    report = check(path).to_dict()
    measurements = {
        key: None if value.get("value") is None else round(value["value"], 2)
        for key, value in report["measurements"].items()
        if key != "st"
    }
    faults = {lead["lead"]: sorted(fault["kind"] for fault in lead["faults"]) for lead in report["leads"]}
    advice = [(one["action"], one["target"]) for one in report["advice"]]
    return {
        "verdict": report["verdict"],
        "reasons": report["reasons"],
        "patient first": report["patient_first"],
        "measurements": measurements,
        "faults": faults,
        "advice": advice,
    }
