"""From a scene to the 12 leads, the electrode potentials and the exact truth about every wave.

Dipole after McSharry et al. 2003 and Sameni et al. 2007, leads by Dower's transform (Dower, Machado,
Osborne 1980) with patient-to-patient variation. V1 to V6, I and II are projected; the rest follows from
the electrode potentials, so that Einthoven's and Goldberger's laws hold to rounding.

Onset and end of a wave: where the magnitude of the wave's own dipole passes EDGE_FRACTION (3 %) of its
own peak, before the recorder's filters. ST level: J+60 ms against 10 ms before QRS onset, likewise before
the filters, of the usual beat at its mean interval.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.fft import next_fast_len
from scipy.signal import lfilter

from sigguard.simulate import continuous
from sigguard.simulate.projection import LEADS, electrodes_from_independent, to_leads
from sigguard.simulate.rhythms import LETHAL, NO_P, RHYTHM_WEIGHTS, RHYTHMS, Schedule, schedule
from sigguard.simulate.scene import Scene, draw_scene
from sigguard.simulate.shapes import EDGE_FRACTION, Array, StShift, Wave

__all__ = [
    "EDGE_FRACTION",
    "LETHAL",
    "RHYTHMS",
    "RHYTHM_WEIGHTS",
    "Scene",
    "SimulatedECG",
    "draw_scene",
    "simulate",
]

WIDE_S = 0.120
PQ_BEFORE_QRS_S = 0.010
ST_AFTER_J_S = 0.060
CALIBRATION_S = 0.8  # the ECG is switched off for so long
FIBRILLATION_MIN_S, WIDE_FAST_MIN_S, STANDSTILL_MIN_S, WIDE_FAST_BPM = 4.0, 10.0, 3.0, 120.0


@dataclass(frozen=True, slots=True, eq=False)
class SimulatedECG:
    """Twelve leads without disturbance, and what is true about them.

    Per-beat arrays are (n_beats,), seconds from the start of the strip, NaN where the wave is not there,
    has no fixed relation to the beat, or its edge lies outside the strip.
    """

    signal_mv: Array  # (12, n_samples)
    leads: tuple[str, ...]
    fs_hz: float
    rhythm: str
    scene: Scene
    electrodes_mv: Array  # (9, n_samples): RA, LA, LL, C1..C6
    beats_s: Array  # moment of the largest QRS magnitude
    beat_kind: tuple[str, ...]  # "usual", "ventricular" or "atrial", one a beat
    p_on_s: Array
    p_off_s: Array
    qrs_on_s: Array
    qrs_off_s: Array
    t_off_s: Array
    p_waves_s: Array  # (n_p, 2): onset and end of every P wave, those without a beat too
    st_mv: Array  # (12,): NaN without usual beats
    pr_ms: float  # median over the dominant beats; NaN without a P in fixed relation
    qrs_ms: float
    qt_ms: float
    has_p: bool
    pr_fixed: bool
    pacing_s: Array  # spike times
    calibration: tuple[tuple[float, float], ...]  # spans in which the leads show a pulse and no ECG
    patient_first: tuple[tuple[float, float, str], ...]  # start_s, end_s, pattern

    @property
    def n_samples(self) -> int:
        return self.signal_mv.shape[1]


def simulate(scene: Scene, rng: np.random.Generator) -> SimulatedECG:
    """The 12 leads of a scene and their truth; the same scene and generator state give the same signal."""
    plan = schedule(scene, rng)
    n = round(scene.duration_s * scene.fs_hz)
    run_in, run_out = round(2.0 * scene.fs_hz), round(0.3 * scene.fs_hz)  # filters settle outside the strip
    xyz, p_spans = _dipole(scene, plan, rng, n_samples=run_in + n + run_out, start_s=-run_in / scene.fs_hz)
    independent = _recorded(scene.transfer @ xyz, scene)[:, run_in : run_in + n]
    electrodes_mv = electrodes_from_independent(independent)
    signal_mv = to_leads(electrodes_mv)
    calibration = _calibrate(signal_mv, electrodes_mv, scene)
    return _with_truth(scene, plan, signal_mv, electrodes_mv, p_spans, calibration)


def _dipole(
    scene: Scene, plan: Schedule, rng: np.random.Generator, *, n_samples: int, start_s: float
) -> tuple[Array, Array]:
    """The dipole, (3, n_samples), mV, and the P waves, (n_p, 2), seconds."""
    canvas = _Canvas(n_samples, scene.fs_hz, start_s)
    sizes = 1 + scene.beat_jitter * rng.standard_normal(len(plan.beat_s))
    for beat_s, k, stretch, size in zip(plan.beat_s, plan.shape, plan.stretch, sizes, strict=True):
        shape = scene.beats[k]
        canvas.add(shape.qrs, beat_s, size)
        canvas.add(shape.t.stretched(stretch), beat_s, size)
        if shape.u is not None:
            canvas.add(shape.u.stretched(stretch), beat_s, size)
        if shape.st is not None:
            canvas.add_st(shape.st, beat_s, size, stretch)
    p_spans = np.zeros((0, 2))
    if scene.p is not None:
        onset = np.sort(np.concatenate([_p_onset(scene, plan), plan.p_alone_s]))
        onset = onset[np.isfinite(onset)]
        if scene.rhythm in LETHAL and not scene.p_dissociated:
            onset = onset[onset < scene.turn_s] if scene.turn_s > 0 else onset[:0]
        for on_s in onset:
            canvas.add(scene.p, on_s, 1.0)
        p_spans = np.column_stack([onset + scene.p.on_s, onset + scene.p.off_s])
    xyz = canvas.xyz
    _add_continuous(xyz, scene, rng, canvas.t_s)
    for spike_s in plan.spike_s:
        i = int(np.floor((spike_s - start_s) * scene.fs_hz))
        if 0 <= i < n_samples:
            xyz[:, i] += scene.spike_mv
    return _breathe(xyz, scene, canvas.t_s), p_spans


class _Canvas:
    """The dipole over time, onto which waves are added in their own window only."""

    def __init__(self, n_samples: int, fs_hz: float, start_s: float) -> None:
        self.fs_hz, self.start_s, self.n = fs_hz, start_s, n_samples
        self.t_s = start_s + np.arange(n_samples) / fs_hz
        self.xyz = np.zeros((3, n_samples))

    def _window(self, first_s: float, last_s: float) -> slice:
        first = int((first_s - self.start_s) * self.fs_hz)
        last = int((last_s - self.start_s) * self.fs_hz) + 2
        return slice(min(max(first, 0), self.n), min(max(last, 0), self.n))

    def add(self, wave: Wave, at_s: float, size: float) -> None:
        low, high = wave.reach_s
        part = self._window(at_s + low, at_s + high)
        if part.start < part.stop:
            self.xyz[:, part] += size * wave.at(self.t_s[part] - at_s)

    def add_st(self, st: StShift, at_s: float, size: float, stretch: float) -> None:
        part = self._window(at_s + st.start_s - 6 * st.rise_s, at_s + stretch * (st.end_s + 6 * st.fall_s))
        if part.start < part.stop:
            self.xyz[:, part] += size * st.at(self.t_s[part] - at_s, stretch=stretch)


def _p_onset(scene: Scene, plan: Schedule) -> Array:
    """P onset of each beat, (n_beats,), NaN without."""
    on_s = np.array([shape.qrs.on_s for shape in scene.beats])[plan.shape]
    return plan.beat_s + on_s - plan.pr_s


def _add_continuous(xyz: Array, scene: Scene, rng: np.random.Generator, t_s: Array) -> None:
    n, fs_hz = xyz.shape[1], scene.fs_hz
    if scene.rhythm == "atrial-fibrillation":
        xyz += continuous.atrial_fibrillation(rng, n, fs_hz=fs_hz, amplitude_mv=scene.atrial_mv)
    elif scene.rhythm == "atrial-flutter":
        xyz += continuous.atrial_flutter(
            rng, n, fs_hz=fs_hz, rate_bpm=scene.atrial_bpm, amplitude_mv=scene.atrial_mv
        )
    elif scene.rhythm in ("ventricular-fibrillation", "ventricular-flutter", "torsades", "asystole"):
        begin_s = scene.turn_s if scene.turn_s > 0 else t_s[0] - 1
        fade_in = np.clip((t_s - begin_s) / 0.25, 0, 1)
        xyz += fade_in * fade_in * (3 - 2 * fade_in) * _lethal(scene, rng, n)


def _lethal(scene: Scene, rng: np.random.Generator, n_samples: int) -> Array:
    if scene.rhythm == "ventricular-fibrillation":
        return continuous.fibrillation(rng, n_samples, fs_hz=scene.fs_hz, vf_type=scene.vf_type)
    if scene.rhythm == "ventricular-flutter":
        return continuous.flutter(rng, n_samples, fs_hz=scene.fs_hz, rate_bpm=scene.rate_bpm)
    if scene.rhythm == "torsades":
        return continuous.torsades(rng, n_samples, fs_hz=scene.fs_hz, rate_bpm=scene.rate_bpm)
    return continuous.standstill(rng, n_samples, fs_hz=scene.fs_hz)


def _breathe(xyz: Array, scene: Scene, t_s: Array) -> Array:
    """Breathing turns the heart a little in the frontal plane and changes its size."""
    breath = np.sin(2 * np.pi * scene.breath_hz * t_s + scene.breath_phase)
    gain, turn = 1 + scene.breath_gain * breath, scene.breath_turn_rad * breath
    cos, sin = gain * np.cos(turn), gain * np.sin(turn)
    return np.stack([cos * xyz[0] - sin * xyz[1], sin * xyz[0] + cos * xyz[1], gain * xyz[2]])


def _recorded(x_mv: Array, scene: Scene) -> Array:
    """The recorder's band, rows of (n_rows, n_samples).

    High-pass: first order, causal, as an AC-coupled amplifier; settled on the mean; 0 is
    a coupling for direct current. Low-pass: fourth-order Butterworth magnitude without delay.
    """
    n = x_mv.shape[1]
    if scene.highpass_hz > 0:
        k = np.tan(np.pi * scene.highpass_hz / scene.fs_hz)
        b, a = np.array([1.0, -1.0]) / (1 + k), np.array([1.0, -(1 - k) / (1 + k)])
        x_mv, _ = lfilter(b, a, x_mv, axis=1, zi=-b[0] * x_mv.mean(axis=1, keepdims=True))
    if scene.lowpass_hz >= 0.45 * scene.fs_hz:
        return x_mv
    size = next_fast_len(n + round(0.3 * scene.fs_hz), real=True)
    gain = 1 / np.sqrt(1 + (np.fft.rfftfreq(size, 1 / scene.fs_hz) / scene.lowpass_hz) ** 8)
    return np.fft.irfft(np.fft.rfft(x_mv, size, axis=1) * gain, size, axis=1)[:, :n]


def _calibrate(signal_mv: Array, electrodes_mv: Array, scene: Scene) -> tuple[tuple[float, float], ...]:
    """Switch the ECG off and show 1 mV for 200 ms on every lead, in place."""
    if not np.isfinite(scene.calibration_s):
        return ()
    fs_hz, n = scene.fs_hz, signal_mv.shape[1]
    begin, end = round(scene.calibration_s * fs_hz), round((scene.calibration_s + CALIBRATION_S) * fs_hz)
    begin, end = max(begin, 0), min(end, n)
    pulse = slice(begin + round(0.3 * fs_hz), begin + round(0.5 * fs_hz))
    signal_mv[:, begin:end] = 0.0
    electrodes_mv[:, begin:end] = 0.0
    signal_mv[:, pulse] = 1.0
    return ((begin / fs_hz, end / fs_hz),)


def _with_truth(
    scene: Scene,
    plan: Schedule,
    signal_mv: Array,
    electrodes_mv: Array,
    p_spans: Array,
    calibration: tuple[tuple[float, float], ...],
) -> SimulatedECG:
    end_s = signal_mv.shape[1] / scene.fs_hz
    on = np.array([shape.qrs.on_s for shape in scene.beats])[plan.shape] + plan.beat_s
    off = np.array([shape.qrs.off_s for shape in scene.beats])[plan.shape] + plan.beat_s
    t_off = np.array([shape.t.off_s for shape in scene.beats])[plan.shape] * plan.stretch + plan.beat_s
    p_on = _p_onset(scene, plan) if scene.p is not None else np.full(len(on), np.nan)
    p_off = p_on + (scene.p.off_s if scene.p is not None else 0.0)
    seen = (plan.beat_s >= 0) & (plan.beat_s < end_s)
    for begin, stop in calibration:
        seen &= (off <= begin) | (on >= stop)
    within = [_within(edge[seen], end_s, calibration) for edge in (p_on, p_off, on, off, t_off)]
    kinds = tuple(scene.beats[k].kind for k in plan.shape[seen])
    p_seen = p_spans[(p_spans[:, 0] >= 0) & (p_spans[:, 1] <= end_s)]
    for begin, stop in calibration:
        p_seen = p_seen[(p_seen[:, 1] <= begin) | (p_seen[:, 0] >= stop)]
    pr_fixed = scene.p is not None and scene.rhythm not in (*NO_P, "complete-block", "wenckebach")
    dominant = np.array([kind == _dominant(kinds) for kind in kinds], dtype=bool)
    pr_fixed = pr_fixed and bool(np.isfinite(within[0][dominant]).any())
    return SimulatedECG(
        signal_mv=signal_mv,
        leads=LEADS,
        fs_hz=scene.fs_hz,
        rhythm=scene.rhythm,
        scene=scene,
        electrodes_mv=electrodes_mv,
        beats_s=plan.beat_s[seen],
        beat_kind=kinds,
        p_on_s=within[0],
        p_off_s=within[1],
        qrs_on_s=within[2],
        qrs_off_s=within[3],
        t_off_s=within[4],
        p_waves_s=p_seen,
        st_mv=_st_truth(scene, kinds),
        pr_ms=_median_ms((within[2] - within[0])[dominant]) if pr_fixed else float("nan"),
        qrs_ms=_median_ms((within[3] - within[2])[dominant]),
        qt_ms=_median_ms((within[4] - within[2])[dominant]),
        has_p=len(p_seen) > 0,
        pr_fixed=pr_fixed,
        pacing_s=plan.spike_s[(plan.spike_s >= 0) & (plan.spike_s < end_s)],
        calibration=calibration,
        patient_first=_patient_first(scene, plan.beat_s, on, off, calibration),
    )


def _within(edge_s: Array, end_s: float, calibration: tuple[tuple[float, float], ...]) -> Array:
    out = np.where((edge_s >= 0) & (edge_s <= end_s), edge_s, np.nan)
    for begin, stop in calibration:
        out = np.where((out >= begin) & (out <= stop), np.nan, out)
    return out


def _dominant(kinds: tuple[str, ...]) -> str:
    """The most frequent kind of beat; the usual one when even."""
    return max(("usual", "atrial", "ventricular"), key=kinds.count)


def _median_ms(values_s: Array) -> float:
    values_s = values_s[np.isfinite(values_s)]
    return float(np.median(values_s) * 1000) if len(values_s) else float("nan")


def _st_truth(scene: Scene, kinds: tuple[str, ...]) -> Array:
    """ST level of the dominant beat over the leads, (12,), mV: J+60 ms against PQ."""
    if not kinds:
        return np.full(12, np.nan)
    shape = scene.beats[0] if _dominant(kinds) != "ventricular" else scene.beats[1]
    t_s = np.array([shape.qrs.on_s - PQ_BEFORE_QRS_S, shape.qrs.off_s + ST_AFTER_J_S])
    rr_s = 60 / scene.rate_bpm
    xyz = np.zeros((3, 2))
    for shift in (-rr_s, 0.0):
        for part in (shape.qrs, shape.t, shape.u, shape.st):
            if part is not None:
                xyz += part.at(t_s - shift)
        if (
            scene.p is not None
            and np.isfinite(scene.pr_ms)
            and scene.rhythm != "complete-block"
            and shape.kind == "usual"
        ):
            xyz += scene.p.at(t_s - shift - (shape.qrs.on_s - scene.pr_ms / 1000))
    lead = to_leads(electrodes_from_independent(scene.transfer @ xyz))
    return lead[:, 1] - lead[:, 0]


def _patient_first(
    scene: Scene, beat_s: Array, on_s: Array, off_s: Array, calibration: tuple[tuple[float, float], ...]
) -> tuple[tuple[float, float, str], ...]:
    """Spans by the rule: fibrillation or flutter 4 s, wide and at least 120 a minute 10 s, no beat 3 s."""
    end_s = scene.duration_s
    spans: list[tuple[float, float, str]] = []
    no_beat_from = 0.0 if scene.turn_s == 0 else scene.turn_s
    if scene.rhythm in ("ventricular-fibrillation", "ventricular-flutter", "torsades"):
        if end_s - no_beat_from >= FIBRILLATION_MIN_S:
            spans.append((no_beat_from, end_s, "fibrillation-or-flutter"))
    else:
        edges = np.concatenate([[max(-1.0, beat_s[0]) if len(beat_s) else 0.0], beat_s, [end_s]])
        edges = np.unique(np.clip(edges, 0.0, end_s))
        if len(beat_s) and beat_s[0] > 0:
            edges = np.unique(np.concatenate([[0.0], edges]))
        for begin, stop in zip(edges[:-1], edges[1:], strict=True):
            if stop - begin > STANDSTILL_MIN_S:
                spans.append((float(begin), float(stop), "standstill"))
    spans += _wide_fast(beat_s, off_s - on_s, end_s)
    return tuple(span for span in spans if not any(b < span[1] and span[0] < s for b, s in calibration))


def _wide_fast(beat_s: Array, width_s: Array, end_s: float) -> list[tuple[float, float, str]]:
    wide = width_s >= WIDE_S
    change = np.flatnonzero(np.diff(wide.astype(np.int8), prepend=0, append=0))
    spans = []
    for first, stop in change.reshape(-1, 2):
        run = beat_s[first:stop]
        if len(run) < 4:
            continue
        begin, end = max(0.0, float(run[0])), min(end_s, float(run[-1]))
        rate = 60 * (len(run) - 1) / (run[-1] - run[0])
        if end - begin >= WIDE_FAST_MIN_S - 1e-9 and rate >= WIDE_FAST_BPM:
            spans.append((begin, end, "wide-fast"))
    return spans
