"""From what is reliable on each lead segment to grades, values of the recording and a verdict."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import floor

import numpy as np
from numpy.typing import NDArray

from sigguard.combining import combine_values
from sigguard.findings import Judgement, LeadSummary, PatientFirst, Value, under_alarm
from sigguard.profile import Profile, Rule
from sigguard.segments import ABSENT, FAULTS, GRADES, MEASUREMENTS, UNITS, Segments
from sigguard.spans import (
    Grid,
    best_strip,
    covered_seconds,
    lead_summaries,
    longest_run,
    reliable_seconds,
    spans,
)

__all__ = [
    "best_strip",
    "combine_values",
    "grade_rows",
    "judge",
    "lead_summaries",
    "reliable_seconds",
    "spans",
]

RATE, PR, QRS, QT, ST = range(5)
FAULT_WORDS = dict(
    zip(
        FAULTS,
        (
            "baseline wander",
            "muscle or tremor",
            "mains hum",
            "movement",
            "flat line",
            "cut off at the limit",
            "no signal",
            "QRS too small",
            "recorded too coarsely",
        ),
        strict=True,
    )
)
_WORDS = {"rate": "heart rate", "pr": "PR", "qrs": "QRS", "qt": "QT", "qtc": "QTc", "st": "ST"}
_ABSENT_WORDS = {
    "no-wave": "no such wave in this rhythm",
    "no-fixed-relation": "P waves without a steady PR",
    "too-small-here": "too small to see",
}
_GRADE_ASKED = {"rhythm": "the rate", "intervals": "all intervals", "all": "everything"}
_SLACK = 1e-9  # shares are sums of floats
_NAMED_AT_MOST = 3
_FAULT_WORTH_NAMING = 0.1  # fraction of a lead's time


def grade_rows(reliable: NDArray[np.bool_], absent: NDArray[np.int8]) -> NDArray[np.int8]:
    """What can be measured on each lead segment, as an index into GRADES.

    (n, 5), (n, 5) → (n,). ``all``: the five; ``intervals``: all but ST; ``rhythm``: the rate, whatever
    of the rest; ``none``: not even the rate. An absent wave (see ABSENT) lowers nothing; the rate itself
    must be reliable, for without beats there is nothing to be absent from.
    """
    fit = np.asarray(reliable, bool) | (np.asarray(absent) > 0)
    rate = np.asarray(reliable, bool)[:, RATE]
    intervals = rate & fit[:, PR] & fit[:, QRS] & fit[:, QT]
    everything = intervals & fit[:, ST]
    return rate.astype(np.int8) + intervals.astype(np.int8) + everything.astype(np.int8)


# ── the verdict ──


@dataclass(frozen=True, slots=True)
class _Demand:
    met: bool
    text: str


def judge(
    profile: Profile,
    segments: Segments,
    values: Mapping[str, Value],
    st_by_lead: Mapping[str, Value],
    patient_first: Sequence[PatientFirst] = (),
    *,
    summaries: Sequence[LeadSummary] | None = None,
) -> Judgement:
    """What the profile makes of the recording, with reasons in plain words.

    ``summaries`` are those of the same table, to save working them out once more.

    Segments under a patient-first stretch never count against a recording: if it is not accepted as
    a whole, it is judged once more by the rest. Where nothing is left, the verdict is ``repeat``, after
    the patient has been seen to, and the reasons say that it shows why.
    """
    alarms = _alarm_reasons(patient_first)
    if not len(segments):
        return Judgement("repeat", (*alarms, "No segment could be checked."))
    verdict, reasons = _by_rules(profile, segments, values, st_by_lead, summaries)
    if alarms and verdict != "accept":
        rest = segments.rows(~under_alarm(patient_first, segments.start_s, segments.end_s))
        if not len(rest):
            kept = "All of it lies under a patient-first stretch: keep it, see to the patient, then record again."
            return Judgement(verdict, (*alarms, kept))
        again, why = _by_rules(profile, rest, values, st_by_lead, None)
        order = ("repeat", "accept-in-part", "accept")
        if order.index(again) > order.index(verdict):
            verdict, reasons = again, [*why, "Judged by the time outside the patient-first stretches."]
    return Judgement(verdict, (*alarms, *reasons))


LOOK_FIRST = "Look at the patient first"


def _alarm_reasons(patient_first: Sequence[PatientFirst]) -> list[str]:
    texts = [
        p.text if p.text.startswith(LOOK_FIRST) else f"{LOOK_FIRST}: {p.text or p.pattern}"
        for p in patient_first[:_NAMED_AT_MOST]
    ]
    more = len(patient_first) - len(texts)
    return texts + (
        [f"{more} more such stretches."] if more > 1 else ["One more such stretch."] if more else []
    )


def _by_rules(
    profile: Profile,
    segments: Segments,
    values: Mapping[str, Value],
    st_by_lead: Mapping[str, Value],
    summaries: Sequence[LeadSummary] | None,
) -> tuple[str, list[str]]:
    accept = _demands(profile.accept, segments, values, st_by_lead)
    short = [d.text for d in accept if not d.met]
    if not short:
        return "accept", [d.text for d in accept]
    spoils = _what_spoils(lead_summaries(segments) if summaries is None else summaries)
    part = _demands(profile.in_part, segments, values, st_by_lead)
    if all(d.met for d in part):
        return "accept-in-part", [
            *(d.text for d in part),
            *(f"Not in full: {text}" for text in short),
            *spoils,
        ]
    return "repeat", [*(d.text for d in part if not d.met), *spoils]


def _demands(
    rule: Rule, segments: Segments, values: Mapping[str, Value], st_by_lead: Mapping[str, Value]
) -> list[_Demand]:
    """Each thing the rule asks for: whether it is met, and a sentence that says so."""
    grid = Grid.of(segments)
    total_s = float(grid.length_s.sum())
    found: list[_Demand] = []
    if rule.values:
        found += _value_demands(rule, values, segments, grid)
    if rule.st_lead_share:
        found.append(_st_demand(rule.st_lead_share, st_by_lead))
    if rule.grade_lead_share:
        found.append(_grade_demand(rule, segments, grid, total_s))
    if rule.rate_time_share:
        seconds = reliable_seconds(segments)[:, RATE]
        best = int(np.argmax(seconds))
        share = float(seconds[best]) / total_s
        where = (
            f"in {_lead_words([segments.leads[best]], len(segments.leads))}" if share > 0 else "in any lead"
        )
        text = f"The heart rate can be trusted for {_percent(share)} of the time {where}; asked: {_percent(rule.rate_time_share)}."
        found.append(_Demand(share >= rule.rate_time_share - _SLACK, text))
    if rule.rate_run_s:
        run_s, lead = longest_run(segments, segments.reliable[:, RATE])
        where = (
            f"in {_lead_words([segments.leads[lead]], len(segments.leads))}"
            if lead is not None
            else "in any lead"
        )
        text = (
            f"The heart rate can be trusted for {run_s:.0f} s on end {where}; asked: {rule.rate_run_s:g} s."
        )
        found.append(_Demand(run_s >= rule.rate_run_s - _SLACK, text))
    for name in rule.somewhere:
        k = MEASUREMENTS.index(name)
        met = bool((segments.reliable[:, k] | (segments.absent[:, k] > 0)).any())
        text = f"{_WORDS[name]} can be trusted {'in part of the recording' if met else 'nowhere'}."
        found.append(_Demand(met, _sentence(text)))
    return found


def _value_demands(rule: Rule, values: Mapping[str, Value], segments: Segments, grid: Grid) -> list[_Demand]:
    """One demand over the values that are met, one for each that is not."""
    total_s = float(grid.length_s.sum())
    met, absent, unmet = [], [], []
    for name in rule.values:
        value, k = values.get(name, Value(UNITS[name])), MEASUREMENTS.index(name)
        absent_there = (segments.absent[:, k] > 0) & (segments.absent[:, k] != ABSENT.index("too-small-here"))
        held_s = max(value.reliable_s, covered_seconds(grid, segments.reliable[:, k] | absent_there))
        share = min(held_s / total_s, 1.0)
        if value.reliable and share >= rule.values_time_share - _SLACK:
            met.append(_WORDS[name])
        elif not value.reliable and value.absent:
            absent.append(f"{_WORDS[name]} ({_ABSENT_WORDS[value.absent]})")
        elif value.reliable:
            unmet.append(
                f"{_WORDS[name]} can be trusted for {_percent(share)} of the time; asked: {_percent(rule.values_time_share)}."
            )
        else:
            unmet.append(f"{_WORDS[name]} cannot be trusted.")
    out = [_Demand(False, _sentence(text)) for text in unmet]
    if met:
        out.append(_Demand(True, _sentence(f"{_listing(met)} can be trusted.")))
    if absent:
        out.append(_Demand(True, _sentence(f"nothing to measure: {_listing(absent)}.")))
    return out


def _st_demand(asked: float, st_by_lead: Mapping[str, Value]) -> _Demand:
    bad = [lead for lead, value in st_by_lead.items() if not value.reliable and not value.absent]
    n = len(st_by_lead)
    if not bad and n:
        return _Demand(True, "ST can be trusted in every lead." if n > 1 else "ST can be trusted.")
    met = n > 0 and (n - len(bad)) / n >= asked - _SLACK
    return _Demand(met, f"ST can be trusted in {n - len(bad)} of {n} leads; not in {_lead_words(bad, n)}.")


def _grade_demand(rule: Rule, segments: Segments, grid: Grid, total_s: float) -> _Demand:
    n = len(segments.leads)
    high = segments.grade >= GRADES.index(rule.grade)
    share = float((segments.end_s - segments.start_s)[high].sum()) / (total_s * n)
    met = share >= rule.grade_lead_share - _SLACK
    what, asked = _GRADE_ASKED[rule.grade], _percent(rule.grade_lead_share)
    if len(grid.start_s) == 1:
        return _Demand(met, f"{int(high.sum())} of {n} leads allow {what}; asked: {asked} of them.")
    return _Demand(
        met, f"On average over time {_percent(share)} of the {n} leads allow {what}; asked: {asked}."
    )


def _what_spoils(summaries: Sequence[LeadSummary]) -> list[str]:
    """One sentence that names the worst faults and the leads they lie on; none if no fault is called."""
    leads: dict[str, list[str]] = {}
    weight: dict[str, float] = {}
    for summary in summaries:
        for fault in summary.faults:
            if fault.harms and fault.fraction >= _FAULT_WORTH_NAMING:
                leads.setdefault(fault.kind, []).append(summary.lead)
                weight[fault.kind] = weight.get(fault.kind, 0.0) + fault.fraction * len(fault.harms)
    worst = sorted(leads, key=lambda kind: -weight[kind])[:_NAMED_AT_MOST]
    if not worst:
        return []
    n = len(summaries)
    return [
        "In the way: " + "; ".join(f"{FAULT_WORDS[k]} in {_lead_words(leads[k], n)}" for k in worst) + "."
    ]


def _lead_words(leads: Sequence[str], n_leads: int) -> str:
    if len(leads) == n_leads:
        return f"all {n_leads} leads" if n_leads > 1 else "the only lead"
    return f"{'lead' if len(leads) == 1 else 'leads'} {_listing(leads)}"


def _listing(words: Sequence[str]) -> str:
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} and {words[-1]}"


def _percent(share: float) -> str:
    """Rounded down, so that what falls short never reads as if it did not."""
    return f"{floor(100 * share + 1e-6)} %"


def _sentence(text: str) -> str:
    return text[0].upper() + text[1:]
