"""Draws of P, QRS, T, U and ST as they differ from patient to patient.

Vectors follow the textbook course of activation (from memory): septum to the right and front, free walls
to the left, down and back, base of the heart up, back and right. All angles and sizes are drawn widely.
"""

from __future__ import annotations

import numpy as np

from sigguard.simulate.projection import DOWER
from sigguard.simulate.shapes import (
    Array,
    BeatShape,
    StShift,
    Wave,
    direction,
    fitted,
    peak_s,
    placed,
    unit,
    with_peak,
)

QRS_STYLES = ("normal", "infarct", "fragmented", "delta", "rsr", "lbbb", "rbbb", "ectopic", "paced")
T_STYLES = ("upright", "tall", "flat", "inverted", "biphasic", "discordant")
P_STYLES = ("upright", "notched", "biphasic", "flat", "inverted")


def draw_p(rng: np.random.Generator, *, duration_s: float, peak_mv: float, style: str | None = None) -> Wave:
    """A P wave of two bumps (right, then left atrium); onset at 0, reference is the onset."""
    style = style or str(rng.choice(P_STYLES, p=(0.52, 0.2, 0.12, 0.06, 0.1)))
    axis = rng.normal(36, 20)
    right = direction(axis + rng.normal(12, 10), rng.normal(-20, 12))
    left = direction(axis - rng.normal(12, 10), rng.normal(22, 14))
    share = rng.uniform(0.6, 1.3)
    centre, width = np.array([0.36, 0.62]), rng.uniform(0.13, 0.18, 2)
    if style == "notched":
        centre, width = (
            np.array([rng.uniform(0.26, 0.32), rng.uniform(0.66, 0.72)]),
            rng.uniform(0.10, 0.14, 2),
        )
    elif style == "biphasic":
        left = unit(left * np.array([0.5, 0.3, 1.4]) - 0.5 * right)
    elif style == "inverted":
        right, left = -right, -left
    amp = np.vstack([right, share * left])
    skew = rng.uniform(0.85, 1.2, 2)
    wave = fitted(amp, centre, width * skew, width / skew, on_s=0.0, off_s=duration_s)
    return with_peak(wave, peak_mv * (0.3 if style == "flat" else 1.0))


def _normal_vectors(rng: np.random.Generator, axis_deg: float, back_deg: float) -> Array:
    """Five vectors of a normal activation, (5, 3), main vector of length 1."""
    main = direction(axis_deg, back_deg)
    fx, fy = main[0], main[1]
    jitter = rng.normal(0, 0.14, (5, 3))
    septal = unit(np.array([-0.6 * fx, -0.35 * fy, -0.8]) + 2 * jitter[0]) * rng.uniform(0.08, 0.34)
    early = (0.75 * np.array([fx, fy, -0.55]) + jitter[1]) * rng.uniform(0.35, 0.7)
    late = (np.array([0.45 * fx, 0.35 * fy, 0.85]) + jitter[3]) * rng.uniform(0.3, 0.75)
    last = unit(np.array([-0.35, -0.55, 0.5]) + 2 * jitter[4]) * rng.uniform(0.05, 0.32)
    return np.vstack([septal, early, main + jitter[2], late, last])


def _wide_vectors(rng: np.random.Generator, style: str, axis_deg: float, back_deg: float) -> Array:
    """Four vectors of an activation that spreads from cell to cell, (4, 3)."""
    if style == "lbbb":
        base = direction(axis_deg if abs(axis_deg) < 75 else rng.normal(0, 30), rng.normal(38, 15))
    elif style == "paced":
        base = direction(rng.normal(-70, 30), rng.normal(25, 25))
    else:
        base = unit(rng.normal(size=3))
    turn = rng.normal(0, 0.28, (4, 3))
    size = np.array([rng.uniform(0.25, 0.6), 1.0, rng.uniform(0.5, 1.1), rng.uniform(0.15, 0.6)])
    return (base + turn) * size[:, None]


def draw_qrs(
    rng: np.random.Generator, *, style: str, duration_s: float, peak_mv: float, axis_deg: float
) -> Wave:
    """A QRS of four to eight bumps; reference is the moment of its largest magnitude."""
    back_deg = float(np.clip(rng.normal(22, 18), -30, 70))
    if style in ("lbbb", "paced", "ectopic"):
        amp = _wide_vectors(rng, style, axis_deg, back_deg)
        centre = np.array([0.2, 0.4, 0.62, 0.82]) + rng.normal(0, 0.025, 4)
        width = rng.uniform(0.085, 0.14, 4)
    else:
        amp = _normal_vectors(rng, axis_deg, back_deg)
        centre = np.array([0.16, 0.34, 0.48, 0.64, 0.82]) + rng.normal(0, 0.02, 5)
        width = rng.uniform(0.065, 0.105, 5)
        if style == "infarct":
            amp[0] = unit(rng.normal(size=3)) * rng.uniform(0.35, 0.9)
            amp[1] = 0.5 * amp[1] + 0.5 * amp[0]
        elif style == "delta":
            amp[0] = unit(0.8 * amp[2] + rng.normal(0, 0.35, 3)) * rng.uniform(0.15, 0.4)
            centre = np.array([0.24, 0.5, 0.62, 0.74, 0.87])
            width = np.concatenate([[rng.uniform(0.11, 0.15)], width[1:] * 0.8])
        elif style in ("rbbb", "rsr"):
            late = unit(np.array([-0.75, 0.05, -0.65]) + rng.normal(0, 0.2, 3))
            strength = rng.uniform(0.4, 0.9) if style == "rbbb" else rng.uniform(0.15, 0.35)
            amp = np.vstack([amp[:4], late * strength])
            centre = np.array([0.12, 0.25, 0.35, 0.47, 0.74]) if style == "rbbb" else centre
            width = np.concatenate(
                [width[:4] * (0.75 if style == "rbbb" else 1.0), [rng.uniform(0.09, 0.13)]]
            )
    if style == "fragmented" or rng.random() < 0.15:
        more = int(rng.integers(1, 4))
        amp = np.vstack([amp, rng.normal(0, 0.12, (more, 3))])
        centre = np.concatenate([centre, rng.uniform(0.25, 0.8, more)])
        width = np.concatenate([width, rng.uniform(0.03, 0.05, more)])
    skew = rng.uniform(0.85, 1.18, len(centre))
    wave = fitted(amp, centre, width * skew, width / skew, on_s=0.0, off_s=duration_s)
    wave = with_peak(wave, peak_mv)
    return placed(wave, -peak_s(wave))


def draw_t(
    rng: np.random.Generator, *, style: str, qrs: Wave, on_s: float, off_s: float, peak_mv: float
) -> Wave:
    """A T wave that rises slowly and falls faster; reference is that of the QRS."""
    mean = qrs.amp_mv.T @ (qrs.left_s + qrs.right_s)
    if style == "discordant":
        main = unit(-unit(mean) + rng.normal(0, 0.3, 3))
    else:
        axis = np.degrees(np.arctan2(mean[1], mean[0]))
        axis = axis if abs(axis - 45) < 60 else 45.0
        main = direction(axis + rng.normal(0, 22), rng.normal(-25, 22))
    early = unit(main + rng.normal(0, 0.4, 3))
    share, sign = rng.uniform(0.1, 0.55), 1.0
    if style == "inverted":
        sign = -1.0
        main = unit(main + rng.normal(0, 0.35, 3))
    elif style == "biphasic":
        early, share = unit(-main + rng.normal(0, 0.3, 3)), rng.uniform(0.5, 1.1)
    size = {"tall": 2.0, "flat": 0.15}.get(style, 1.0)
    early_width, width = rng.uniform(0.12, 0.18), rng.uniform(0.1, 0.15)
    asymmetry = rng.uniform(1.15, 1.9)  # of the main bump: width before the peak over width after it
    centre_early = rng.uniform(0.35, 0.48) if style != "biphasic" else rng.uniform(0.28, 0.36)
    wave = fitted(
        sign * np.vstack([share * early, main]),
        np.array([centre_early, rng.uniform(0.6, 0.66)]),
        np.array([early_width * 1.1, width * asymmetry]),
        np.array([early_width, width]),
        on_s=on_s,
        off_s=off_s,
    )
    return with_peak(wave, peak_mv * size)


def draw_st(rng: np.random.Generator, *, lead_peak_mv: float, qrs: Wave, t: Wave) -> StShift:
    """An ST shift whose largest deviation over the leads is lead_peak_mv at its start."""
    level = unit(rng.normal(size=3))
    level *= lead_peak_mv / np.abs(DOWER @ level).max()
    j_s, rise_s = qrs.off_s, 0.16 * (qrs.off_s - qrs.on_s)
    fall_s = 0.18 * (t.off_s - j_s)
    return StShift(
        level_mv=level,
        slope_per_s=float(rng.uniform(-2.5, 2.5)),
        start_s=j_s - 1.2 * rise_s,
        rise_s=rise_s,
        end_s=t.off_s - 2.2 * fall_s,
        fall_s=fall_s,
    )


def draw_u(rng: np.random.Generator, *, t: Wave, peak_mv: float) -> Wave:
    """A small U wave after T; reference is that of the QRS."""
    start = t.off_s + rng.uniform(-0.01, 0.03)
    vector = unit(t.amp_mv[-1] + 0.4 * np.linalg.norm(t.amp_mv[-1]) * rng.normal(size=3))
    wave = fitted(
        vector[None],
        np.array([0.5]),
        np.array([0.16]),
        np.array([0.18]),
        on_s=start,
        off_s=start + rng.uniform(0.1, 0.18),
    )
    return with_peak(wave, peak_mv)


def draw_beat(
    rng: np.random.Generator,
    *,
    kind: str,
    style: str,
    qrs_s: float,
    qt_s: float,
    qrs_mv: float,
    t_mv: float,
    axis_deg: float,
    st_mv: float,
    t_style: str | None = None,
    u_wave: bool = False,
) -> BeatShape:
    """One kind of beat with its QRS, T, U and ST."""
    qrs = draw_qrs(rng, style=style, duration_s=qrs_s, peak_mv=qrs_mv, axis_deg=axis_deg)
    if t_style is None:
        wide = style in ("lbbb", "paced", "ectopic") and rng.random() < 0.9
        t_style = "discordant" if wide else str(rng.choice(T_STYLES, p=(0.55, 0.08, 0.1, 0.1, 0.09, 0.08)))
    t_off = qrs.on_s + qt_s
    t_on = qrs.off_s + rng.uniform(0.05, 0.48) * (t_off - qrs.off_s)
    t = draw_t(rng, style=t_style, qrs=qrs, on_s=t_on, off_s=t_off, peak_mv=t_mv)
    u = draw_u(rng, t=t, peak_mv=float(rng.uniform(0.01, 0.08))) if u_wave else None
    st = draw_st(rng, lead_peak_mv=st_mv, qrs=qrs, t=t) if st_mv else None
    return BeatShape(kind=kind, qrs=qrs, t=t, u=u, st=st)
