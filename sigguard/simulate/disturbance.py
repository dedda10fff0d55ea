"""Disturbances to lay on an ECG: additive noise of unit rms, and transforms that spoil the samples.

Bands (textbook, from memory): wander below 0.7 Hz, muscle from 20 Hz up, tremor 4 to 12 Hz, mains 50 or
60 Hz ± 0.2 with harmonics, movement 1 to 10 Hz. Additive noise goes on one lead, on each lead, or on
electrodes and through ``to_leads``.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from scipy.fft import next_fast_len

from sigguard.errors import UsageError
from sigguard.simulate.continuous import drifting_phase, slow_noise
from sigguard.simulate.projection import to_leads
from sigguard.simulate.shapes import Array

__all__ = [
    "ADDITIVE_KINDS",
    "ENVELOPES",
    "LEAD_OFF_MODES",
    "TRANSFORM_KINDS",
    "apply_clipping",
    "apply_dropouts",
    "apply_lead_off",
    "apply_quantisation",
    "draw_disturbance",
    "draw_envelope",
    "to_leads",
]

ENVELOPES = ("constant", "bursting", "drifting")
LEAD_OFF_MODES = ("flat", "rail", "mains", "pickup")
TRANSFORM_KINDS = ("clipping", "quantisation", "dropout", "lead-off")


def draw_disturbance(
    rng: np.random.Generator,
    kind: str,
    *,
    n_samples: int,
    fs_hz: float,
    envelope: str = "constant",
    mains_hz: float | None = None,
) -> Array:
    """Additive noise of one of ADDITIVE_KINDS, (n_samples,), mean 0 and rms 1.

    ``envelope`` is one of ENVELOPES, or "random". ``mains_hz`` (50 or 60) is drawn unless given. Raises
    UsageError for an unknown kind or envelope, or fewer than 16 samples.
    """
    if kind not in _DRAW:
        raise UsageError(f"unknown disturbance {kind!r}; known: {', '.join(ADDITIVE_KINDS)}")
    if n_samples < 16:
        raise UsageError(f"a disturbance needs at least 16 samples, found {n_samples}")
    x = _mains(rng, n_samples, fs_hz, mains_hz) if kind == "mains" else _DRAW[kind](rng, n_samples, fs_hz)
    if envelope == "random":
        envelope = str(rng.choice(ENVELOPES))
    x = (x - x.mean()) * draw_envelope(rng, envelope, n_samples=n_samples, fs_hz=fs_hz)
    x -= x.mean()
    return x / np.sqrt(np.mean(x * x))


def draw_envelope(rng: np.random.Generator, envelope: str, *, n_samples: int, fs_hz: float) -> Array:
    """Slow multiplier, (n_samples,), greater than 0; UsageError for an unknown one."""
    if envelope == "constant":
        return np.ones(n_samples)
    if envelope == "drifting":
        t = np.linspace(-1, 1, n_samples)
        return np.exp(
            rng.uniform(-1.1, 1.1) * t + 0.4 * slow_noise(rng, n_samples, fs_hz=fs_hz, knot_s=4.0)[0]
        )
    if envelope != "bursting":
        raise UsageError(f"unknown envelope {envelope!r}; known: {', '.join(ENVELOPES)}")
    t_s = np.arange(n_samples) / fs_hz
    out = np.full(n_samples, rng.uniform(0.02, 0.2))
    for _ in range(1 + rng.poisson(t_s[-1] / 7)):
        centre, half, edge = rng.uniform(0, t_s[-1]), rng.uniform(0.25, 1.6), rng.uniform(0.03, 0.3)
        burst = 0.5 * (np.tanh((t_s - centre + half) / edge) - np.tanh((t_s - centre - half) / edge))
        out += rng.uniform(0.5, 1.0) * burst
    return out


def _spectral(
    rng: np.random.Generator, n_samples: int, fs_hz: float, gain_of: Callable[[Array], Array]
) -> Array:
    """Gaussian noise with the given amplitude over frequency, (n_samples,)."""
    f_hz = np.arange(n_samples // 2 + 1, dtype=np.float64) * (fs_hz / n_samples)
    half = rng.standard_normal(len(f_hz)) + 1j * rng.standard_normal(len(f_hz))
    gain = gain_of(f_hz)
    gain[0] = 0.0
    return np.fft.irfft(half * gain, n_samples)


def _wander(rng: np.random.Generator, n_samples: int, fs_hz: float) -> Array:
    """Breathing with a second harmonic, slow sines, and a random walk, all below 0.7 Hz."""
    t_s = np.arange(n_samples) / fs_hz
    breath_hz = rng.uniform(0.15, 0.33)
    phase = drifting_phase(
        rng, n_samples, fs_hz=fs_hz, centre_hz=breath_hz, spread_hz=0.06 * breath_hz, knot_s=5.0
    )
    x = rng.uniform(0.2, 1.2) * (
        np.sin(phase) + rng.uniform(0, 0.4) * np.sin(2 * phase + rng.uniform(0, 6.3))
    )
    for f_hz in rng.uniform(0.03, 0.6, int(rng.integers(2, 6))):
        x += rng.uniform(0.1, 0.8) * np.sin(2 * np.pi * (f_hz * t_s + rng.random()))
    padded = next_fast_len(n_samples + round(30.0 * fs_hz), real=True)  # the walk must not close on itself
    walk = _spectral(rng, padded, fs_hz, lambda f: (1 / np.maximum(f, 0.03)) / np.sqrt(1 + (f / 0.5) ** 16))
    walk = walk[:n_samples]
    return x + rng.uniform(0.3, 1.2) * walk / (walk.std() + 1e-12)


def _muscle(rng: np.random.Generator, n_samples: int, fs_hz: float) -> Array:
    """Coloured noise from 20 Hz up, its size flickering as motor units come and go."""
    low_hz, high_hz = rng.uniform(18, 32), rng.uniform(90, 220)
    slope = rng.uniform(0.0, 0.9)
    x = _spectral(
        rng,
        n_samples,
        fs_hz,
        lambda f: (
            (np.maximum(f, 1.0) / 40) ** -slope
            / np.sqrt(1 + (low_hz / np.maximum(f, 0.1)) ** 10)
            / np.sqrt(1 + (f / high_hz) ** 6)
        ),
    )
    flicker = slow_noise(rng, n_samples, fs_hz=fs_hz, knot_s=rng.uniform(0.08, 0.4))[0]
    return x * np.exp(rng.uniform(0, 0.5) * np.clip(flicker, -2, 2))


def _tremor(rng: np.random.Generator, n_samples: int, fs_hz: float) -> Array:
    """A wandering line of 4 to 12 Hz with harmonics; sometimes more a hump than a line."""
    centre_hz = rng.uniform(4.5, 11.0)
    phase = drifting_phase(
        rng,
        n_samples,
        fs_hz=fs_hz,
        centre_hz=centre_hz,
        spread_hz=rng.uniform(0.1, 0.7),
        low_hz=4.0,
        high_hz=12.0,
    )
    x = np.sin(phase)
    for k in (2, 3):
        x += rng.uniform(0, 0.35 / k) * np.sin(k * phase + rng.uniform(0, 6.3))
    swell = slow_noise(rng, n_samples, fs_hz=fs_hz, knot_s=rng.uniform(0.4, 2.0))[0]
    return x * np.maximum(1 + rng.uniform(0.05, 0.6) * swell, 0.05)


def _mains(rng: np.random.Generator, n_samples: int, fs_hz: float, mains_hz: float | None = None) -> Array:
    """50 or 60 Hz within 0.2 Hz, with harmonics below 0.45 fs and a slow drift of size."""
    base_hz = float(mains_hz or rng.choice((50.0, 60.0))) + rng.uniform(-0.2, 0.2)
    t_s = np.arange(n_samples) / fs_hz
    x = np.sin(2 * np.pi * (base_hz * t_s + rng.random()))
    for k, most in ((2, 0.15), (3, 0.35), (5, 0.2), (7, 0.1)):
        if k * base_hz < 0.45 * fs_hz:
            x += rng.uniform(0, most) * np.sin(2 * np.pi * (k * base_hz * t_s + rng.random()))
    return x * np.maximum(
        1 + rng.uniform(0, 0.3) * slow_noise(rng, n_samples, fs_hz=fs_hz, knot_s=3.0)[0], 0.1
    )


def _motion(rng: np.random.Generator, n_samples: int, fs_hz: float) -> Array:
    """Excursions of 1 to 10 Hz: smooth lumps at random moments on a coloured ground."""
    t_s = np.arange(n_samples) / fs_hz
    x = _spectral(
        rng,
        n_samples,
        fs_hz,
        lambda f: (
            1 / np.sqrt(1 + (1.2 / np.maximum(f, 0.01)) ** 6) / np.maximum(f, 0.5) / np.sqrt(1 + (f / 9) ** 8)
        ),
    )
    x *= rng.uniform(0.2, 1.0) / (x.std() + 1e-12)
    for _ in range(2 + rng.poisson(0.7 * t_s[-1])):
        f_hz, at_s = rng.uniform(1.3, 8.0), rng.uniform(0, t_s[-1])
        near = slice(max(0, int((at_s - 1.5 / f_hz) * fs_hz)), int((at_s + 1.5 / f_hz) * fs_hz))
        u = 2 * np.pi * f_hz * (t_s[near] - at_s)
        x[near] += rng.normal(0, 2.0) * np.cos(u + rng.uniform(0, 6.3)) * np.exp(-((u / 3.5) ** 2))
    return x


def _pops(rng: np.random.Generator, n_samples: int, fs_hz: float) -> Array:
    """An electrode that comes and goes: steps with exponential recovery, and spikes."""
    t_s = np.arange(n_samples) / fs_hz
    x = np.zeros(n_samples)
    for _ in range(1 + rng.poisson(0.25 * t_s[-1])):
        after = t_s - rng.uniform(0, t_s[-1])
        recovery_s = np.exp(rng.uniform(np.log(0.05), np.log(3.0)))
        x += rng.normal(0, 1) * np.where(after >= 0, np.exp(-np.maximum(after, 0) / recovery_s), 0.0)
    for _ in range(rng.poisson(0.2 * t_s[-1])):
        width_s = np.exp(rng.uniform(np.log(0.004), np.log(0.06)))
        x += rng.normal(0, 1.5) * np.exp(-np.abs(t_s - rng.uniform(0, t_s[-1])) / width_s)
    return x


def _excursion(rng: np.random.Generator, n_samples: int, fs_hz: float) -> Array:
    """One to three short lurches over an otherwise quiet stretch, each far larger than all the rest."""
    t_s = np.arange(n_samples) / fs_hz
    x = 0.01 * _motion(rng, n_samples, fs_hz)
    for _ in range(int(rng.integers(1, 4))):
        after = t_s - rng.uniform(0, t_s[-1])
        rise_s, fall_s = rng.uniform(0.01, 0.1), rng.uniform(0.08, 0.7)
        lurch = np.where(after > 0, (1 - np.exp(-np.maximum(after, 0) / rise_s)), 0.0)
        x += rng.choice((-1, 1)) * rng.uniform(0.5, 1.0) * lurch * np.exp(-np.maximum(after, 0) / fall_s)
    return x


_DRAW: dict[str, Callable[[np.random.Generator, int, float], Array]] = {
    "wander": _wander,
    "muscle": _muscle,
    "tremor": _tremor,
    "mains": _mains,
    "motion": _motion,
    "pops": _pops,
    "excursion": _excursion,
}
ADDITIVE_KINDS = tuple(_DRAW)


def apply_clipping(x_mv: Array, *, low_mv: float, high_mv: float) -> Array:
    """The signal held at the rails, same shape; NaN stays NaN. UsageError unless low_mv < high_mv."""
    if not low_mv < high_mv:
        raise UsageError(f"the lower rail must lie below the upper, found {low_mv} and {high_mv} mV")
    return np.clip(x_mv, low_mv, high_mv)


def apply_quantisation(x_mv: Array, *, step_mv: float) -> Array:
    """The signal in whole converter steps, same shape; UsageError unless step_mv > 0."""
    if not step_mv > 0:
        raise UsageError(f"a converter step must be greater than 0, found {step_mv} mV")
    return np.round(np.asarray(x_mv) / step_mv) * step_mv


def _stretches(rng: np.random.Generator, n_samples: int, share: float, most: int) -> list[tuple[int, int]]:
    """One to ``most`` stretches that together cover about the share, at random places."""
    count = int(rng.integers(1, most + 1))
    lengths = np.maximum(1, np.round(rng.dirichlet(np.full(count, 2.0)) * share * n_samples)).astype(int)
    starts = [int(rng.integers(0, max(1, n_samples - length + 1))) for length in lengths]
    return [
        (start, min(start + int(length), n_samples)) for start, length in zip(starts, lengths, strict=True)
    ]


def apply_dropouts(x_mv: Array, rng: np.random.Generator, *, share: float, held: bool = False) -> Array:
    """Samples lost in one to five stretches covering about ``share`` (0 to 1) of the last axis.

    NaN there, or the last value held; all rows lose the same stretches.
    """
    out = np.array(x_mv, dtype=np.float64)
    for start, stop in _stretches(rng, out.shape[-1], share, 5):
        out[..., start:stop] = out[..., max(start - 1, 0) : max(start - 1, 0) + 1] if held else np.nan
    return out


def apply_lead_off(
    x_mv: Array,
    rng: np.random.Generator,
    *,
    fs_hz: float,
    mode: str | None = None,
    share: float = 1.0,
    rail_mv: float = 5.0,
) -> Array:
    """One lead, (n_samples,), without contact over one stretch of about ``share`` (0 to 1) of it.

    Modes: "flat" (0 and a few µV), "rail" (drifts to ±rail_mv and stays), "mains" (only mains pickup),
    "pickup" (wander, mains and movement, no ECG). Contact returns with an exponential recovery.
    """
    mode = mode or str(rng.choice(LEAD_OFF_MODES))
    if mode not in LEAD_OFF_MODES:
        raise UsageError(f"unknown lead-off mode {mode!r}; known: {', '.join(LEAD_OFF_MODES)}")
    out = np.array(x_mv, dtype=np.float64)
    if out.ndim != 1:
        raise UsageError(f"lead-off works on one lead, (n_samples,), found {out.ndim} dimensions")
    n = len(out)
    length = int(np.clip(round(share * n), min(16, n), n))
    start = int(rng.integers(0, n - length + 1))
    stop = start + length
    out[start:stop] = _without_contact(rng, mode, length, fs_hz, rail_mv)
    if stop < n:
        after_s = np.arange(n - stop) / fs_hz
        level = float(np.clip(out[stop - 1], -rail_mv, rail_mv))
        out[stop:] += level * np.exp(-after_s / rng.uniform(0.05, 0.8))
    return out


def _without_contact(rng: np.random.Generator, mode: str, n: int, fs_hz: float, rail_mv: float) -> Array:
    quiet = 0.001 * rng.standard_normal(n) * rng.uniform(0, 2)
    if mode == "flat" or n < 16:
        return quiet
    if mode == "rail":
        side = float(rng.choice((-1, 1))) * rail_mv
        return side * (1 - np.exp(-np.arange(1, n + 1) / fs_hz / rng.uniform(0.005, 0.2)))
    mains = rng.uniform(0.05, 2.0) * draw_disturbance(rng, "mains", n_samples=n, fs_hz=fs_hz)
    if mode == "mains":
        return quiet + mains
    wander = rng.uniform(0.1, 1.5) * draw_disturbance(rng, "wander", n_samples=n, fs_hz=fs_hz)
    moving = rng.uniform(0.05, 0.6) * draw_disturbance(rng, "motion", n_samples=n, fs_hz=fs_hz)
    return quiet + 0.3 * mains + wander + moving


def clipped_share(x_mv: Array, *, low_mv: float, high_mv: float) -> NDArray[np.float64]:
    """Share of samples at or beyond the rails, along the last axis; NaN samples count as not clipped."""
    return np.mean((x_mv <= low_mv) | (x_mv >= high_mv), axis=-1)
