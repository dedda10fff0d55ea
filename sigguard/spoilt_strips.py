"""The stretches of a recording that lost measurements, chosen and laid out so that they can be scored again."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sigguard.blocks import MARGIN_S, SegmentPlan
from sigguard.features import FEATURE_NAMES
from sigguard.repair import ElectrodePowers, Split, electrode_powers, split_strip
from sigguard.segment_pass import Source
from sigguard.segments import Segments
from sigguard.spans import lost

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

MOST_STRIPS = 12
CLIPPED_LEAST_S = 0.05


@dataclass(slots=True, eq=False)
class Strip:
    """One stretch of time that lost measurements, with what it is made of."""

    slot: int
    size: int
    margin: tuple[int, int]
    x_mv: Floats  # (L, margin + size + margin)
    found: Split
    split: Split  # what is left of it after the acts taken so far
    powers: ElectrodePowers | None
    clipped: Bools  # (L, same)
    table: Segments  # its L rows
    own_s: list[Floats]  # beats of each lead from the strip's start
    common_s: Floats | None
    lost: Floats  # (L, 5) shares, as things stand after the acts taken so far
    weight: float  # strips it stands for
    mended: bool = False  # lower-gain has been taken


def choose_slots(lost_s: Floats) -> list[tuple[int, float]]:
    """(slot, slots it stands for): all that lost anything, or the six worst and six spread evenly over the others."""
    order = np.argsort(-lost_s, kind="stable")
    order = order[lost_s[order] > 0]
    if len(order) <= MOST_STRIPS:
        return [(int(k), 1.0) for k in order]
    worst, rest = order[: MOST_STRIPS // 2], order[MOST_STRIPS // 2 :]
    spread = rest[np.linspace(0, len(rest) - 1, MOST_STRIPS - len(worst)).round().astype(int)]
    scale = float(lost_s[rest].sum() / lost_s[spread].sum())
    return [(int(k), 1.0) for k in worst] + [(int(k), scale) for k in spread]


def lay_out(
    source: Source,
    plan: SegmentPlan,
    segments: Segments,
    mains_among_hz: tuple[float, ...],
    slot: int,
    weight: float,
    lead_beats: Sequence[NDArray[np.int64]],
    beats: NDArray[np.int64],
    common: bool,
) -> Strip:
    info = source.info
    fs_hz, n_leads = info.fs_hz, info.n_leads
    start, stop = int(plan.start[slot]), int(plan.stop[slot])
    reach = int(round(MARGIN_S * fs_hz))
    first, last = max(0, start - reach), min(info.n_samples, stop + reach)
    x_mv = source.read(first, last)
    table = segments.rows(np.arange(slot * n_leads, (slot + 1) * n_leads))
    within = beats[(beats >= first) & (beats < last)] - first
    split = split_strip(x_mv, fs_hz, within, _mains_hz(table, mains_among_hz))

    def local(at: NDArray[np.int64]) -> Floats:
        return (at[(at >= start) & (at < stop)] - start) / fs_hz

    return Strip(
        slot,
        stop - start,
        (start - first, last - stop),
        x_mv,
        split,
        split,
        electrode_powers(split, info.leads),
        _clipped(x_mv, table, info.rails_mv),
        table,
        [local(at) for at in lead_beats],
        local(split.beats + first) if common else None,
        lost(table).astype(np.float64),
        weight,
    )


def _mains_hz(table: Segments, among_hz: tuple[float, ...]) -> float:
    """The mains frequency that carries most over the leads; NaN where no line stands out."""
    size, hz = (table.features[:, FEATURE_NAMES.index(n)] for n in ("mains_uv", "mains_hz"))
    power = [float(np.nansum(np.where(hz == f, size.astype(np.float64) ** 2, 0.0))) for f in among_hz]
    return among_hz[int(np.argmax(power))] if max(power) > 0 else float("nan")


def _clipped(x_mv: Floats, table: Segments, rails_mv: Floats | None) -> Bools:
    """(L, N): samples at the extremes of the leads that were found cut off there."""
    out = np.zeros(x_mv.shape, dtype=bool)
    seconds = table.features[:, FEATURE_NAMES.index("clipped_s")]
    for lead in np.flatnonzero(seconds >= CLIPPED_LEAST_S):
        x = x_mv[lead]
        low, high = np.nanmin(x), np.nanmax(x)
        near = 1e-3 * (high - low)
        out[lead] = (x <= low + near) | (x >= high - near)
    return out
