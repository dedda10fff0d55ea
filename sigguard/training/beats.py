"""Grows the beat judge: which detector candidates are beats, learned from simulated ECG whose beats are known.

Comes before the reliability model, which rests on the beats:

    python -m sigguard.training.beats [--noise DIR] [--seed N] [--out models]
"""

from __future__ import annotations

import argparse
from io import BytesIO
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sigguard.beat_judge import CANDIDATE_FEATURES, FILE, candidate_features
from sigguard.beats import detection_curves, survey
from sigguard.filters import transform_rows
from sigguard.simulate.disturbance import ADDITIVE_KINDS, draw_disturbance
from sigguard.simulate.ecg import draw_scene, simulate
from sigguard.simulate.recipes import training_recipe
from sigguard.simulate.recorded import RECORDED_KINDS, NoiseBank, qrs_peak_to_peak_mv, snr_gain
from sigguard.training.fit import pack
from sigguard.trees import TreeEnsemble
from sigguard.writers.atomic import write_bytes_atomic

FS_HZ, N = 500.0, 5000
PATIENTS, LEADS = 1200, 4
NO_BEATS = ("asystole", "ventricular-fibrillation", "ventricular-flutter", "torsades")
MORE_OF = {"ectopy-ventricular": 0.40, "ectopy-atrial": 0.10}  # where rules err most and shapes vary most
CLEAN_SHARE, RECORDED_SHARE = 0.2, 0.5
SNR_DB = (0.0, 24.0)
MATCH_S = 0.10
GROWTH = {"max_iter": 100, "max_leaf_nodes": 12, "learning_rate": 0.12}
CHUNK = 96


def corpus(noise_dir: str | None, seed: int) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """((C, F) candidates, whether each is a beat) of simulated leads with and without noise."""
    rng = np.random.default_rng(seed)
    weights = {k: w for k, w in dict(training_recipe().rhythms).items() if k not in NO_BEATS} | MORE_OF
    bank = None if noise_dir is None else NoiseBank(noise_dir, "train")
    rows, beats = [], []
    for _ in range(PATIENTS):
        ecg = simulate(draw_scene(rng, fs_hz=FS_HZ, rhythm_weights=weights), rng)
        for lead in rng.choice(12, LEADS, replace=False):
            rows.append(_spoilt(rng, ecg.signal_mv[lead], ecg.beats_s, bank))
            beats.append(ecg.beats_s)
    parts = [
        _described(np.stack(rows[i : i + CHUNK]), beats[i : i + CHUNK]) for i in range(0, len(rows), CHUNK)
    ]
    return np.concatenate([p[0] for p in parts]), np.concatenate([p[1] for p in parts])


def _spoilt(
    rng: np.random.Generator, x_mv: NDArray[np.float64], beats_s: NDArray[np.float64], bank: NoiseBank | None
) -> NDArray[np.float64]:
    size = qrs_peak_to_peak_mv(x_mv, beats_s, FS_HZ)
    draw, snr_db = rng.random(), float(rng.uniform(*SNR_DB))
    if draw < CLEAN_SHARE or not size > 0:
        return x_mv
    if bank is not None and draw < CLEAN_SHARE + RECORDED_SHARE:
        noise = bank.draw(rng, RECORDED_KINDS[int(rng.integers(3))], n_samples=N, fs_hz=FS_HZ)
    else:
        noise = draw_disturbance(
            rng, ADDITIVE_KINDS[int(rng.integers(len(ADDITIVE_KINDS)))], n_samples=N, fs_hz=FS_HZ
        )
    return x_mv + snr_gain(size, noise, snr_db, FS_HZ) * noise


def _described(
    rows_mv: NDArray[np.float64], beats_s: list[NDArray[np.float64]]
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    work = transform_rows(rows_mv, FS_HZ)
    seen, _, _ = survey(work, detection_curves(work))
    is_beat = np.zeros(len(seen.row), dtype=bool)
    for row, truth in enumerate(beats_s):
        mine = np.flatnonzero(seen.row == row)
        at_s = seen.at[mine] / seen.fs_hz
        for t in truth:
            near = mine[np.abs(at_s - t) < MATCH_S]
            if len(near):
                is_beat[near[seen.height[near].argmax()]] = True
    return candidate_features(seen), is_beat


def grow(noise_dir: str | None = None, *, seed: int = 4, out_dir: str | Path = "models") -> Path:
    """Train the judge and write it, with probes, to ``out_dir``/beats.npz; the path."""
    from sklearn.ensemble import HistGradientBoostingClassifier

    features, is_beat = corpus(noise_dir, seed)
    model = HistGradientBoostingClassifier(early_stopping=False, random_state=seed, **GROWTH)
    trees = pack(model.fit(features, is_beat))
    probe = features[:: max(1, len(features) // 64)]
    answer = TreeEnsemble.build(trees, len(CANDIDATE_FEATURES)).predict_proba(probe)[:, 0]
    buffer = BytesIO()
    arrays: dict[str, Any] = trees.to_dict("tree_")
    arrays |= {"feature_names": np.array(CANDIDATE_FEATURES), "probe": probe, "answer": answer}
    np.savez_compressed(buffer, **arrays)
    target = Path(out_dir) / FILE
    target.parent.mkdir(parents=True, exist_ok=True)
    write_bytes_atomic(target, buffer.getvalue())
    return target


def main() -> None:
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--noise", default=None)
    parser.add_argument("--seed", type=int, default=4)
    parser.add_argument("--out", default="models")
    arguments = parser.parse_args()
    grow(arguments.noise, seed=arguments.seed, out_dir=arguments.out)


if __name__ == "__main__":
    main()
