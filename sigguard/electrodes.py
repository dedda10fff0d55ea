"""Whose noise it is: which electrodes a disturbance comes from, for each kind apart, and what comes from no single one.

The powers are estimated by ``electrode_powers``; here it is decided what they allow to say. Kinds are weighed by what
they spoil, after the stability test of IEC 60601-2-51 (25 µV rms of high frequencies and 0.3 Hz of 0.5 mV, taken as
peak to peak, upset measurement alike; mains 25 µV): a wander of 177 µV counts as much as muscle noise of 25 µV. For
movement the standard has no figure; 20 µV was chosen on records that serve no test.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache
from math import acos, pi, sqrt

import numpy as np
from numpy.typing import NDArray

from sigguard.electrode_algebra import (
    ELECTRODES,
    LEAD_FROM_ELECTRODES,
    LEADS_12,
    algebra_of,
    einthoven_error,
    goldberger_error,
    lead_rows,
    swap_matrix,
)
from sigguard.electrode_powers import KINDS, ElectrodePowers
from sigguard.findings import CommonNoise, ElectrodeNoise, KindNoise
from sigguard.lead_laws import law_breaks, law_findings

__all__ = [
    "ELECTRODES",
    "LEADS_12",
    "LEAD_FROM_ELECTRODES",
    "beat_free_residual",
    "einthoven_error",
    "electrode_noise",
    "goldberger_error",
    "law_breaks",
    "law_findings",
    "lead_rows",
    "non_negative_least_squares",
    "swap_matrix",
    "whose_noise",
    "worth_stating",
]

Floats = NDArray[np.float64]

HARM_UV = {"wander": 177.0, "motion": 20.0, "muscle": 25.0, "mains": 25.0}  # rms that harm about alike
LEAST_UV = {"wander": 60.0, "motion": 15.0, "muscle": 8.0, "mains": 4.0}  # below, a kind is not spoken of
# How often the electrode is the right one that stands out z-fold from the middle one: a logistic curve in log z,
# fitted on the half of the hand-marked records and the noise that serve no test (the least noise that costs a grade).
CONFIDENCE_SLOPE, CONFIDENCE_EVEN = 2.1, 6.0
SURE, WORTH_SAYING = 0.5, 0.1
LEAST_STATED_UV = 6.0  # below, nothing is named even where something was lost
HARMLESS_UV = 30.0  # below, nothing is named where nothing was lost
ONE_BY_ONE = 0.6  # fit from which a disturbance is called that of single electrodes
CHANCE = 0.05  # that a hum of any pattern looks like that of one electrode


def whose_noise(
    powers: ElectrodePowers | None, *, segment: int | None = None
) -> tuple[tuple[ElectrodeNoise, ...], tuple[CommonNoise, ...]]:
    """(all electrodes, the worst first; what moves several together), of one segment or of the whole.

    ``noise_uv`` is the rms over all kinds, each weighed by its harm and put in µV of movement; ``share`` the
    electrode's part of that power; plain µV and the confidence for each kind stand in ``kinds``. Segments without an
    estimate do not count; both are empty where the leads cannot tell (``powers`` None). Whether any electrode is
    worth naming, ``worth_stating`` says.
    """
    if powers is None:
        return (), ()
    pick = slice(None) if segment is None else slice(segment, segment + 1)
    known = np.isfinite(powers.total_uv2[pick]).any(axis=1)
    if not known.any():
        return (), ()
    weight = (powers.end_s - powers.start_s)[pick][known]
    power = np.einsum("s,skn->kn", weight, np.nan_to_num(powers.power_uv2[pick][known])) / weight.sum()
    total = weight @ powers.total_uv2[pick][known] / weight.sum()
    strength = weight[:, None] * powers.total_uv2[pick][known]
    fit = np.nansum(strength * np.nan_to_num(powers.fit[pick][known]), axis=0) / np.maximum(
        strength.sum(axis=0), 1e-12
    )
    n = len(powers.electrodes)
    if fit[KINDS.index("mains")] < hum_of_one(n):
        power[KINDS.index("mains")] = 0.0
    harm = power / np.array([HARM_UV[kind] ** 2 for kind in KINDS])[:, None]
    return _electrodes(powers.electrodes, power, harm, fit), _common(total, fit, n)


def worth_stating(electrodes: tuple[ElectrodeNoise, ...], *, lost: bool) -> tuple[ElectrodeNoise, ...]:
    """All of them if the first stands out, else none: a clean recording has no culprit.

    Standing out is 30 µV and a confidence of at least one half or, where measurements were ``lost`` to something,
    6 µV and 0.1: then the likeliest is worth looking at, with its confidence beside it.
    """
    least_uv, least = (LEAST_STATED_UV, WORTH_SAYING) if lost else (HARMLESS_UV, SURE)
    if not electrodes or electrodes[0].noise_uv < least_uv:
        return ()
    return electrodes if (electrodes[0].confidence or 0.0) >= least else ()


def _electrodes(
    names: tuple[str, ...], power: Floats, harm: Floats, fit: Floats
) -> tuple[ElectrodeNoise, ...]:
    score = harm.sum(axis=0)
    # what moves several electrodes together (a beat left over, breathing) is no electrode's own
    strength = harm.sum(axis=1)
    alone = float((strength * fit).sum() / max(strength.sum(), 1e-12))
    sure = _confidence(score) * min(max((alone - 0.4) / (ONE_BY_ONE + 0.1 - 0.4), 0.0), 1.0)
    by_kind = [_confidence(power[k]) for k in range(len(KINDS))]
    out = []
    for i in np.argsort(-score, kind="stable"):
        kinds = tuple(
            KindNoise(kind, sqrt(power[k, i]), float(power[k, i] / power[k].sum()), float(by_kind[k][i]))
            for k, kind in enumerate(KINDS)
            if power[k, i] >= LEAST_UV[kind] ** 2 and by_kind[k][i] >= SURE and fit[k] >= ONE_BY_ONE
        )
        rms = HARM_UV["motion"] * sqrt(score[i])
        share = float(score[i] / score.sum()) if score.sum() > 0 else 0.0
        out.append(ElectrodeNoise(names[i], rms, share, float(sure[i]), kinds))
    return tuple(out)


def _confidence(power: Floats) -> Floats:
    """(n,) powers → how likely each is one of those to see to, by how far it stands out of the middle one."""
    middle = np.median(power)
    if not power.max() > 0:
        return np.zeros(len(power))
    z = power / max(float(middle), 1e-6 * float(power.max()))
    return 1.0 / (1.0 + (CONFIDENCE_EVEN / np.maximum(z, 1e-9)) ** CONFIDENCE_SLOPE)


def _common(total: Floats, fit: Floats, n: int) -> tuple[CommonNoise, ...]:
    """What moves several electrodes together, of three electrodes nothing: any two could be meant."""
    out = []
    for k, kind in enumerate(KINDS):
        least = hum_of_one(n) if kind == "mains" else ONE_BY_ONE
        if total[k] >= LEAST_UV[kind] ** 2 and fit[k] < least and (n > 3 or kind == "mains"):
            out.append(CommonNoise(kind, sqrt(total[k]), float(1.0 - fit[k])))
    return tuple(out)


@lru_cache(maxsize=64)
def hum_of_one(n: int) -> float:
    """The squared cosine from which hum is laid to one of n electrodes.

    A pattern drawn at random has n − 1 free directions; that it lies so near to one of the n electrodes by chance
    has a probability of at most CHANCE (the squared cosine with a fixed direction is Beta(1/2, (n − 2)/2)
    distributed). Never below 0.9. Of three electrodes practically none can be named.
    """
    if n < 3:
        return 1.0
    each = CHANCE / n
    low, high = 0.0, 1.0
    for _ in range(50):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if _beyond(middle, n - 1) > each else (low, middle)
    return max(high, 0.9)


def _beyond(cosine2: float, d: int) -> float:
    """P(squared cosine > cosine2) of a random direction in d ≥ 2 dimensions with a fixed one."""
    # the angle's density is sin^(d-2): integrate by the usual recursion
    angle = acos(sqrt(cosine2))
    part, whole = _sine_power(angle, d - 2), _sine_power(pi / 2, d - 2)
    return part / whole


def _sine_power(angle: float, k: int) -> float:
    """Integral of sin^k from 0 to angle."""
    s, c = np.sin(angle), np.cos(angle)
    if k == 0:
        return angle
    if k == 1:
        return float(1.0 - c)
    return float(-c * s ** (k - 1) / k + (k - 1) / k * _sine_power(angle, k - 2))


def electrode_noise(residual_mv: Floats, leads: Sequence[str]) -> list[ElectrodeNoise]:
    """How much disturbance comes from each electrode, the worst first.

    ``residual_mv`` (n_leads, n_samples), mV: the signal without its beats. The electrodes are taken to be
    disturbed independently: the covariance of the centred electrode potentials is then C·diag(p)·C, C taking
    out the part common to all, and non-negative least squares gives the powers p. Working with centred
    potentials and not with a choice of leads makes the answer independent of which of the redundant leads are
    given and treats all electrodes alike. What moves all electrodes together cannot show in any lead.

    Empty where the leads cannot tell the electrodes apart (a single lead, unknown names, the chest leads
    alone), or without at least 2 samples present in all of them. A lead without a single sample is left out.
    Shares add up to 1; all 0 for a residual that is zero throughout.
    """
    x = np.asarray(residual_mv, dtype=np.float64)
    algebra = algebra_of(tuple(n if np.isfinite(row).any() else "" for n, row in zip(leads, x, strict=True)))
    if not algebra.tells:
        return []
    x = x[list(algebra.positions)]
    x = x[:, np.isfinite(x).all(axis=0)]
    if x.shape[1] < 2:
        return []
    power = _independent_powers(np.cov(algebra.to_potentials @ x), algebra.centring)
    rms_uv = 1e3 * np.sqrt(power)
    share = power / power.sum() if power.sum() > 0 else power
    order = np.argsort(-power, kind="stable")
    return [ElectrodeNoise(algebra.electrodes[i], float(rms_uv[i]), float(share[i])) for i in order]


def _independent_powers(covariance: Floats, centring: Floats) -> Floats:
    """Non-negative p with centring · diag(p) · centring nearest to the covariance (Frobenius norm)."""
    scale = float(np.trace(covariance))
    if not scale > 0:
        return np.zeros(len(centring))
    # column k of the design is the covariance one electrode of unit power makes
    design = (centring[:, None, :] * centring[None, :, :]).reshape(-1, len(centring))
    return non_negative_least_squares(design, (covariance / scale).ravel()) * scale


def non_negative_least_squares(design: Floats, target: Floats) -> Floats:
    """x ≥ 0 (n,) with the least |design @ x − target| for a (m, n) design of full rank.

    The active set method of Lawson and Hanson 1974. Written here because its home, scipy.optimize, takes longer
    to import than a recording takes to check; a test holds the two against each other.
    """
    n = design.shape[1]
    x, free = np.zeros(n), np.zeros(n, dtype=bool)
    least = 10 * max(design.shape) * np.finfo(np.float64).eps * float(np.abs(design).sum(axis=0).max())
    for _ in range(3 * n):
        descent = np.where(free, -np.inf, design.T @ (target - design @ x))
        if not descent.max() > least:
            break
        free[descent.argmax()] = True
        while True:
            wanted = np.zeros(n)
            wanted[free] = np.linalg.lstsq(design[:, free], target, rcond=None)[0]
            below = free & (wanted <= 0)
            if not below.any():
                break
            step = np.min(x[below] / (x[below] - wanted[below]))
            x = x + step * (wanted - x)
            free &= x > least
            x[~free] = 0.0
        x = wanted
    return x


def beat_free_residual(x_mv: Floats, fs_hz: float) -> Floats:
    """A residual without knowing any beat: what lies below 0.7 Hz and above 25 Hz, QRS cut out.

    (n_leads, n_samples) mV → the same shape; NaN within QRS complexes (the steepest stretches over all leads)
    and where the signal is missing, all NaN for fewer than 2 samples. Meant for when no beat train can be averaged; movement between 0.7
    and 25 Hz, where the ECG itself lies, is not seen.
    """
    from scipy.signal import firwin  # slow to import, and no check needs it

    x = np.asarray(x_mv, dtype=np.float64)
    n = x.shape[1]
    if n < 2:
        return np.full_like(x, np.nan)
    missing = ~np.isfinite(x)
    centred = np.where(missing, 0.0, x)
    centred -= np.median(centred, axis=1, keepdims=True)
    low = firwin(2 * min(round(1.5 * fs_hz), max(1, n // 3)) + 1, 0.7, fs=fs_hz)
    fast = firwin(2 * max(2, round(0.1 * fs_hz)) + 1, min(25.0, 0.4 * fs_hz), fs=fs_hz)
    residual = _filtered(centred, low) + centred - _filtered(centred, fast)
    steep = _filtered(np.abs(np.gradient(centred, axis=1)).sum(axis=0, keepdims=True), fast)[0]
    qrs = _spread(steep > np.quantile(steep, 0.9), round(0.05 * fs_hz))
    return np.where(missing | qrs, np.nan, residual)


def _filtered(x: Floats, taps: Floats) -> Floats:
    """Zero-phase FIR filter with the ends held, rows on their own; shape kept."""
    from scipy.signal import oaconvolve

    half = len(taps) // 2
    return oaconvolve(np.pad(x, ((0, 0), (half, half)), mode="edge"), taps[None], mode="valid", axes=1)


def _spread(mask: NDArray[np.bool_], reach: int) -> NDArray[np.bool_]:
    """The mask grown by ``reach`` samples to both sides."""
    return np.convolve(mask.astype(np.float64), np.ones(2 * reach + 1), mode="same") > 0.5
