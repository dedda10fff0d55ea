"""Reports made by hand for the tests of what is written from them."""

from __future__ import annotations

from datetime import datetime

import numpy as np

from sigguard.findings import (
    Advice,
    BestStrip,
    ElectrodeNoise,
    Fault,
    Judgement,
    LeadSummary,
    PatientFirst,
    Placement,
    Span,
    Value,
)
from sigguard.recording import RecordingInfo
from sigguard.report.document import Report
from sigguard.segments import FAULTS, GRADES, MEASUREMENTS, UNITS, Segments

TWELVE = ("I", "II", "III", "aVR", "aVL", "aVF", "V1", "V2", "V3", "V4", "V5", "V6")
FEATURES = ("wander_rms_uv", "muscle_rms_uv", "mains_amplitude_uv", "snr_db", "bsqi")
NAN = float("nan")
WHEN = {"all": 4, "intervals": 3, "rhythm": 1, "none": 0}


def make_segments(
    leads=TWELVE, *, duration_s: float = 10.0, segment_s: float = 10.0, seed: int = 1, features=FEATURES
) -> Segments:
    """Segments with random grades, faults and holes, ordered as the program orders them."""
    rng = np.random.default_rng(seed)
    n_times = max(1, round(duration_s / segment_s))
    n = n_times * len(leads)
    start = np.repeat(np.arange(n_times) * segment_s, len(leads))
    end = np.minimum(start + segment_s, duration_s)
    grade = rng.choice(4, size=n, p=[0.15, 0.15, 0.2, 0.5]).astype(np.int8)
    reliable = np.arange(5)[None] < np.array([0, 1, 4, 5])[grade][:, None]
    value = np.array([72.0, 158.0, 94.0, 392.0, 0.03]) * rng.normal(1, 0.03, (n, 5))
    bound = np.array([0.8, 6.0, 5.0, 9.0, 0.01]) * np.where(reliable, 1, 6) * rng.uniform(0.8, 1.2, (n, 5))
    value[grade == 0, 1:] = NAN
    bound[grade == 0, 1:] = NAN
    fault = np.zeros((n, len(FAULTS)), np.float32)
    spoilt = np.flatnonzero(grade < 3)
    fault[spoilt, rng.integers(0, 4, spoilt.size)] = rng.uniform(0.1, 1, spoilt.size)
    table = rng.normal(size=(n, len(features))).astype(np.float32)
    table[rng.random(table.shape) < 0.1] = np.nan
    return Segments(
        leads=tuple(leads),
        feature_names=tuple(features),
        lead_index=np.tile(np.arange(len(leads), dtype=np.int32), n_times),
        start_s=start,
        end_s=end,
        value=value,
        score=np.where(reliable, 0.97, 0.4),
        bound=bound,
        reliable=reliable,
        absent=np.zeros((n, 5), np.int8),
        grade=grade,
        fault=fault,
        features=table,
    )


def summarise(segments: Segments) -> tuple[LeadSummary, ...]:
    found = []
    for i, lead in enumerate(segments.leads):
        mine = segments.rows(segments.lead_index == i)
        share = mine.fault.mean(axis=0) if len(mine) else np.zeros(len(FAULTS))
        found.append(
            LeadSummary(
                lead,
                {g: float(np.mean(mine.grade == k)) for k, g in enumerate(GRADES)},
                {m: float(np.mean(mine.reliable[:, k])) for k, m in enumerate(MEASUREMENTS)},
                tuple(Fault(f, float(share[k]), ("pr", "st")) for k, f in enumerate(FAULTS) if share[k] > 0),
            )
        )
    return tuple(found)


def make_values(leads=TWELVE, *, duration_s: float = 10.0) -> dict[str, Value]:
    return {
        "rate": Value("1/min", 72.04, 66.0, 79.0, 0.8, True, None, tuple(leads), duration_s),
        "pr": Value("ms", 158.3, 150.0, 164.0, 8.04, True, None, tuple(leads[:3]), duration_s),
        "qrs": Value("ms", 94.0, 92.0, 97.0, 6.2, True, None, tuple(leads[:3]), duration_s),
        "qt": Value("ms", 392.0, 380.0, 399.0, 44.0, False, None, tuple(leads[:2]), 0.0),
        "qtc": Value("ms", 429.0, 420.0, 440.0, 48.1, False, None, tuple(leads[:2]), 0.0),
    }


def make_report(
    *,
    leads=TWELVE,
    duration_s: float = 10.0,
    fs_hz: float = 500.0,
    name: str = "morning",
    seed: int = 1,
    **change,
) -> Report:
    """A plausible report; any field can be replaced by keyword."""
    segments = change.pop("segments", None) or make_segments(leads, duration_s=duration_s, seed=seed)
    info = RecordingInfo(
        name=name,
        leads=tuple(leads),
        fs_hz=fs_hz,
        n_samples=round(duration_s * fs_hz),
        path=f"incoming/{name}.hea",
        format="wfdb",
        sha256="a" * 64,
        start_time=datetime(2024, 3, 5, 9, 30),
        assumed=("lead V3 names no unit: millivolts assumed",),
        left_out=("RESP",),
        identity=(("name", "Nobody Inparticular"), ("born", "1900-01-01")),
    )
    beats = np.arange(0.3, duration_s, 0.83)
    beats = np.round(beats * fs_hz).astype(np.int64)
    st = {
        lead: Value("mV", 0.0312 - 0.01 * i, None, None, 0.02 + 0.002 * i, i < 3, None, (lead,), 10.0)
        for i, lead in enumerate(leads)
    }
    facts = dict(
        software_version="0.1.0",
        model_sha256="b" * 64,
        profile_name="resting",
        profile_sha256="c" * 64,
        info=info,
        judgement=Judgement(
            "accept-in-part", ("QT cannot be trusted in any lead", "the other measurements can")
        ),
        values=make_values(leads, duration_s=duration_s),
        st_by_lead=st,
        lead_summaries=summarise(segments),
        segments=segments,
        electrodes=(
            ElectrodeNoise("LA", 182.04, 0.81),
            ElectrodeNoise("RA", 40.0, 0.12),
            ElectrodeNoise("V3", 22.0, 0.07),
        ),
        placement=(Placement("LA/RA", 0.07, "Left and right arm electrode might be exchanged."),),
        advice=(
            Advice(
                1,
                "reapply",
                "LA",
                "Reapply the left-arm electrode: clean, dry, new gel.",
                ("81 % of the disturbance comes from LA", "would win back QT in 4 leads"),
            ),
            Advice(2, "warm", None, "Warm the patient and rest the hands.", ("muscle 60 µV in I and II",)),
        ),
        spans=(Span(0.0, duration_s, tuple(leads), "rhythm", ("muscle",)),),
        best_strip=BestStrip(0.0, min(10.0, duration_s), "intervals"),
        beats=beats,
        lead_beats={lead: beats for lead in leads},
        procedure_note="The measuring procedure itself differs from hand marks by 2 ± 9 ms (PR) and 3 ± 14 ms (QT).",
        notes=("QTc after Bazett.",),
    )
    facts.update(change)
    return Report(**facts)


def empty_report(**change) -> Report:
    """A recording of which nothing could be measured."""
    blank = {m: Value(UNITS[m]) for m in ("rate", "pr", "qrs", "qt", "qtc")}
    facts = dict(
        leads=("ECG",),
        judgement=Judgement("repeat", ("nothing can be measured",)),
        values=blank,
        st_by_lead={"ECG": Value("mV")},
        electrodes=(),
        placement=(),
        advice=(),
        spans=(),
        best_strip=None,
        beats=np.zeros(0, np.int64),
        lead_beats={},
        procedure_note="",
        notes=(),
        model_sha256=None,
        profile_sha256=None,
    )
    facts.update(change)
    return make_report(**facts)


def nan_report() -> Report:
    """Every number that may be unknown is NaN."""
    broken = {m: Value(UNITS[m], NAN, NAN, NAN, NAN) for m in ("rate", "pr", "qrs", "qt", "qtc")}
    return make_report(
        values=broken,
        st_by_lead={"I": Value("mV", NAN, bound_95=NAN)},
        electrodes=(ElectrodeNoise("LA", NAN, NAN),),
        placement=(Placement("x", NAN, "unsure"),),
    )


def alarm_report(**change) -> Report:
    alarm = PatientFirst(
        ("II", "V1"), 2.0, 9.5, "fibrillation-or-flutter", "Irregular waves without beats; contact is good."
    )
    return make_report(
        **{"patient_first": (alarm,), "judgement": Judgement("repeat", ("see the patient first",)), **change}
    )


def make_signal(leads=TWELVE, *, duration_s: float = 10.0, fs_hz: float = 500.0, seed: int = 3) -> np.ndarray:
    """(n_leads, n_samples), mV: Gaussian waves, wander and noise that grow with the lead's number."""
    rng = np.random.default_rng(seed)
    t = np.arange(round(duration_s * fs_hz)) / fs_hz
    phase = (t - 0.3 + 0.4) % 0.83 - 0.4
    waves = (
        (-0.17, 0.12, 0.02),
        (-0.025, -0.1, 0.008),
        (0.0, 1.1, 0.011),
        (0.028, -0.25, 0.009),
        (0.26, 0.28, 0.045),
    )
    beat = sum(a * np.exp(-0.5 * ((phase - c) / w) ** 2) for c, a, w in waves)
    gains = np.linspace(1.0, -0.6, len(leads))[:, None] + 0.15
    noise = rng.normal(0, 1, (len(leads), t.size)) * np.linspace(0.005, 0.08, len(leads))[:, None]
    wander = 0.25 * np.sin(2 * np.pi * 0.2 * t) * (np.arange(len(leads))[:, None] % 4 == 3)
    return gains * beat + noise + wander
