"""Several takes of one patient: which to keep for each measurement and over all, and why.

Decided on finished reports alone. Best is what can be trusted, then the smaller bound, then trusted for longer,
then on more leads; figures that read alike on the page count as alike. A take with a patient-first stretch is
never to be discarded, whatever its quality.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from itertools import combinations
from statistics import median

import numpy as np

from sigguard import __version__
from sigguard.errors import UsageError
from sigguard.findings import Value
from sigguard.report.comparison import (
    Choice,
    ComparedTake,
    Comparison,
    Disagreement,
    Standing,
    read_bound,
    read_value,
)
from sigguard.report.document import Report
from sigguard.report.page import duration_words
from sigguard.report.words import SHORT_WORDS, UNIT_WORDS, VERDICT_WORDS, listing
from sigguard.segments import MEASUREMENTS, UNITS

NO_SUCH_WAVE = ("no-wave", "no-fixed-relation")  # absent by the rhythm; too small to see is another matter
LONGER = 1.5  # takes whose durations differ by more are said to
_VERDICTS = ("accept", "accept-in-part", "repeat")
# What a choice goes by, best first, and how to say it: (key of a standing, words for its figure).
_Figure = tuple[Callable[[Standing], float], Callable[[Standing], str]]


def compare(
    takes: Sequence[tuple[str, Report]],
    *,
    links: Mapping[str, str] | None = None,
    unreadable: Sequence[tuple[str, str]] = (),
) -> Comparison:
    """Hold takes, each with a name of its own, against each other, in their order.

    ``links`` lead from a take's name to its report; ``unreadable`` takes are passed on by name and sentence.
    Raises UsageError without any take, and where two have one name.
    """
    names = [name for name, _ in takes]
    if not names or len(set(names)) != len(names):
        raise UsageError(f"compare needs takes with a name each, no two alike; found {names}")
    choices = tuple(
        _choose(m, [_standing(name, report, m) for name, report in takes], len(takes)) for m in MEASUREMENTS
    )
    compared = tuple(_compared(name, report, (links or {}).get(name, "")) for name, report in takes)
    keep, because = _over_all(compared, choices)
    return Comparison(
        software_version=__version__,
        takes=compared,
        keep=keep,
        because=because,
        choices=choices,
        disagreements=_disagreements(takes),
        must_not_discard=tuple(take.name for take in compared if take.patient_first),
        notes=_notes(compared, unreadable),
        unreadable=tuple(unreadable),
    )


def _compared(name: str, report: Report, link: str) -> ComparedTake:
    info, segments = report.info, report.segments
    length_s = segments.end_s - segments.start_s
    fit = (segments.reliable | (segments.absent > 0)).mean(axis=1)
    return ComparedTake(
        name=name,
        verdict=report.verdict,
        duration_s=info.duration_s,
        leads=info.leads,
        profile=report.profile_name,
        trusted=tuple(m for m in MEASUREMENTS if _standing(name, report, m).reliable),
        share=float(np.average(fit, weights=length_s)) if len(segments) else 0.0,
        patient_first=tuple((a.pattern, a.start_s, a.end_s) for a in report.patient_first_to_tell),
        path=info.path,
        sha256=info.sha256,
        link=link,
    )


# ── one measurement ──


def _standing(name: str, report: Report, measurement: str) -> Standing:
    if measurement != "st":
        v = report.values.get(measurement, Value(UNITS[measurement]))
        return Standing(
            name, v.reliable and v.value is not None, v.value, v.bound_95, v.reliable_s, v.leads, v.absent
        )
    held = {
        lead: v
        for lead, v in report.st_by_lead.items()
        if v.reliable and v.value is not None and not v.absent
    }
    bounds = [v.bound_95 for v in held.values() if v.bound_95 is not None]
    return Standing(
        name,
        bool(held),
        None,
        median(bounds) if bounds else None,
        sum(v.reliable_s for v in held.values()) / max(len(held), 1),
        tuple(held),
        None if held else next((v.absent for v in report.st_by_lead.values() if v.absent), None),
    )


def _figures(measurement: str) -> list[_Figure]:
    """What reliable takes are told apart by, best first; smaller is better."""
    unit = UNITS[measurement]
    bound: _Figure = (
        lambda s: read_bound(s.bound, unit),
        lambda s: (
            f"± {read_value(read_bound(s.bound, unit), unit)} {UNIT_WORDS[unit]}"
            if s.bound is not None
            else "no bound"
        ),
    )
    time: _Figure = (lambda s: -round(s.reliable_s), lambda s: f"trusted for {duration_words(s.reliable_s)}")
    leads: _Figure = (
        lambda s: -len(s.leads),
        lambda s: f"on {len(s.leads)} {'lead' if len(s.leads) == 1 else 'leads'}",
    )
    # ST is measured lead by lead: on how many it holds comes before how well.
    return [leads, bound, time] if measurement == "st" else [bound, time, leads]


def _choose(measurement: str, standings: Sequence[Standing], n_takes: int) -> Choice:
    held = [s for s in standings if s.reliable]
    whole = tuple(standings)
    if not held:
        missing = [s.take for s in standings if s.absent in NO_SUCH_WAVE]
        why = f"no such wave in this rhythm ({listing(missing)})" if missing else "no take can be trusted"
        return Choice(measurement, (), why, whole)
    figures = _figures(measurement)
    best = min(held, key=lambda s: [key(s) for key, _ in figures])
    alike = [s for s in held if all(key(s) == key(best) for key, _ in figures)]
    keep = tuple(s.take for s in alike)
    others = [s for s in held if s not in alike]
    all_words = ", ".join(words(best) for _, words in figures)
    if len(alike) > 1:
        why = f"alike: {all_words}"
    elif n_takes == 1:
        why = f"the only take: {all_words}"
    elif not others:
        why = f"the only one to be trusted: {all_words}"
    else:
        rival = min(others, key=lambda s: [key(s) for key, _ in figures])
        said = []
        for key, words in figures:
            if key(best) != key(rival):
                said.append(f"{words(best)} against {words(rival)} ({rival.take})")
                break
            said.append(f"{words(best)} alike")
        why = ", ".join(said)
    longest = max(others, key=lambda s: s.reliable_s, default=None)
    if longest is not None and longest.reliable_s > 2 * best.reliable_s:
        why += f", though for {duration_words(best.reliable_s)} only, {longest.take} for {duration_words(longest.reliable_s)}"
    return Choice(measurement, keep, why, whole)


# ── over all ──


def _over_all(takes: Sequence[ComparedTake], choices: Sequence[Choice]) -> tuple[tuple[str, ...], str]:
    """The takes to keep over all, and why: verdict (under one profile), measurements fit, won, share of time fit."""
    fit = {
        take.name: sum(
            s.reliable or s.absent in NO_SUCH_WAVE
            for c in choices
            for s in c.standings
            if s.take == take.name
        )
        for take in takes
    }
    won = {take.name: sum(take.name in c.keep for c in choices) for take in takes}
    figures: list[tuple[Callable[[ComparedTake], float], Callable[[ComparedTake], str]]] = [
        (lambda t: -fit[t.name], lambda t: f"{fit[t.name]} of {len(choices)} measurements fit"),
        (lambda t: -won[t.name], lambda t: f"best or as good in {won[t.name]}"),
        (lambda t: -round(100 * t.share), lambda t: f"{100 * t.share:.0f} % of leads and time fit"),
    ]
    if len({take.profile for take in takes}) == 1:  # verdicts by different rules say nothing about each other
        figures.insert(0, (lambda t: _VERDICTS.index(t.verdict), lambda t: VERDICT_WORDS[t.verdict].lower()))
    usable = [take for take in takes if take.trusted]
    if not usable:
        return (), "no take can be trusted for any measurement"
    best = min(usable, key=lambda t: [key(t) for key, _ in figures])
    alike = [t for t in usable if all(key(t) == key(best) for key, _ in figures)]
    others = [t for t in takes if t not in alike]
    if len(alike) > 1 or not others:
        words = ", ".join(words(best) for _, words in figures)
        return tuple(t.name for t in alike), f"{'alike' if len(alike) > 1 else 'the only take'}: {words}"
    rival = min(others, key=lambda t: [key(t) for key, _ in figures])
    said = []
    for key, words_of in figures:
        if key(best) != key(rival):
            said.append(f"{words_of(best)} against {words_of(rival)} ({rival.name})")
            break
        said.append(f"{words_of(best)} alike")
    return (best.name,), ", ".join(said)


# ── values that cannot be of one patient in one state ──


def _disagreements(takes: Sequence[tuple[str, Report]]) -> tuple[Disagreement, ...]:
    """Per measurement the pair of takes that differs the most beyond its bounds."""
    out = []
    for m in MEASUREMENTS:
        found: list[tuple[float, Disagreement]] = []
        for (a, one), (b, other) in combinations(takes, 2):
            if m == "st":
                shared = [lead for lead in one.st_by_lead if lead in other.st_by_lead]
                pairs = [(lead, one.st_by_lead[lead], other.st_by_lead[lead]) for lead in shared]
            else:
                empty = Value(UNITS[m])
                pairs = [("", one.values.get(m, empty), other.values.get(m, empty))]
            for lead, v, w in pairs:
                # A wave that is missing means something only where the beats were found.
                beats = _held(one.values.get("rate")) and _held(other.values.get("rate"))
                found += _differ(m, lead or None, (a, b), v, w, beats=beats)
        if found:
            worst = max(found, key=lambda item: item[0])[1]
            out.append(
                Disagreement(
                    worst.measurement,
                    worst.takes,
                    worst.text,
                    worst.values,
                    worst.bounds,
                    worst.lead,
                    len(found) - 1,
                )
            )
    return tuple(out)


def _held(v: Value | None) -> bool:
    return v is not None and v.reliable and v.value is not None


def _differ(
    m: str, lead: str | None, names: tuple[str, str], v: Value, w: Value, *, beats: bool
) -> list[tuple[float, Disagreement]]:
    """(excess over the bounds, the disagreement) of two values, or nothing."""
    what = SHORT_WORDS[m] + (f" in {lead}" if lead else "")
    if v.value is not None and w.value is not None and _held(v) and _held(w):
        if v.bound_95 is None or w.bound_95 is None:
            return []
        apart, allowed = abs(v.value - w.value), v.bound_95 + w.bound_95
        if not apart > allowed:
            return []
        unit = UNITS[m]
        (first, second) = (
            f"{read_value(x.value or 0.0, unit)} ± {read_value(read_bound(x.bound_95, unit), unit)}"
            for x in (v, w)
        )
        text = (
            f"{what}: {first} in {names[0]}, {second} {UNIT_WORDS[unit]} in {names[1]}: "
            f"{read_value(apart, unit, finer=1)} apart, both bounds allow {read_value(allowed, unit, finer=1)}"
        )
        return [
            (
                apart / max(allowed, 1e-9),
                Disagreement(m, names, text, (v.value, w.value), (v.bound_95, w.bound_95), lead),
            )
        ]
    if not beats or m not in ("pr", "qrs", "qt"):
        return []
    for x, y, (here, there) in ((v, w, names), (w, v, names[::-1])):
        if x.value is not None and _held(x) and y.absent in NO_SUCH_WAVE:
            text = f"{what}: {x.value:.0f} {UNIT_WORDS[UNITS[m]]} in {here}, no such wave in the rhythm of {there}"
            values = (v.value if _held(v) else None, w.value if _held(w) else None)
            return [(float("inf"), Disagreement(m, names, text, values, (v.bound_95, w.bound_95), lead))]
    return []


# ── what a reader must know ──


def _notes(takes: Sequence[ComparedTake], unreadable: Sequence[tuple[str, str]]) -> tuple[str, ...]:
    notes = []
    if len(takes) == 1:
        more = "; the other could not be checked" if len(unreadable) == 1 else ""
        notes.append(f"Only {takes[0].name} could be looked at{more}: there is nothing to hold it against.")
    for a, b in combinations(takes, 2):
        if a.sha256 is not None and a.sha256 == b.sha256:
            notes.append(f"{a.name} and {b.name} are the same file.")
    every = [set(take.leads) for take in takes]
    if any(leads != every[0] for leads in every):
        shared = [lead for lead in takes[0].leads if all(lead in leads for leads in every)]
        counts = listing(f"{take.name} has {len(take.leads)}" for take in takes)
        notes.append(
            f"The leads differ: {counts}; in all takes: {', '.join(shared) or 'none'}. A take with more leads can hold more; "
            "ST is set against ST on shared leads only."
        )
    shortest, longest = (f(take.duration_s for take in takes) for f in (min, max))
    if longest > LONGER * shortest:
        spans = listing(f"{take.name} lasts {duration_words(take.duration_s)}" for take in takes)
        notes.append(
            f"The takes differ in length: {spans}. A bound is the largest over the stretches used, so a longer take has "
            "more chances of a large one."
        )
    if len({take.profile for take in takes}) > 1:
        rules = listing(f"{take.name} by {take.profile}" for take in takes)
        notes.append(f"Judged by different rules ({rules}): the verdicts do not count in the choice.")
    return tuple(notes)
