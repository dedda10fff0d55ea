"""Learns what rightly placed leads look like, and how far to believe it.

    python -m sigguard.training.placement --carriers DIR [--out models]

All that is learned comes from recordings that are taken to be rightly placed, and from what lead algebra makes of
them. The weights of the conditional logit are fitted on scores of subjects that the scores have not seen (inner folds).
"""

from __future__ import annotations

import argparse
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from io import BytesIO
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sigguard.global_values import analyse_global
from sigguard.placement_model import (
    CHEST_FREE,
    FILE,
    LIMB_FEATURES,
    LIMB_HYPOTHESES,
    LL,
    N_PAIRS,
    RL_HYPOTHESES,
    USUAL_FEATURES,
    Judge,
    N,
    PlacementModel,
    Shapes,
    Usual,
    chest_features,
    describe,
    exchanged,
    limb_features,
    normalised,
    pair_differences,
    part_columns,
)
from sigguard.simulate.misplacement import REMAINDER, electrode_potentials, misplaced_potentials
from sigguard.training.carriers import real_carrier
from sigguard.writers.atomic import write_bytes_atomic

Floats = NDArray[np.float64]

SHRINK = 0.1  # of the covariance of the wave areas towards a multiple of the identity
PAIR_RIDGE = 0.1
LIMB_RIDGE, CHEST_RIDGE = 1e-3, 3e-4
# How often each hypothesis is taken to be true, beside the others: LA/LL, which has no strong sign, and the rare
# rotations must be clearer than the rest to be named.
LIMB_COUNT = (10.0, 1.0, 0.2, 1.0, 0.2, 0.2, 1.0, 1.0)
CHEST_COUNT = (7.0, 1.0, 1.0, 1.0, 1.0, 1.0, 0.1, 0.1, 0.1, 0.1, 0.1, 0.1)
INNER_FOLDS = 5
ALL_LEADS = np.ones(N, dtype=bool)
LIMBS_ONLY = np.arange(N) < 3
LIMB_FREE = slice(USUAL_FEATURES, LIMB_FEATURES)
CHEST_BIASES = slice(USUAL_FEATURES + N_PAIRS, USUAL_FEATURES + N_PAIRS + CHEST_FREE)
_FREE_RIDGE = 1e-6


@dataclass(frozen=True, slots=True, eq=False)
class Example:
    """One subject: averaged electrode potentials (9, LENGTH) and where the waves are."""

    potential_mv: Floats
    columns: list[tuple[int, int]]
    has_p: bool

    @property
    def shape(self) -> Shapes:
        return describe(self.potential_mv[None], self.columns)


def example(x_mv: Floats, fs_hz: float) -> Example:
    """The example that (12, N) leads in the order of LEADS_12 make."""
    found = analyse_global(x_mv[None], fs_hz)
    marks = found.marks_ms[0]
    return Example(
        electrode_potentials(found.beat_mv[0].astype(np.float64)),
        part_columns(marks),
        bool(np.isfinite(marks[0])),
    )


def learn_usual(examples: Sequence[Example]) -> Usual:
    """What unswapped recordings look like."""
    each = [e.shape for e in examples]
    shapes = Shapes(*(np.concatenate([getattr(s, f) for s in each]) for f in ("parts", "power", "extremes")))
    parts, power = normalised(shapes, ALL_LEADS)
    parts = parts.reshape(len(parts), -1)
    mean = parts.mean(axis=0)
    covariance = (parts - mean).T @ (parts - mean) / len(parts)
    level = np.trace(covariance) / len(mean)
    covariance = (1 - SHRINK) * covariance + SHRINK * level * np.eye(len(mean))
    differences = pair_differences(shapes, ALL_LEADS)
    weights = np.stack([learn_order(differences[:, k]) for k in range(N_PAIRS)])
    maps = np.stack([learn_rl_map(shapes, wire) for wire in RL_HYPOTHESES.values()])
    return Usual(mean, covariance, power.mean(axis=0), weights, maps)


def learn_order(differences: Floats) -> Floats:
    """(F,) weights of a logistic regression without intercept: in the usual order the differences score > 0."""
    size = np.sqrt((differences**2).mean(axis=0)) + 1e-6
    x = differences / size

    def loss(w: Floats) -> tuple[float, Floats]:
        u = x @ w
        slope = -(x / (1.0 + np.exp(np.clip(u, -500, 500)))[:, None]).mean(axis=0)
        return float(np.logaddexp(0, -u).mean() + 0.5 * PAIR_RIDGE * w @ w), slope + PAIR_RIDGE * w

    return _minimise(loss, differences.shape[1]) / size


def learn_rl_map(shapes: Shapes, wire: int) -> Floats:
    """(9, 9) seen → restored potentials where ``wire`` sits on the right leg: its own are foretold from the others."""
    to_leg = np.eye(N)
    to_leg[:, LL] -= 1.0
    power = (shapes.power / np.einsum("nwii->nw", shapes.power)[:, :, None, None]).sum(axis=(0, 1))
    power = to_leg @ power @ to_leg.T
    known = [i for i in range(N) if i not in (wire, LL)]
    inner = power[np.ix_(known, known)]
    foretell = np.zeros(N)
    foretell[known] = np.linalg.solve(
        inner + 0.01 * np.trace(inner) / len(known) * np.eye(len(known)), power[known, wire]
    )
    fill = to_leg.copy()
    fill[wire] = foretell @ to_leg
    centring = np.eye(N)
    centring[:, :3] -= 1 / 3
    return centring @ fill


def limb_trials(
    examples: Sequence[Example], judge_of: Callable[[bool], Judge], rng: np.random.Generator
) -> Floats:
    """(n, 8 seen, 8 supposed, LIMB_FEATURES)."""
    out = np.empty((len(examples), len(LIMB_HYPOTHESES), len(LIMB_HYPOTHESES), LIMB_FEATURES))
    for i, e in enumerate(examples):
        for h in range(len(LIMB_HYPOTHESES)):
            seen = misplaced_potentials(e.potential_mv, h, remainder=float(rng.uniform(*REMAINDER)))
            out[i, h] = limb_features(seen, e.columns, judge_of(e.has_p))
    return out


def chest_trials(examples: Sequence[Example], judge_of: Callable[[bool], Judge]) -> Floats:
    """(n, 12 seen, 12 supposed, CHEST_FEATURES)."""
    return np.stack([chest_features(exchanged(e.shape), judge_of(e.has_p)) for e in examples])


def judges(usual: Usual, use: NDArray[np.bool_]) -> Callable[[bool], Judge]:
    both = (usual.judge(use, False), usual.judge(use, True))
    return lambda has_p: both[int(has_p)]


def fit_logit(trials: Floats, counts: Sequence[float], free: slice, ridge_most: float) -> Floats:
    """Weights of the conditional logit over (n, seen, supposed, F) trials; the ``free`` features are biases."""
    n, n_seen, n_supposed, n_features = trials.shape
    x = trials.reshape(n * n_seen, n_supposed, n_features)
    truth = np.tile(np.arange(n_seen), n)
    count = np.tile(np.asarray(counts), n)
    count /= count.sum()
    size = np.sqrt(((x - x.mean(axis=1, keepdims=True)) ** 2).mean(axis=(0, 1))) + 1e-9
    size[free] = 1.0
    x = x / size
    ridge = np.full(n_features, ridge_most)
    ridge[free] = _FREE_RIDGE
    row = np.arange(len(x))

    def loss(w: Floats) -> tuple[float, Floats]:
        score = x @ w
        score -= score.max(axis=1, keepdims=True)
        chance = np.exp(score)
        chance /= chance.sum(axis=1, keepdims=True)
        value = -(count * np.log(chance[row, truth] + 1e-300)).sum() + 0.5 * (ridge * w * w).sum()
        slope = np.tensordot(count[:, None] * chance, x, axes=2) - count @ x[row, truth]
        return float(value), slope + ridge * w

    return _minimise(loss, n_features) / size


def _minimise(loss: Callable[[Floats], tuple[float, Floats]], n: int) -> Floats:
    from scipy.optimize import minimize

    return np.asarray(minimize(loss, np.zeros(n), jac=True, method="L-BFGS-B").x)


def learn(examples: Sequence[Example], *, seed: int = 5) -> PlacementModel:
    """The whole model from unswapped recordings."""
    rng = np.random.default_rng(seed)
    fold = rng.permutation(len(examples)) % INNER_FOLDS
    limb, alone, chest = [], [], []
    for k in range(INNER_FOLDS):
        usual = learn_usual([e for e, f in zip(examples, fold, strict=True) if f != k])
        held = [e for e, f in zip(examples, fold, strict=True) if f == k]
        limb.append(limb_trials(held, judges(usual, ALL_LEADS), rng))
        alone.append(limb_trials(held, judges(usual, LIMBS_ONLY), rng))
        chest.append(chest_trials(held, judges(usual, ALL_LEADS)))
    return PlacementModel(
        learn_usual(examples),
        fit_logit(np.concatenate(limb), LIMB_COUNT, LIMB_FREE, LIMB_RIDGE),
        fit_logit(np.concatenate(alone), LIMB_COUNT, LIMB_FREE, LIMB_RIDGE),
        fit_logit(np.concatenate(chest), CHEST_COUNT, CHEST_BIASES, CHEST_RIDGE),
    )


def load_examples(folder: str | Path) -> dict[str, Example]:
    """Name → example of every 12-lead WFDB record in a folder."""
    out = {}
    for name in sorted(p.stem for p in Path(folder).glob("*.hea")):
        carrier = real_carrier(folder, name)
        out[name] = example(carrier.signal_mv, carrier.fs_hz)
    return out


def write_model(model: PlacementModel, out_dir: str | Path) -> Path:
    """Write ``out_dir``/placement.npz whole; the path."""
    buffer = BytesIO()
    arrays: dict[str, Any] = dict(model.arrays())
    np.savez_compressed(buffer, **arrays)
    target = Path(out_dir) / FILE
    target.parent.mkdir(parents=True, exist_ok=True)
    write_bytes_atomic(target, buffer.getvalue())
    return target


def main() -> None:
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--carriers", required=True)
    parser.add_argument("--out", default="models")
    arguments = parser.parse_args()
    write_model(learn(list(load_examples(arguments.carriers).values())), arguments.out)


if __name__ == "__main__":
    main()
