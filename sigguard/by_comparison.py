"""What cannot be taken out of a signal, because the signal is not there: wires off, leads too small, too narrow a band.

There is nothing to score again. The leads hit are taken to become as good as the comparable ones: the other leads
at the same time; where none is whole, the same leads at other times.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from sigguard.segments import FAULTS, Segments
from sigguard.spans import lost

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

GONE = [FAULTS.index(kind) for kind in ("flat", "missing")]
WEAK, NARROW, CLIPPED = (FAULTS.index(kind) for kind in ("weak", "narrow-band", "clipped"))
_PAIRS = {frozenset({"I", "II"}): "RA", frozenset({"I", "III"}): "LA", frozenset({"II", "III"}): "LL"}


def hit_rows(table: Segments, action: str) -> Bools:
    """(n,): the rows that check-wire, check-contact or record-wider would be for."""
    if action == "check-wire":
        return np.asarray((table.fault[:, GONE] > 0).any(axis=1))
    return np.asarray(table.fault[:, WEAK if action == "check-contact" else NARROW] > 0)


def usual_loss(segments: Segments) -> Floats:
    """(n_leads, 5): share of each lead's whole rows (neither flat, missing, clipped nor weak) that is lost; NaN if none."""
    whole = ~(segments.fault[:, [*GONE, WEAK, CLIPPED]] > 0).any(axis=1)
    gone = lost(segments)
    out = np.full((len(segments.leads), gone.shape[1]), np.nan)
    for lead in range(len(out)):
        rows = whole & (segments.lead_index == lead)
        if rows.any():
            out[lead] = gone[rows].mean(axis=0)
    return out


def expected_loss(still_lost: Floats, hit: Bools, whole: Bools, usual: Floats) -> tuple[Floats, str]:
    """((L, 5) shares still lost once the rows hit are mended, what they were compared with).

    ``still_lost`` (L, 5) as things stand; ``whole`` (L,) rows fit to compare with. A row is never taken to get worse.
    """
    others = whole & ~hit
    if others.any():
        like, with_what = (
            np.broadcast_to(still_lost[others].mean(axis=0), still_lost.shape),
            "the other leads",
        )
    elif np.isfinite(usual[hit]).any():
        like = np.where(np.isfinite(usual), usual, np.nanmean(usual[hit], axis=0))
        with_what = "the same leads at other times"
    else:
        like, with_what = np.zeros_like(still_lost), "a whole signal"
    return np.where(hit[:, None], np.minimum(like, still_lost), still_lost), with_what


def common_place(hit: Sequence[str], leads: Sequence[str]) -> str | None:
    """The electrode that the leads hit have in common, ``all leads``, or None: each by itself."""
    if len(leads) > 1 and len(hit) == len(leads):
        return "all leads"
    limb = frozenset(hit) & {"I", "II", "III"}
    present = frozenset(leads) & {"I", "II", "III"}
    if len(present) == 3 and limb in _PAIRS and not any(name.startswith("V") for name in hit):
        return _PAIRS[limb]
    return None


def own_electrode(lead: str) -> str:
    """The chest electrode of a chest lead; otherwise the lead itself."""
    name = lead.strip().upper()
    return f"C{name[1]}" if len(name) == 2 and name[0] == "V" and name[1] in "123456" else f"lead {lead}"
