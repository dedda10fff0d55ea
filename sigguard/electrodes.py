"""Lead algebra: which electrode a disturbance comes from, and whether the leads obey their own laws.

A lead is a difference of electrode potentials, so the disturbance of one electrode shows in the leads
in fixed proportions. Textbook algebra: Einthoven 1912 (I, II, III), Wilson 1934 (V1 to V6 against the
mean of the limbs), Goldberger 1942 (aVR, aVL, aVF).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from sigguard.findings import ElectrodeNoise

Floats = NDArray[np.float64]

ELECTRODES = ("RA", "LA", "LL", "C1", "C2", "C3", "C4", "C5", "C6")
LEADS_12 = ("I", "II", "III", "aVR", "aVL", "aVF", "V1", "V2", "V3", "V4", "V5", "V6")


def _lead_matrix() -> Floats:
    limb = np.array([[-1, 1, 0], [-1, 0, 1], [0, -1, 1], [1, -0.5, -0.5], [-0.5, 1, -0.5], [-0.5, -0.5, 1]])
    rows = np.zeros((12, 9))
    rows[:6, :3] = limb
    rows[6:, :3] = -1 / 3
    rows[6:, 3:] = np.eye(6)
    return rows


LEAD_FROM_ELECTRODES: Floats = _lead_matrix()  # (12 leads, 9 electrodes): lead = row · electrode potentials
LEAD_FROM_ELECTRODES.flags.writeable = False

_ROW_OF = {name.upper(): i for i, name in enumerate(LEADS_12)}
_SINGULAR = 1e-9  # below this share of the largest singular value a direction counts as lost


def lead_rows(leads: Sequence[str]) -> tuple[list[int], Floats]:
    """Positions of the leads whose algebra is known, and their rows of LEAD_FROM_ELECTRODES.

    Names are compared without regard to case. A name met twice counts once; a name that is not one of
    the twelve is left out. Returns (n_known,) positions and (n_known, 9) rows.
    """
    seen: dict[int, int] = {}
    for position, name in enumerate(leads):
        row = _ROW_OF.get(name.strip().upper())
        if row is not None:
            seen.setdefault(row, position)
    return list(seen.values()), LEAD_FROM_ELECTRODES[list(seen)]


def swap_matrix(leads: Sequence[str], first: str, second: str) -> Floats:
    """What the leads turn into when two electrodes are exchanged: seen = matrix @ true.

    ``leads`` are names of the twelve; returns (n_leads, n_leads). Raises ValueError if a lead or an
    electrode is unknown, or if the leads do not hold enough to say what the exchange does.
    """
    positions, rows = lead_rows(leads)
    if len(positions) != len(leads) or not {first, second} <= set(ELECTRODES):
        raise ValueError(
            f"expected leads of {LEADS_12} and electrodes of {ELECTRODES}, found {leads}, {first}, {second}"
        )
    order = list(range(len(ELECTRODES)))
    a, b = ELECTRODES.index(first), ELECTRODES.index(second)
    order[a], order[b] = b, a
    swapped = rows[:, order]
    matrix = swapped @ np.linalg.pinv(rows)
    if not np.allclose(matrix @ rows, swapped, atol=1e-9):
        raise ValueError(f"the leads {tuple(leads)} cannot show what exchanging {first} and {second} does")
    return matrix


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
    positions, rows = lead_rows(leads)
    present = [k for k, i in enumerate(positions) if np.isfinite(x[i]).any()]
    rows, x = rows[present], x[[positions[k] for k in present]]
    used = np.flatnonzero(np.any(rows != 0, axis=0))
    centring = _centring(rows[:, used])
    if centring is None:
        return []
    x = x[:, np.isfinite(x).all(axis=0)]
    if x.shape[1] < 2:
        return []
    potential = np.linalg.pinv(rows[:, used], rcond=_SINGULAR) @ x
    power = _independent_powers(np.cov(potential), centring)
    rms_uv = 1e3 * np.sqrt(power)
    share = power / power.sum() if power.sum() > 0 else power
    order = np.argsort(-power, kind="stable")
    return [ElectrodeNoise(ELECTRODES[used[i]], float(rms_uv[i]), float(share[i])) for i in order]


def _centring(rows: Floats) -> Floats | None:
    """The projection that takes out the common part, or None where these leads cannot tell the electrodes apart."""
    n = rows.shape[1]
    if n < 3:  # of two electrodes one difference is all there is
        return None
    centring = np.eye(n) - 1.0 / n
    seen = np.linalg.pinv(rows, rcond=_SINGULAR) @ rows
    return centring if np.allclose(seen, centring, atol=1e-6) else None


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


def einthoven_error(x_mv: Floats, leads: Sequence[str]) -> float:
    """Rms of I + III − II in µV, each lead taken about its mean; NaN unless the three leads overlap in time.

    ``x_mv`` (n_leads, n_samples), mV. A few µV come from rounding alone; more means a corrupt, time-skewed
    or separately filtered lead, never a swap: exchanged electrodes still obey the law.
    """
    return _law_error_uv(x_mv, leads, ("I", "III", "II"), (1.0, 1.0, -1.0))


def goldberger_error(x_mv: Floats, leads: Sequence[str]) -> float:
    """Rms of aVR + aVL + aVF in µV, as einthoven_error; NaN unless the three leads overlap in time."""
    return _law_error_uv(x_mv, leads, ("aVR", "aVL", "aVF"), (1.0, 1.0, 1.0))


def _law_error_uv(
    x_mv: Floats, leads: Sequence[str], names: tuple[str, ...], weights: tuple[float, ...]
) -> float:
    upper = [lead.strip().upper() for lead in leads]
    if not all(name.upper() in upper for name in names):
        return float("nan")
    x = np.asarray(x_mv, dtype=np.float64)[[upper.index(name.upper()) for name in names]]
    total = np.asarray(weights) @ x
    total = total[np.isfinite(total)]
    return float(1e3 * np.std(total)) if total.size else float("nan")
