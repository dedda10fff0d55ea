"""Fits the score for fibrillation and flutter (``vf_score``) and its limits, from simulation alone:

    python -m sigguard.training.rhythms [--seed N] [--patients N]

prints the constants as they stand in ``sigguard/vf_score.py`` and the figures on patients drawn afresh. Nothing but
the seed goes in. Lethal: fibrillation, flutter, torsades and very fast wide tachycardia of the simulator, and as many
strips of a plainer kind (a few drifting oscillators of 1.7 to 8 Hz, from nearly a sine to ragged), with chest
compressions, pacing spikes that go on, wander and all other disturbances laid on them: what a rhythm looks like in one
lead varies far more than any one simulator knows, and a fit to this simulator's alone is too narrow. Ordinary: all
other rhythms that have beats, under every simulated disturbance and those of ``simulate/rhythm_noise`` (climbing,
handling, loose contact), some with a QRS of fast deflections only, noise-stress ratio -6 to 24 dB. One logistic
regression on the nine shape indices of ``rhythm_shape`` and their products.
"""

from __future__ import annotations

import argparse
import sys
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sigguard.rhythm_shape import SHAPE_NAMES, prepare, shape_indices
from sigguard.simulate.continuous import drifting_phase, slow_noise
from sigguard.simulate.disturbance import draw_disturbance
from sigguard.simulate.ecg import SimulatedECG, draw_scene, simulate
from sigguard.simulate.recorded import qrs_peak_to_peak_mv, snr_gain
from sigguard.simulate.rhythm_noise import (
    apply_loose_contact,
    draw_like_rhythm,
    draw_pacing_spikes,
    with_fast_qrs,
)
from sigguard.simulate.rhythms import RHYTHM_WEIGHTS
from sigguard.vf_score import SMALLEST_RMS_MV, Constants, fibrillation_score

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

FS_HZ, STRIP_S = 250.0, 24.0
PATIENTS, LEADS = 900, 2
LETHAL_WEIGHTS = {
    "ventricular-fibrillation": 0.55,
    "ventricular-flutter": 0.2,
    "torsades": 0.13,
    "wide-tachycardia": 0.12,
}
LIKE_FLUTTER_BPM = 170.0  # a wide tachycardia this fast is hardly to be told from flutter in one lead
NOT_ORDINARY = (*LETHAL_WEIGHTS, "asystole", "pause", "calibration")
LIKE_WEIGHTS = {"steps": 0.15, "handling": 0.2}
PLAIN_WEIGHTS = {
    "motion": 0.25,
    "tremor": 0.05,
    "muscle": 0.12,
    "wander": 0.1,
    "pops": 0.08,
    "excursion": 0.05,
}
LETHAL_SNR_DB, ORDINARY_SNR_DB = (3.0, 30.0), (-6.0, 24.0)
LETHAL_WANDER_DB = (-12.0, 30.0)
COMPRESSIONS_SHARE = 0.15  # of the lethal strips; nobody presses on a chest whose heart beats
PLAINER_SHARE = 0.5
SPIKES_SHARE = 0.08  # of the lethal strips: a pacemaker that goes on
FAST_QRS_SHARE = 0.08  # of the ordinary strips
LOOSE_SHARE, MUSCLE_TOO_SHARE, CLEAN_SHARE = 0.15, 0.3, 0.15
STRENGTH = 0.01  # of the regression's L2 penalty, inverse
IN_TIME_S = 10.0


@dataclass(frozen=True, slots=True, eq=False)
class Corpus:
    """Strips of one lead each."""

    shape: Floats  # (n_strips, n_windows, 9)
    rms_mv: Floats  # (n_strips, n_windows)
    lethal: Bools  # (n_strips, n_windows): the whole window is
    mixed: Bools  # (n_strips, n_windows): a part of it is: taught nothing
    times_s: Floats  # (n_windows,): where windows begin


def corpus(seed: int, *, patients: int = PATIENTS) -> Corpus:
    """Every second patient in a lethal rhythm; the same seed gives the same corpus."""
    rng = np.random.default_rng([seed, 7])
    strips, turns = [], []
    for k in range(patients):
        ecg = _patient(rng, lethal=k % 2 == 0)
        for lead in rng.choice(12, LEADS, replace=False):
            x_mv = ecg.signal_mv[lead]
            strips.append(_lethal(x_mv, ecg, rng) if k % 2 == 0 else _ordinary(x_mv, ecg, rng))
            turns.append(ecg.scene.turn_s if k % 2 == 0 else np.inf)
    shape, rms_mv = _described(np.stack(strips))
    times_s = np.arange(shape.shape[1], dtype=np.float64)
    begins = np.array(turns)[:, None]
    lethal = times_s >= begins
    return Corpus(shape, rms_mv, lethal, ~lethal & (times_s + 4.0 > begins), times_s)


def _patient(rng: np.random.Generator, *, lethal: bool) -> SimulatedECG:
    """Of a lethal rhythm, or of one in which nothing is to be raised."""
    ordinary = {name: w for name, w in RHYTHM_WEIGHTS.items() if name not in NOT_ORDINARY}
    weights = LETHAL_WEIGHTS if lethal else ordinary
    while True:
        scene = draw_scene(rng, fs_hz=FS_HZ, duration_s=STRIP_S, rhythm_weights=weights)
        if scene.rhythm == "wide-tachycardia" and scene.rate_bpm < LIKE_FLUTTER_BPM:
            continue
        ecg = simulate(scene, rng)
        if lethal or not ecg.patient_first:
            return ecg


def _noise(rng: np.random.Generator, n_samples: int) -> Floats:
    weights = LIKE_WEIGHTS | PLAIN_WEIGHTS
    share = np.array(list(weights.values()))
    kind = str(rng.choice(list(weights), p=share / share.sum()))
    draw = draw_like_rhythm if kind in LIKE_WEIGHTS else draw_disturbance
    return draw(rng, kind, n_samples=n_samples, fs_hz=FS_HZ, envelope="random")


def _lethal(x_mv: Floats, ecg: SimulatedECG, rng: np.random.Generator) -> Floats:
    n, begin = len(x_mv), int(ecg.scene.turn_s * FS_HZ)
    if ecg.rhythm != "wide-tachycardia" and rng.random() < PLAINER_SHARE:
        x_mv = x_mv.copy()
        x_mv[begin:] = _plainer(rng, n)[begin:]
    size_mv = x_mv[begin:].std()

    def gain(range_db: tuple[float, float]) -> float:
        return float(size_mv * 10 ** (-rng.uniform(*range_db) / 20))

    out = x_mv + gain(LETHAL_SNR_DB) * _noise(rng, n) + 0.004 * rng.standard_normal(n)
    out += gain(LETHAL_WANDER_DB) * draw_disturbance(rng, "wander", n_samples=n, fs_hz=FS_HZ)
    if rng.random() < COMPRESSIONS_SHARE:
        out += gain(LETHAL_SNR_DB) * draw_like_rhythm(rng, "compressions", n_samples=n, fs_hz=FS_HZ)
    if rng.random() < SPIKES_SHARE:
        out += draw_pacing_spikes(rng, n, fs_hz=FS_HZ)
    return out


def _plainer(rng: np.random.Generator, n_samples: int) -> Floats:
    """One to four oscillators that drift in frequency and size, with harmonics; (n_samples,), mV."""
    main_hz, out = rng.uniform(1.7, 7.0), np.zeros(n_samples)
    for k in range(int(rng.integers(1, 5))):
        centre = main_hz if k == 0 else float(np.clip(main_hz + rng.normal(0, 1.5), 1.6, 8.5))
        spread = rng.uniform(0.02, 0.2) * centre
        phase = drifting_phase(
            rng, n_samples, fs_hz=FS_HZ, centre_hz=centre, spread_hz=spread, low_hz=1.4, high_hz=9.0
        )
        wave = np.cos(phase)
        for order in (2, 3):
            wave += rng.uniform(0, 0.6) / (order - 1) * np.cos(order * phase + rng.uniform(0, 6.3))
        swing = slow_noise(rng, n_samples, fs_hz=FS_HZ, knot_s=rng.uniform(0.6, 3.0))[0]
        out += rng.uniform(0.3, 1.0) * wave * np.maximum(1 + rng.uniform(0.05, 0.5) * swing, 0.15)
    return np.exp(rng.uniform(np.log(0.06), np.log(1.5))) * out / out.std()


def _ordinary(x_mv: Floats, ecg: SimulatedECG, rng: np.random.Generator) -> Floats:
    if rng.random() < FAST_QRS_SHARE:
        x_mv = with_fast_qrs(x_mv, rng, on_s=ecg.qrs_on_s, off_s=ecg.qrs_off_s, fs_hz=FS_HZ)
    size_mv = qrs_peak_to_peak_mv(x_mv, ecg.beats_s, FS_HZ)
    if rng.random() < LOOSE_SHARE:
        x_mv = apply_loose_contact(x_mv, rng, fs_hz=FS_HZ, share=float(rng.uniform(0.1, 0.8)))
    if rng.random() >= CLEAN_SHARE and size_mv > 0:
        noise = [_noise(rng, len(x_mv))]
        if rng.random() < MUSCLE_TOO_SHARE:
            noise.append(draw_disturbance(rng, "muscle", n_samples=len(x_mv), fs_hz=FS_HZ))
        for z in noise:
            x_mv = x_mv + snr_gain(size_mv, z, float(rng.uniform(*ORDINARY_SNR_DB)), FS_HZ) * z
    return x_mv + 0.004 * rng.standard_normal(len(x_mv))


def _described(x_mv: Floats, chunk: int = 200) -> tuple[Floats, Floats]:
    parts = [shape_indices(prepare(x_mv[k : k + chunk], FS_HZ)) for k in range(0, len(x_mv), chunk)]
    return np.concatenate([p[0] for p in parts]), np.concatenate([p[1] for p in parts])


def fit(data: Corpus) -> Constants:
    """The regression, its weights as ``vf_score`` wants them."""
    from sklearn.linear_model import LogisticRegression

    use = ~data.mixed & (data.rms_mv >= SMALLEST_RMS_MV)
    x, y = data.shape[use], data.lethal[use]
    centre, spread = x.mean(axis=0), x.std(axis=0)
    z = (x - centre) / spread
    i, j = np.triu_indices(z.shape[1])
    model = LogisticRegression(C=STRENGTH, max_iter=3000).fit(np.hstack([z, z[:, i] * z[:, j]]), y)
    weights = model.coef_[0]
    products = np.zeros((len(centre), len(centre)))
    products[i, j] = weights[len(centre) :]
    return Constants(centre, spread, float(model.intercept_[0]), weights[: len(centre)], products)


def figures(data: Corpus, constants: Constants, *, sure: float, lasting: float) -> dict[str, float]:
    """Shares of strips: lethal ones raised within 10 s, ordinary ones raised in 24 s; and where lethal scores lie."""
    from sigguard.patient_first import looks_wavy

    score = np.where(data.rms_mv >= SMALLEST_RMS_MV, fibrillation_score(data.shape, constants), -np.inf)
    raised = looks_wavy(score, sure=sure, lasting=lasting)
    first = np.where(data.lethal.any(axis=1), data.lethal.argmax(axis=1), -1)
    early = data.lethal & (data.times_s <= data.times_s[first][:, None] + IN_TIME_S - 4.0)
    seen = early.any(axis=1) & (data.rms_mv >= SMALLEST_RMS_MV).all(axis=1)
    whole = data.lethal & (data.rms_mv >= SMALLEST_RMS_MV)
    ordinary = ~(data.lethal | data.mixed).any(axis=1)
    return {
        "lethal strips raised within 10 s": float((raised & early)[seen].any(axis=1).mean()),
        "ordinary strips of 24 s raised": float(raised[ordinary].any(axis=1).mean()),
        "ordinary windows raised": float(raised[ordinary].mean()),
        "lethal windows raised": float(raised[whole].mean()),
        "score that 99.5 % of lethal windows exceed": float(np.quantile(score[whole], 0.005)),
        "score that 95 % of lethal windows exceed": float(np.quantile(score[whole], 0.05)),
    }


def as_source(constants: Constants) -> str:
    """The constants as Python text, four significant digits of what is multiplied."""

    def row(values: NDArray[np.floating]) -> str:
        return ", ".join(f"{v:.4f}" for v in values)

    products = "\n".join(f"        [{row(line)}]," for line in constants.products)
    return (
        f"    centre=np.array([{row(constants.centre)}]),\n    spread=np.array([{row(constants.spread)}]),\n"
        f"    offset={constants.offset:.4f},\n    linear=np.array([{row(constants.linear)}]),\n"
        f"    products=np.array([\n{products}\n    ]),\n"
    )


def main() -> None:
    from sigguard.patient_first import LASTING_LIMIT, SURE_LIMIT

    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--patients", type=int, default=PATIENTS)
    arguments = parser.parse_args()
    constants = fit(corpus(arguments.seed, patients=arguments.patients))
    sys.stdout.write(f"# {', '.join(SHAPE_NAMES)}\n{as_source(constants)}")
    fresh = corpus(arguments.seed + 1000, patients=arguments.patients // 2)
    for name, value in figures(fresh, constants, sure=SURE_LIMIT, lasting=LASTING_LIMIT).items():
        sys.stdout.write(f"# {name}: {value:.4f}\n")


if __name__ == "__main__":
    main()
