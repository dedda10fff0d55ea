"""What makes an ordinary rhythm look like a lethal one, or a lethal one like an ordinary: handling, climbing, chest
compressions, loose contact; a QRS of nothing but fast deflections; pacing spikes that no beat follows.

These serve the search for lethal rhythms (training/rhythms.py) and are apart from ``disturbance`` so that the
corpus of the reliability model stays what it is. Sizes and rates are common practice, no source: compressions
come at 100 to 120 a minute (resuscitation guidelines, from memory), a wearer walks or climbs at 1.2 to 2.6 steps
a second, a hand on an electrode trembles and slips.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from sigguard.errors import UsageError
from sigguard.simulate.continuous import drifting_phase, slow_noise
from sigguard.simulate.disturbance import draw_disturbance, draw_envelope
from sigguard.simulate.shapes import Array

__all__ = [
    "LIKE_RHYTHM_KINDS",
    "apply_loose_contact",
    "draw_like_rhythm",
    "draw_pacing_spikes",
    "with_fast_qrs",
]


def draw_like_rhythm(
    rng: np.random.Generator, kind: str, *, n_samples: int, fs_hz: float, envelope: str = "constant"
) -> Array:
    """Additive noise of one of LIKE_RHYTHM_KINDS, (n_samples,), mean 0 and rms 1.

    ``envelope`` as in ``disturbance.draw_disturbance``. UsageError for an unknown kind or under 16 samples.
    """
    if kind not in _DRAW:
        raise UsageError(f"unknown disturbance {kind!r}; known: {', '.join(LIKE_RHYTHM_KINDS)}")
    if n_samples < 16:
        raise UsageError(f"a disturbance needs at least 16 samples, found {n_samples}")
    if envelope == "random":
        envelope = str(rng.choice(("constant", "bursting", "drifting")))
    x = _DRAW[kind](rng, n_samples, fs_hz)
    x = (x - x.mean()) * draw_envelope(rng, envelope, n_samples=n_samples, fs_hz=fs_hz)
    x -= x.mean()
    return x / np.sqrt(np.mean(x * x) + 1e-24)


def _rhythmic(rng: np.random.Generator, n: int, fs_hz: float, rate_hz: float, spread: float) -> Array:
    """One lump a cycle, each a little different: harmonics in a relation that drifts."""
    phase = drifting_phase(
        rng, n, fs_hz=fs_hz, centre_hz=rate_hz, spread_hz=spread * rate_hz, low_hz=0.5, knot_s=3.0
    )
    x = np.zeros(n)
    for k in range(1, 6):
        weight = rng.uniform(0.2, 1.0) / k ** rng.uniform(0.5, 1.5)
        turn = rng.uniform(0, 6.3) + 0.5 * slow_noise(rng, n, fs_hz=fs_hz, knot_s=2.0)[0]
        x += weight * np.cos(k * phase + turn)
    return x


def _compressions(rng: np.random.Generator, n: int, fs_hz: float) -> Array:
    """Chest compressions: nearly periodic, 1.6 to 2.1 Hz, with pauses for breaths in one of three."""
    x = _rhythmic(rng, n, fs_hz, rng.uniform(1.6, 2.1), 0.04)
    x *= np.maximum(1 + 0.2 * slow_noise(rng, n, fs_hz=fs_hz, knot_s=1.5)[0], 0.1)
    if rng.random() < 0.33:
        t_s = np.arange(n) / fs_hz + rng.uniform(0, 20)
        x *= 0.03 + 0.97 * (t_s % 20 < 16)
    return x


def _steps(rng: np.random.Generator, n: int, fs_hz: float) -> Array:
    """Walking, running or climbing: a lump each step on a restless ground of 1 to 10 Hz."""
    gait = _rhythmic(rng, n, fs_hz, rng.uniform(1.2, 2.6), 0.08)
    ground = draw_disturbance(rng, "motion", n_samples=n, fs_hz=fs_hz)
    return rng.uniform(0.3, 1.0) * gait / (gait.std() + 1e-12) + rng.uniform(0.3, 1.5) * ground


def _handling(rng: np.random.Generator, n: int, fs_hz: float) -> Array:
    """Hands on dry electrodes: trembling, slipping and the muscles of the arms, each coming and going."""
    x = np.zeros(n)
    for kind, most in (("motion", 1.0), ("tremor", 0.6), ("muscle", 0.7), ("pops", 0.8), ("wander", 1.0)):
        envelope = "bursting" if rng.random() < 0.6 else "drifting"
        x += rng.uniform(0, most) * draw_disturbance(rng, kind, n_samples=n, fs_hz=fs_hz, envelope=envelope)
    return x


_DRAW: dict[str, Callable[[np.random.Generator, int, float], Array]] = {
    "compressions": _compressions,
    "steps": _steps,
    "handling": _handling,
}
LIKE_RHYTHM_KINDS = tuple(_DRAW)


def apply_loose_contact(x_mv: Array, rng: np.random.Generator, *, fs_hz: float, share: float = 0.4) -> Array:
    """One lead, (n_samples,), whose electrode sits loose over about ``share`` (0 to 1) of it: the beats stay
    but shrink by a factor of 1.2 to 6 that comes and goes, with lurches of the baseline at both ends."""
    n = len(x_mv)
    length = int(np.clip(round(share * n), min(16, n), n))
    start = int(rng.integers(0, n - length + 1))
    t = np.arange(n) / fs_hz
    first, last = start / fs_hz, (start + length) / fs_hz
    edge_s = rng.uniform(0.02, 0.4)
    inside = 0.5 * (np.tanh((t - first) / edge_s) - np.tanh((t - last) / edge_s))
    least = 1 / np.exp(rng.uniform(np.log(1.2), np.log(6.0)))
    flicker = np.clip(1 + 0.3 * slow_noise(rng, n, fs_hz=fs_hz, knot_s=1.0)[0], 0.3, 1.7)
    gain = 1 - inside + inside * np.minimum(least * flicker, 1.0)
    out = np.asarray(x_mv, dtype=np.float64) * gain
    for at_s in (first, last):
        after = np.maximum(t - at_s, 0.0)
        lurch = rng.normal(0, 1.0) * np.exp(-after / np.exp(rng.uniform(np.log(0.1), np.log(2.0))))
        out += np.where(t >= at_s, lurch, 0.0)
    return out


FINE = 8  # a spike is drawn so much finer than it is sampled


def draw_pacing_spikes(
    rng: np.random.Generator, n_samples: int, *, fs_hz: float, rate_bpm: float | None = None
) -> Array:
    """Spikes of 0.4 to 2 ms at a steady rate (50 to 110/min unless given), (n_samples,), mV.

    0.3 to 20 mV at the electrode, less once through the recorder's low-pass (35 to 120 Hz, without delay); in one of
    three a charge is left behind that fades within some 0.1 s. Sizes are common practice, no source.
    """
    rr_s = 60 / (rng.uniform(50, 110) if rate_bpm is None else rate_bpm)
    at_s = rng.uniform(0, rr_s) + rr_s * np.arange(int(n_samples / fs_hz / rr_s) + 1)
    at_s = at_s + 0.0005 * rng.standard_normal(len(at_s))
    width_s = rng.uniform(0.0004, 0.002)
    size_mv = np.exp(rng.uniform(np.log(0.3), np.log(20.0)))
    left_mv = rng.uniform(0.02, 0.15) * min(size_mv, 1.0) if rng.random() < 0.33 else 0.0
    t_s = np.arange(FINE * n_samples) / (FINE * fs_hz)
    x = np.zeros(t_s.size)
    for start_s in at_s:
        first = np.searchsorted(t_s, start_s)
        x[first : first + max(1, round(width_s * FINE * fs_hz))] += size_mv
        tail = slice(first, first + round(0.6 * FINE * fs_hz))
        x[tail] -= left_mv * np.exp(-(t_s[tail] - start_s) / 0.1)
    low_hz = min(float(rng.choice((35.0, 60.0, 100.0, 120.0))), 0.45 * fs_hz)
    gain = 1 / np.sqrt(1 + (np.fft.rfftfreq(x.size, 1 / (FINE * fs_hz)) / low_hz) ** 6)
    return np.fft.irfft(np.fft.rfft(x) * gain, x.size)[::FINE]


def with_fast_qrs(x_mv: Array, rng: np.random.Generator, *, on_s: Array, off_s: Array, fs_hz: float) -> Array:
    """One lead, (n_samples,), whose QRS complexes are replaced by three to six deflections of 5 to 9 ms, up and down.

    ``on_s``, ``off_s``: where each QRS begins and ends, s (NaN: left as it is). Nearly all of such a complex
    lies above 28 Hz. P and T stay.
    """
    out, t_s = np.array(x_mv, dtype=np.float64), np.arange(len(x_mv)) / fs_hz
    count, apart_s = int(rng.integers(3, 7)), rng.uniform(0.007, 0.011)
    sign = rng.choice((-1.0, 1.0))
    heights = sign * (-1.0) ** np.arange(count) * rng.uniform(0.4, 1.0, count)
    heights *= np.exp(rng.uniform(np.log(0.4), np.log(2.0)))
    for on, off in zip(on_s, off_s, strict=True):
        first, last = np.searchsorted(t_s, (on, off)) if np.isfinite(on + off) else (0, 0)
        if not 0 < first < last < len(out):
            continue
        out[first:last] = np.linspace(out[first - 1], out[last], last - first)
        centre_s = (on + off) / 2 + apart_s * (np.arange(count) - (count - 1) / 2)
        size = heights * (1 + 0.15 * rng.standard_normal(count))
        near = np.abs(t_s - (on + off) / 2) < 0.1
        out[near] += size @ np.exp(-0.5 * ((t_s[near] - centre_s[:, None]) / (0.35 * apart_s)) ** 2)
    return out
