"""What to do about it: one act at one place, ranked by how much measurable signal it would win back.

The loss is counted from the table: each segment's measurements that are neither reliable nor absent,
times its seconds, laid to its main fault. An act would win back at most the loss of the segments it
is for. Time under a patient-first stretch is left out: what looks like noise there may be the heart.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from sigguard.electrodes import ELECTRODES, lead_rows
from sigguard.fault_summaries import gravest
from sigguard.findings import Advice, ElectrodeNoise, LeadSummary, PatientFirst, Placement, under_alarm
from sigguard.grading import FAULT_WORDS
from sigguard.segments import FAULTS, MEASUREMENTS, Segments
from sigguard.spans import lost

MAX_ADVICE = 5
NOT_WORTH_IT = 0.01  # share of all measurement-seconds below which nothing needs doing
OUTSTANDING = 2 / 3  # an electrode is named for a lead if it carries this share of the lead's disturbance
TWICE_EVEN = 2.0  # ... and this many times what it would if all electrodes were disturbed alike
SURE_ENOUGH = 0.5  # probability from which on a placement is worth a look
_LIMBS = ("RA", "LA", "LL")
_LIMB_WORDS = {"RA": "right arm (RA)", "LA": "left arm (LA)", "LL": "left leg (LL)"}
_PAIRS = {frozenset({"I", "II"}): "RA", frozenset({"I", "III"}): "LA", frozenset({"II", "III"}): "LL"}
_SIDE_FAULTS = [
    FAULTS.index(kind) for kind in ("weak", "narrow-band")
]  # lie on all of a lead; others come first
_UNEXPLAINED = len(FAULTS)
_KINDS = (*FAULTS, "unexplained")


@dataclass(slots=True)
class _Proposal:
    """An act at a place while its reasons are being gathered."""

    action: str
    target: str | None
    lost_s: float = 0.0  # measurement-seconds
    per_kind: dict[str, float] = field(default_factory=dict)
    leads: dict[str, None] = field(default_factory=dict)


def advise(
    segments: Segments,
    summaries: Sequence[LeadSummary],
    *,
    electrodes: Sequence[ElectrodeNoise] = (),
    patient_first: Sequence[PatientFirst] = (),
    placement: Sequence[Placement] = (),
    at_most: int = MAX_ADVICE,
) -> tuple[Advice, ...]:
    """At most five pieces of advice, the most rewarding first; the patient before all else.

    Where at least 99 % of all measurement-seconds are reliable (or absent) and nothing else was found,
    the one advice is that nothing needs doing; an empty table without findings gives none at all.
    """
    first = [*_patient(patient_first), *_placement(placement)]
    loss, whole_s = _loss(segments, patient_first)
    proposals = _proposals(segments.leads, loss, electrodes, summaries)
    worth = [p for p in proposals if p.lost_s > NOT_WORTH_IT * whole_s]
    rest = [_advice(p, segments.leads, whole_s, summaries, electrodes) for p in worth]
    if not first and not rest and len(segments):
        rest = [("nothing", None, "Nothing needs doing.", _fit_because(loss, whole_s))]
    return tuple(
        Advice(rank, action, target, text, because)
        for rank, (action, target, text, because) in enumerate([*first, *rest][:at_most], 1)
    )


# ── what is lost, and to which fault ──


def _loss(segments: Segments, patient_first: Sequence[PatientFirst]) -> tuple[NDArray[np.float64], float]:
    """(n_leads, 10) measurement-seconds lost by lead and main fault (last: none called), and all there are."""
    length_s = segments.end_s - segments.start_s
    counts = ~under_alarm(patient_first, segments.start_s, segments.end_s)
    direct = segments.fault.copy()
    direct[:, _SIDE_FAULTS] = 0
    first = gravest(replace(segments, fault=direct))
    first = np.where(first < 0, gravest(segments), first)
    main = np.where(first < 0, _UNEXPLAINED, first)
    seconds = lost(segments).sum(axis=1) * length_s * counts
    n = len(segments.leads)
    loss = np.bincount(segments.lead_index * len(_KINDS) + main, seconds, minlength=n * len(_KINDS))
    return loss.astype(np.float64).reshape(n, len(_KINDS)), float((length_s * counts).sum()) * len(
        MEASUREMENTS
    )


def _proposals(
    leads: tuple[str, ...],
    loss: NDArray[np.float64],
    electrodes: Sequence[ElectrodeNoise],
    summaries: Sequence[LeadSummary],
) -> list[_Proposal]:
    found: dict[tuple[str, str | None], _Proposal] = {}

    def lay(action: str, target: str | None, lead: int, kind: int) -> None:
        p = found.setdefault((action, target), _Proposal(action, target))
        seconds = float(loss[lead, kind])
        p.lost_s += seconds
        p.per_kind[_KINDS[kind]] = p.per_kind.get(_KINDS[kind], 0.0) + seconds
        p.leads[leads[lead]] = None

    worst = _worst_electrodes(leads, electrodes)
    for kind, name in enumerate(_KINDS):
        hit = [k for k in range(len(leads)) if loss[k, kind] > 0]
        names = [leads[k] for k in hit]
        common = _common_place(names, leads)
        for k in hit:
            lay(*_act(name, leads[k], worst.get(leads[k]), common, bool(electrodes)), k, kind)
    return sorted(found.values(), key=lambda p: -p.lost_s)


def _act(
    kind: str, lead: str, electrode: str | None, common: str | None, estimated: bool
) -> tuple[str, str | None]:
    """The act and its place for one fault of one lead."""
    if kind in ("motion", "wander"):
        if estimated:  # no electrode stands out: the patient moves, not one contact
            return ("reapply-electrode", electrode) if electrode else ("wait-and-repeat", None)
        if common == "all leads":
            return "wait-and-repeat", None
        return "reapply-electrode", common or _own_electrode(lead)
    if kind == "muscle":
        return "relax-muscles", None
    if kind == "mains":
        return "cut-mains", None
    if kind == "clipped":
        return "lower-gain", None
    if kind in ("flat", "missing"):
        return "check-wire", "patient cable" if common == "all leads" else common or _own_electrode(lead)
    if kind == "weak":
        return "check-contact", _own_electrode(lead)
    if kind == "narrow-band":
        return "record-wider", None
    return "wait-and-repeat", None


def _worst_electrodes(leads: Sequence[str], electrodes: Sequence[ElectrodeNoise]) -> dict[str, str]:
    """For each lead the electrode that stands out in its disturbance, where there is one."""
    power = np.zeros(len(ELECTRODES))
    for e in electrodes:
        if e.electrode in ELECTRODES:
            power[ELECTRODES.index(e.electrode)] = e.noise_uv**2
    positions, rows = lead_rows(leads)
    outstanding = power >= TWICE_EVEN * power.sum() / max(len(electrodes), 1)
    out = {}
    for position, row in zip(positions, rows, strict=True):
        share = row**2 * power
        if share.max() > 0 and share.max() >= OUTSTANDING * share.sum() and outstanding[share.argmax()]:
            out[leads[position]] = ELECTRODES[int(share.argmax())]
    return out


def _common_place(hit: Sequence[str], leads: Sequence[str]) -> str | None:
    """The electrode that the leads hit have in common, ``all leads``, or None: each by itself."""
    if len(leads) > 1 and len(hit) == len(leads):
        return "all leads"
    limb = frozenset(hit) & {"I", "II", "III"}
    present = frozenset(leads) & {"I", "II", "III"}
    if len(present) == 3 and limb in _PAIRS and not any(name.startswith("V") for name in hit):
        return _PAIRS[limb]
    return None


def _own_electrode(lead: str) -> str:
    """The chest electrode of a chest lead; otherwise the lead itself."""
    name = lead.strip().upper()
    return f"C{name[1]}" if len(name) == 2 and name[0] == "V" and name[1] in "123456" else f"lead {lead}"


# ── in words ──

_Words = tuple[str, str | None, str, tuple[str, ...]]


def _patient(patient_first: Sequence[PatientFirst]) -> list[_Words]:
    if not patient_first:
        return []
    because = tuple(p.text or p.pattern for p in patient_first[:3])
    return [("look-at-patient", "patient", "Look at the patient now, before the leads.", because)]


def _placement(placement: Sequence[Placement]) -> list[_Words]:
    likely = sorted((p for p in placement if p.probability >= SURE_ENOUGH), key=lambda p: -p.probability)
    return [
        (
            "check-placement",
            p.finding,
            "Check where the electrodes are and which wire is on which.",
            (p.text, f"probability {p.probability:.0%}".replace("%", " %")),
        )
        for p in likely
    ]


def _advice(
    p: _Proposal,
    leads: tuple[str, ...],
    whole_s: float,
    summaries: Sequence[LeadSummary],
    electrodes: Sequence[ElectrodeNoise],
) -> _Words:
    because = [*_fault_because(p, len(leads), summaries)]
    noise = next((e for e in electrodes if e.electrode == p.target), None)
    if noise:
        because.append(
            f"{noise.electrode} carries {noise.share:.0%} of the disturbance, {noise.noise_uv:.0f} µV".replace(
                "%", " %"
            )
        )
    because.append(f"costs {100 * p.lost_s / whole_s:.0f} % of all that could be measured")
    return p.action, p.target, _text(p), tuple(because)


def _text(p: _Proposal) -> str:
    place = _place_words(p.target)
    leads = _listing(p.leads)
    if p.action == "reapply-electrode":
        return (
            f"Reapply {place}: clean and dry the skin, abrade it lightly, use a new electrode with fresh gel."
        )
    if p.action == "check-contact":
        return f"Check {place}: its place, its contact, its gel. If the QRS stays this small, it is the patient's own."
    if p.action == "check-wire":
        return f"Check the wire of {place}: plugged in, whole, clipped to its electrode."
    if p.action == "wait-and-repeat":
        return "Let the patient lie still, with the cable hanging loose, then record again."
    return {
        "relax-muscles": "Warm the patient, rest the arms and hands. If it stays, move the limb electrodes towards "
        "the trunk and say so on the tracing: it alters amplitudes.",
        "cut-mains": "Keep the mains cable away from the patient cable, unplug what can be unplugged, renew the "
        "right-leg electrode.",
        "lower-gain": f"Lower the gain of {leads}: the signal is cut off at the limit.",
        "record-wider": "Record from 0.05 to 150 Hz, at 500 samples per second, in steps of at most 5 µV.",
    }[p.action]


def _place_words(target: str | None) -> str:
    if target is None:
        return "the electrodes"
    if target in _LIMBS:
        return f"the {_LIMB_WORDS[target]} electrode"
    if target in ELECTRODES:
        return f"chest electrode {target} (lead V{target[1]})"
    if target == "patient cable":
        return "the patient cable"
    return f"the electrodes of {target}"


def _fault_because(p: _Proposal, n_leads: int, summaries: Sequence[LeadSummary]) -> Iterable[str]:
    """For each fault behind the proposal: on which leads it lies, and for how much of the time."""
    for kind in sorted(p.per_kind, key=lambda k: -p.per_kind[k])[:2]:
        if kind == "unexplained":
            yield f"measurements lost without a fault that could be named in {_count(len(p.leads), n_leads)}"
            continue
        on = {
            s.lead: fault.fraction
            for s in summaries
            if s.lead in p.leads
            for fault in s.faults
            if fault.kind == kind
        }
        if on:
            worst = max(on, key=lambda lead: on[lead])
            most = (
                f"{100 * on[worst]:.0f} % of {worst}"
                if len(on) == 1
                else f"up to {100 * on[worst]:.0f} % of {worst}"
            )
            yield f"{FAULT_WORDS[kind]} in {_count(len(on), n_leads)}, {most}"


def _count(n: int, n_leads: int) -> str:
    return f"{n} of {n_leads} leads" if n_leads > 1 else "the lead"


def _listing(words: Iterable[str]) -> str:
    words = list(words)
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} and {words[-1]}"


def _fit_because(loss: NDArray[np.float64], whole_s: float) -> tuple[str, ...]:
    if whole_s <= 0:
        return ()
    return (f"{100 * (1 - loss.sum() / whole_s):.0f} % of all that could be measured can be trusted",)
