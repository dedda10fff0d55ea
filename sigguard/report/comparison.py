"""Several takes of one patient held against each other: the facts, and their form as JSON (``compare.json``)."""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from importlib import resources
from typing import Any

from sigguard.findings import CAUTION
from sigguard.report.document import DECIMALS, number
from sigguard.report.table import round_up
from sigguard.report.words import PATTERN_WORDS, SHORT_WORDS, clean, listing, plain, stretch
from sigguard.segments import UNITS

SCHEMA_NAME = "sigguard.compare/1"
SHOWN_DECIMALS = {"1/min": 0, "ms": 0, "mV": 3}  # for a reader; figures that read alike count as alike


@dataclass(frozen=True, slots=True)
class Standing:
    """What one take gives for one measurement.

    Of ST, which every lead has its own of, ``value`` is None, ``bound`` the median bound of the leads that can be
    trusted, and ``leads`` names these.
    """

    take: str
    reliable: bool
    value: float | None = None
    bound: float | None = None  # bound_95, in the measurement's unit
    reliable_s: float = 0.0
    leads: tuple[str, ...] = ()
    absent: str | None = None


@dataclass(frozen=True, slots=True)
class Choice:
    """The take to keep for one measurement; several where they are alike, none where no take can be trusted."""

    measurement: str
    keep: tuple[str, ...]
    because: str
    standings: tuple[Standing, ...]  # in the order of the takes


@dataclass(frozen=True, slots=True)
class Disagreement:
    """Two takes whose values lie farther apart than both bounds allow; the pair that does so the most.

    ``values`` and ``bounds`` follow ``takes``, in the measurement's unit; None where the one has a wave and the
    other none. ``lead`` is that of an ST level, else None; ``n_more``: pairs (and for ST leads) besides this one.
    """

    measurement: str
    takes: tuple[str, str]
    text: str
    values: tuple[float | None, float | None] = (None, None)
    bounds: tuple[float | None, float | None] = (None, None)
    lead: str | None = None
    n_more: int = 0


@dataclass(frozen=True, slots=True)
class ComparedTake:
    """One take, as far as the comparison looks at it. ``name`` tells it from the others."""

    name: str
    verdict: str
    duration_s: float
    leads: tuple[str, ...]
    profile: str
    trusted: tuple[str, ...]  # measurements that can be trusted
    share: float  # of measurements over leads and time that are reliable or absent
    patient_first: tuple[tuple[str, float, float], ...] = ()  # pattern, start_s, end_s
    path: str | None = None
    sha256: str | None = None
    link: str = ""  # to its report, relative to the page


@dataclass(frozen=True, slots=True)
class Comparison:
    """Which take to keep, for each measurement and over all, and why.

    ``keep``: the best over all, several where they are alike. ``must_not_discard``: takes with a patient-first
    stretch, whatever their quality.
    """

    software_version: str
    takes: tuple[ComparedTake, ...]
    keep: tuple[str, ...]
    because: str
    choices: tuple[Choice, ...]
    disagreements: tuple[Disagreement, ...] = ()
    must_not_discard: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    unreadable: tuple[tuple[str, str], ...] = field(default=())  # name, what is wrong and what to do

    def to_dict(self) -> dict[str, Any]:
        """The comparison as ``compare.json`` has it: plain JSON types, no NaN, validates against the schema."""
        return {
            "schema": SCHEMA_NAME,
            "software": {"version": clean(self.software_version)},
            "patient_first": [
                {
                    "take": clean(take.name),
                    "pattern": pattern,
                    "start_s": number(start_s, 3),
                    "end_s": number(end_s, 3),
                }
                for take in self.takes
                for pattern, start_s, end_s in take.patient_first
            ],
            "must_not_discard": [clean(name) for name in self.must_not_discard],
            "overall": {"keep": [clean(name) for name in self.keep], "because": clean(self.because)},
            "measurements": {choice.measurement: _choice(choice) for choice in self.choices},
            "disagreements": [_disagreement(d) for d in self.disagreements],
            "takes": [_take(take) for take in self.takes],
            "unreadable": [{"take": clean(name), "text": clean(text)} for name, text in self.unreadable],
            "notes": [clean(note) for note in self.notes],
            "caution": CAUTION,
        }

    def to_json(self, *, indent: int | None = 1) -> str:
        return json.dumps(self.to_dict(), allow_nan=False, ensure_ascii=False, indent=indent)


def one_line(found: Comparison) -> str:
    """``keep B over all (why); rate: A and B alike; PR: B …``, led by PATIENT FIRST where somebody must look."""
    parts = [f"keep {listing(found.keep)} over all ({found.because})" if found.keep else found.because]
    by_take: dict[tuple[str, ...], list[str]] = {}
    for choice in found.choices:
        by_take.setdefault(choice.keep, []).append(SHORT_WORDS[choice.measurement])
    for keep, names in by_take.items():
        alike = " alike" if len(keep) > 1 else ""
        parts.append(f"{listing(names)}: {listing(keep) or 'no take can be trusted'}{alike}")
    if found.disagreements:
        names = list(dict.fromkeys(SHORT_WORDS[d.measurement] for d in found.disagreements))
        parts.append(
            f"the takes differ in {listing(names)} beyond their bounds: two patients, or a changed state?"
        )
    line = "; ".join(parts)
    alarmed = [take for take in found.takes if take.patient_first]
    if alarmed:
        pattern, start_s, end_s = alarmed[0].patient_first[0]
        what = f"{alarmed[0].name} {PATTERN_WORDS.get(pattern, pattern)} {stretch(start_s, end_s)}"
        more = sum(len(take.patient_first) for take in alarmed) - 1
        names_kept = listing(take.name for take in alarmed)
        line = f"PATIENT FIRST: {what}{f' and {more} more' if more else ''}; discard nothing of {names_kept} | {line}"
    return plain(line)


def load_compare_schema() -> dict[str, Any]:
    """The JSON Schema (draft 2020-12) every ``compare.json`` validates against."""
    text = resources.files("sigguard.report").joinpath("compare_schema.json").read_text(encoding="utf-8")
    found: dict[str, Any] = json.loads(text)
    return found


def _bound(bound: float | None, unit: str) -> float | None:
    """A bound as reports give it: rounded up, so that rounding never narrows it."""
    if bound is None or number(bound, 6) is None:
        return None
    return float(round_up(bound, decimals=DECIMALS[unit]))


def read_bound(bound: float | None, unit: str) -> float:
    """The bound as a reader is shown it, rounded up; infinite where there is none."""
    if bound is None or number(bound, 6) is None:
        return float("inf")
    return float(round_up(bound, decimals=SHOWN_DECIMALS[unit]))


def read_value(value: float, unit: str, *, finer: int = 0) -> str:
    """A value as a reader is shown it, with a real minus sign; ``finer``: so many decimals more."""
    decimals = SHOWN_DECIMALS[unit] + finer
    return f"{round(value, decimals) + 0.0:.{decimals}f}".replace("-", "−")


def _choice(choice: Choice) -> dict[str, Any]:
    unit = UNITS[choice.measurement]
    return {
        "keep": [clean(name) for name in choice.keep],
        "because": clean(choice.because),
        "unit": unit,
        "takes": [
            {
                "take": clean(s.take),
                "value": number(s.value, DECIMALS[unit]),
                "bound_95": _bound(s.bound, unit),
                "reliable": s.reliable,
                "absent": s.absent or None,
                "reliable_s": number(s.reliable_s, 3) or 0.0,
                "leads": [clean(lead) for lead in s.leads],
            }
            for s in choice.standings
        ],
    }


def _disagreement(d: Disagreement) -> dict[str, Any]:
    unit = UNITS[d.measurement]
    return {
        "measurement": d.measurement,
        "lead": None if d.lead is None else clean(d.lead),
        "takes": [clean(name) for name in d.takes],
        "values": [number(v, DECIMALS[unit]) for v in d.values],
        "bounds_95": [_bound(b, unit) for b in d.bounds],
        "unit": unit,
        "n_more": d.n_more,
        "text": clean(d.text),
    }


def _take(take: ComparedTake) -> dict[str, Any]:
    return {
        "take": clean(take.name),
        "path": None if take.path is None else clean(take.path),
        "sha256": take.sha256,
        "verdict": take.verdict,
        "profile": clean(take.profile),
        "duration_s": number(take.duration_s, 3),
        "leads": [clean(lead) for lead in take.leads],
        "trusted": list(take.trusted),
        "share": number(take.share, 4),
        "report": clean(take.link) or None,
    }
