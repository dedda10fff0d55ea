"""Wave shapes: sums of two-sided Gaussians on the dipole's three axes.

After McSharry, Clifford, Tarassenko, Smith 2003 (Gaussian waves) and Sameni, Clifford, Jutten,
Shamsollahi 2007 (the same on a dipole). Each wave is drawn in its own time and then stretched so
that its onset and end fall where the scene wants them; truth is therefore exact by construction.

Onset and end, one rule for P, QRS and T: the first and last moment at which the magnitude of the
wave's own dipole contribution is at least EDGE_FRACTION of that wave's own peak magnitude.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

EDGE_FRACTION = 0.03
_TAIL = 5.0  # Gaussians are left out beyond this many widths: 4e-6 of their peak

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Wave:
    """K two-sided Gaussians; times in seconds from the wave's reference, amplitudes in mV per axis."""

    amp_mv: Array  # (K, 3)
    centre_s: Array  # (K,)
    left_s: Array  # (K,): width before the centre
    right_s: Array  # (K,): width after it
    on_s: float
    off_s: float

    def at(self, t_s: Array) -> Array:
        """The dipole at times t_s, (n,) → (3, n), mV."""
        u = t_s - self.centre_s[:, None]
        u /= np.where(u < 0, self.left_s[:, None], self.right_s[:, None])
        u *= u
        u *= -0.5
        return self.amp_mv.T @ np.exp(u, out=u)

    @property
    def reach_s(self) -> tuple[float, float]:
        """From where to where the wave differs from nothing, seconds."""
        return (
            float((self.centre_s - _TAIL * self.left_s).min()),
            float((self.centre_s + _TAIL * self.right_s).max()),
        )

    def stretched(self, factor: float) -> Wave:
        """Time stretched about the reference by a factor."""
        return Wave(
            self.amp_mv,
            self.centre_s * factor,
            self.left_s * factor,
            self.right_s * factor,
            self.on_s * factor,
            self.off_s * factor,
        )

    def times(self, factor: float) -> Wave:
        """Amplitude multiplied by a factor."""
        return replace(self, amp_mv=self.amp_mv * factor)


@dataclass(frozen=True, slots=True, eq=False)
class StShift:
    """A plateau between the end of QRS and T: level at its start, and its slope."""

    level_mv: Array  # (3,)
    slope_per_s: float  # relative change of the level per second
    start_s: float  # centre of the rise, inside QRS
    rise_s: float
    end_s: float  # centre of the fall, under T
    fall_s: float

    def at(self, t_s: Array, *, stretch: float = 1.0) -> Array:
        """The dipole at times t_s, (n,) → (3, n), mV; stretch moves and widens the fall."""
        rise = 0.5 * (1 + np.tanh((t_s - self.start_s) / self.rise_s))
        fall = 0.5 * (1 - np.tanh((t_s / stretch - self.end_s) / self.fall_s))
        return np.outer(self.level_mv, rise * fall * (1 + self.slope_per_s * (t_s - self.start_s)))


@dataclass(frozen=True, slots=True, eq=False)
class BeatShape:
    """QRS, T, U and ST of one kind of beat; reference is the moment of the largest QRS magnitude."""

    kind: str
    qrs: Wave
    t: Wave
    u: Wave | None = None
    st: StShift | None = None


def fitted(amp_mv: Array, centre: Array, left: Array, right: Array, *, on_s: float, off_s: float) -> Wave:
    """The wave stretched and moved so that onset and end (EDGE_FRACTION rule) fall on on_s and off_s."""
    raw = Wave(
        amp_mv=np.asarray(amp_mv, float),
        centre_s=np.asarray(centre, float),
        left_s=np.asarray(left, float),
        right_s=np.asarray(right, float),
        on_s=0.0,
        off_s=0.0,
    )
    first, last = edges(raw)
    scale = (off_s - on_s) / (last - first)
    return Wave(
        amp_mv=raw.amp_mv,
        centre_s=on_s + (raw.centre_s - first) * scale,
        left_s=raw.left_s * scale,
        right_s=raw.right_s * scale,
        on_s=on_s,
        off_s=off_s,
    )


def edges(wave: Wave, *, n: int = 600) -> tuple[float, float]:
    """Onset and end of a wave by the EDGE_FRACTION rule, seconds."""
    t_s = np.linspace(*wave.reach_s, n)
    excess = _magnitude(wave.at(t_s))
    excess -= EDGE_FRACTION * excess.max()
    above = np.flatnonzero(excess >= 0)
    return _crossing(t_s, excess, above[0] - 1), _crossing(t_s, excess, above[-1])


def _crossing(t_s: Array, excess: Array, i: int) -> float:
    a, b = excess[i], excess[i + 1]
    return float(t_s[i] + (t_s[i + 1] - t_s[i]) * a / (a - b))


def peak_s(wave: Wave, *, n: int = 300) -> float:
    """Moment of the largest magnitude, seconds."""
    t_s = np.linspace(wave.on_s, wave.off_s, n)
    return float(t_s[np.argmax(_magnitude(wave.at(t_s)))])


def _magnitude(xyz: Array) -> Array:
    return np.sqrt(np.einsum("ij,ij->j", xyz, xyz))


def direction(frontal_deg: float, back_deg: float) -> Array:
    """Unit vector: frontal axis (0 left, 90 down) and tilt to the back, degrees."""
    f, b = np.radians(frontal_deg), np.radians(back_deg)
    return np.array([np.cos(f) * np.cos(b), np.sin(f) * np.cos(b), np.sin(b)])


def unit(vector: Array) -> Array:
    """The vector at length 1."""
    return vector / np.linalg.norm(vector)


def with_peak(wave: Wave, peak_mv: float) -> Wave:
    """The wave scaled so that its largest magnitude is peak_mv."""
    t_s = np.linspace(wave.on_s, wave.off_s, 200)
    return wave.times(peak_mv / _magnitude(wave.at(t_s)).max())


def placed(wave: Wave, shift_s: float) -> Wave:
    """The wave moved by shift_s."""
    return replace(
        wave, centre_s=wave.centre_s + shift_s, on_s=wave.on_s + shift_s, off_s=wave.off_s + shift_s
    )
