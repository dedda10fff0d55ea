"""Simulated strips shared by the tests of measuring and screening: seeded, drawn once, never altered."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
from numpy.typing import NDArray

from sigguard.simulate.ecg import SimulatedECG, draw_scene, simulate


@cache
def strip(
    seed: int,
    *,
    rhythm: str = "sinus",
    fs_hz: float = 500.0,
    duration_s: float = 10.0,
    plain: bool = True,
) -> SimulatedECG:
    """A strip of that rhythm. ``plain``: the recorder passes 0.05 to 150 Hz, so that truth is not filtered away."""
    rng = np.random.default_rng(seed)
    scene = draw_scene(rng, rhythm=rhythm, fs_hz=fs_hz, duration_s=duration_s)
    if plain:
        scene = replace(scene, highpass_hz=0.05, lowpass_hz=min(150.0, 0.4 * fs_hz))
    ecg = simulate(scene, rng)
    ecg.signal_mv.flags.writeable = False
    return ecg


def strips(n: int, *, first_seed: int = 0, **kind) -> list[SimulatedECG]:
    return [strip(seed, **kind) for seed in range(first_seed, first_seed + n)]


def leads_of(ecgs: list[SimulatedECG], *names: str) -> NDArray[np.float64]:
    """(n_strips * n_names, n_samples): the named leads of strips of one length, strip by strip."""
    return np.concatenate([ecg.signal_mv[[ecg.leads.index(name) for name in names]] for ecg in ecgs])


def qrs_over_t(ecg: SimulatedECG, lead: str) -> float:
    """How much taller (peak to peak) the QRS complex is than the T wave in this lead; median over the usual beats."""
    x, fs_hz = ecg.signal_mv[ecg.leads.index(lead)], ecg.fs_hz
    ratio = []
    for on, off, end in zip(ecg.qrs_on_s, ecg.qrs_off_s, ecg.t_off_s, strict=True):
        if np.isfinite(on + off + end) and end - off > 0.12:
            qrs = x[int(on * fs_hz) : int(off * fs_hz) + 1]
            t = x[int((off + 0.06) * fs_hz) : int(end * fs_hz) + 1]
            ratio.append(np.ptp(qrs) / max(np.ptp(t), 1e-6))
    return float(np.median(ratio)) if ratio else float("nan")
