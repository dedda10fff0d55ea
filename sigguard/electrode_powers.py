"""How much each electrode is disturbed, segment by segment and kind by kind, from the samples.

Leads are turned into electrode potentials about their own mean (what all electrodes share shows in no lead). If the
electrodes are disturbed independently, the covariance of these is C·diag(p)·C, C taking out the common part; least
squares gives the powers p, and how well that form fits says whether the disturbance comes from electrodes one by
one or moves several of them together, as breathing, hum and what is left of the heart's own field do.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import fft
from scipy.ndimage import uniform_filter1d

from sigguard import noise
from sigguard.electrode_algebra import Algebra, algebra_of
from sigguard.features import qrs_mask
from sigguard.filters import low_pass
from sigguard.measure import Analysis

Floats = NDArray[np.float64]

KINDS = ("wander", "motion", "muscle", "mains")  # names of segments.FAULTS
WINDOW_S = 0.5  # short, so that a burst or a beat left over costs its own time only
EDGE_S = 0.4  # at both ends the filters bend what they show
HUM_LEAST_UV = 4.0  # amplitude in a lead below which no hum is traced to electrodes
HUM_HARMONICS = 3
HUM_FREE = 0.75  # share of the mains frequency up to which muscle noise is read beside hum
MUSCLE_FS_HZ = 320.0  # enough for 150 Hz
BEAT_VOTES = 1 / 3  # share of the leads that must see a beat for its time to be left out
LEAST_OPEN = 0.3  # share of the time that must lie between beats, else beats stay in
MOST_MISSING, MOST_FLAT = 0.2, 0.5  # share of a segment beyond which a lead is left out of it


@dataclass(frozen=True, slots=True, eq=False)
class ElectrodePowers:
    """Disturbance of n electrodes in S segments, second axes as KINDS; NaN where the leads there cannot tell."""

    electrodes: tuple[str, ...]
    start_s: Floats  # (S,)
    end_s: Floats  # (S,)
    power_uv2: Floats  # (S, 4, n): of each electrode, taken as disturbed by itself
    total_uv2: Floats  # (S, 4): mean over the electrodes of all that moves them against each other
    fit: Floats  # (S, 4), 0 to 1: how much of it independent electrodes explain; of mains, the one that explains most


def join_powers(parts: Sequence[ElectrodePowers | None]) -> ElectrodePowers | None:
    """Of consecutive parts of one recording, or None where the leads cannot tell."""
    told = [part for part in parts if part is not None]
    if len(told) < 2:
        return told[0] if told else None
    columns = ("start_s", "end_s", "power_uv2", "total_uv2", "fit")
    return ElectrodePowers(
        told[0].electrodes, *(np.concatenate([getattr(part, name) for part in told]) for name in columns)
    )


def electrode_powers(
    strips_mv: NDArray[np.floating],
    fs_hz: float,
    leads: tuple[str, ...],
    analysis: Analysis,
    *,
    start_s: Floats,
    end_s: Floats,
    mains_hz: NDArray[np.floating],
    mains_uv: NDArray[np.floating],
    wanted: NDArray[np.bool_] | None = None,
) -> ElectrodePowers | None:
    """Powers in S strips of the same leads; None where the leads cannot tell the electrodes apart.

    ``strips_mv`` (S, n_leads, N), mV, NaN where missing; ``analysis`` of the same rows, strip by strip;
    ``start_s``, ``end_s`` (S,); ``mains_hz`` and ``mains_uv`` (S, n_leads) as the features have them. A lead
    that is missing or flat for long is left out of its strip; if the rest cannot tell, the strip is NaN. So is one
    that is not ``wanted`` (S,).
    """
    algebra = algebra_of(tuple(leads))
    if not algebra.tells:
        return None
    n_strips, n_leads, _ = strips_mv.shape
    power = np.full((n_strips, len(KINDS), len(algebra.electrodes)), np.nan)
    total, fit = np.full((2, n_strips, len(KINDS)), np.nan)
    residual = analysis.residual_mv.reshape(n_strips, n_leads, -1)
    open_ = between_beats(analysis, residual.shape, end_s - start_s)
    lost = (analysis.missing.mean(axis=1) > MOST_MISSING) | (analysis.flat.mean(axis=1) > MOST_FLAT)
    lost = lost.reshape(n_strips, n_leads)
    for k in range(n_strips) if wanted is None else np.flatnonzero(wanted):
        part = _without(algebra, lost[k])
        if part is None:
            continue
        at, columns = list(part.positions), [algebra.electrodes.index(e) for e in part.electrodes]
        strip = _Strip.of(strips_mv[k, at], fs_hz, part, open_[k])
        for j, squares in enumerate(
            (
                _wander(strip),
                _motion(strip, residual[k, at], _hum_hz(mains_hz[k, at])),
                _muscle(strip, _hum_hz(mains_hz[k, at])),
                _hum(strip, mains_hz[k, at], mains_uv[k, at]),
            )
        ):
            found = one_source(squares) if KINDS[j] == "mains" else independent_powers(squares)
            power[k, j, columns], total[k, j], fit[k, j] = found
    return ElectrodePowers(algebra.electrodes, start_s, end_s, power, total, fit)


def independent_powers(squares: Floats) -> tuple[Floats, float, float]:
    """Power of each electrode, of all that shows, and the fit, from the second moments of W windows.

    ``squares`` (W, n, n), of potentials about their mean. Least squares window by window, negative powers set to 0;
    over windows the square of the mean root, in which a burst counts for its time and not for its square. The fit is
    that of all windows by their power, 1 for electrodes disturbed one by one, about 1/m where m move as one.
    (n,), scalar, scalar; 0, 0 and NaN without any power.
    """
    n = squares.shape[-1]
    design, inverse = _design(n)
    flat = squares.reshape(len(squares), n * n)
    each = np.maximum(flat @ inverse.T, 0.0)
    trace = np.trace(squares, axis1=1, axis2=2)
    if not len(squares) or not trace.sum() > 0:
        return np.zeros(n), 0.0, float("nan")
    off = ((flat - each @ design.T) ** 2).sum(axis=1)
    own = (flat**2).sum(axis=1)
    good = 1.0 - off / np.where(own > 0, own, 1.0)
    fit = float(np.clip((good * trace).sum() / trace.sum(), 0.0, 1.0))
    total = float(np.sqrt(np.maximum(trace, 0.0)).mean() ** 2 / (n - 1))
    return np.square(np.sqrt(each).mean(axis=0), dtype=np.float64), total, fit


def one_source(squares: Floats) -> tuple[Floats, float, float]:
    """As independent_powers, for a disturbance that comes from one place: all power goes to the electrode nearest to it.

    The fit is the squared cosine between the pattern over the electrodes and that of this electrode alone: what
    reaches many electrodes at once (from the cable, through the right leg) has a pattern of its own.
    """
    n = squares.shape[-1]
    trace = float(np.trace(squares, axis1=1, axis2=2).sum())
    if not len(squares) or not trace > 0:
        return np.zeros(n), 0.0, float("nan")
    # centred potentials keep their length, of one electrode 1 − 1/n: the diagonal is the projection on it
    along = np.diagonal(squares.sum(axis=0)) / (1.0 - 1.0 / n)
    best = int(along.argmax())
    power = np.zeros(n)
    power[best] = max(float(along[best]), 0.0) / len(squares) / (1.0 - 1.0 / n)
    return power, trace / len(squares) / (n - 1), float(np.clip(along[best] / trace, 0.0, 1.0))


@lru_cache(maxsize=64)
def _design(n: int) -> tuple[Floats, Floats]:
    """Column k of (n², n) is the covariance one electrode of unit power makes; and the pseudo-inverse."""
    centring = np.eye(n) - 1.0 / n
    design = (centring[:, None, :] * centring[None, :, :]).reshape(-1, n)
    return design, np.asarray(np.linalg.pinv(design), dtype=np.float64)


def _without(algebra: Algebra, lost: NDArray[np.bool_]) -> Algebra | None:
    """The algebra of the leads that are there, at the places they have among all; None if they cannot tell."""
    if not lost[list(algebra.positions)].any():
        return algebra
    kept = tuple("" if gone else lead for gone, lead in zip(lost, algebra.leads, strict=True))
    part = algebra_of(kept)
    return part if part.tells else None


def between_beats(analysis: Analysis, shape: tuple[int, ...], length_s: Floats) -> NDArray[np.bool_]:
    """(S, M): samples of the residual away from what at least a third of the leads call a beat."""
    n_strips, n_leads, m = shape
    fs_hz = m / max(float(length_s.max(initial=0.0)), 1e-9)
    mask = qrs_mask(analysis.beat_row, analysis.beat_s, (n_strips * n_leads, m), fs_hz)
    votes = mask.reshape(shape).sum(axis=1)
    open_ = votes < max(1.0, BEAT_VOTES * n_leads)
    open_[open_.mean(axis=1) < LEAST_OPEN] = True
    return open_


@dataclass(frozen=True, slots=True, eq=False)
class _Strip:
    """One segment as electrode potentials, with what the kinds of noise share."""

    algebra: Algebra
    potential_uv: Floats  # (n, N)
    plain: noise.PlainTransform  # of the same in mV
    fs_hz: float
    keep: NDArray[np.bool_]  # (M,): between beats and present

    @classmethod
    def of(
        cls, x_mv: NDArray[np.floating], fs_hz: float, algebra: Algebra, open_: NDArray[np.bool_]
    ) -> _Strip:
        filled, missing = noise.fill_gaps(np.asarray(x_mv, dtype=np.float64))
        gap: NDArray[np.bool_] = np.any(missing, axis=0)
        keep = open_ & ~_at(gap, open_.size) if gap.any() else open_
        potential = algebra.to_potentials @ filled
        return cls(algebra, potential * 1e3, noise.plain_transform(potential, fs_hz), fs_hz, keep)

    @property
    def length_s(self) -> float:
        return self.plain.n / self.fs_hz


def _at(mask: NDArray[np.bool_], n: int) -> NDArray[np.bool_]:
    """The mask on another grid of n samples over the same time."""
    return mask[np.minimum((np.arange(n) * (mask.size / n)).astype(np.intp), mask.size - 1)]


def _windows(x_uv: NDArray[np.floating], keep: NDArray[np.bool_], length_s: float, edge_s: float) -> Floats:
    """Second moments (W, n, n) about the mean in windows of WINDOW_S of (n, M), over the samples kept.

    A window with under a quarter kept is left out. All windows at once: samples not kept weigh nothing.
    """
    n, m = x_uv.shape
    fs_hz = m / length_s
    edge = min(int(edge_s * fs_hz), m // 4)
    width = max(2, int(round(WINDOW_S * fs_hz)))
    count = max(1, (m - 2 * edge) // width)
    width = min(width, m - 2 * edge)
    cut = slice(edge, edge + count * width)
    x = np.asarray(x_uv[:, cut], dtype=np.float64).reshape(n, count, width).transpose(1, 0, 2)
    weight = keep[cut].reshape(count, 1, width).astype(np.float64)
    there = weight.sum(axis=2)
    used = there[:, 0] >= max(2.0, noise.MIN_OPEN * width)
    x, weight, there = x[used], weight[used], there[used]
    x = (x - (x * weight).sum(axis=2, keepdims=True) / there[..., None]) * weight
    return x @ x.transpose(0, 2, 1) / there[..., None]


def _wander(strip: _Strip) -> Floats:
    """Below 0.5 Hz: one window, for no less shows it."""
    wave = noise.wander_wave_uv(strip.plain)
    return (wave @ wave.T / wave.shape[1])[None]


def _hum_hz(mains_hz: NDArray[np.floating]) -> float:
    """The mains frequency that leads show, NaN if none does."""
    found = mains_hz[np.isfinite(mains_hz)]
    return float(np.median(found)) if found.size else float("nan")


def _motion(strip: _Strip, residual_mv: NDArray[np.floating], hum_hz: float) -> Floats:
    """0.5 to 35 Hz, the averaged beats taken off, between beats; of hum, what the filter let through averaged away."""
    potential = 1e3 * (strip.algebra.to_potentials @ residual_mv)
    if np.isfinite(hum_hz):
        width = max(1, round(potential.shape[1] / strip.length_s / hum_hz))  # a period: a zero at the line
        potential = uniform_filter1d(potential, width, axis=1)
    return _windows(potential, strip.keep, strip.length_s, EDGE_S)


def _muscle(strip: _Strip, hum_hz: float) -> Floats:
    """20 to 150 Hz between beats, at about MUSCLE_FS_HZ; where there is hum, only what lies below it.

    The size is that of white noise over the whole band, whatever was looked at.
    """
    plain = strip.plain
    gain = noise.muscle_gain(plain, float("nan"))
    if np.isfinite(hum_hz):
        below = gain * low_pass(plain.freq_hz, HUM_FREE * hum_hz, order=10)
        gain = below * np.sqrt((gain**2).sum() / (below**2).sum())
    m = min(plain.n, fft.next_fast_len(int(plain.n * MUSCLE_FS_HZ / plain.fs_hz), real=True))
    bins = m // 2 + 1
    scale = (gain[:bins] * (m / plain.n)).astype(np.float32)
    quick = fft.irfft(plain.spectrum[:, :bins] * scale, n=m, axis=-1, overwrite_x=True)
    return _windows(quick, _at(strip.keep, m), strip.length_s, noise.EDGE_S)


def _hum(strip: _Strip, mains_hz: NDArray[np.floating], mains_uv: NDArray[np.floating]) -> Floats:
    """Mains: (1, n, n), the real part of the mean outer product of phasors over windows and harmonics; none without hum.

    Half of it, so that its trace is a mean square as with the other kinds. What neighbouring frequencies hold
    (muscle noise, QRS complexes) is taken off. Phasors of several electrodes turn together: hum that comes through
    the cable or the right leg is not taken for many electrodes disturbed one by one, nor for one of them.
    """
    n = len(strip.potential_uv)
    nothing = np.zeros((0, n, n))
    has = np.isfinite(mains_hz) & (np.nan_to_num(mains_uv) >= HUM_LEAST_UV)
    width = int(round(WINDOW_S * strip.fs_hz))
    count = strip.potential_uv.shape[1] // max(width, 1)
    if not has.any() or count < 2:
        return nothing
    hz = float(np.median(mains_hz[has]))
    aside = 3.0 / WINDOW_S
    tones = [hz * k for k in range(1, HUM_HARMONICS + 1) if hz * k + aside < 0.5 * strip.fs_hz]
    if not tones:
        return nothing
    windows = strip.potential_uv[:, : count * width].reshape(n, count, width)
    windows = windows - windows.mean(axis=2, keepdims=True)
    t = np.arange(width) / strip.fs_hz
    hann = 0.5 - 0.5 * np.cos(2 * np.pi * (np.arange(width) + 0.5) / width)
    asked = np.array([[f, f - aside, f + aside] for f in tones]).ravel()
    wave = np.exp(-2j * np.pi * asked[:, None] * t) * (hann * (2.0 / hann.sum()))
    phasor = (windows @ wave.T).transpose(2, 0, 1)  # (3 · tones, n, count)
    square = (phasor @ phasor.conj().transpose(0, 2, 1)).real.reshape(len(tones), 3, n, n) / count
    return 0.5 * (square[:, 0] - square[:, 1:].mean(axis=1)).sum(axis=0)[None]
