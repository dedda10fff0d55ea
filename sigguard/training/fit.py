"""Grows the classifiers and hands them over as plain arrays. The only place that knows scikit-learn."""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from joblib import Parallel, delayed
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

from sigguard.reliability import finite_or_nan
from sigguard.trees import TreeArrays


@dataclass(frozen=True, slots=True)
class Growth:
    """How one ensemble grows."""

    max_leaf_nodes: int = 15
    max_depth: int = 6  # also the number of levels the evaluator has to descend
    learning_rate: float = 0.08
    max_iter: int = 140
    min_samples_leaf: int = 40
    l2: float = 1.0


GRID = tuple(
    Growth(max_leaf_nodes=leaves, learning_rate=rate, max_iter=trees, l2=l2)
    for (leaves, rate, trees), l2 in itertools.product(
        ((8, 0.12, 150), (15, 0.08, 150), (24, 0.1, 150)), (1.0, 20.0)
    )
)
SMALL = Growth(max_leaf_nodes=8, learning_rate=0.15, max_iter=30, min_samples_leaf=15)


@dataclass(frozen=True, slots=True, eq=False)
class Fitted:
    """One classifier as arrays, how it grew, and the log loss of each growth tried (internal split)."""

    trees: TreeArrays
    growth: Growth
    tried: tuple[tuple[Growth, float], ...]


@dataclass(frozen=True, slots=True, eq=False)
class Task:
    """One binary question over the training rows: (n,) answers and which rows are asked."""

    name: str
    answer: NDArray[np.bool_]
    asked: NDArray[np.bool_]
    monotone: tuple[int, ...] | None = None  # for each feature: -1 its rise never raises the score, 0 free


def fit_all(
    features: NDArray[np.float32],
    tasks: list[Task],
    carrier: NDArray[np.integer],
    *,
    seed: int,
    grid: tuple[Growth, ...] = GRID,
    jobs: int = 1,
    tune_rows: int = 14_000,
) -> list[Fitted]:
    """A classifier for each task from (n, F) features; carrier (n,) says which rows belong together.

    The growth is chosen on a split of these rows by carrier, then all of them are used. The same
    input and seed give the same trees, whatever ``jobs`` is.
    """
    table = finite_or_nan(features)
    return Parallel(n_jobs=jobs)(
        delayed(_fit_task)(
            table[t.asked], t.answer[t.asked], carrier[t.asked], seed, grid, tune_rows, t.monotone
        )
        for t in tasks
    )


def _fit_task(
    features: NDArray[np.float32],
    answer: NDArray[np.bool_],
    carrier: NDArray[np.integer],
    seed: int,
    grid: tuple[Growth, ...],
    tune_rows: int,
    monotone: tuple[int, ...] | None,
) -> Fitted:
    if not len(answer) or answer.all() or not answer.any():
        return Fitted(constant_model(float(np.mean(answer)) if len(answer) else 0.0), grid[0], ())
    tried: tuple[tuple[Growth, float], ...] = ()
    if len(grid) > 1:
        tried = tuple(
            (growth, _held_out_loss(features, answer, carrier, growth, seed, tune_rows, monotone))
            for growth in grid
        )
    best = min(tried, key=lambda pair: pair[1])[0] if tried else grid[0]
    return Fitted(pack(_grow(features, answer, best, seed, monotone)), best, tried)


def _grow(  # type: ignore[no-untyped-def]
    features: NDArray[np.float32],
    answer: NDArray[np.bool_],
    growth: Growth,
    seed: int,
    monotone: tuple[int, ...] | None,
):
    from sklearn.ensemble import HistGradientBoostingClassifier

    leaf = min(growth.min_samples_leaf, max(2, len(answer) // 20))
    model = HistGradientBoostingClassifier(
        max_leaf_nodes=growth.max_leaf_nodes,
        max_depth=growth.max_depth,
        learning_rate=growth.learning_rate,
        max_iter=growth.max_iter,
        min_samples_leaf=leaf,
        l2_regularization=growth.l2,
        early_stopping=False,
        random_state=seed,
        monotonic_cst=None if monotone is None else np.array(monotone),
    )
    with threadpool_limits(1):  # one thread: sums in one order, so that a seed means one model
        return model.fit(features, answer)


def _held_out_loss(
    features: NDArray[np.float32],
    answer: NDArray[np.bool_],
    carrier: NDArray[np.integer],
    growth: Growth,
    seed: int,
    tune_rows: int,
    monotone: tuple[int, ...] | None,
) -> float:
    """Log loss on a third of the carriers, grown on the others."""
    carriers = np.unique(carrier)
    rng = np.random.default_rng(seed)
    held = np.isin(carrier, rng.permutation(carriers)[: max(1, len(carriers) // 3)])
    train = np.flatnonzero(~held)
    if len(train) > tune_rows:
        train = np.sort(rng.permutation(train)[:tune_rows])
    if not held.any() or not len(train) or answer[train].all() or not answer[train].any():
        return float("inf")
    model = _grow(features[train], answer[train], growth, seed, monotone)
    with threadpool_limits(1):
        p = np.clip(model.predict_proba(features[held])[:, 1], 1e-6, 1 - 1e-6)
    return float(-np.mean(np.where(answer[held], np.log(p), np.log1p(-p))))


def pack(model) -> TreeArrays:  # type: ignore[no-untyped-def]
    """A fitted binary HistGradientBoostingClassifier → its trees as plain arrays.

    Raises ValueError for a model of several classes or one with categorical splits.
    """
    if len(model.classes_) != 2:
        raise ValueError(f"the evaluator takes binary models, found {len(model.classes_)} classes")
    trees = [stage[0].nodes for stage in model._predictors]
    start = np.cumsum([0] + [len(nodes) for nodes in trees])
    nodes = np.concatenate(trees)
    leaf = nodes["is_leaf"].astype(bool)
    if np.any(nodes["is_categorical"].astype(bool) & ~leaf):
        raise ValueError("the evaluator takes numeric splits only")
    offset = np.repeat(start[:-1], np.diff(start))
    return TreeArrays(
        feature=np.where(leaf, 0, nodes["feature_idx"]).astype(np.int32),
        threshold=np.where(leaf, 0.0, nodes["num_threshold"]),
        left=np.where(leaf, -1, nodes["left"] + offset).astype(np.int32),
        right=np.where(leaf, -1, nodes["right"] + offset).astype(np.int32),
        missing_left=nodes["missing_go_to_left"].astype(bool) & ~leaf,
        value=np.where(leaf, nodes["value"], 0.0),
        tree_start=start.astype(np.int64),
        model_start=np.array([0, len(trees)], dtype=np.int64),
        baseline=np.asarray(model._baseline_prediction, dtype=np.float64).ravel()[:1],
    )


def constant_model(share: float) -> TreeArrays:
    """A model that always answers ``share``: what is left when training saw only one answer."""
    share = float(np.clip(share, 1e-4, 1 - 1e-4))
    leaf = np.array([-1], dtype=np.int32)
    return TreeArrays(
        feature=np.zeros(1, dtype=np.int32),
        threshold=np.zeros(1),
        left=leaf,
        right=leaf,
        missing_left=np.zeros(1, dtype=bool),
        value=np.zeros(1),
        tree_start=np.array([0, 1], dtype=np.int64),
        model_start=np.array([0, 1], dtype=np.int64),
        baseline=np.array([np.log(share / (1 - share))]),
    )
