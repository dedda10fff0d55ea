"""What to do about it: one act at one place, ranked by how much measurable signal it would win back.

What each act would win back was measured by scoring the recording again without what the act would cure
(``rescoring``); here it is put in order and in words. The patient comes first, then what is wrong with the
placement. Time under a patient-first stretch is left out: what looks like noise there may be the heart.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from sigguard.electrodes import ELECTRODES
from sigguard.findings import Advice, PatientFirst, Placement, WonBack, under_alarm
from sigguard.segments import MEASUREMENTS, Segments
from sigguard.spans import lost

MAX_ADVICE = 5
NOT_WORTH_IT = 0.01  # share of all measurement-seconds below which an act is not given
LITTLE_LOST = 0.035  # ... and below which nothing needs doing: two measurements of one of twelve leads
SURE_ENOUGH = 0.5  # probability from which on a placement is worth a look
_LIMB_WORDS = {"RA": "right arm (RA)", "LA": "left arm (LA)", "LL": "left leg (LL)"}


def advise(
    segments: Segments,
    acts: Sequence[WonBack] = (),
    *,
    patient_first: Sequence[PatientFirst] = (),
    placement: Sequence[Placement] = (),
    at_most: int = MAX_ADVICE,
) -> tuple[Advice, ...]:
    """At most five pieces of advice: the patient, the placement, then ``acts`` in the order given.

    Where at least 96.5 % of all measurement-seconds are reliable (or absent) and nothing else was found,
    the one advice is that nothing needs doing; where more is lost and no act wins it back, to record once
    more. An empty table without findings gives none at all.
    """
    first = [*_patient(patient_first), *_placement(placement)]
    seconds, whole_s = seconds_lost(segments, patient_first)
    lost_s = float(seconds.sum())
    told = [
        Advice(0, act.action, act.target, _text(act), act.because, act.gain_s)
        for act in acts
        if act.gain_s > NOT_WORTH_IT * whole_s
    ]
    if not first and not told and len(segments):
        told = [_nothing_wins(lost_s, whole_s)]
    return tuple(replace(a, rank=rank) for rank, a in enumerate([*first, *told][:at_most], 1))


def seconds_lost(
    segments: Segments, patient_first: Sequence[PatientFirst] = ()
) -> tuple[NDArray[np.float64], float]:
    """((n,) measurement-seconds of each row that are neither reliable nor absent, all there are), alarms left out."""
    length_s = segments.end_s - segments.start_s
    length_s = np.where(under_alarm(patient_first, segments.start_s, segments.end_s), 0.0, length_s)
    return lost(segments).sum(axis=1) * length_s, float(length_s.sum()) * len(MEASUREMENTS)


def _nothing_wins(lost_s: float, whole_s: float) -> Advice:
    if lost_s <= LITTLE_LOST * whole_s:
        kept = (f"{100 * (1 - lost_s / whole_s):.0f} % of all that could be measured can be trusted",)
        return Advice(0, "nothing", None, "Nothing needs doing.", kept if whole_s > 0 else ())
    because = (
        f"{100 * lost_s / whole_s:.0f} % of all that could be measured cannot be trusted",
        "no disturbance was found whose removal would win any of it back: it may be the patient's own",
    )
    return Advice(0, "wait-and-repeat", None, STILL, because)


# ── in words ──

STILL = "Let the patient lie still and breathe quietly, with the cable hanging loose, then record again."


def _patient(patient_first: Sequence[PatientFirst]) -> list[Advice]:
    if not patient_first:
        return []
    because = tuple(p.text or p.pattern for p in patient_first[:3])
    return [Advice(0, "look-at-patient", "patient", "Look at the patient now, before the leads.", because)]


def _placement(placement: Sequence[Placement]) -> list[Advice]:
    likely = sorted((p for p in placement if p.probability >= SURE_ENOUGH), key=lambda p: -p.probability)
    return [
        Advice(
            0,
            "check-placement",
            p.finding,
            "Check where the electrodes are and which wire is on which.",
            (p.text, f"probability {p.probability:.0%}".replace("%", " %")),
        )
        for p in likely
    ]


def _text(act: WonBack) -> str:
    place = _place_words(act.target)
    leads = _listing(act.leads)
    if act.action == "reapply-electrode":
        return (
            f"Reapply {place}: clean and dry the skin, abrade it lightly, use a new electrode with fresh gel."
        )
    if act.action == "check-contact":
        return f"Check {place}: its place, its contact, its gel. If the QRS stays this small, it is the patient's own."
    if act.action == "check-wire":
        return f"Check the wire of {place}: plugged in, whole, clipped to its electrode."
    if act.action == "wait-and-repeat":
        return STILL
    return {
        "relax-muscles": "Warm the patient, rest the arms and hands. If it stays, move the limb electrodes towards "
        "the trunk and say so on the tracing: it alters amplitudes.",
        "cut-mains": "Keep the mains cable away from the patient cable, unplug what can be unplugged, renew the "
        "right-leg electrode.",
        "lower-gain": f"Lower the gain of {leads}: the signal is cut off at the limit.",
        "record-wider": "Record from 0.05 to 150 Hz, at 500 samples per second, in steps of at most 5 µV.",
    }[act.action]


def _place_words(target: str | None) -> str:
    if target is None:
        return "the electrodes"
    if target in _LIMB_WORDS:
        return f"the {_LIMB_WORDS[target]} electrode"
    if target in ELECTRODES:
        return f"chest electrode {target} (lead V{target[1]})"
    if target == "patient cable":
        return "the patient cable"
    return f"the electrodes of {target}"


def _listing(words: Iterable[str]) -> str:
    words = list(words) or ["the leads"]
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} and {words[-1]}"
