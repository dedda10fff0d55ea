"""When which beat comes: schedules of the rhythms, without any wave shape."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from sigguard.simulate.shapes import Array

if TYPE_CHECKING:
    from sigguard.simulate.scene import Scene

RHYTHM_WEIGHTS = {
    "sinus": 0.24,
    "sinus-slow": 0.06,
    "sinus-fast": 0.08,
    "atrial-fibrillation": 0.11,
    "atrial-flutter": 0.03,
    "ectopy-ventricular": 0.08,
    "ectopy-atrial": 0.05,
    "lbbb": 0.05,
    "rbbb": 0.05,
    "ventricular-pacing": 0.04,
    "calibration": 0.03,
    "complete-block": 0.03,
    "wenckebach": 0.03,
    "pause": 0.02,
    "idioventricular": 0.01,
    "asystole": 0.015,
    "wide-tachycardia": 0.025,
    "ventricular-flutter": 0.015,
    "ventricular-fibrillation": 0.025,
    "torsades": 0.01,
}
RHYTHMS = tuple(RHYTHM_WEIGHTS)
LETHAL = ("asystole", "wide-tachycardia", "ventricular-flutter", "ventricular-fibrillation", "torsades")
BEATLESS = ("asystole", "ventricular-flutter", "ventricular-fibrillation", "torsades")
NO_P = ("atrial-fibrillation", "atrial-flutter")

START_S = -3.0  # schedules begin before the strip so that tails and filters are settled in it


@dataclass(frozen=True, slots=True, eq=False)
class Schedule:
    """Beats in time order. pr_s is NaN where no P belongs to the beat; p_alone_s are onsets of other Ps."""

    beat_s: Array
    shape: NDArray[np.intp]  # index into Scene.beats
    pr_s: Array
    stretch: Array  # of ST, T and U in time
    p_alone_s: Array
    spike_s: Array


def schedule(scene: Scene, rng: np.random.Generator) -> Schedule:
    """The beats of a scene from START_S to a second past its end."""
    plan = _PLANS.get(scene.rhythm, _sinus)(scene, rng)
    if scene.rhythm in BEATLESS:
        keep = (plan.beat_s < scene.turn_s) & (scene.turn_s > 0)
        plan = Schedule(
            beat_s=plan.beat_s[keep],
            shape=plan.shape[keep],
            pr_s=plan.pr_s[keep],
            stretch=plan.stretch[keep],
            p_alone_s=plan.p_alone_s,
            spike_s=plan.spike_s,
        )
    return plan


def _plan(
    scene: Scene,
    beat_s: Array,
    *,
    shape: NDArray[np.intp] | int = 0,
    pr_s: Array | float | None = None,
    p_alone_s: Array | None = None,
    spike_s: Array | None = None,
    adapt: float = 0.3,
) -> Schedule:
    rr = np.diff(beat_s, prepend=beat_s[0] - 60 / scene.rate_bpm)
    pr = scene.pr_ms / 1000 if pr_s is None else pr_s
    return Schedule(
        beat_s=beat_s,
        shape=np.broadcast_to(np.asarray(shape, dtype=np.intp), beat_s.shape),
        pr_s=np.broadcast_to(np.asarray(pr, dtype=float), beat_s.shape),
        stretch=np.clip((rr * scene.rate_bpm / 60) ** adapt, 0.82, 1.15) if adapt else np.ones_like(beat_s),
        p_alone_s=np.zeros(0) if p_alone_s is None else p_alone_s,
        spike_s=np.zeros(0) if spike_s is None else spike_s,
    )


def _train(
    scene: Scene, rng: np.random.Generator, *, rate_bpm: float | None = None, jitter: float | None = None
) -> Array:
    """Times of a sinus-like pacemaker with respiratory variation, seconds."""
    mean_s = 60 / (rate_bpm or scene.rate_bpm)
    n = int((scene.duration_s + 2 - START_S) / mean_s * 1.4) + 3
    rough = START_S + mean_s * np.arange(n)
    breath = np.sin(2 * np.pi * scene.breath_hz * rough + scene.breath_phase)
    rr = (
        1
        + scene.breath_rr * breath
        + (scene.rr_jitter if jitter is None else jitter) * rng.standard_normal(n)
    )
    t_s = START_S + rng.random() * mean_s + np.cumsum(mean_s * np.clip(rr, 0.6, 1.6))
    return t_s[t_s < scene.duration_s + 1]


def _sinus(scene: Scene, rng: np.random.Generator) -> Schedule:
    return _plan(scene, _train(scene, rng))


def _irregular(scene: Scene, rng: np.random.Generator) -> Schedule:
    """Atrial fibrillation: gamma distributed intervals above a refractory floor."""
    mean_s = 60 / scene.rate_bpm
    floor = max(0.27, 0.5 * mean_s)
    spread = scene.af_irregularity * mean_s
    shape = ((mean_s - floor) / spread) ** 2
    n = int((scene.duration_s + 4 - START_S) / floor) + 3
    t_s = START_S + np.cumsum(floor + rng.gamma(shape, spread**2 / (mean_s - floor), n))
    return _plan(scene, t_s[t_s < scene.duration_s + 1], pr_s=np.nan, adapt=0.15)


def _flutter_conduction(scene: Scene, rng: np.random.Generator) -> Schedule:
    """Atrial flutter: every second to fourth saw-tooth is conducted."""
    cycle = 60 / scene.atrial_bpm
    ratio = max(2, round(60 / scene.rate_bpm / cycle))
    n = int((scene.duration_s + 2 - START_S) / (2 * cycle)) + 2
    steps = np.full(n, ratio)
    if rng.random() < 0.4:
        steps = np.maximum(2, steps + rng.integers(-1, 2, n))
    t_s = START_S + rng.random() * cycle + np.cumsum(steps * cycle)
    return _plan(scene, t_s[t_s < scene.duration_s + 1], pr_s=np.nan, adapt=0.15)


def _ventricular_ectopy(scene: Scene, rng: np.random.Generator) -> Schedule:
    """Early wide beats with a full compensatory pause: the sinus clock runs on, one beat is replaced."""
    t_s = _train(scene, rng)
    rr = np.diff(t_s, prepend=t_s[0] - 60 / scene.rate_bpm)
    early = _ectopic_mask(scene, rng, t_s)
    coupling = np.maximum(0.36, rng.uniform(0.5, 0.72) * rr)
    beat = np.where(early, np.minimum(t_s - rr + coupling, t_s), t_s)
    pr = np.where(early, np.nan, scene.pr_ms / 1000)
    # The sinus P of the replaced beat still fires; it usually hides in the ectopic ST segment.
    hidden = t_s[early] + scene.beats[0].qrs.on_s - scene.pr_ms / 1000
    plan = _plan(scene, beat, shape=early.astype(np.intp), pr_s=pr, p_alone_s=hidden, adapt=0.15)
    return replace(plan, stretch=np.where(early, 1.0, plan.stretch))


def _atrial_ectopy(scene: Scene, rng: np.random.Generator) -> Schedule:
    """Early narrow beats that reset the sinus clock."""
    t_s = _train(scene, rng)
    rr = np.diff(t_s, prepend=t_s[0] - 60 / scene.rate_bpm)
    early = _ectopic_mask(scene, rng, t_s)
    shortened = np.where(early, np.maximum(0.4, rng.uniform(0.55, 0.78) * rr), rr)
    after = np.roll(early, 1)
    after[0] = False
    shortened = np.where(after, shortened * 1.12, shortened)
    beat = t_s[0] - rr[0] + np.cumsum(shortened)
    more = beat[-1] + np.arange(1, 8) * 60 / scene.rate_bpm  # the train got shorter; fill up
    beat, early = np.append(beat, more), np.append(early, np.zeros(7, bool))
    keep = beat < scene.duration_s + 1
    beat, early = beat[keep], early[keep]
    pr = np.where(early, max(0.1, scene.pr_ms / 1000 * 0.9), scene.pr_ms / 1000)
    return _plan(scene, beat, shape=early.astype(np.intp), pr_s=pr, adapt=0.15)


def _ectopic_mask(scene: Scene, rng: np.random.Generator, t_s: Array) -> NDArray[np.bool_]:
    mask = np.zeros(len(t_s), dtype=bool)
    gap = max(2, round(1 / scene.ectopic_share))
    i = int(rng.integers(1, gap + 1))
    while i < len(t_s):
        mask[i] = True
        i += max(2, gap + int(rng.integers(-1, 2)))
    return mask


def _paced(scene: Scene, rng: np.random.Generator) -> Schedule:
    """Ventricular pacing at a steady rate, with a sinus P before it (tracking) or without any."""
    beat = _train(scene, rng, jitter=0.001)
    pr = scene.pr_ms / 1000 if scene.p is not None else np.nan
    spike = beat + scene.beats[0].qrs.on_s - 0.004
    return _plan(scene, beat, pr_s=pr, spike_s=spike, adapt=0.0)


def _complete_block(scene: Scene, rng: np.random.Generator) -> Schedule:
    beat = _train(scene, rng, jitter=0.005)
    atria = _train(scene, rng, rate_bpm=scene.atrial_bpm)
    return _plan(scene, beat, pr_s=np.nan, p_alone_s=atria, adapt=0.0)


def _wenckebach(scene: Scene, rng: np.random.Generator) -> Schedule:
    """PR grows by shrinking steps until one P is blocked; the atria are steady."""
    atria = _train(scene, rng, rate_bpm=scene.atrial_bpm, jitter=0.005)
    cycle, start = int(rng.integers(3, 6)), int(rng.integers(0, 6))
    step = rng.uniform(0.04, 0.11)
    position = (np.arange(len(atria)) + start) % cycle
    conducted = position < cycle - 1
    growth = step * np.concatenate([[0.0], np.cumsum(0.6 ** np.arange(cycle))])
    pr = scene.pr_ms / 1000 + growth[position]
    pr = np.minimum(pr, 0.8 * 60 / scene.atrial_bpm)
    beat = atria + pr - scene.beats[0].qrs.on_s
    return _plan(scene, beat[conducted], pr_s=pr[conducted], p_alone_s=atria[~conducted], adapt=0.0)


def _pause(scene: Scene, rng: np.random.Generator) -> Schedule:
    """Sinus arrest of 3.2 s or more, then sinus again."""
    beat = _train(scene, rng)
    inside = np.flatnonzero((beat > 0.3) & (beat < max(0.6, scene.duration_s - 4.0)))
    i = int(rng.choice(inside)) if len(inside) else int(np.searchsorted(beat, 0.0))
    shift = np.where(np.arange(len(beat)) > i, max(0.0, scene.pause_s - (beat[i + 1] - beat[i])), 0.0)
    beat = beat + shift
    return _plan(scene, beat[beat < scene.duration_s + 1], adapt=0.1)


def _escape(scene: Scene, rng: np.random.Generator) -> Schedule:
    return _plan(scene, _train(scene, rng, jitter=0.02), pr_s=np.nan, adapt=0.0)


def _wide_tachycardia(scene: Scene, rng: np.random.Generator) -> Schedule:
    """Wide fast beats from turn_s on, sinus before; half of them with Ps that run on alone."""
    sinus = _train(scene, rng, rate_bpm=scene.atrial_bpm)
    fast = _train(scene, rng, jitter=0.006)
    turn_s = scene.turn_s if scene.turn_s > 0 else START_S
    before = sinus[sinus < turn_s - 0.1]
    fast = fast[fast > max(turn_s, before[-1] + 0.3 if len(before) else START_S)]
    beat = np.concatenate([before, fast])
    wide = np.concatenate([np.zeros(len(before), bool), np.ones(len(fast), bool)])
    pr = np.where(wide, np.nan, scene.pr_ms / 1000)
    alone = sinus[sinus > turn_s] if scene.p_dissociated else np.zeros(0)
    return _plan(scene, beat, shape=wide.astype(np.intp), pr_s=pr, p_alone_s=alone, adapt=0.0)


def _arrest(scene: Scene, rng: np.random.Generator) -> Schedule:
    atria = _train(scene, rng, rate_bpm=scene.atrial_bpm)
    plan = _sinus(scene, rng)
    turn_s = scene.turn_s if scene.turn_s > 0 else START_S
    alone = atria[atria > turn_s] if scene.p_dissociated else np.zeros(0)
    return replace(plan, p_alone_s=alone)


_PLANS: dict[str, Callable[[Scene, np.random.Generator], Schedule]] = {
    "atrial-fibrillation": _irregular,
    "atrial-flutter": _flutter_conduction,
    "ectopy-ventricular": _ventricular_ectopy,
    "ectopy-atrial": _atrial_ectopy,
    "ventricular-pacing": _paced,
    "complete-block": _complete_block,
    "wenckebach": _wenckebach,
    "pause": _pause,
    "idioventricular": _escape,
    "wide-tachycardia": _wide_tachycardia,
    "asystole": _arrest,
}
