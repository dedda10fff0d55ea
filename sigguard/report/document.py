"""The report: everything found out about one recording, and its form as JSON."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cache
from importlib import resources
from math import isfinite
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sigguard.electrode_powers import ElectrodePowers
from sigguard.findings import (
    CAUTION,
    Advice,
    BestStrip,
    CommonNoise,
    ElectrodeNoise,
    Fault,
    Judgement,
    LeadSummary,
    PatientFirst,
    Placement,
    Span,
    Value,
)
from sigguard.patient_first import join_to_at_most
from sigguard.recording import RecordingInfo
from sigguard.report.table import SegmentTable, round_up
from sigguard.report.words import clean
from sigguard.segments import GRADES, MEASUREMENTS, UNITS, Segments

SCHEMA_NAME = "sigguard.report/1"
GLOBAL_VALUES = ("rate", "pr", "qrs", "qt", "qtc")
MAX_ALARMS = 500  # patient-first stretches told one by one; more are told joined over the pauses between them
DECIMALS = {"1/min": 1, "ms": 1, "mV": 4}  # how finely a value is given, by unit


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Report:
    """What ``check`` returns: facts only, every text form is made from them.

    ``values`` holds rate, pr, qrs, qt and qtc; ``st_by_lead`` the ST level of each lead. ``beats``
    are sample indices over all leads, ``lead_beats[LEAD]`` those of one lead. ``segments`` may be
    given as plain Segments; it is kept as a SegmentTable, which can write itself as CSV.
    """

    software_version: str
    model_sha256: str | None
    profile_name: str
    profile_sha256: str | None
    info: RecordingInfo
    judgement: Judgement
    values: Mapping[str, Value]
    st_by_lead: Mapping[str, Value]
    lead_summaries: tuple[LeadSummary, ...]
    segments: SegmentTable | Segments
    electrodes: tuple[ElectrodeNoise, ...] = ()
    common_noise: tuple[CommonNoise, ...] = ()
    electrode_powers: ElectrodePowers | None = None  # by segment, for electrodes.whose_noise
    placement: tuple[Placement, ...] = ()
    patient_first: tuple[PatientFirst, ...] = ()
    advice: tuple[Advice, ...] = ()
    spans: tuple[Span, ...] = ()
    best_strip: BestStrip | None = None
    beats: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, np.int64))
    lead_beats: Mapping[str, NDArray[np.int64]] = field(default_factory=dict)
    procedure_note: str = ""  # how far the measuring procedure itself is from a careful hand, said once
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if not isinstance(self.segments, SegmentTable):
            object.__setattr__(self, "segments", SegmentTable.of(self.segments))

    @property
    def verdict(self) -> str:
        """``accept``, ``accept-in-part`` or ``repeat``."""
        return self.judgement.verdict

    @property
    def patient_first_to_tell(self) -> tuple[PatientFirst, ...]:
        """The patient-first stretches, joined over their pauses where there are more than can be told."""
        return tuple(join_to_at_most(self.patient_first, MAX_ALARMS))

    @property
    def advice_to_tell(self) -> tuple[Advice, ...]:
        """The advice by rank; what was accepted is not to be recorded again."""
        ranked = sorted(self.advice, key=lambda a: a.rank)
        return tuple(
            a for a in ranked if self.verdict != "accept" or a.action not in ("wait-and-repeat", "nothing")
        )

    @property
    def for_next_time(self) -> bool:
        """Whether the advice is for the next recording, this one being good as it is and nobody in danger."""
        return self.verdict == "accept" and not self.patient_first

    @property
    def taken_for_granted(self) -> tuple[str, ...]:
        """What the reader assumed, and which signals were left out as not ECG."""
        left_out = self.info.left_out
        return self.info.assumed + ((f"left out as not ECG: {', '.join(left_out)}",) if left_out else ())

    def to_dict(self, *, with_identity: bool = False) -> dict[str, Any]:
        """The report as ``report.json`` has it: plain JSON types, no NaN, validates against ``load_schema()``.

        Patients' names, numbers and dates from the header appear only ``with_identity``, under
        ``recording.identity``.
        """
        judgement = self.judgement
        return {
            "schema": SCHEMA_NAME,
            "software": {"version": clean(self.software_version), "model_sha256": self.model_sha256},
            "profile": {"name": clean(self.profile_name), "sha256": self.profile_sha256},
            "verdict": judgement.verdict,
            "reasons": _texts(judgement.reasons + self.notes),
            "recording": self._recording(with_identity=with_identity),
            "measurements": {
                **{m: _value(self.values.get(m, Value(UNITS[m]))) for m in GLOBAL_VALUES},
                "st": {"by_lead": {clean(lead): _st_value(v) for lead, v in self.st_by_lead.items()}},
            },
            "leads": [_lead(summary) for summary in self.lead_summaries],
            "electrodes": [_electrode(e) for e in self.electrodes],
            "placement": [
                {"finding": clean(p.finding), "probability": number(p.probability, 3), "text": clean(p.text)}
                for p in self.placement
            ],
            "patient_first": [
                {
                    "leads": _texts(p.leads),
                    "start_s": number(p.start_s, 3),
                    "end_s": number(p.end_s, 3),
                    "pattern": p.pattern,
                    "text": clean(p.text),
                }
                for p in self.patient_first_to_tell
            ],
            "advice": [
                {
                    "rank": int(a.rank),
                    "action": clean(a.action),
                    "target": None if a.target is None else clean(a.target),
                    "text": clean(a.text),
                    "because": _texts(a.because),
                    "gain_s": None if a.gain_s is None else number(a.gain_s, 1),
                }
                for a in self.advice
            ],
            "spans": [
                {
                    "start_s": number(s.start_s, 3),
                    "end_s": number(s.end_s, 3),
                    "leads": _texts(s.leads),
                    "grade": s.grade,
                    "faults": list(s.faults),
                }
                for s in self.spans
            ],
            "best_strip": None
            if self.best_strip is None
            else {
                "start_s": number(self.best_strip.start_s, 3),
                "end_s": number(self.best_strip.end_s, 3),
                "grade": self.best_strip.grade,
            },
            "caution": CAUTION,
        }

    def to_json(self, *, with_identity: bool = False, indent: int | None = None) -> str:
        """``to_dict`` as text; on one line unless ``indent`` is given."""
        found = self.to_dict(with_identity=with_identity)
        return json.dumps(found, allow_nan=False, ensure_ascii=False, indent=indent)

    def _recording(self, *, with_identity: bool) -> dict[str, Any]:
        info = self.info
        found: dict[str, Any] = {
            "name": clean(info.name),
            "path": None if info.path is None else clean(info.path),
            "format": clean(info.format),
            "sha256": info.sha256,
            "fs_hz": number(info.fs_hz, 6),
            "duration_s": number(info.duration_s, 3),
            "start_time": None if info.start_time is None else info.start_time.isoformat(),
            "leads": _texts(info.leads),
            "assumed": _texts(self.taken_for_granted),
        }
        if with_identity:
            found["identity"] = {clean(key): clean(value) for key, value in info.identity}
        return found


def number(x: float | None, decimals: int) -> float | None:
    """A plain float so rounded; None for what is missing or not finite."""
    if x is None or not isfinite(x):
        return None
    return round(float(x), decimals) + 0.0


def _electrode(e: ElectrodeNoise) -> dict[str, Any]:
    found: dict[str, Any] = {
        "electrode": clean(e.electrode),
        "noise_uv": number(e.noise_uv, 1),
        "share": number(e.share, 3),
    }
    if e.confidence is not None:
        found["confidence"] = number(e.confidence, 3)
        found["kinds"] = [
            {
                "kind": k.kind,
                "noise_uv": number(k.noise_uv, 1),
                "share": number(k.share, 3),
                "confidence": number(k.confidence, 3),
            }
            for k in e.kinds
        ]
    return found


def _texts(words) -> list[str]:
    return [clean(word) for word in words]


def _bound(value: Value) -> float | None:
    # Rounded up: a bound beyond the tolerance must not read as one within it.
    if value.bound_95 is None or not isfinite(value.bound_95):
        return None
    return float(round_up(value.bound_95, decimals=DECIMALS[value.unit]))


def _st_value(value: Value) -> dict[str, Any]:
    return {
        "value": number(value.value, DECIMALS[value.unit]),
        "unit": value.unit,
        "bound_95": _bound(value),
        "reliable": bool(value.reliable),
        "absent": value.absent or None,
    }


def _value(value: Value) -> dict[str, Any]:
    decimals = DECIMALS[value.unit]
    return {
        "value": number(value.value, decimals),
        "low": number(value.low, decimals),
        "high": number(value.high, decimals),
        "unit": value.unit,
        "bound_95": _bound(value),
        "reliable": bool(value.reliable),
        "absent": value.absent or None,
        "leads": _texts(value.leads),
        "reliable_s": number(value.reliable_s, 3) or 0.0,
    }


def _lead(summary: LeadSummary) -> dict[str, Any]:
    return {
        "lead": clean(summary.lead),
        "grade_fraction": {g: number(summary.grade_fraction.get(g, 0.0), 4) or 0.0 for g in reversed(GRADES)},
        "reliable_fraction": {
            m: number(summary.reliable_fraction.get(m, 0.0), 4) or 0.0 for m in MEASUREMENTS
        },
        "faults": [_fault(f) for f in summary.faults],
    }


def _fault(fault: Fault) -> dict[str, Any]:
    out: dict[str, Any] = {
        "kind": fault.kind,
        "fraction": number(fault.fraction, 4) or 0.0,
        "harms": list(fault.harms),
    }
    if fault.strength is not None and (strength := number(fault.strength, 3)) is not None:
        out |= {"strength": strength, "unit": fault.unit}
    if fault.when:
        out["when"] = [[number(a, 3), number(b, 3)] for a, b in fault.when]
    return out


@cache
def _schema_text() -> str:
    return resources.files("sigguard.report").joinpath("schema.json").read_text(encoding="utf-8")


def load_schema() -> dict[str, Any]:
    """The JSON Schema (draft 2020-12) every report validates against."""
    return json.loads(_schema_text())
