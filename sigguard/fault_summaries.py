"""The faults of a lead, from the table: which, how much of the time, what they take, how strong, when.

The first named is the one held to cost the most measurements, over its time.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sigguard.findings import Fault
from sigguard.segments import FAULTS, MEASUREMENTS, STRENGTH_UNITS, Segments

HARM_SHARE = 0.1  # a fault harms a measurement that is lost on at least this share of the fault's time
MAX_STRETCHES = 200  # of one fault of one lead; more are joined over the shortest pauses
_ADDS_UP = tuple(unit == "s" for unit in STRENGTH_UNITS)


def lead_faults(segments: Segments, rows: NDArray[np.intp], lost: NDArray[np.float64]) -> tuple[Fault, ...]:
    """Faults of the ``rows`` (k,) of one lead; ``lost`` (n, 5) is 1 where neither reliable nor absent.

    A fault harms a measurement that it takes on at least a tenth of the time of the segments it lies
    on. Without details in the table each takes whatever is lost beside it, and the largest fraction
    comes first.
    """
    length_s = segments.end_s[rows] - segments.start_s[rows]
    share = length_s / max(float(length_s.sum()), 1e-12)
    fault = segments.fault[rows].astype(np.float64)
    fraction = share @ fault
    touched = (fault > 0) * share[:, np.newaxis]
    details = segments.details
    if details is None:
        harm, cost = touched.T @ lost[rows], fraction
    else:
        takes = details.harms[rows]
        harm = np.stack([touched[:, k] @ takes[:, k].astype(np.float64) for k in range(len(FAULTS))])
        cost = (touched * details.weight[rows]).sum(axis=0)
    harmed = (harm > 0) & (harm >= HARM_SHARE * touched.sum(axis=0)[:, np.newaxis])
    order = [k for k in np.lexsort((-fraction, -cost)) if fraction[k] > 0]
    return tuple(
        Fault(
            FAULTS[k],
            round(min(max(float(fraction[k]), 0.0), 1.0), 9),
            tuple(m for m, hit in zip(MEASUREMENTS, harmed[k], strict=True) if hit),
            _strength(segments, rows, fault[:, k] * length_s, int(k)),
            STRENGTH_UNITS[k],
            fault_stretches(segments, rows, int(k)),
        )
        for k in order
    )


def gravest(segments: Segments) -> NDArray[np.intp]:
    """(n,): the fault to name first of each row, -1 where none is called."""
    worth = segments.fault.astype(np.float64)
    if segments.details is not None:
        # Without any cost the larger fraction counts.
        worth = np.where(worth > 0, segments.details.weight + 1e-6 * worth, 0.0)
    return np.where(segments.fault.any(axis=1), worth.argmax(axis=1), -1)


def _strength(segments: Segments, rows: NDArray[np.intp], seconds: NDArray, k: int) -> float | None:
    """Seconds add up; µV are a mean of squares over the time of the fault."""
    if segments.details is None or not STRENGTH_UNITS[k]:
        return None
    level = segments.details.strength[rows, k].astype(np.float64)
    use = np.isfinite(level) & (seconds > 0)
    if not use.any():
        return None
    if _ADDS_UP[k]:
        return float(level[use].sum())
    return float(np.sqrt(np.average(level[use] ** 2, weights=seconds[use])))


def fault_stretches(
    segments: Segments, rows: NDArray[np.intp], k: int, *, at_most: int = MAX_STRETCHES
) -> tuple[tuple[float, float], ...]:
    """(start_s, end_s) of the stretches of fault ``k`` in ``rows`` of one lead, in order, neighbours joined."""
    details = segments.details
    if details is None:
        return ()
    rows = rows[segments.fault[rows, k] > 0]
    if not len(rows):
        return ()
    start_s, end_s = segments.start_s[rows], segments.end_s[rows]
    n, bits = details.n_windows[rows].astype(np.int64), details.windows[rows, k]
    place = np.arange(int(n.max()))
    on = ((bits[:, None] >> place.astype(np.uint64)) & np.uint64(1)).astype(bool) & (place < n[:, None])
    row, window = np.nonzero(on)
    if not len(row):
        return ()
    width = ((end_s - start_s) / n)[row]
    first, last = start_s[row] + window * width, start_s[row] + (window + 1) * width
    gap = first[1:] - last[:-1]
    joined = gap < 1e-6
    apart = np.flatnonzero(~joined)
    if len(apart) >= at_most:
        joined[apart[np.argsort(gap[apart], kind="stable")[: len(apart) - at_most + 1]]] = True
    begin = np.concatenate(([True], ~joined))
    finish = np.concatenate((~joined, [True]))
    return tuple(
        (round(a, 3), round(b, 3)) for a, b in zip(first[begin].tolist(), last[finish].tolist(), strict=True)
    )
