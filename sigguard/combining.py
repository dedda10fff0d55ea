"""Values of the recording out of the values of its segments."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from sigguard.findings import Value
from sigguard.segments import ABSENT, MEASUREMENTS, UNITS, Segments
from sigguard.spans import Grid, covered_seconds

RATE, QT, ST = (MEASUREMENTS.index(name) for name in ("rate", "qt", "st"))
_GLOBAL = MEASUREMENTS[:ST]


def combine_values(
    segments: Segments,
    global_values: Mapping[str, Value] | None = None,
    *,
    fridericia: bool = False,
) -> tuple[dict[str, Value], dict[str, Value]]:
    """Values of the recording from those of its segments: (rate, pr, qrs, qt, qtc), (ST by lead).

    The value is the median over time of the median over the leads that are reliable at that time; low
    and high are the least and the greatest of these. Its bound is the largest bound of the segments
    used: each of these is kept in 95 % of cases, so that fewer than half can break the largest. The
    value is reliable if any segment is; ``reliable_s`` says for how long. Absent, with the reason that
    holds longest, only where no segment gives a value; ``too-small-here`` counts for a single lead only.

    A measurement handed over in ``global_values`` is taken as it is (one without ``reliable_s`` holds
    for the whole time). QTc is QT/√RR (Bazett), with ``fridericia`` QT/∛RR, RR in seconds, from QT and
    rate of the same time; its bound is how far the bounds of both together can move it.
    """
    handed = {name: _for_whole_time(value, segments) for name, value in (global_values or {}).items()}
    grid = Grid.of(segments)
    series = [_over_leads(segments, grid, k) for k in range(len(_GLOBAL))]
    values = {
        name: handed.get(name) or _combine(segments, grid, k, series[k]) for k, name in enumerate(_GLOBAL)
    }
    power = 1 / 3 if fridericia else 1 / 2
    values["qtc"] = handed.get("qtc") or _corrected_qt(
        values, grid, series, power, one_pair=not handed.keys().isdisjoint({"rate", "qt"})
    )
    st = {
        lead: _combine_lead(segments, grid, np.flatnonzero(segments.lead_index == index), lead)
        for index, lead in enumerate(segments.leads)
    }
    return values, st


def _for_whole_time(value: Value, segments: Segments) -> Value:
    if not value.reliable or value.reliable_s > 0 or not len(segments):
        return value
    return replace(value, reliable_s=float(Grid.of(segments).length_s.sum()))


def _usable(segments: Segments, k: int) -> NDArray[np.bool_]:
    return segments.reliable[:, k] & np.isfinite(segments.value[:, k])


def _over_leads(segments: Segments, grid: Grid, k: int) -> NDArray[np.float64]:
    """(n_slots,): median over the leads reliable in each slot; NaN where none is."""
    x = np.sort(grid.spread(np.where(_usable(segments, k), segments.value[:, k], np.nan), np.nan), axis=1)
    count = np.isfinite(x).sum(axis=1)  # NaN sort last
    slots = np.arange(len(x))
    return (x[slots, np.maximum(count - 1, 0) // 2] + x[slots, np.minimum(count // 2, grid.n_leads - 1)]) / 2


def _combine(segments: Segments, grid: Grid, k: int, over_time: NDArray[np.float64]) -> Value:
    name = MEASUREMENTS[k]
    used = _usable(segments, k)
    if not used.any():
        return Value(UNITS[name], absent=_absent(segments, k, np.arange(len(segments)), codes=(1, 2)))
    leads = np.bincount(segments.lead_index[used], minlength=len(segments.leads)) > 0
    return _value(
        name,
        over_time[np.isfinite(over_time)],
        segments.bound[used, k],
        leads=tuple(lead for lead, hit in zip(segments.leads, leads, strict=True) if hit),
        reliable_s=covered_seconds(grid, used),
    )


def _combine_lead(segments: Segments, grid: Grid, rows: NDArray[np.intp], lead: str) -> Value:
    used = rows[_usable(segments, ST)[rows]]
    if not len(used):
        return Value(UNITS["st"], absent=_absent(segments, ST, rows, codes=(1, 2, 3)))
    seconds = float((segments.end_s[used] - segments.start_s[used]).sum())
    return _value("st", segments.value[used, ST], segments.bound[used, ST], leads=(lead,), reliable_s=seconds)


def _value(
    name: str,
    x: NDArray[np.float64],
    bound: NDArray[np.float64],
    *,
    leads: tuple[str, ...],
    reliable_s: float,
) -> Value:
    bound = bound[np.isfinite(bound)]
    return Value(
        unit=UNITS[name],
        value=float(np.median(x)),
        low=float(x.min()),
        high=float(x.max()),
        bound_95=float(bound.max()) if len(bound) else None,
        reliable=True,
        leads=leads,
        reliable_s=reliable_s,
    )


def _absent(segments: Segments, k: int, rows: NDArray[np.intp], *, codes: Sequence[int]) -> str | None:
    """The reason that holds for the most lead-seconds, None without any."""
    length_s = segments.end_s[rows] - segments.start_s[rows]
    seconds = (
        np.bincount(segments.absent[rows, k], length_s, minlength=len(ABSENT)) if len(rows) else np.zeros(4)
    )
    best = max(codes, key=lambda code: seconds[code])
    return ABSENT[best] if seconds[best] > 0 else None


def _corrected_qt(
    values: Mapping[str, Value],
    grid: Grid,
    series: Sequence[NDArray[np.float64]],
    power: float,
    *,
    one_pair: bool,
) -> Value:
    """QTc of the one pair of recording values, or of each slot that has both."""
    rate, qt = values["rate"], values["qt"]
    if rate.value is None or qt.value is None or not rate.reliable or not qt.reliable:
        return Value(UNITS["qtc"], absent=qt.absent)
    if one_pair:
        rates, qts = np.array([rate.value]), np.array([qt.value])
        reliable_s = min(rate.reliable_s, qt.reliable_s)
    else:
        both = np.isfinite(series[RATE]) & np.isfinite(series[QT])
        rates, qts = series[RATE][both], series[QT][both]
        reliable_s = float(grid.length_s[both].sum())
    if not len(rates) or not (rates > 0).all():
        return Value(UNITS["qtc"])
    x = qts * (rates / 60) ** power
    bound = np.zeros(0)
    if rate.bound_95 is not None and qt.bound_95 is not None:
        above = (qts + qt.bound_95) * ((rates + rate.bound_95) / 60) ** power - x
        below = x - np.maximum(qts - qt.bound_95, 0) * (np.maximum(rates - rate.bound_95, 0) / 60) ** power
        bound = np.maximum(above, below)
    value = _value("qtc", x, bound, leads=qt.leads, reliable_s=reliable_s)
    return replace(value, low=None, high=None) if one_pair else value
