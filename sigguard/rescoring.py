"""What an act would win back: the recording scored again with that act's disturbance taken out.

For each act that something measured speaks for, the strips that lost measurements are rebuilt without what
the act would cure (``repair``), measured and judged by the same way as the first time, and the
measurement-seconds counted that are then reliable or absent. The best act is taken, the others are scored
again on top of it, and so on. Of long recordings at most MOST_STRIPS strips are scored again and the rest
taken to fare alike. Time under a patient-first stretch is left out: what looks like noise there may be the heart.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from sigguard import by_comparison
from sigguard.acts import (
    COMPARED,
    LOCAL,
    LOCAL_SHARE,
    Act,
    by_measure,
    by_table,
    once_done,
    reason,
    share_taken,
    stands_out,
)
from sigguard.advice import LITTLE_LOST, seconds_lost
from sigguard.blocks import SegmentPlan
from sigguard.findings import PatientFirst, WonBack
from sigguard.measure import analyse
from sigguard.profile import Profile
from sigguard.reliability import ReliabilityModel
from sigguard.repair import electrode_powers, unclipped
from sigguard.segment_pass import Source, decide, tolerances
from sigguard.segments import Segments
from sigguard.spoilt_strips import Strip, choose_slots, lay_out
from sigguard.verdicts import same_beats

Floats = NDArray[np.float64]

MOST_ROUNDS = 4
TRIES = (5, 2)  # acts scored again in the first round, and in each after it
WORTH_IT = 0.01  # share of all measurement-seconds below which an act is not worth a word
TOUCHED_MV = 0.002  # a lead from which an act takes less is left as it is
MOST_ROWS = 48  # of 12 leads scored again in all
LEAST_SHARE = 0.1  # an act that takes less of the disturbance away is not tried
ALONE, ALONE_SHARE = (
    0.85,
    0.4,
)  # an electrode with so much of all electrodes' disturbance needs so much of the best
CLEARLY = 0.6  # an act that wins this share of what is lost needs no rival


@dataclass(frozen=True, slots=True)
class Setting:
    """What judging needs beside the samples."""

    model: ReliabilityModel
    profile: Profile
    mains_among_hz: tuple[float, ...]


def won_back(
    source: Source,
    plan: SegmentPlan,
    segments: Segments,
    setting: Setting,
    *,
    lead_beats: Sequence[NDArray[np.int64]],
    beats: NDArray[np.int64],
    common: bool,
    alarms: Sequence[PatientFirst] = (),
) -> tuple[WonBack, ...]:
    """The acts that win measurement-seconds back, in the order in which they are best done.

    ``lead_beats`` and ``beats`` (over all leads) are sample indices in the recording; ``common`` says that the
    latter were looked for in all leads together. Empty where little is lost, or no act wins a hundredth.
    """
    lost_s, whole_s = seconds_lost(segments, alarms)
    if lost_s.sum() <= LITTLE_LOST * whole_s:
        return ()
    by_slot = lost_s.reshape(len(plan), -1).sum(axis=1)
    chosen, n_spoilt = choose_slots(by_slot), int((by_slot > 0).sum())
    strips = [
        lay_out(source, plan, segments, setting.mains_among_hz, slot, weight, lead_beats, beats, common)
        for slot, weight in chosen
    ]
    usual = by_comparison.usual_loss(segments)
    places = by_table(strips)
    budget = _Budget(MOST_ROWS * max(1, len(strips) * source.info.n_leads // 12))
    out: list[WonBack] = []
    done: set[Act] = set()
    for number in range(MOST_ROUNDS):
        remaining_s = sum(s.weight * float(s.lost.sum()) * s.size for s in strips) / source.info.fs_hz
        if remaining_s <= WORTH_IT * whole_s:
            break
        left = [c for c in [*by_measure(strips), *places] if c not in done]
        scored = _round(source, strips, left, setting, usual, remaining_s, budget, tries=TRIES[number > 0])
        gains = {c: _gain_s(strips, after, source.info.fs_hz) for c, after in scored.items()}
        if not gains:
            break
        # What a lead that is too small would be worth elsewhere is a guess: it is told where nothing measured wins.
        measured = {c: g for c, g in gains.items() if c[0] != "check-contact" and g > WORTH_IT * whole_s}
        gains = measured or gains
        best = _best(strips, gains, source.info.fs_hz)
        if gains[best] <= WORTH_IT * whole_s:
            break
        out.append(_as_found(best, gains[best], strips, scored[best], float(lost_s.sum()), n_spoilt))
        for strip, after in zip(strips, scored[best], strict=True):
            strip.split = once_done(strip, best, strip.split)
            strip.powers = electrode_powers(strip.split, source.info.leads)
            strip.mended |= best[0] == "lower-gain"
            strip.lost = after
        done.add(best)
    return tuple(out)


@dataclass(slots=True)
class _Budget:
    """Rows that may still be scored again."""

    rows: int


def _round(
    source: Source,
    strips: Sequence[Strip],
    left: Sequence[Act],
    setting: Setting,
    usual: Floats,
    remaining_s: float,
    budget: _Budget,
    *,
    tries: int,
) -> dict[Act, list[Floats]]:
    """What is still lost after each act tried: those that take most away first, until one wins most of it back."""
    share = {c: share_taken(strips, c) for c in left if c[0] not in COMPARED}
    order = sorted(share, key=lambda c: -share[c] * (1.25 if c[0] in LOCAL else 1.0))
    scored = {c: [_compared(s, c, setting, usual) for s in strips] for c in left if c[0] in COMPARED}
    for k, c in enumerate(order[:tries]):
        if share[c] < LEAST_SHARE or budget.rows <= 0:
            break
        scored[c] = _score_again(source, strips, c, setting, budget)
        local = any(o[0] in LOCAL and share[o] >= 0.5 * share[c] for o in order[k + 1 :])
        enough = (
            LOCAL_SHARE if c[0] in LOCAL else CLEARLY
        )  # of a local act, so that no rival can be ahead by much
        if _gain_s(strips, scored[c], source.info.fs_hz) >= enough * remaining_s and not local:
            break
    return scored


def _score_again(
    source: Source, strips: Sequence[Strip], act: Act, setting: Setting, budget: _Budget
) -> list[Floats]:
    """For each strip, (L, 5): the shares still lost once the act has been done."""
    out = []
    for strip in strips:
        done = once_done(strip, act, strip.split)
        taken = strip.found.residual_mv + strip.found.hum_mv - done.residual_mv - done.hum_mv
        mend = act[0] == "lower-gain"
        changed = strip.split.rms_mv(
            strip.split.residual_mv + strip.split.hum_mv - done.residual_mv - done.hum_mv
        )
        touched = strip.clipped.any(axis=1) if mend else changed > TOUCHED_MV
        rows = np.flatnonzero((strip.lost > 0).any(axis=1) & touched)
        if not len(rows):
            out.append(strip.lost)
            continue
        budget.rows -= len(rows)
        mended = mend or strip.mended
        x = unclipped(strip.x_mv, strip.clipped, source.info.fs_hz) if mended else strip.x_mv
        out.append(_still_lost(source, strip, rows, (x - taken)[rows], setting, mended))
    return out


def _compared(strip: Strip, act: Act, setting: Setting, usual: Floats) -> Floats:
    action, target = act
    table = strip.table
    hit = by_comparison.hit_rows(table, action)
    if action == "record-wider":
        free = setting.model.reliable(table.score, tolerances(setting.profile).tolist()) & np.isfinite(
            table.value
        )
        return np.where(hit[:, None] & free, 0.0, strip.lost)
    if target is not None and target.startswith(("C", "lead ")):
        hit &= np.array([by_comparison.own_electrode(lead) == target for lead in table.leads])
    whole = ~by_comparison.hit_rows(table, "check-wire") & ~by_comparison.hit_rows(table, "check-contact")
    return by_comparison.expected_loss(strip.lost, hit, whole, usual)[0]


def _still_lost(
    source: Source, strip: Strip, rows: NDArray[np.intp], x_mv: Floats, setting: Setting, mended: bool
) -> Floats:
    """Measure and judge the rebuilt rows as the first time; the other rows as they stand."""
    info = source.info
    n_leads = info.n_leads
    again = analyse(
        x_mv,
        info.fs_hz,
        rails_mv=None if info.rails_mv is None or mended else info.rails_mv[rows],
        step_mv=None if info.step_mv is None else info.step_mv[rows],
        margin=strip.margin,
        mains_among_hz=setting.mains_among_hz,
    )
    table = strip.table
    value, absent, features = table.value.copy(), table.absent.copy(), table.features.copy()
    value[rows], absent[rows], features[rows] = again.value, again.absent, again.features
    agree = None
    if strip.common_s is not None:
        own = list(strip.own_s)
        for k, row in enumerate(rows):
            own[row] = again.beat_s[again.beat_row == k]
        duration_s = strip.size / info.fs_hz
        agree = np.array([[same_beats(at, strip.common_s, duration_s) for at in own]])
    whole = replace(again, value=value, absent=absent, features=features)
    found = decide(info, np.arange(n_leads), whole, setting.model, setting.profile, agree)
    after = (~found.reliable & (found.absent == 0)).astype(np.float64)
    others = np.setdiff1d(np.arange(n_leads), rows)
    # not scored again; may be lost no longer by what is now seen elsewhere
    after[others] = np.minimum(after[others], strip.lost[others])
    return after


# ── what is won ──


def _gain_s(strips: Sequence[Strip], after: Sequence[Floats], fs_hz: float) -> float:
    return sum(
        s.weight * float((s.lost - a).sum()) * s.size / fs_hz for s, a in zip(strips, after, strict=True)
    )


def _best(strips: Sequence[Strip], gains: dict[Act, float], fs_hz: float) -> Act:
    """The act that wins most; one for a fault that lies at one place where it wins nearly as much.

    Nearly: LOCAL_SHARE of it, or one measurement of one segment less, which is the least two acts can differ by. An
    electrode that does not stand out among all must win that much more than the rest to be named.
    """
    quantum_s = max(s.weight * s.size for s in strips) / fs_hz
    worth = {c: g * (1.0 if stands_out(strips, c) else LOCAL_SHARE) for c, g in gains.items()}
    best = max(worth, key=lambda c: worth[c])
    enough_s = max(min(LOCAL_SHARE * worth[best], worth[best] - quantum_s), 0.5 * worth[best])
    cut = [c for c in gains if c[0] == "lower-gain" and 0 < gains[c] >= enough_s]
    if cut:
        return cut[0]
    # Where nearly all comes from one electrode, what lying still would win beyond it is the next step, not a rival.
    at_one = [
        c
        for c in gains
        if c[0] == "reapply-electrode"
        and 0 < gains[c] >= (ALONE_SHARE * worth[best] if stands_out(strips, c, ALONE) else enough_s)
        and stands_out(strips, c)
    ]
    return max(at_one, key=lambda c: gains[c]) if at_one else best


def _as_found(
    best: Act, gain_s: float, strips: Sequence[Strip], after: Sequence[Floats], lost_s: float, n_spoilt: int
) -> WonBack:
    leads = strips[0].table.leads
    won = np.any([(s.lost - a).sum(axis=1) > 0 for s, a in zip(strips, after, strict=True)], axis=0)
    gain_s = min(gain_s, lost_s)
    how = "by comparison" if best[0] in COMPARED else "scored again without it"
    if n_spoilt > len(strips):
        how += f", from {len(strips)} of {n_spoilt} spoilt stretches"
    promise = f"would win back {gain_s:.0f} of {lost_s:.0f} measurement-seconds lost ({how})"
    named = tuple(name for name, w in zip(leads, won, strict=True) if w)
    return WonBack(best[0], best[1], gain_s, named, (reason(strips, best), promise))
