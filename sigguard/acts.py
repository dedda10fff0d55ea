"""Acts that something measured speaks for, and what each would leave of a strip's disturbance.

The classifiers that name faults may be unsure; here it counts what was measured.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from sigguard import by_comparison
from sigguard.electrodes import ELECTRODES
from sigguard.repair import (
    FAST_FLOOR_MV,
    MOVING_FLOOR_MV,
    ElectrodePowers,
    Split,
    without_electrode,
    without_hum,
    without_leads,
    without_movement,
    without_shivering,
)
from sigguard.spoilt_strips import Strip

Floats = NDArray[np.float64]
Act = tuple[str, str | None]  # action and target

MOST_ELECTRODES = 2
STANDS_OUT = 2.0
WELL_ABOVE = 1.5  # times what a careful recording holds: less is not worth trying
HUM_LEAST_MV, ELECTRODE_LEAST_MV = 0.004, 0.015
HARM_OF_DRIFT, HARM_OF_HUM = 0.2, 0.3  # beside movement and muscle of the same size
SKETCH = 5  # of so many samples one is looked at to weigh acts against each other
LOCAL_SHARE = 0.8  # an act at one place that wins this share of the best goes before one all over the body
COMPARED = ("check-wire", "check-contact", "record-wider")
LOCAL = ("reapply-electrode", "lower-gain")


def by_measure(strips: Sequence[Strip]) -> list[Act]:
    """Acts for what exceeds, on leads that lost something, what a careful recording holds."""
    found: dict[Act, None] = {}
    power = np.zeros(len(ELECTRODES))
    for s in strips:
        hit = (s.lost > 0).any(axis=1)
        if (s.split.rms_mv(s.split.hum_mv)[hit] >= HUM_LEAST_MV).any():
            found["cut-mains", None] = None
        if (s.split.rms_mv(s.split.muscle_mv)[hit] > WELL_ABOVE * FAST_FLOOR_MV).any():
            found["relax-muscles", None] = None
        slow = s.split.rms_mv(s.split.moving_mv)
        if (slow[hit] > WELL_ABOVE * MOVING_FLOOR_MV).any():
            found["wait-and-repeat", None] = None
        if s.clipped[hit].any():
            found["lower-gain", None] = None
        if s.powers is not None:
            harm = _electrode_harm(s.powers)
            power += s.weight * np.where(harm > ELECTRODE_LEAST_MV**2, harm, 0.0)
        elif len(slow) > 1:
            lead = int(np.where(hit, slow, 0.0).argmax())
            if slow[lead] > max(MOVING_FLOOR_MV, STANDS_OUT * float(np.median(np.delete(slow, lead)))):
                found["reapply-electrode", by_comparison.own_electrode(s.table.leads[lead])] = None
    for k in np.argsort(-power)[:MOST_ELECTRODES]:
        if power[k] > 0:
            found["reapply-electrode", ELECTRODES[k]] = None
    return list(found)


def by_table(strips: Sequence[Strip]) -> list[Act]:
    """Wires off, leads too small and too narrow a band, each with its place."""
    out: list[Act] = []
    leads = strips[0].table.leads
    for action in ("check-wire", "check-contact", "record-wider"):
        hit = np.zeros(len(leads), dtype=bool)
        for s in strips:
            hit |= by_comparison.hit_rows(s.table, action) & (s.lost > 0).any(axis=1)
        names = [name for name, h in zip(leads, hit, strict=True) if h]
        if not names:
            continue
        if action == "record-wider":
            out.append((action, None))
            continue
        common = by_comparison.common_place(names, leads) if action == "check-wire" else None
        if common:
            out.append((action, "patient cable" if common == "all leads" else common))
        else:
            out += [(action, by_comparison.own_electrode(name)) for name in names]
    return out


def once_done(strip: Strip, act: Act, split: Split) -> Split:
    """The strip's disturbance, or a sketch of it, once the act has been done."""
    action, target = act
    if action == "cut-mains":
        return without_hum(split)
    if action == "relax-muscles":
        return without_shivering(split)
    if action == "wait-and-repeat":
        return without_movement(split)
    if action == "reapply-electrode" and strip.powers is not None and target in ELECTRODES:
        return without_electrode(split, strip.powers, target)
    if action == "reapply-electrode":
        own = [by_comparison.own_electrode(lead) == target for lead in strip.table.leads]
        return without_leads(split, np.array(own))
    return split


def share_taken(strips: Sequence[Strip], act: Act) -> float:
    """Share of the disturbance's power on the leads that lost something that the act takes away, by its harm."""
    taken = whole = 0.0
    for s in strips:
        hit = (s.lost > 0).any(axis=1)
        if act[0] == "lower-gain":
            taken += s.weight * float(s.lost[s.clipped.any(axis=1)].sum())
            whole += s.weight * float(s.lost.sum())
            continue
        sketch = s.split.every(SKETCH)
        before, after = _harm(sketch)[hit], _harm(once_done(s, act, sketch))[hit]
        taken += s.weight * float((before**2).sum() - (after**2).sum())
        whole += s.weight * float((before**2).sum())
    return taken / whole if whole > 0 else 0.0


def _harm(split: Split) -> Floats:
    """(L, n) the disturbance outside the QRS complexes, what does less harm counted for less."""
    parts = (
        (split.slow_mv, 1.0),
        (split.muscle_mv, 1.0),
        (split.drift_mv, HARM_OF_DRIFT),
        (split.hum_mv, HARM_OF_HUM),
    )
    return np.sum([weight * part[:, split.open] for part, weight in parts], axis=0)


def stands_out(strips: Sequence[Strip], act: Act, share: float = 0.5) -> bool:
    """Whether an electrode carries that share of what all electrodes carry, by its harm; true of what is no electrode."""
    if act[0] != "reapply-electrode" or act[1] not in ELECTRODES or strips[0].powers is None:
        return True
    power = _harm_of_electrodes(strips)
    return bool(power[ELECTRODES.index(act[1])] >= share * power.sum())


def _harm_of_electrodes(strips: Sequence[Strip]) -> Floats:
    """(9,)"""
    return np.sum([s.weight * _electrode_harm(s.powers) for s in strips if s.powers is not None], axis=0)


def _electrode_harm(powers: ElectrodePowers) -> Floats:
    return powers.moving_mv2 + HARM_OF_DRIFT**2 * powers.drift_mv2


# ── in numbers ──


def reason(strips: Sequence[Strip], act: Act) -> str:
    """What speaks for the act, as measured on the strips looked at."""
    action, target = act
    leads = strips[0].table.leads
    if action == "reapply-electrode" and target in ELECTRODES and strips[0].powers is not None:
        power = _harm_of_electrodes(strips)
        k = ELECTRODES.index(target)
        rms_uv = max(
            1e3 * np.sqrt(s.powers.moving_mv2[k] + s.powers.drift_mv2[k]) for s in strips if s.powers
        )
        return f"{100 * power[k] / power.sum():.0f} % of what does harm comes from {target}, up to {rms_uv:.0f} µV"
    if action in COMPARED:
        hit = np.any([by_comparison.hit_rows(s.table, action) for s in strips], axis=0)
        what = {
            "check-wire": "flat line or no signal",
            "check-contact": "QRS too small",
            "record-wider": "recorded too coarsely",
        }[action]
        return f"{what} in {_count(int(hit.sum()), len(leads))}"
    if action == "lower-gain":
        hit = np.any([s.clipped.any(axis=1) for s in strips], axis=0)
        return f"cut off at the limit in {_count(int(hit.sum()), len(leads))}"
    rms_uv = 1e3 * np.max([s.split.rms_mv(_of(s.split, action)) for s in strips], axis=0)
    if action == "reapply-electrode":
        rms_uv = np.where([by_comparison.own_electrode(lead) == target for lead in leads], rms_uv, 0.0)
    name = {
        "cut-mains": "mains hum",
        "relax-muscles": "muscle noise and tremor",
        "wait-and-repeat": "drift and movement",
        "reapply-electrode": "drift and movement",
    }[action]
    worst = int(np.argmax(rms_uv))
    return f"{name} of up to {rms_uv[worst]:.0f} µV in {leads[worst]}"


def _of(split: Split, action: str) -> Floats:
    if action == "cut-mains":
        return split.hum_mv
    return split.muscle_mv if action == "relax-muscles" else split.moving_mv


def _count(n: int, n_leads: int) -> str:
    return f"{n} of {n_leads} leads" if n_leads > 1 else "the lead"
