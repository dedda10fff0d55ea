"""Lead algebra: which electrodes a lead is the difference of, what exchanging two does, and the leads' own laws.

Textbook algebra: Einthoven 1912 (I, II, III), Wilson 1934 (V leads against the mean of the limbs),
Goldberger 1942 (aVR, aVL, aVF). Beyond the twelve (textbooks, from memory): VR, VL and VF are Goldberger's
leads before they were augmented, MCL1 to MCL6 (Marriott and Fogg 1970) and CL leads run from the left arm,
CR leads from the right arm, CF leads from the left leg to a chest electrode; the V of a five-wire set is any
chest place against the limbs.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

ELECTRODES = ("RA", "LA", "LL", "C1", "C2", "C3", "C4", "C5", "C6")
LEADS_12 = ("I", "II", "III", "aVR", "aVL", "aVF", "V1", "V2", "V3", "V4", "V5", "V6")
SINGULAR = 1e-9  # below this share of the largest singular value a direction counts as lost

_THIRD = 1.0 / 3.0
_LIMB_ROWS: dict[str, tuple[float, float, float]] = {
    "I": (-1.0, 1.0, 0.0),
    "II": (-1.0, 0.0, 1.0),
    "III": (0.0, -1.0, 1.0),
    "AVR": (1.0, -0.5, -0.5),
    "AVL": (-0.5, 1.0, -0.5),
    "AVF": (-0.5, -0.5, 1.0),
    "VR": (2 * _THIRD, -_THIRD, -_THIRD),
    "VL": (-_THIRD, 2 * _THIRD, -_THIRD),
    "VF": (-_THIRD, -_THIRD, 2 * _THIRD),
    "MLI": (-1.0, 1.0, 0.0),
    "MLII": (-1.0, 0.0, 1.0),
    "MLIII": (0.0, -1.0, 1.0),
}
_BIPOLAR_FROM = {"MCL": "LA", "CL": "LA", "CR": "RA", "CF": "LL"}
_CHEST = re.compile(r"V([1-9]R?)?")
_BIPOLAR = re.compile(r"(MCL|CL|CR|CF)([1-9]R?)")


def lead_in_electrodes(name: str) -> dict[str, float] | None:
    """The weight of each electrode in a lead, or None for a lead whose algebra is not known.

    Names are compared without regard to case; a leading minus sign turns the lead round. ``V`` alone is the
    chest electrode ``C`` of a five-wire set. Weights add up to 0: what all electrodes share drops out.
    """
    key = name.strip().upper()
    sign = -1.0 if key.startswith("-") else 1.0
    key = key.removeprefix("-")
    if key in _LIMB_ROWS:
        weight = dict(zip(ELECTRODES[:3], _LIMB_ROWS[key], strict=True))
    elif found := _CHEST.fullmatch(key):
        weight = {f"C{found[1] or ''}": 1.0, "RA": -_THIRD, "LA": -_THIRD, "LL": -_THIRD}
    elif found := _BIPOLAR.fullmatch(key):
        weight = {f"C{found[2]}": 1.0, _BIPOLAR_FROM[found[1]]: -1.0}
    else:
        return None
    return {electrode: sign * w for electrode, w in weight.items() if w != 0}


def _lead_matrix() -> Floats:
    rows = np.zeros((len(LEADS_12), len(ELECTRODES)))
    for i, lead in enumerate(LEADS_12):
        for electrode, w in (lead_in_electrodes(lead) or {}).items():
            rows[i, ELECTRODES.index(electrode)] = w
    return rows


LEAD_FROM_ELECTRODES: Floats = _lead_matrix()  # (12 leads, 9 electrodes): lead = row · electrode potentials
LEAD_FROM_ELECTRODES.flags.writeable = False

_ROW_OF = {name.upper(): i for i, name in enumerate(LEADS_12)}


def lead_rows(leads: Sequence[str]) -> tuple[list[int], Floats]:
    """Positions of those leads that are of the twelve, and their rows of LEAD_FROM_ELECTRODES.

    Names are compared without regard to case. A name met twice counts once; a name that is not one of
    the twelve is left out. Returns (n_known,) positions and (n_known, 9) rows.
    """
    seen: dict[int, int] = {}
    for position, name in enumerate(leads):
        row = _ROW_OF.get(name.strip().upper())
        if row is not None:
            seen.setdefault(row, position)
    return list(seen.values()), LEAD_FROM_ELECTRODES[list(seen)]


@dataclass(frozen=True, slots=True, eq=False)
class Algebra:
    """How a set of leads hangs together: lead = rows @ electrode potentials."""

    leads: tuple[str, ...]
    positions: tuple[int, ...]  # of the leads whose algebra is known
    electrodes: tuple[str, ...]  # those the leads are made of, limbs first
    rows: Floats  # (n_known, n_electrodes)
    to_potentials: Floats  # (n_electrodes, n_known): leads → potentials about their own mean
    centring: Floats  # (n_electrodes, n_electrodes): takes out the part common to all
    tells: bool  # whether the leads can tell the electrodes apart


@lru_cache(maxsize=256)
def algebra_of(leads: tuple[str, ...]) -> Algebra:
    """The algebra of a lead set. A name met twice counts once; a lead of unknown algebra is left out.

    ``tells`` is False where some difference between two electrodes shows in no lead (a single lead, chest
    leads alone), and with fewer than three electrodes: one difference cannot say which end moves.
    """
    known: dict[str, tuple[int, dict[str, float]]] = {}
    for position, name in enumerate(leads):
        weight = lead_in_electrodes(name)
        if weight is not None:
            known.setdefault(name.strip().upper(), (position, weight))
    named = {electrode for _, weight in known.values() for electrode in weight}
    order = [e for e in ELECTRODES if e in named] + sorted(named - set(ELECTRODES))
    rows = np.zeros((len(known), len(order)))
    for i, (_, weight) in enumerate(known.values()):
        for electrode, w in weight.items():
            rows[i, order.index(electrode)] = w
    n = len(order)
    if not n:
        return Algebra(leads, (), (), rows, rows.T, np.zeros((0, 0)), False)
    centring = np.eye(n) - 1.0 / n
    inverse: Floats = np.asarray(np.linalg.pinv(rows, rcond=SINGULAR), dtype=np.float64)
    tells = n >= 3 and np.allclose(inverse @ rows, centring, atol=1e-6)
    return Algebra(leads, tuple(p for p, _ in known.values()), tuple(order), rows, inverse, centring, tells)


def swap_matrix(leads: Sequence[str], first: str, second: str) -> Floats:
    """What the leads turn into when two electrodes are exchanged: seen = matrix @ true.

    ``leads`` are names of the twelve; returns (n_leads, n_leads). Raises ValueError if a lead or an
    electrode is unknown, or if the leads do not hold enough to say what the exchange does.
    """
    positions, rows = lead_rows(leads)
    if len(positions) != len(leads) or not {first, second} <= set(ELECTRODES):
        raise ValueError(
            f"expected leads of {LEADS_12} and electrodes of {ELECTRODES}, found {leads}, {first}, {second}"
        )
    order = list(range(len(ELECTRODES)))
    a, b = ELECTRODES.index(first), ELECTRODES.index(second)
    order[a], order[b] = b, a
    swapped = rows[:, order]
    matrix = swapped @ np.linalg.pinv(rows)
    if not np.allclose(matrix @ rows, swapped, atol=1e-9):
        raise ValueError(f"the leads {tuple(leads)} cannot show what exchanging {first} and {second} does")
    return matrix


def einthoven_error(x_mv: Floats, leads: Sequence[str]) -> float:
    """Rms of I + III − II in µV, each lead taken about its mean; NaN unless the three leads overlap in time.

    ``x_mv`` (n_leads, n_samples), mV. A few µV come from rounding alone; more means a corrupt, time-skewed
    or separately filtered lead, never a swap: exchanged electrodes still obey the law.
    """
    return _law_error_uv(x_mv, leads, ("I", "III", "II"), (1.0, 1.0, -1.0))


def goldberger_error(x_mv: Floats, leads: Sequence[str]) -> float:
    """Rms of aVR + aVL + aVF in µV, as einthoven_error; NaN unless the three leads overlap in time."""
    return _law_error_uv(x_mv, leads, ("aVR", "aVL", "aVF"), (1.0, 1.0, 1.0))


def _law_error_uv(
    x_mv: Floats, leads: Sequence[str], names: tuple[str, ...], weights: tuple[float, ...]
) -> float:
    upper = [lead.strip().upper() for lead in leads]
    if not all(name.upper() in upper for name in names):
        return float("nan")
    x = np.asarray(x_mv, dtype=np.float64)[[upper.index(name.upper()) for name in names]]
    total = np.asarray(weights) @ x
    total = total[np.isfinite(total)]
    return float(1e3 * np.std(total)) if total.size else float("nan")
