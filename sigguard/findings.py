"""What is found out about a recording, as plain facts: spans, faults, advice, alarms, values."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

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
    """One fault of one lead: the fraction of the recording it lies on, what it harms, how strong it is and when.

    ``strength`` is in ``unit`` (segments.STRENGTH_UNITS), None where there is none to give; ``when`` the
    stretches it lies on, to about a second, empty where they are not known.
    """

    kind: str
    fraction: float
    harms: tuple[str, ...] = ()
    strength: float | None = None
    unit: str = ""
    when: tuple[tuple[float, float], ...] = ()


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
class KindNoise:
    """One kind of disturbance from one electrode: rms in µV, its share of this kind, and how sure that is."""

    kind: str  # wander, motion, muscle, mains
    noise_uv: float
    share: float
    confidence: float


@dataclass(frozen=True, slots=True)
class ElectrodeNoise:
    """Disturbance that comes from one electrode: rms in µV and its share of all electrodes' power.

    ``confidence``: how likely this is one of the electrodes to see to; None where it was not judged.
    ``kinds``: the kinds that come from this electrode and from few others.
    """

    electrode: str
    noise_uv: float
    share: float
    confidence: float | None = None
    kinds: tuple[KindNoise, ...] = ()


@dataclass(frozen=True, slots=True)
class CommonNoise:
    """A disturbance that moves several electrodes together: rms in µV at an electrode, and the share that does."""

    kind: str
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


def under_alarm(
    alarms: Iterable[PatientFirst], start_s: float | NDArray[np.floating], end_s: float | NDArray[np.floating]
) -> NDArray[np.bool_]:
    """Whether a patient-first stretch lies on any part of the time from start to end, s; of scalars or arrays alike.

    Time under an alarm is kept and shown whatever its grade: nothing of it may be called noise or cut.
    """
    start, end = np.broadcast_arrays(start_s, end_s)
    out = np.zeros(start.shape, dtype=bool)
    for alarm in alarms:
        out |= (start < alarm.end_s) & (end > alarm.start_s)
    return out
