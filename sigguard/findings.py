"""What is found out about a recording, as plain facts: spans, faults, advice, alarms, values."""

from __future__ import annotations

from dataclasses import dataclass, field

CAUTION = (
    "Screening aid, no diagnosis. Look at the patient, not at the tracing alone; "
    "local protocol and the responsible clinician decide."
)


@dataclass(frozen=True, slots=True)
class Span:
    """A stretch of time over some leads, with the lowest grade that holds over all of it."""

    start_s: float
    end_s: float
    leads: tuple[str, ...]
    grade: str
    faults: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Fault:
    """One fault of one lead: the fraction of the recording it lies on, and what it harms."""

    kind: str
    fraction: float
    harms: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class LeadSummary:
    """One lead over the whole recording; fractions of its duration from 0 to 1."""

    lead: str
    grade_fraction: dict[str, float]  # keys: the grades
    reliable_fraction: dict[str, float]  # keys: the measurements
    faults: tuple[Fault, ...] = ()


@dataclass(frozen=True, slots=True)
class Value:
    """One measurement of the recording, in its unit; None where there is nothing to give."""

    unit: str
    value: float | None = None
    low: float | None = None
    high: float | None = None
    bound_95: float | None = None
    reliable: bool = False
    absent: str | None = None
    leads: tuple[str, ...] = ()
    reliable_s: float = 0.0


@dataclass(frozen=True, slots=True)
class PatientFirst:
    """A stretch that looks like a lethal rhythm or standstill: somebody must look at the patient."""

    leads: tuple[str, ...]
    start_s: float
    end_s: float
    pattern: str  # "fibrillation-or-flutter", "wide-fast", "standstill"
    text: str


@dataclass(frozen=True, slots=True)
class ElectrodeNoise:
    """Disturbance that comes from one electrode: rms in µV and its share of all electrodes' power."""

    electrode: str
    noise_uv: float
    share: float


@dataclass(frozen=True, slots=True)
class Placement:
    """A suspected misplacement or a broken lead law."""

    finding: str
    probability: float
    text: str


@dataclass(frozen=True, slots=True)
class Advice:
    """One act at one place, with its reason in numbers."""

    rank: int
    action: str
    target: str | None
    text: str
    because: tuple[str, ...] = ()
    gain_s: float | None = None  # measurement-seconds it would win back, where that was measured


@dataclass(frozen=True, slots=True)
class WonBack:
    """What one act at one place would win back, as measured."""

    action: str
    target: str | None
    gain_s: float  # measurement-seconds
    leads: tuple[str, ...]  # those that gain
    because: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class BestStrip:
    """The cleanest stretch over the leads that matter."""

    start_s: float
    end_s: float
    grade: str


@dataclass(frozen=True, slots=True)
class Judgement:
    """What the profile makes of it all."""

    verdict: str  # accept, accept-in-part, repeat
    reasons: tuple[str, ...] = field(default=())
