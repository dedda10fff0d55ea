"""Electrodes in the wrong place, leads upside down, leads that are copies: what the averaged beats give away.

Limb swaps, rotations, a wire on the right leg, neighbouring chest leads and inverted chest leads are weighed against
each other by ``placement_model``. An inverted limb lead breaks Einthoven's or Goldberger's sum in a way that turning it
round mends; a broken sum that nothing mends is no swap, and makes this room silent. So do leads without reliable QRS,
and sets of leads that cannot tell.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from sigguard.electrodes import LEAD_FROM_ELECTRODES, LEADS_12, lead_rows
from sigguard.findings import Placement
from sigguard.placement_model import (
    CHEST_HYPOTHESES,
    LIMB_HYPOTHESES,
    N_PAIRS,
    N,
    PlacementModel,
    chest_features,
    describe,
    limb_features,
    part_columns,
    probabilities,
    ready_judge,
    restoring,
    shipped_placement_model,
)

Floats = NDArray[np.float64]

LIKELY = 0.5  # from which probability on a finding is named
ENOUGH_CHEST = 4  # chest leads, below which the limb leads are judged alone and the chest leads not at all
COPY = 1e-3  # two leads that differ by less than this share of their size are one signal
COPY_SURE, INVERTED_SURE = 0.99, 0.95  # of findings by rule, not by model (practice)
BROKEN = (
    0.5  # share of the limb leads that disobeys the sums, above which their algebra is not to be believed
)
MENDED, RIVAL = (
    0.6,
    0.65,
)  # turning a lead round must leave less than this of the misfit, and of what the next best leaves
UPRIGHT = 0.1  # a misfit below this share of the limb leads turns no lead round
_USUAL_NAME = {name.upper(): name for name in LEADS_12}


def find_placement(
    beat_mv: NDArray[np.floating],
    marks_ms: Floats,
    leads: Sequence[str],
    *,
    fit: NDArray[np.bool_],
    model: PlacementModel | None = None,
) -> tuple[Placement, ...]:
    """What is likely to be misplaced, the likeliest first.

    ``beat_mv`` (n_leads, LENGTH): beats averaged about common times, mV; ``marks_ms`` (5,): P onset, P end, QRS onset,
    QRS end, T end from the beat, NaN where not found; ``fit`` (n_leads,): whether the lead's QRS is reliable. Empty
    where the QRS is not marked, where fewer than two independent limb leads are fit, or where nothing reaches LIKELY.
    """
    beat = np.asarray(beat_mv, dtype=np.float64)
    there = np.asarray(fit, dtype=bool) & np.isfinite(beat).all(axis=1) & (beat != 0).any(axis=1)
    row_of = {_USUAL_NAME[leads[k].strip().upper()]: k for k in lead_rows(leads)[0] if there[k]}
    if not np.isfinite(marks_ms[2:4]).all() or not marks_ms[3] > marks_ms[2]:
        return ()
    copies = _copies(beat, row_of)
    copied = {name for pair in copies for name in pair}
    out = [_copy_words(*pair) for pair in copies]
    names = [name for name in row_of if name not in copied]
    limb = [name for name in names if not name.startswith("V")]
    potential, inverted = _limb_potentials(beat, row_of, limb)
    if inverted is not None:
        out.append(Placement(f"inverted lead {inverted}", INVERTED_SURE, _words(f"inverted lead {inverted}")))
    if potential is not None:
        chest = [name for name in names if name.startswith("V")]
        out += _weigh(potential, beat, row_of, chest, marks_ms, model or shipped_placement_model())
    return tuple(sorted(out, key=lambda p: -p.probability))


def _copies(beat: Floats, row_of: dict[str, int]) -> list[tuple[str, str]]:
    """Pairs of leads that are one signal."""
    names = list(row_of)
    x = beat[[row_of[name] for name in names]]
    power = x @ x.T
    own = np.diag(power)
    apart2 = own[:, None] + own - 2 * power
    same = apart2 < COPY**2 * np.maximum(own[:, None], own)
    return [(names[i], names[j]) for i, j in zip(*np.nonzero(np.triu(same, 1)), strict=True)]


def _limb_potentials(
    beat: Floats, row_of: dict[str, int], limb: Sequence[str]
) -> tuple[Floats | None, str | None]:
    """((3, LENGTH) potentials of RA, LA, LL about their mean, name of an inverted lead); None where not to be had."""
    if not limb:
        return None, None
    to_limbs, outside = _limb_algebra(tuple(limb))
    if to_limbs is None:
        return None, None
    x = beat[[row_of[name] for name in limb]]
    power = x @ x.T
    signs = np.concatenate([np.ones((1, len(limb))), 1.0 - 2.0 * np.eye(len(limb))])
    left = np.sqrt(np.maximum(np.einsum("hi,ij,hj,ij->h", signs, power, signs, outside), 0) / np.trace(power))
    inverted = None
    best, second = np.argsort(left, kind="stable")[:2]
    if left[0] > UPRIGHT and left[best] < min(MENDED * left[0], RIVAL * left[second]):
        inverted = limb[best - 1]
        x = x * signs[best][:, None]
    if inverted is None and left[0] > BROKEN:
        return None, None
    return to_limbs @ x, inverted


@lru_cache(maxsize=16)
def _limb_algebra(limb: tuple[str, ...]) -> tuple[Floats | None, Floats]:
    """(limb leads → RA, LA, LL about their mean, None where they do not tell; projection onto what breaks the sums)."""
    rows = LEAD_FROM_ELECTRODES[[LEADS_12.index(name) for name in limb], :3]
    inverse = np.asarray(np.linalg.pinv(rows), dtype=np.float64)
    told = np.linalg.matrix_rank(rows) >= 2
    return (inverse if told else None), np.eye(len(limb)) - rows @ inverse


def _weigh(
    limbs: Floats,
    beat: Floats,
    row_of: dict[str, int],
    chest: Sequence[str],
    marks_ms: Floats,
    model: PlacementModel,
) -> list[Placement]:
    seen = np.zeros((N, beat.shape[1]))
    seen[:3] = limbs
    use = np.arange(N) < 3
    if len(chest) >= ENOUGH_CHEST:
        for name in chest:
            seen[2 + int(name[1])] = beat[row_of[name]]
            use[2 + int(name[1])] = True
    columns, has_p = part_columns(marks_ms), bool(np.isfinite(marks_ms[0]))
    judge = ready_judge(model.usual, use, has_p)
    weight = model.limb_weight if use[3:].any() else model.limb_alone_weight
    chance = probabilities(limb_features(seen, columns, judge), weight)
    best = int(chance.argmax())
    out = _named(LIMB_HYPOTHESES, chance)
    if use[3:].any():
        if best:
            seen = restoring(best, model.usual.rl_maps) @ seen
        score = chest_features(describe(seen[None], columns), judge)[0]
        out += _named(
            CHEST_HYPOTHESES, probabilities(score[_askable(use)], model.chest_weight), _askable(use)
        )
    return out


def _askable(use: NDArray[np.bool_]) -> NDArray[np.intp]:
    """Positions of the chest hypotheses whose leads are all there."""
    pairs = use[3 : 3 + N_PAIRS] & use[4 : 4 + N_PAIRS]
    return np.flatnonzero(np.concatenate([[True], pairs, use[3:]]))


def _named(
    hypotheses: Sequence[str], chance: Floats, asked: NDArray[np.intp] | None = None
) -> list[Placement]:
    at = np.arange(len(hypotheses)) if asked is None else asked
    likely = [(hypotheses[k], float(p)) for k, p in zip(at, chance, strict=True) if k and p >= LIKELY]
    return [Placement(name, p, _words(name)) for name, p in likely]


# ── in words ──

_LIMB_WORDS = {"RA": "right arm", "LA": "left arm", "LL": "left leg", "RL": "right leg"}


def _copy_words(first: str, second: str) -> Placement:
    text = (
        f"Leads {first} and {second} hold the same signal: one of them was copied, or wired twice. "
        "What the other should show is missing; check the cable and the export, then record again."
    )
    return Placement(f"duplicate leads {first} and {second}", COPY_SURE, text)


def _words(finding: str) -> str:
    """What it looks like, what else it could be, what to do."""
    if finding.startswith("inverted"):
        lead = finding.split()[-1]
        return (
            f"Lead {lead} looks as if it were upside down beside the other leads. "
            + ("A scar or a pacemaker can turn a chest lead too. " if lead.startswith("V") else "")
            + f"Check the plug and the polarity of lead {lead}, then record again."
        )
    if finding.endswith("rotated"):
        return (
            f"The limb wires look as if each sat one place further ({finding.split()[0]}). An unusual axis or an atrial "
            "rhythm from below can look alike. Check the three limb wires, then record again."
        )
    first, second = finding.split()[0].split("/")
    if first.startswith("V"):
        return (
            f"{first} and {second} look as if they were exchanged: the waves change from V1 to V6 in an unusual order. "
            "An old infarction or electrodes in the wrong rib space can look alike. Check the wires and the places of "
            f"{first} and {second}, then record again."
        )
    wires = f"The {_LIMB_WORDS[first]} and {_LIMB_WORDS[second]} wires look exchanged"
    if finding.startswith("LA/RA"):
        return (
            f"{wires}: lead I is upside down. A heart on the right side (dextrocardia) and an atrial rhythm from "
            "the left look the same in lead I; with dextrocardia R also shrinks from V1 to V6. Check the arm wires; if "
            "they are right, tell whoever reads the tracing."
        )
    if finding.startswith("LA/LL"):
        return (
            f"{wires}: the axis would fit better. There is no strong sign of this exchange; an atrial rhythm or an "
            "unusual axis can look alike. Check the two wires; an earlier tracing helps."
        )
    if second == "RL":
        flat = "II" if first == "RA" else "III"
        return (
            f"{wires}: lead {flat} is almost a straight line while the other limb leads are not. A heart axis across lead "
            f"{flat} makes it small, but seldom all its waves. Check both wires: the chest leads are distorted too."
        )
    return (
        f"{wires}: lead II is upside down. An atrial rhythm from below or an unusual axis can look alike. "
        "Check the two wires, then record again."
    )
