"""Do the limb leads add up? And if not, why: leads scaled apart, late, or corrupt. Never a swap.

Einthoven's I + III = II and Goldberger's aVR + aVL + aVF = 0 hold whatever the electrodes pick up and wherever they
sit. What breaks them happened to a lead after it was taken: a gain or a delay of its own, a filter of its own, lost
or cut-off samples.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sigguard.findings import Placement

Floats = NDArray[np.float64]

LAWS = {
    "Einthoven": (("I", "III", "II"), (1.0, 1.0, -1.0), "I + III = II"),
    "Goldberger": (("aVR", "aVL", "aVF"), (1.0, 1.0, 1.0), "aVR + aVL + aVF = 0"),
}
# Rounding to steps of 10 µV, the coarsest of usual recorders, alone gives 5 µV rms.
BREAK_UV, BREAK_SHARE = 20.0, 0.05  # rms that counts as broken, absolute and of the leads' own rms
STEEPNESS = 4.0  # of the probability that it is more than rounding, against the size of the break
MOST_LATE_S = 0.06
FLAT_MV = 1e-3
LATE_LEAVES = 0.3  # a delay is the cause if it leaves less than this share of the break
GAIN_RANGE = (0.1, 10.0)


@dataclass(frozen=True, slots=True)
class LawBreak:
    """A law that does not hold: rms of the sum in µV, of what is left when gains are fitted, and the cause."""

    law: str
    error_uv: float
    rest_uv: float
    cause: str  # "scaled", "late", "corrupt"
    lead: str | None = None  # the late one
    late_ms: float = 0.0
    amplitude_uv: float = 0.0  # rms of the leads themselves


def law_breaks(x_mv: NDArray[np.floating], fs_hz: float, leads: Sequence[str]) -> tuple[LawBreak, ...]:
    """The laws of LAWS that do not hold.

    ``x_mv`` (n_leads, n_samples), mV, NaN where missing. A law is not looked at without its three leads, with one of
    them flat, or where they share less than 1 s.
    """
    upper = [lead.strip().upper() for lead in leads]
    out = []
    for law, (names, weights, _) in LAWS.items():
        if not all(name.upper() in upper for name in names):
            continue
        x = np.asarray(x_mv, dtype=np.float64)[[upper.index(name.upper()) for name in names]]
        there = np.isfinite(x).all(axis=0)
        if there.sum() < fs_hz:
            continue
        x = x[:, there]
        x = x - x.mean(axis=1, keepdims=True)
        found = _broken(law, names, np.asarray(weights)[:, None] * x, fs_hz)
        if found is not None:
            out.append(found)
    return tuple(out)


def _broken(law: str, names: tuple[str, ...], signed: Floats, fs_hz: float) -> LawBreak | None:
    """Three leads, signed so that they should add up to 0."""
    error = float(1e3 * np.sqrt(np.mean(signed.sum(axis=0) ** 2)))
    own = np.sqrt(np.mean(signed**2, axis=1))
    size = float(1e3 * own.mean())
    if own.min() < FLAT_MV or error < max(BREAK_UV, BREAK_SHARE * size):
        return None
    rest, gains = _fit_gains(signed)
    if rest < max(BREAK_UV, BREAK_SHARE * size) and _plausible(gains):
        return LawBreak(law, error, rest, "scaled", amplitude_uv=size)
    lead, lag, left = _latest(signed, int(MOST_LATE_S * fs_hz))
    if lag and left < LATE_LEAVES * rest:
        return LawBreak(law, error, rest, "late", names[lead], 1e3 * lag / fs_hz, size)
    return LawBreak(law, error, rest, "corrupt", amplitude_uv=size)


def _fit_gains(signed: Floats) -> tuple[float, Floats]:
    """Rms in µV of the third lead less what the first two explain with gains of their own; the gains."""
    products = signed @ signed.T / signed.shape[1]
    gains = np.linalg.lstsq(products[:2, :2], -products[:2, 2], rcond=None)[0]
    weight = np.append(gains, 1.0)
    return float(1e3 * np.sqrt(max(weight @ products @ weight, 0.0))), gains


def _plausible(gains: Floats) -> bool:
    return bool(((gains > GAIN_RANGE[0]) & (gains < GAIN_RANGE[1])).all())


def _latest(signed: Floats, most: int) -> tuple[int, int, float]:
    """(which lead, by how many samples it is late, rms in µV left) for the delay that mends most."""
    best = (0, 0, float("inf"))
    n = signed.shape[1]
    for lead in range(3):
        others = [k for k in range(3) if k != lead]
        for lag in range(-most, most + 1):
            cut = slice(most, n - most)
            moved = signed[lead, most + lag : n - most + lag]
            left, gains = _fit_gains(np.vstack([signed[others][:, cut], moved[None]]))
            if left < best[2] and _plausible(gains):
                best = (lead, lag, left)
    return best


def usual_breaks(parts: Sequence[Sequence[LawBreak]]) -> tuple[LawBreak, ...]:
    """Of the breaks in parts of one recording those of a law broken in at least half of them, of middling size."""
    out = []
    for law in LAWS:
        found = sorted((b for part in parts for b in part if b.law == law), key=lambda b: b.error_uv)
        if found and 2 * len(found) >= len(parts):
            out.append(found[len(found) // 2])
    return tuple(out)


def law_findings(breaks: Sequence[LawBreak]) -> tuple[Placement, ...]:
    """What is to be said of the laws broken by a delay, a filter or loss; leads merely scaled apart have their note."""
    out = []
    for b in breaks:
        if b.cause == "scaled":
            continue
        limit = max(BREAK_UV, BREAK_SHARE * b.amplitude_uv)
        probability = 1.0 / (1.0 + (limit / max(b.rest_uv, 1e-9)) ** STEEPNESS)
        rule = LAWS[b.law][2]
        if b.cause == "late":
            how = "late" if b.late_ms > 0 else "early"
            what = f"lead {b.lead} is about {abs(b.late_ms):.0f} ms {how} against the others"
        else:
            what = "a lead is corrupt or was filtered by itself"
        text = (
            f"{rule} is off by {b.error_uv:.0f} µV rms: {what}. Exchanged electrodes cannot do this; "
            "look at the recorder, its filters or the file."
        )
        out.append(Placement(f"leads-do-not-add-up-{b.cause}", float(probability), text))
    return tuple(out)


def scale_notes(breaks: Sequence[LawBreak]) -> tuple[str, ...]:
    """A sentence for leads that add up only with gains of their own: their amplitudes are no common millivolts."""
    scaled = [b for b in breaks if b.cause == "scaled"]
    if not scaled:
        return ()
    rules = " and ".join(f"{LAWS[b.law][2]} (off by {b.error_uv:.0f} µV rms)" for b in scaled)
    return (
        f"{rules} holds only if each lead is given a gain of its own: the leads were scaled apart, "
        "and their amplitudes cannot be compared.",
    )
