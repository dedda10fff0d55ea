"""One invented patient and rhythm: every parameter, and how they are drawn."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sigguard.errors import UsageError
from sigguard.recording import check_fs
from sigguard.simulate.morphology import draw_beat, draw_p
from sigguard.simulate.projection import DOWER
from sigguard.simulate.rhythms import BEATLESS, LETHAL, NO_P, RHYTHM_WEIGHTS, RHYTHMS
from sigguard.simulate.shapes import Array, BeatShape, Wave

RATE_BPM = {  # lowest, highest; others: (50, 110)
    "sinus": (50, 105),
    "sinus-slow": (35, 52),
    "sinus-fast": (100, 180),
    "atrial-fibrillation": (45, 170),
    "atrial-flutter": (60, 165),
    "ectopy-ventricular": (50, 105),
    "complete-block": (28, 50),
    "wenckebach": (50, 95),
    "idioventricular": (20, 48),
    "wide-tachycardia": (122, 250),
    "ventricular-flutter": (200, 300),
    "torsades": (180, 260),
    "lbbb": (50, 130),
    "rbbb": (50, 130),
}
QRS_STYLE = {
    "lbbb": "lbbb",
    "rbbb": "rbbb",
    "ventricular-pacing": "paced",
    "idioventricular": "ectopic",
}
WIDE_MS = (122.0, 200.0)


@dataclass(frozen=True, slots=True, eq=False)
class Scene:
    """One patient, one rhythm, one recorder. ``beats[0]`` is the usual beat, ``beats[1]`` the other kind."""

    rhythm: str
    fs_hz: float
    duration_s: float
    rate_bpm: float  # of the ventricles; of the flutter waves for ventricular flutter and torsades
    pr_ms: float  # P onset to QRS onset of the usual beat; NaN without P
    qrs_ms: float  # of the usual beat
    qt_ms: float  # of the usual beat at its mean interval
    beats: tuple[BeatShape, ...]
    p: Wave | None
    transfer: Array  # (8, 3): dipole → V1..V6, I, II of this patient; Dower's matrix, varied
    low_voltage_factor: float
    st_peak_mv: float  # largest ST shift over the leads at its start; 0 without
    rr_jitter: float
    breath_hz: float
    breath_phase: float
    breath_rr: float
    breath_gain: float
    breath_turn_rad: float
    beat_jitter: float  # of the amplitude, beat to beat
    atrial_bpm: float
    atrial_mv: float  # of fibrillation or flutter waves
    af_irregularity: float
    ectopic_share: float
    p_dissociated: bool
    pause_s: float
    turn_s: float  # when a lethal rhythm begins; 0: it fills the strip
    vf_type: str
    spike_mv: Array  # (3,)
    calibration_s: float  # where a calibration pulse begins; NaN without
    highpass_hz: float  # 0: none
    lowpass_hz: float


def draw_scene(
    rng: np.random.Generator,
    *,
    rhythm: str | None = None,
    fs_hz: float = 500.0,
    duration_s: float = 10.0,
    rhythm_weights: dict[str, float] | None = None,
) -> Scene:
    """A random scene; the rhythm is drawn by weight (RHYTHM_WEIGHTS unless others are given) if not named.

    Raises UsageError for an unknown rhythm, a rate no ECG has, or a duration outside 2 to 3600 s.
    """
    fs_hz = check_fs(fs_hz)
    if not 2.0 <= duration_s <= 3600.0:
        raise UsageError(f"a simulated strip lasts 2 to 3600 s, found {duration_s!r}")
    rhythm = rhythm or _draw_rhythm(rng, rhythm_weights or RHYTHM_WEIGHTS)
    if rhythm not in RHYTHMS:
        raise UsageError(f"unknown rhythm {rhythm!r}; known: {', '.join(RHYTHMS)}")
    rate = float(rng.uniform(*RATE_BPM.get(rhythm, (50, 110))))
    sinus_rate = rate if rhythm not in LETHAL else float(rng.uniform(55, 120))
    style = QRS_STYLE.get(rhythm) or str(
        rng.choice(("normal", "infarct", "fragmented", "delta", "rsr"), p=(0.62, 0.14, 0.08, 0.05, 0.11))
    )
    qrs_ms = _draw_qrs_ms(rng, style)
    qt_ms = _draw_qt_ms(rng, sinus_rate, qrs_ms)
    pr_ms = _draw_pr_ms(rng, rhythm, style, sinus_rate, qt_ms)
    low_voltage = float(rng.uniform(0.2, 0.5)) if rng.random() < 0.1 else 1.0
    st_peak = float(rng.choice((-1, 1)) * rng.uniform(0.03, 0.4)) if rng.random() < 0.35 else 0.0
    p = _draw_scene_p(rng, rhythm, pr_ms, low_voltage)
    usual = _usual_beat(rng, style, qrs_ms, qt_ms, low_voltage, st_peak)
    turn_s = _draw_turn(rng, rhythm, duration_s)
    return Scene(
        rhythm=rhythm,
        fs_hz=fs_hz,
        duration_s=float(duration_s),
        rate_bpm=rate
        if rhythm not in BEATLESS or rhythm in ("ventricular-flutter", "torsades")
        else sinus_rate,
        pr_ms=pr_ms if p is not None else float("nan"),
        qrs_ms=qrs_ms,
        qt_ms=qt_ms,
        beats=(usual, _other_beat(rng, rhythm, usual, rate, qrs_ms, qt_ms, low_voltage)),
        p=p,
        transfer=DOWER * (1 + 0.12 * rng.standard_normal((8, 3))) + 0.04 * rng.standard_normal((8, 3)),
        low_voltage_factor=low_voltage,
        st_peak_mv=st_peak,
        rr_jitter=float(rng.uniform(0.003, 0.025)),
        breath_hz=float(rng.uniform(0.15, 0.4)),
        breath_phase=float(rng.uniform(0, 2 * np.pi)),
        breath_rr=float(rng.uniform(0, 0.1)) if rate < 110 else float(rng.uniform(0, 0.02)),
        breath_gain=float(rng.uniform(0, 0.08)),
        breath_turn_rad=float(rng.uniform(0, 0.1)),
        beat_jitter=float(rng.uniform(0.0, 0.025)),
        atrial_bpm=_draw_atrial_bpm(rng, rhythm),
        atrial_mv=float(np.exp(rng.uniform(np.log(0.01), np.log(0.07))))
        * (2.0 if rhythm == "atrial-flutter" else 1),
        af_irregularity=float(rng.uniform(0.12, 0.26)),
        ectopic_share=float(rng.uniform(0.08, 0.5)),
        p_dissociated=bool(rng.random() < 0.45),
        pause_s=float(rng.uniform(3.2, max(3.4, min(6.0, duration_s - 2.0)))),
        turn_s=turn_s,
        vf_type=str(rng.choice(("coarse", "medium", "fine", "rich", "orderly"))),
        spike_mv=rng.normal(size=3) * rng.uniform(0.3, 3.0),
        calibration_s=float(rng.choice((0.1, duration_s - 0.9))) if rhythm == "calibration" else float("nan"),
        highpass_hz=_draw_highpass(rng),
        lowpass_hz=150.0 if rng.random() < 0.45 else float(rng.uniform(25, 150)),
    )


def _draw_rhythm(rng: np.random.Generator, weights: dict[str, float]) -> str:
    share = np.array(list(weights.values()), dtype=float)
    return str(rng.choice(list(weights), p=share / share.sum()))


def _draw_qrs_ms(rng: np.random.Generator, style: str) -> float:
    low, high = {
        "lbbb": WIDE_MS,
        "rbbb": (115.0, 180.0),
        "paced": (130.0, 200.0),
        "ectopic": WIDE_MS,
        "delta": (95.0, 150.0),
    }.get(style, (70.0, 125.0))
    return float(rng.triangular(low, low + 0.35 * (high - low), high))


def _draw_qt_ms(rng: np.random.Generator, rate_bpm: float, qrs_ms: float) -> float:
    rr = 60 / rate_bpm
    corrected = float(np.clip(rng.normal(415, 38), 330, 540))
    qt = corrected * rr ** rng.uniform(0.33, 0.5) + 0.5 * max(0.0, qrs_ms - 100)
    return float(np.clip(min(qt, 930 * rr), max(qrs_ms + 130, 240), 620))


def _draw_pr_ms(rng: np.random.Generator, rhythm: str, style: str, rate_bpm: float, qt_ms: float) -> float:
    if style == "delta":
        return float(rng.uniform(90, 120))
    pr = rng.uniform(90, 320) if rng.random() < 0.25 else rng.normal(162, 26)
    room_ms = 60000 / rate_bpm - 0.8 * qt_ms  # P may climb onto T, not before its top
    low = 100 if rhythm == "wenckebach" else 90
    return float(np.clip(min(pr, max(room_ms, 110)), low, 320))


def _draw_scene_p(rng: np.random.Generator, rhythm: str, pr_ms: float, low_voltage: float) -> Wave | None:
    if (
        rhythm in NO_P
        or rhythm == "idioventricular"
        or (rhythm == "ventricular-pacing" and rng.random() < 0.6)
    ):
        return None
    duration_s = min(rng.uniform(0.07, 0.135), (pr_ms - 12) / 1000)
    peak = float(np.exp(rng.uniform(np.log(0.04), np.log(0.25))))
    return draw_p(rng, duration_s=duration_s, peak_mv=max(0.02, peak * np.sqrt(low_voltage)))


def _usual_beat(
    rng: np.random.Generator, style: str, qrs_ms: float, qt_ms: float, low_voltage: float, st_mv: float
) -> BeatShape:
    return draw_beat(
        rng,
        kind="usual",
        style=style,
        qrs_s=qrs_ms / 1000,
        qt_s=qt_ms / 1000,
        qrs_mv=float(np.clip(np.exp(rng.normal(np.log(1.15), 0.38)), 0.45, 3.0)) * low_voltage,
        t_mv=float(np.clip(np.exp(rng.normal(np.log(0.3), 0.45)), 0.08, 0.9)) * low_voltage,
        axis_deg=float(np.clip(rng.normal(16, 40), -100, 170)),
        st_mv=st_mv,
        u_wave=bool(rng.random() < 0.15),
    )


def _other_beat(
    rng: np.random.Generator,
    rhythm: str,
    usual: BeatShape,
    rate_bpm: float,
    qrs_ms: float,
    qt_ms: float,
    low_voltage: float,
) -> BeatShape:
    """A ventricular ectopic beat; for atrial ectopy the usual beat over again."""
    if rhythm == "ectopy-atrial":
        return BeatShape(kind="atrial", qrs=usual.qrs, t=usual.t, u=usual.u, st=usual.st)
    wide = float(rng.uniform(125, 185))
    if rhythm == "wide-tachycardia":
        rr_ms = 60000 / rate_bpm
        wide = float(np.clip(wide, 122, max(126, 0.6 * rr_ms)))
        qt_ms = float(np.clip(rng.uniform(0.85, 1.0) * rr_ms, wide + 60, 480))
    else:
        qt_ms = max(qt_ms + 20, wide + 150)
    return draw_beat(
        rng,
        kind="ventricular",
        style="ectopic",
        qrs_s=wide / 1000,
        qt_s=qt_ms / 1000,
        qrs_mv=float(rng.uniform(0.7, 2.2)) * max(low_voltage, 0.5),
        t_mv=float(rng.uniform(0.2, 0.7)) * max(low_voltage, 0.5),
        axis_deg=float(rng.uniform(-180, 180)),
        st_mv=0.0,
    )


def _draw_turn(rng: np.random.Generator, rhythm: str, duration_s: float) -> float:
    """Mostly 0; sometimes the rhythm turns lethal within the strip, early enough to leave 4 s of it."""
    if rhythm not in LETHAL or rng.random() < 0.7 or duration_s < 6.5:
        return 0.0
    return float(rng.uniform(1.0, duration_s - 4.5))


def _draw_atrial_bpm(rng: np.random.Generator, rhythm: str) -> float:
    if rhythm == "atrial-flutter":
        return float(rng.uniform(240, 340))
    if rhythm in ("complete-block", "asystole"):
        return float(rng.uniform(60, 110))
    return float(rng.uniform(60, 100))


def _draw_highpass(rng: np.random.Generator) -> float:
    if rng.random() < 0.55:
        return 0.05
    return float(np.exp(rng.uniform(np.log(0.05), np.log(1.0))))
