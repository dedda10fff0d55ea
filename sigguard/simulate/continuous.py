"""Activity without separate beats: fibrillation and flutter of ventricles and atria, torsades, standstill.

Each function gives the dipole, (3, n_samples), mV. Ventricular fibrillation is a sum of a few oscillators
whose frequency (within 3 to 9 Hz, textbook, from memory), size and direction wander.
"""

from __future__ import annotations

import numpy as np

from sigguard.simulate.projection import DOWER
from sigguard.simulate.shapes import Array, unit

VF_TYPES = ("coarse", "medium", "fine", "rich", "orderly")
VF_BAND_HZ = (3.0, 9.0)


def slow_noise(
    rng: np.random.Generator, n_samples: int, *, fs_hz: float, knot_s: float, rows: int = 1
) -> Array:
    """Smooth noise of unit variance at its knots, one knot every knot_s seconds, (rows, n_samples)."""
    n_knots = int(np.ceil(n_samples / fs_hz / knot_s)) + 4
    knots = rng.standard_normal((rows, n_knots))
    position = np.arange(n_samples) / (fs_hz * knot_s) + rng.random()
    i = position.astype(np.intp)
    f = position - i
    p0, p1, p2, p3 = (knots[:, i + k] for k in range(4))  # Catmull-Rom through the knots
    return p1 + 0.5 * f * (p2 - p0 + f * (2 * p0 - 5 * p1 + 4 * p2 - p3 + f * (3 * (p1 - p2) + p3 - p0)))


def drifting_phase(
    rng: np.random.Generator,
    n_samples: int,
    *,
    fs_hz: float,
    centre_hz: float,
    spread_hz: float,
    low_hz: float = 0.0,
    high_hz: float = np.inf,
    knot_s: float = 0.8,
) -> Array:
    """Phase in radians, (n_samples,), of a tone whose frequency wanders about centre_hz within the limits."""
    f_hz = centre_hz + spread_hz * slow_noise(rng, n_samples, fs_hz=fs_hz, knot_s=knot_s)[0]
    return 2 * np.pi * (np.cumsum(np.clip(f_hz, low_hz, high_hz)) / fs_hz + rng.random())


def fibrillation(
    rng: np.random.Generator, n_samples: int, *, fs_hz: float, vf_type: str | None = None
) -> Array:
    """Ventricular fibrillation, (3, n_samples), mV; vf_type is one of VF_TYPES."""
    vf_type = vf_type or str(rng.choice(VF_TYPES))
    amplitude, count, spread = {
        "coarse": (rng.uniform(0.35, 1.0), 2, 0.5),
        "medium": (rng.uniform(0.18, 0.4), 3, 0.6),
        "fine": (rng.uniform(0.05, 0.16), 3, 0.9),
        "rich": (rng.uniform(0.2, 0.8), 5, 0.9),
        "orderly": (rng.uniform(0.3, 1.0), 1, 0.25),
    }[vf_type]
    low, high = VF_BAND_HZ
    main_hz = rng.uniform(4.5, 7.8) if vf_type in ("fine", "rich") else rng.uniform(3.6, 6.8)
    xyz = np.zeros((3, n_samples))
    for k in range(count):
        centre = main_hz if k == 0 else float(np.clip(main_hz + rng.normal(0, 1.3), 3.4, 8.4))
        phase = drifting_phase(
            rng,
            n_samples,
            fs_hz=fs_hz,
            centre_hz=centre,
            spread_hz=spread,
            low_hz=low + 0.2,
            high_hz=high - 0.4,
        )
        shape = np.cos(phase) + rng.uniform(0, 0.22) * np.cos(2 * phase + rng.uniform(0, 6.3))
        swing = slow_noise(rng, n_samples, fs_hz=fs_hz, knot_s=rng.uniform(0.7, 2.0))[0]
        envelope = np.maximum(1 + 0.45 * swing, 0.12)
        axes = rng.normal(size=(3, 1)) + 0.8 * slow_noise(rng, n_samples, fs_hz=fs_hz, knot_s=1.2, rows=3)
        xyz += (1.0 if k == 0 else rng.uniform(0.3, 0.8)) * shape * envelope * axes
    return xyz * (amplitude / (np.sqrt(2) * xyz.std(axis=1).mean()))


def flutter(rng: np.random.Generator, n_samples: int, *, fs_hz: float, rate_bpm: float) -> Array:
    """Ventricular flutter: nearly a sine at 200 to 300 per minute, (3, n_samples), mV."""
    phase = drifting_phase(
        rng, n_samples, fs_hz=fs_hz, centre_hz=rate_bpm / 60, spread_hz=0.03 * rate_bpm / 60, knot_s=2.0
    )
    amplitude = rng.uniform(0.5, 1.6)
    first, second = unit(rng.normal(size=3)), unit(rng.normal(size=3))
    lean = rng.uniform(0.1, 0.5)
    xyz = np.outer(first, np.cos(phase)) + lean * np.outer(second, np.sin(phase))
    xyz += rng.uniform(0, 0.25) * np.outer(first, np.cos(2 * phase + rng.uniform(0, 6.3)))
    return amplitude * xyz * (1 + 0.06 * slow_noise(rng, n_samples, fs_hz=fs_hz, knot_s=1.0))


def torsades(rng: np.random.Generator, n_samples: int, *, fs_hz: float, rate_bpm: float) -> Array:
    """Fast wide complexes whose axis twists about the baseline, (3, n_samples), mV."""
    phase = drifting_phase(
        rng, n_samples, fs_hz=fs_hz, centre_hz=rate_bpm / 60, spread_hz=0.07 * rate_bpm / 60, knot_s=1.0
    )
    twist = drifting_phase(
        rng, n_samples, fs_hz=fs_hz, centre_hz=rng.uniform(0.15, 0.4), spread_hz=0.05, knot_s=3.0
    )
    peaked = np.cos(phase) + 0.3 * np.cos(2 * phase)
    first = unit(rng.normal(size=3))
    second = unit(np.cross(first, rng.normal(size=3)))
    axis = np.outer(first, np.cos(twist)) + rng.uniform(0.2, 0.6) * np.outer(second, np.sin(twist))
    return rng.uniform(0.5, 1.5) * axis * peaked


def atrial_fibrillation(
    rng: np.random.Generator, n_samples: int, *, fs_hz: float, amplitude_mv: float
) -> Array:
    """Fibrillation waves of the atria, 4 to 9 Hz, largest to the front and right, (3, n_samples), mV."""
    main = unit(np.array([-0.35, 0.45, -0.8]) + rng.normal(0, 0.25, 3))
    phase = drifting_phase(
        rng,
        n_samples,
        fs_hz=fs_hz,
        centre_hz=rng.uniform(5.0, 8.0),
        spread_hz=0.6,
        low_hz=4.0,
        high_hz=9.0,
        knot_s=0.5,
    )
    envelope = np.maximum(1 + 0.35 * slow_noise(rng, n_samples, fs_hz=fs_hz, knot_s=0.8)[0], 0.1)
    saw = np.sin(phase) + 0.35 * np.sin(2 * phase) + 0.15 * np.sin(3 * phase)
    return amplitude_mv * np.outer(main, saw * envelope)


def atrial_flutter(
    rng: np.random.Generator, n_samples: int, *, fs_hz: float, rate_bpm: float, amplitude_mv: float
) -> Array:
    """The saw-tooth of atrial flutter, (3, n_samples), mV."""
    phase = 2 * np.pi * (np.arange(n_samples) / fs_hz * rate_bpm / 60 + rng.random())
    main = unit(np.array([0.05, -0.85, -0.3]) + rng.normal(0, 0.2, 3))
    saw = np.sin(phase) - 0.4 * np.sin(2 * phase + 0.3) + 0.15 * np.sin(3 * phase)
    return amplitude_mv * np.outer(main, saw)


def standstill(rng: np.random.Generator, n_samples: int, *, fs_hz: float) -> Array:
    """A few µV of slow residue, (3, n_samples), mV; no beat in it."""
    return (
        rng.uniform(0.001, 0.008) * slow_noise(rng, n_samples, fs_hz=fs_hz, knot_s=0.6, rows=3) / DOWER.max()
    )
