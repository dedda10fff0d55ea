"""Which faults lie on a row, what each takes, how strong it is and when: from calls to the table's columns."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sigguard import fault_windows as windows
from sigguard.features import FEATURE_NAMES, qrs_mask
from sigguard.flatline import SAME_MV, Runs, paint, runs_of
from sigguard.measure import Analysis
from sigguard.noise import widen
from sigguard.reliability import HARM_FAULTS, LEARNED_FAULTS, ReliabilityModel
from sigguard.segments import FAULTS, MEASUREMENTS, FaultDetails
from sigguard.verdicts import fault_rows

SUSPECT = 0.45  # share of its threshold from which a disturbance is called where something is lost
LEAST_P = 0.10  # where something is lost and nothing called, the likeliest disturbance is, from here on
SURE = 0.5  # P(the fault alone takes the measurement) from which a lost one is laid to it
HELD_S = 0.12
OFTEN_SAME = 0.4  # share of neighbours alike, below which 0.12 s alike are no chance
STILL_UV, STILL_S, BLOCK_S = 20.0, 1.5, 0.25  # a lead without contact shows its amplifier's noise, a few µV
WITHOUT_LOSS = 0.01  # what a fault that costs nothing weighs beside one that does
WEAK_COSTS = 0.25  # what disturbs a small QRS comes first, if it is surely there


def judge_faults(
    model: ReliabilityModel,
    analysis: Analysis,
    x_mv: NDArray[np.float64],
    fs_hz: float,
    *,
    fault_p: NDArray[np.float64],
    lost: NDArray[np.bool_],
    limited: NDArray[np.bool_],
    n_leads: int,
) -> tuple[NDArray[np.float32], FaultDetails]:
    """((R, 9) fractions of the segment each fault lies on, their details); 0 where not called.

    ``x_mv`` (R, N) are the rows as analysed, without margins, by time and then lead; ``lost`` (R, 5) the
    measurements neither reliable nor absent. The order of naming: the measurements lost, each
    weighed by the chance that this fault alone takes it and that the fault is there.
    """
    length_s = x_mv.shape[1] / fs_hz
    fraction = fault_rows(model, analysis.features, fault_p, limited, length_s)
    flat = _either(still_beside_others(x_mv, fs_hz, n_leads), held(x_mv, fs_hz))
    if flat is not None:
        flat &= ~analysis.clipped
    if flat is not None:
        seconds = (flat | analysis.flat).sum(axis=1) / fs_hz
        still = flat.any(axis=1)
        k = FAULTS.index("flat")
        fraction[still, k] = np.maximum(fraction[still, k], seconds[still] / length_s)
    _name_the_likely(fraction, fault_p, lost, model.fault_threshold)
    called = fraction > 0
    harm_p = _harm(model, analysis.features, called)
    there = np.ones(called.shape)
    there[:, [FAULTS.index(f) for f in LEARNED_FAULTS]] = fault_p
    gone = lost[:, None, :].astype(np.float64)
    cost = (harm_p * (gone + WITHOUT_LOSS)).sum(axis=2)
    weight = np.where(called, there * cost, 0.0)
    harms: NDArray[np.bool_] = lost[:, None, :] & called[:, :, None] & (harm_p >= SURE)
    _leave_no_loss_unexplained(harms, harm_p * there[:, :, None], lost, called)
    found = _windows(analysis, x_mv, fs_hz, called, flat)
    fraction = _by_windows(fraction, found.on)
    return fraction, FaultDetails(
        weight=weight.astype(np.float32),
        harms=harms,
        strength=_strength(analysis.features, found.level, called),
        windows=_bits(found.on, called),
        n_windows=np.full(len(fraction), found.on.shape[1], dtype=np.uint8),
    )


def still_beside_others(x_mv: NDArray[np.float64], fs_hz: float, n_leads: int) -> NDArray[np.bool_] | None:
    """(R, N): a lead keeps within 20 µV for 1.5 s while most other leads move; None where no lead does.

    That the others move tells a lead without contact from a heart that pauses: a lead alone is
    never so called. Rows by time and then lead.
    """
    width = max(1, int(round(BLOCK_S * fs_hz)))
    count, reach = x_mv.shape[1] // width, int(round(STILL_S / BLOCK_S))
    if n_leads < 2 or count < reach:
        return None
    blocks = x_mv[:, : count * width].reshape(len(x_mv), count, width)
    # Few rows rest at all: look at a sample every 20 ms first, no QRS complex is shorter than three of them.
    calm = _calm(blocks[:, :, :: max(1, int(0.02 * fs_hz))], reach)
    rows = np.flatnonzero(calm.any(axis=1))
    if len(rows):
        calm[rows] = _calm(blocks[rows], reach)
    if not calm.any():
        return None
    by_lead = calm.reshape(-1, n_leads, calm.shape[1])
    resting = n_leads - by_lead.sum(axis=1) <= 0.5 * (n_leads - 1)
    # Leads come to rest one after the other: near a time when most do, one more proves nothing.
    by_lead = by_lead & ~widen(resting, reach)[:, None, :]
    alone = by_lead.reshape(calm.shape)
    if not alone.any():
        return None
    still: NDArray[np.bool_] = np.zeros((len(x_mv), count), dtype=bool)
    n = count - reach + 1
    for step in range(reach):
        still[:, step : step + n] |= alone
    out = np.zeros(x_mv.shape, dtype=bool)
    out[:, : count * width] = np.repeat(still, width, axis=1)
    out[:, count * width :] = still[:, -1:]
    return out


def _calm(blocks: NDArray[np.float64], reach: int) -> NDArray[np.bool_]:
    """(R, count, width) → (R, count - reach + 1): ``reach`` blocks on end stay within STILL_UV."""
    high, low = blocks.max(axis=2), blocks.min(axis=2)
    n = blocks.shape[1] - reach + 1
    top, foot = high[:, :n].copy(), low[:, :n].copy()
    for step in range(1, reach):
        np.maximum(top, high[:, step : step + n], out=top)
        np.minimum(foot, low[:, step : step + n], out=foot)
    return top - foot <= STILL_UV * 1e-3


def held(x_mv: NDArray[np.float64], fs_hz: float) -> NDArray[np.bool_] | None:
    """(R, N): a value repeated for 0.12 s or more in a row that otherwise does not rest; None without any.

    A row whose noise moves every few samples cannot stand still that long by chance; one that often
    rests for a shorter while (coarse steps, no noise) can.
    """
    least = max(4, int(HELD_S * fs_hz))
    thin = x_mv[:, :: least // 4]  # a value held that long is met three times in a row
    alike = np.abs(np.diff(thin, axis=1)) <= SAME_MV
    rows = np.flatnonzero((alike[:, 1:] & alike[:, :-1]).any(axis=1))
    if not len(rows):
        return None
    same = np.abs(np.diff(x_mv[rows], axis=1)) <= SAME_MV
    runs = runs_of(same, max(2, least // 4))
    long = runs.length >= least
    n_long = np.bincount(runs.row[long], minlength=len(rows))
    n_short = np.bincount(runs.row[~long], minlength=len(rows))
    inside = np.bincount(runs.row[long], runs.length[long], minlength=len(rows))
    outside = same.shape[1] - inside
    often = (same.sum(axis=1) - inside) / np.maximum(outside, 1)
    odd = (n_long > 0) & (3 * n_short <= n_long) & (often < OFTEN_SAME) & (outside > 0.02 * same.shape[1])
    found = runs.where(long & odd[runs.row])
    if not len(found):
        return None
    out = np.zeros(x_mv.shape, dtype=bool)
    out[rows] = paint(Runs(found.row, found.start, found.end + 1), (len(rows), x_mv.shape[1]))
    return out


def _either(a: NDArray[np.bool_] | None, b: NDArray[np.bool_] | None) -> NDArray[np.bool_] | None:
    return b if a is None else a if b is None else a | b


def _name_the_likely(
    fraction: NDArray[np.float32],
    fault_p: NDArray[np.float64],
    lost: NDArray[np.bool_],
    threshold: NDArray[np.float64],
) -> None:
    """Where something is lost a disturbance is called on less evidence, and the likeliest if none else is."""
    some = np.atleast_1d(lost.any(axis=1))
    learned = np.array([FAULTS.index(f) for f in LEARNED_FAULTS])
    row, k = np.nonzero(some[:, None] & (fault_p >= SUSPECT * threshold))
    fraction[row, learned[k]] = 1.0
    bare = some & ~fraction.any(axis=1)
    best = fault_p.argmax(axis=1)
    rows = np.flatnonzero(bare & (fault_p.max(axis=1) >= LEAST_P))
    fraction[rows, learned[best[rows]]] = 1.0


def _harm(
    model: ReliabilityModel, features: NDArray[np.float32], called: NDArray[np.bool_]
) -> NDArray[np.float64]:
    """(R, 9, 5): P(this fault alone takes the measurement), where it is called."""
    out = np.zeros((*called.shape, len(MEASUREMENTS)))
    columns = np.array([FAULTS.index(f) for f in HARM_FAULTS])
    row, kind = np.nonzero(called[:, columns])
    if len(row):
        out[row, columns[kind]] = model.harm(features[row], kind)
    out[:, FAULTS.index("weak")] = WEAK_COSTS * called[:, [FAULTS.index("weak")]]
    out[:, FAULTS.index("narrow-band")] = called[:, [FAULTS.index("narrow-band")]]
    return out


def _leave_no_loss_unexplained(
    harms: NDArray[np.bool_],
    share: NDArray[np.float64],
    lost: NDArray[np.bool_],
    called: NDArray[np.bool_],
) -> None:
    """A lost measurement that no fault surely takes is laid to the one most likely to."""
    explained: NDArray[np.bool_] = np.any(harms, axis=1) | ~np.any(called, axis=1, keepdims=True)
    row, m = np.nonzero(lost & ~explained)
    if len(row):
        harms[row, share[row, :, m].argmax(axis=1), m] = True
        harms &= called[:, :, None]


def _windows(
    analysis: Analysis,
    x_mv: NDArray[np.float64],
    fs_hz: float,
    called: NDArray[np.bool_],
    flat: NDArray[np.bool_] | None,
) -> windows.FaultWindows:
    """Seconds of each fault, all FAULTS; those that are no matter of time lie on all of them."""
    count = windows.n_windows(x_mv.shape[1] / fs_hz)
    on = np.repeat(called[:, None, :], count, axis=1)
    level = np.full(called.shape, np.nan, dtype=np.float32)
    timed = np.array([FAULTS.index(kind) for kind in windows.KINDS])
    rows = np.flatnonzero(called[:, timed].any(axis=1))
    if len(rows):
        mask = qrs_mask(analysis.beat_row, analysis.beat_s, x_mv.shape, fs_hz)[rows]
        still = analysis.flat[rows] if flat is None else analysis.flat[rows] | flat[rows]
        found = windows.fault_windows(
            x_mv[rows],
            fs_hz,
            called=called[np.ix_(rows, timed)],
            qrs_mask=mask,
            residual_mv=analysis.residual_mv[rows],
            fs_res_hz=analysis.residual_mv.shape[1] * fs_hz / x_mv.shape[1],
            masks={"flat": still, "clipped": analysis.clipped[rows], "missing": analysis.missing[rows]},
            mains_hz=analysis.features[rows, FEATURE_NAMES.index("mains_hz")],
            tremor_uv=analysis.features[rows, FEATURE_NAMES.index("tremor_uv")],
        )
        on[np.ix_(rows, np.arange(count), timed)] = found.on
        level[np.ix_(rows, timed)] = found.level
    return windows.FaultWindows(on, level)


def _by_windows(fraction: NDArray[np.float32], on: NDArray[np.bool_]) -> NDArray[np.float32]:
    """Fractions of the learned faults from their windows; the others are measured to the sample."""
    out = fraction.copy()
    for name in LEARNED_FAULTS:
        k = FAULTS.index(name)
        out[:, k] = np.where(fraction[:, k] > 0, on[:, :, k].mean(axis=1), 0.0)
    return out


def _strength(
    features: NDArray[np.float32], level: NDArray[np.float32], called: NDArray[np.bool_]
) -> NDArray[np.float32]:
    out = level.copy()
    for kind, name in (("wander", "wander_range_uv"), ("weak", "qrs_pp_uv")):
        out[:, FAULTS.index(kind)] = features[:, FEATURE_NAMES.index(name)]
    return np.where(called & np.isfinite(out) & (out > 0), out, np.nan).astype(np.float32)


def _bits(on: NDArray[np.bool_], called: NDArray[np.bool_]) -> NDArray[np.uint64]:
    """(R, W, 9) → (R, 9), bit k for window k."""
    power = np.uint64(1) << np.arange(on.shape[1], dtype=np.uint64)
    return np.where(called, (on * power[None, :, None]).sum(axis=1, dtype=np.uint64), np.uint64(0))
