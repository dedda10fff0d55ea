"""Disturbances taken out of a strip one at a time, to see what the strip would be worth without them.

Not for measuring: what is left is no ECG to read values from, only one to score. A strip is split into its
mains hum, its averaged beats, and what does not recur with the beats; an act takes part of the last away,
down to what a strip recorded with care still holds, never to nothing.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from sigguard.electrodes import ELECTRODES, lead_rows, non_negative_least_squares
from sigguard.noise import fill_gaps

Floats = NDArray[np.float64]

DRIFT_HZ = 0.7  # a baseline below this can be taken out without harm to ST (Kligfield et al. 2007)
FAST_HZ = 18.0  # muscle lies above, the movement of electrodes mostly below
MIDDLE_HZ = (3.0, 13.0)  # tremor, but movement too
TREMOR_RATIO = (2.0, 4.0)  # middle over 0.7 to 3 Hz, rms: movement has about 1, tremor 10 and more
# Fast and tremor over slow, rms. Recorded muscle artifact has 0.4 and more: the shaking that goes with it moves the
# electrodes too, and ends with it. Recorded wander and electrode motion have 0.06: what is fast in them goes with them.
SHAKING_RATIO, STILL_RATIO = (0.15, 0.3), (0.08, 0.12)
# each pass takes what the one before left of a line some tenths of a hertz off, or swelling
HUM_WINDOWS_S = (0.5, 0.5, 0.25)
HARMONICS = 5
BEFORE, AFTER = 0.42, 0.58  # shares of the interval that belong to the beat after and the beat before
QRS_S = (0.06, 0.08)
LIKE_THE_REST = 0.6  # correlation with the usual beat below which a beat is another shape, not noise
# rms that a strip recorded with care still holds, per lead and per electrode
FAST_FLOOR_MV, SLOW_FLOOR_MV, DRIFT_FLOOR_MV, ELECTRODE_FLOOR_MV = 0.008, 0.015, 0.025, 0.008
MOVING_FLOOR_MV = 0.03  # of drift and slow movement together
LEAD_ALONE = 1e-3  # of a lead's disturbance that no electrode explains


@dataclass(frozen=True, slots=True, eq=False)
class Split:
    """A strip of (L, N) mV in parts that add up to it: hum + averaged beats + drift + slow + muscle.

    ``drift_mv`` below 0.7 Hz, ``slow_mv`` up to about 18 Hz, ``muscle_mv`` tremor and what lies above: none of the three
    recurs with the beats.
    """

    hum_mv: Floats
    drift_mv: Floats
    slow_mv: Floats
    muscle_mv: Floats
    beats: NDArray[np.intp]  # sample indices, those that were no beats left out
    open: NDArray[np.bool_]  # (N,): outside the QRS complexes
    shaking: float  # share of drift and slow movement that goes with the muscles, 0 to 1
    stirring: float  # share of what is fast that goes with drift and slow movement, 0 to 1

    @property
    def moving_mv(self) -> Floats:
        return self.drift_mv + self.slow_mv

    @property
    def residual_mv(self) -> Floats:
        return self.drift_mv + self.slow_mv + self.muscle_mv

    def every(self, step: int) -> Split:
        """Each ``step``-th sample only: enough to weigh the parts against each other."""
        parts = {f: getattr(self, f)[:, ::step] for f in ("hum_mv", "drift_mv", "slow_mv", "muscle_mv")}
        return replace(self, open=self.open[::step], **parts)

    def rms_mv(self, part: Floats) -> Floats:
        """(L,) root mean square of a part outside the QRS complexes."""
        return np.sqrt((part[:, self.open] ** 2).mean(axis=1)) if self.open.any() else np.zeros(len(part))


def split_strip(x_mv: Floats, fs_hz: float, beats: NDArray[np.int64], mains_hz: float) -> Split:
    """(L, N) mV, NaN where missing; ``beats`` (B,) sample indices common to all leads; ``mains_hz`` 50, 60 or NaN.

    Gaps are bridged. Without two beats nothing recurs: all of the strip but its mean counts as disturbance.
    """
    x = fill_gaps(np.asarray(x_mv, dtype=np.float64))[0]
    x = (x - x.mean(axis=1, keepdims=True)).astype(np.float32)  # for speed; 1 mV is then known to 0.1 nV
    n = x.shape[1]
    at = np.asarray(beats, dtype=np.intp)
    at = at[(at >= 0) & (at < n)]
    open_mask = _outside_qrs(at, n, fs_hz)
    hum = hum_part(x, fs_hz, mains_hz, open_mask) if np.isfinite(mains_hz) else np.zeros_like(x)
    still = x - hum
    (drift,) = _banded(still, fs_hz, _drift_gain)
    at = true_beats(still - drift, at, fs_hz)
    for _ in range(2):
        train, other = beat_train(still - drift, at, fs_hz)
        (drift,) = _banded(still - train, fs_hz, _drift_gain)
    rest = still - train - drift
    # Beats of another shape are not noise: nothing but the drift is laid to any disturbance there.
    rest[:, other] = 0.0
    slow, middle, fast = _bands(rest, fs_hz)
    open_mask = _outside_qrs(at, n, fs_hz)
    share = _muscle_share(slow, middle, fast, open_mask)[:, None] * middle
    slow, muscle = slow + middle - share, share + fast
    ratio = _power(muscle, open_mask) / max(_power(drift + slow, open_mask), 1e-18)
    shaking, moving = _ramp(np.sqrt(ratio), *SHAKING_RATIO), _ramp(np.sqrt(ratio), *STILL_RATIO)
    return Split(hum, drift, slow, muscle, at, open_mask, shaking, 1.0 - moving)


def _power(part: Floats, open_mask: NDArray[np.bool_]) -> float:
    return float((part[:, open_mask] ** 2).sum())


def _bands(x: Floats, fs_hz: float) -> tuple[Floats, Floats, Floats]:
    """(below 3 Hz with 13 to 18 Hz, 3 to 13 Hz, above 18 Hz) of (L, N), adding up to it."""
    middle, fast = _banded(x, fs_hz, _middle_gain, _fast_gain)
    return x - middle - fast, middle, fast


def _muscle_share(slow: Floats, middle: Floats, fast: Floats, open_mask: NDArray[np.bool_]) -> Floats:
    """(L,) how much of the middle band goes with muscle: where it is tremor, or no larger than the fast part."""
    if not open_mask.any():
        return np.zeros(len(middle))
    a, b, c = (np.sqrt((part[:, open_mask] ** 2).mean(axis=1)) for part in (slow, middle, fast))
    tremor = np.clip((b / np.maximum(a, 1e-9) - TREMOR_RATIO[0]) / (TREMOR_RATIO[1] - TREMOR_RATIO[0]), 0, 1)
    return np.maximum(tremor, np.clip(c / np.maximum(b, 1e-9), 0.0, 1.0))


def _ramp(x: float, low: float, high: float) -> float:
    return float(np.clip((x - low) / (high - low), 0.0, 1.0))


def _outside_qrs(at: NDArray[np.intp], n: int, fs_hz: float) -> NDArray[np.bool_]:
    out = np.ones(n, dtype=bool)
    for k in at:
        out[max(0, k - round(QRS_S[0] * fs_hz)) : k + round(QRS_S[1] * fs_hz)] = False
    return out


def _below(f_hz: Floats, corner_hz: float) -> Floats:
    return 1.0 / (1.0 + (f_hz / corner_hz) ** 8)


def _drift_gain(f_hz: Floats) -> Floats:
    return _below(f_hz, DRIFT_HZ)


def _middle_gain(f_hz: Floats) -> Floats:
    return _below(f_hz, MIDDLE_HZ[1]) - _below(f_hz, MIDDLE_HZ[0])


def _fast_gain(f_hz: Floats) -> Floats:
    return 1.0 - _below(f_hz, FAST_HZ)


def _banded(x: Floats, fs_hz: float, *gains: Callable[[Floats], Floats]) -> list[Floats]:
    """Zero-phase filters by spectrum, one result for each gain; mirrored at both ends; shape kept."""
    n = x.shape[1]
    pad = min(n - 1, round(1.5 * fs_hz))
    size = fft.next_fast_len(n + 2 * pad, real=True)
    wide = np.pad(x, ((0, 0), (pad, size - n - pad)), mode="reflect" if size - n - pad < n else "edge")
    f_hz = np.arange(size // 2 + 1) * (fs_hz / size)
    spectrum = fft.rfft(wide, axis=1)
    return [
        fft.irfft(spectrum * gain(f_hz).astype(x.dtype), n=size, axis=1)[:, pad : pad + n] for gain in gains
    ]


def hum_part(x_mv: Floats, fs_hz: float, mains_hz: float, open_mask: NDArray[np.bool_]) -> Floats:
    """The mains line and its harmonics in (L, N) mV, each a sine fitted by least squares in a window of half a second that
    slides, so that hum that swells is followed; fitted outside the QRS complexes, which hold 50 Hz of their own."""
    n = x_mv.shape[1]
    (high,) = _banded(x_mv, fs_hz, lambda f: 1.0 - _below(f, 0.5 * mains_hz))
    weight = open_mask.astype(np.float64)
    out = np.zeros_like(high)
    t_s = np.arange(n) / fs_hz
    for k in range(1, HARMONICS + 1):
        if k * mains_hz > 0.45 * fs_hz:
            break
        turn = np.exp(-2j * np.pi * k * mains_hz * t_s)
        for width in (round(window_s * fs_hz) for window_s in HUM_WINDOWS_S):
            under = np.maximum(_sliding(weight[None], width)[0], 1.0)
            part = _sliding((high - out) * (weight * turn), width) / under
            out += 2.0 * (part * turn.conj()).real
    return out


def _sliding(x: NDArray, width: int) -> NDArray:
    """Sums over a centred window along the last axis, shorter at the ends."""
    n = x.shape[-1]
    total = np.concatenate([np.zeros((*x.shape[:-1], 1), x.dtype), np.cumsum(x, axis=-1)], axis=-1)
    k = np.arange(n)
    return total[..., np.minimum(k + width // 2 + 1, n)] - total[..., np.maximum(k - width // 2, 0)]


def true_beats(x_mv: Floats, at: NDArray[np.intp], fs_hz: float) -> NDArray[np.intp]:
    """``at`` without those that are no beats: unlike the rest, and between two of the rest no further apart than usual.

    An extra beat of the heart leaves a longer way between its neighbours, or is alike over its leads with others.
    """
    for _ in range(2):
        if len(at) < 4:
            return at
        like = _cut(x_mv, at, fs_hz).like >= LIKE_THE_REST
        if like.sum() < 3:
            return at
        usual = float(np.median(np.diff(at[like])))
        k = np.arange(len(at))
        before = np.maximum.accumulate(np.where(like, k, -1))
        after = np.minimum.accumulate(np.where(like, k, len(at))[::-1])[::-1]
        way = np.where(
            (before >= 0) & (after < len(at)),
            at[np.minimum(after, len(at) - 1)] - at[np.maximum(before, 0)],
            np.where(before >= 0, at - at[np.maximum(before, 0)], at[np.minimum(after, len(at) - 1)] - at)
            + 0.3 * usual,
        )
        at = at[like | (way > 1.3 * usual)]
    return at


@dataclass(frozen=True, slots=True, eq=False)
class _Cuts:
    """The stretch that each of (B,) beats owns, of (L, N)."""

    column: NDArray[np.intp]  # (B, W)
    owned: NDArray[np.bool_]  # (B, W)
    cuts: Floats  # (L, B, W), NaN where not owned
    shape: Floats  # (L, W): median over the beats
    like: Floats  # (B,): correlation about the QRS complex with the median, over all leads laid end to end


def _cut(x_mv: Floats, at: NDArray[np.intp], fs_hz: float) -> _Cuts:
    n = x_mv.shape[1]
    gap = np.diff(at)
    usual = int(np.median(gap))
    left = np.minimum(np.concatenate([[usual], gap]) * BEFORE, 0.6 * fs_hz).astype(np.intp)
    right = np.minimum(np.concatenate([gap, [usual]]) * AFTER, 0.9 * fs_hz).astype(np.intp)
    offset = np.arange(-int(left.max()), int(right.max()))
    column = at[:, None] + offset
    owned = (column >= 0) & (column < n) & (offset >= -left[:, None]) & (offset < right[:, None])
    cuts = np.where(owned, x_mv[:, np.clip(column, 0, n - 1)], np.nan)
    shape = _median(cuts)
    core = (offset >= -0.08 * fs_hz) & (offset < 0.1 * fs_hz)
    return _Cuts(column, owned, cuts, shape, _likeness(np.nan_to_num(cuts[:, :, core]), shape[:, core]))


def beat_train(x_mv: Floats, at: NDArray[np.intp], fs_hz: float) -> tuple[Floats, NDArray[np.bool_]]:
    """((L, N) the averaged beat laid at every beat, (N,) samples of beats of another shape).

    The average is weighted by how little a beat strays from the median of all (as in ``averaging``).
    """
    train, other = np.zeros_like(x_mv), np.zeros(x_mv.shape[1], dtype=bool)
    if len(at) < 2:
        return train, other
    c = _cut(x_mv, at, fs_hz)
    usual_shape = c.like >= LIKE_THE_REST
    if usual_shape.sum() < 2:
        usual_shape[:] = True
    stray = np.where(c.owned, (c.cuts - c.shape[:, None]) ** 2, 0.0).sum(axis=2) / np.maximum(
        c.owned.sum(axis=1), 1
    )
    weight = usual_shape / (stray + 0.3 * np.median(stray, axis=1, keepdims=True) + 1e-9)
    held = np.where(c.owned, weight[:, :, None], 0.0)
    beat = (held * np.nan_to_num(c.cuts)).sum(axis=1) / np.maximum(held.sum(axis=1), 1e-12)
    b, w = np.nonzero(c.owned & usual_shape[:, None])
    train[:, c.column[b, w]] = beat[:, w]
    b, w = np.nonzero(c.owned & ~usual_shape[:, None])
    other[c.column[b, w]] = True
    return train, other


def _median(cuts: Floats) -> Floats:
    """(L, W): median over the beats, 0 where there is none."""
    held = np.isfinite(cuts)
    ranked = np.sort(np.where(held, cuts, np.inf), axis=1)
    count = held.sum(axis=1)
    low = np.take_along_axis(ranked, np.maximum((count - 1) // 2, 0)[:, None], axis=1)[:, 0]
    return np.where(count > 0, low, 0.0)


def _likeness(cuts: Floats, shape: Floats) -> Floats:
    """(B,) correlation of each beat with the usual one over all leads laid end to end, each lead about its mean."""
    a = cuts - cuts.mean(axis=2, keepdims=True)
    b = shape - shape.mean(axis=1, keepdims=True)
    dot = np.einsum("lbw,lw->b", a, b)
    return dot / np.sqrt(np.maximum(np.einsum("lbw,lbw->b", a, a) * (b * b).sum(), 1e-18))


def toned_down(part_mv: Floats, rms_mv: Floats, floor_mv: float) -> Floats:
    """A part (L, N) of which at most ``floor_mv`` rms is left: what a strip recorded with care still holds."""
    return np.minimum(1.0, floor_mv / np.maximum(rms_mv, 1e-12))[:, None] * part_mv


def without_hum(split: Split) -> Split:
    return replace(split, hum_mv=np.zeros_like(split.hum_mv))


def without_shivering(split: Split) -> Split:
    """Muscle and tremor toned down, and as much of the movement as goes with them."""
    muscle = toned_down(split.muscle_mv, split.rms_mv(split.muscle_mv), FAST_FLOOR_MV)
    return replace(_stilled(split, split.shaking), muscle_mv=muscle)


def without_movement(split: Split) -> Split:
    """Drift and movement toned down, and as much of what is fast as goes with them."""
    quiet = toned_down(split.muscle_mv, split.rms_mv(split.muscle_mv), FAST_FLOOR_MV)
    left = split.stirring * quiet + (1.0 - split.stirring) * split.muscle_mv
    return replace(_stilled(split, 1.0), muscle_mv=left)


def _stilled(split: Split, share: float) -> Split:
    drift = toned_down(split.drift_mv, split.rms_mv(split.drift_mv), DRIFT_FLOOR_MV)
    slow = toned_down(split.slow_mv, split.rms_mv(split.slow_mv), SLOW_FLOOR_MV)
    return replace(
        split,
        drift_mv=share * drift + (1.0 - share) * split.drift_mv,
        slow_mv=share * slow + (1.0 - share) * split.slow_mv,
    )


def without_leads(split: Split, which: NDArray[np.bool_]) -> Split:
    """Movement toned down in some leads (L,) only."""
    still = _stilled(split, 1.0)
    return replace(
        split,
        drift_mv=np.where(which[:, None], still.drift_mv, split.drift_mv),
        slow_mv=np.where(which[:, None], still.slow_mv, split.slow_mv),
    )


# ── whose disturbance ──


@dataclass(frozen=True, slots=True, eq=False)
class ElectrodePowers:
    """Disturbance power of each electrode that the leads can tell apart, of the drift and of all above it."""

    position: list[int]  # of the leads whose algebra is known
    rows: Floats  # (n, 9) of those leads
    drift_mv2: Floats  # (9,)
    moving_mv2: Floats  # (9,)

    def weights(self, electrode: str, power_mv2: Floats) -> Floats:
        """(n,): the leads' weights in the estimate of one electrode's potential (Wiener's, the electrodes independent),
        toned down so that a careful recording's share of it is left."""
        k = ELECTRODES.index(electrode)
        rest = LEAD_ALONE * float(((self.rows**2) @ power_mv2).mean()) + 1e-9
        cover = (self.rows * power_mv2) @ self.rows.T + rest * np.eye(len(self.rows))
        gone = 1.0 - min(1.0, ELECTRODE_FLOOR_MV / max(float(np.sqrt(power_mv2[k])), 1e-12))
        return gone * power_mv2[k] * np.linalg.solve(cover, self.rows[:, k])


def electrode_powers(split: Split, leads: Sequence[str]) -> ElectrodePowers | None:
    """Non-negative least squares of the residual's covariance on the patterns of the electrodes; None where the
    leads cannot tell electrodes apart (fewer than three limb leads' worth of algebra)."""
    position, rows = lead_rows(leads)
    used = np.any(rows != 0, axis=0)
    if len(position) < 3 or np.linalg.matrix_rank(rows) < used.sum() - 1 or used.sum() < 3:
        return None
    columns = np.flatnonzero(used)
    design = np.stack([np.outer(rows[:, k], rows[:, k]).ravel() for k in columns], axis=1)

    def powers(part: Floats) -> Floats:
        seen = part[position][:, split.open]
        covariance = seen @ seen.T / max(seen.shape[1], 1)
        scale = float(np.trace(covariance))
        out = np.zeros(len(ELECTRODES))
        if scale > 0:
            out[columns] = non_negative_least_squares(design, covariance.ravel() / scale) * scale
        return out

    return ElectrodePowers(position, rows, powers(split.drift_mv), powers(split.slow_mv + split.muscle_mv))


def without_electrode(split: Split, powers: ElectrodePowers, electrode: str) -> Split:
    """What one electrode puts on every lead toned down; leads without known algebra stay."""
    own = powers.rows[:, ELECTRODES.index(electrode)]
    drifting, moving = (powers.weights(electrode, p) for p in (powers.drift_mv2, powers.moving_mv2))
    at = powers.position

    def cleaned(part: Floats, weights: Floats) -> Floats:
        out = part.copy()
        out[at] -= own[:, None] * (weights @ part[at])
        return out

    return replace(
        split,
        drift_mv=cleaned(split.drift_mv, drifting),
        slow_mv=cleaned(split.slow_mv, moving),
        muscle_mv=cleaned(split.muscle_mv, moving),
    )


# ── cut off at the rails ──


def unclipped(x_mv: Floats, clipped: NDArray[np.bool_], fs_hz: float) -> Floats:
    """(L, N) with each clipped run bent on beyond the rail: a cubic that leaves and joins with the slopes at its ends.

    Runs longer than 0.12 s stay: no slope tells what was there.
    """
    out = np.array(x_mv, dtype=np.float64)
    n = out.shape[1]
    for lead in np.flatnonzero(clipped.any(axis=1)):
        edge = np.flatnonzero(np.diff(np.concatenate([[0], clipped[lead].view(np.int8), [0]])))
        for first, stop in edge.reshape(-1, 2):
            a, b, length = first - 1, stop, stop - first + 1
            if a < 1 or b > n - 2 or length > 0.12 * fs_hz:
                continue
            y = out[lead]
            rise, fall = (y[a] - y[a - 1]) * length, (y[b + 1] - y[b]) * length
            u = np.arange(1, length) / length
            out[lead, first:stop] = (
                (2 * u**3 - 3 * u**2 + 1) * y[a]
                + (u**3 - 2 * u**2 + u) * rise
                + (3 * u**2 - 2 * u**3) * y[b]
                + (u**3 - u**2) * fall
            )
    return out
