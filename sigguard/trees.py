"""Evaluates gradient-boosted trees from plain arrays, without the library that grew them.

A binary model is P = 1 / (1 + exp(-(baseline + sum over trees of the leaf reached))); the trees are
those of scikit-learn's histogram gradient boosting, whose ``predict_proba`` this equals (Friedman
2001 for the method). A node sends a row left when its feature is at most the threshold; a missing
value (NaN) goes where training sent it.

The descent is level by level over all trees of all models and a block of rows at once, so that
its cost is that of a few array look-ups for each level and not of a loop in Python.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray
from scipy.special import expit

from sigguard.errors import ModelError

_TOGETHER = 5  # levels that all rows go down side by side; few nodes lie deeper in trees that grew freely
_BLOCK_CELLS = 24_000  # rows × trees looked at together: the working arrays stay in the processor's cache


@dataclass(frozen=True, slots=True, eq=False)
class TreeArrays:
    """The trees of one or more binary models as flat arrays, as stored in the model file.

    Node arrays run over all nodes of all trees; children are indices into them. A leaf has
    ``left`` -1. ``tree_start`` (n_trees + 1,) says where each tree's nodes begin, its root first;
    ``model_start`` (n_models + 1,) where each model's trees begin.
    """

    feature: NDArray[np.int32]
    threshold: NDArray[np.float64]
    left: NDArray[np.int32]
    right: NDArray[np.int32]
    missing_left: NDArray[np.bool_]
    value: NDArray[np.float64]  # what a leaf adds to the log odds
    tree_start: NDArray[np.int64]
    model_start: NDArray[np.int64]
    baseline: NDArray[np.float64]  # (n_models,)

    @property
    def n_models(self) -> int:
        return len(self.baseline)

    def to_dict(self, prefix: str) -> dict[str, NDArray]:
        """The arrays under names that begin with ``prefix``, ready for an archive."""
        return {prefix + f.name: getattr(self, f.name) for f in fields(self)}

    @classmethod
    def from_dict(cls, arrays: Mapping[str, NDArray], prefix: str) -> TreeArrays:
        """The reverse of ``to_dict``. Raises ModelError where an array is missing."""
        try:
            return cls(**{f.name: np.asarray(arrays[prefix + f.name]) for f in fields(cls)})
        except KeyError as err:
            raise ModelError(f"the model lacks the array {err.args[0]}; train it again") from err

    @classmethod
    def join(cls, models: Sequence[TreeArrays]) -> TreeArrays:
        """Several ensembles as one, in order. Raises ModelError for none."""
        if not models:
            raise ModelError("an ensemble needs at least one model")
        n_nodes = np.cumsum([0] + [len(m.feature) for m in models])
        n_trees = np.cumsum([0] + [len(m.tree_start) - 1 for m in models])

        def shifted(name: str) -> NDArray[np.int32]:
            parts = [getattr(m, name) for m in models]
            return np.concatenate([np.where(p < 0, p, p + o) for p, o in zip(parts, n_nodes, strict=False)])

        plain = {
            name: np.concatenate([getattr(m, name) for m in models])
            for name in ("feature", "threshold", "missing_left", "value", "baseline")
        }
        return cls(
            left=shifted("left").astype(np.int32),
            right=shifted("right").astype(np.int32),
            tree_start=_join_starts([m.tree_start for m in models], n_nodes),
            model_start=_join_starts([m.model_start for m in models], n_trees),
            **plain,
        )


@dataclass(frozen=True, slots=True, eq=False)
class TreeEnsemble:
    """Trees made ready for the descent. Build with ``TreeEnsemble.build(arrays, n_features)``."""

    n_features: int
    n_models: int
    depth: int
    column: NDArray[np.intp]  # (n_nodes,): into the doubled feature table, see ``build``
    threshold: NDArray[np.float64]
    left: NDArray[np.intp]  # the right child is the next node; a leaf leads back to itself
    value: NDArray[np.float64]
    root: NDArray[np.intp]  # (n_trees,)
    model_start: NDArray[np.int64]
    baseline: NDArray[np.float64]

    @classmethod
    def build(cls, arrays: TreeArrays, n_features: int) -> TreeEnsemble:
        """Renumber the nodes for the descent. Raises ModelError for arrays that are no trees.

        The feature table is used twice over: columns 0 to F-1 as they are, where NaN is never at
        most a threshold and so goes right; columns F to 2F-1 with NaN as minus infinity, which
        always goes left. A node thus needs no question about missing values.
        """
        _check(arrays, n_features)
        order, depth = _by_level(arrays)
        new_of = np.empty(len(order), dtype=np.intp)
        new_of[order] = np.arange(len(order))
        leaf = arrays.left[order] < 0
        goes_left = arrays.missing_left[order] | leaf
        feature = np.where(leaf, 0, arrays.feature[order])
        return cls(
            n_features=n_features,
            n_models=arrays.n_models,
            depth=depth,
            column=(feature + n_features * goes_left).astype(np.intp),
            threshold=np.where(leaf, np.inf, arrays.threshold[order]),
            left=np.where(leaf, np.arange(len(order)), new_of[np.where(leaf, 0, arrays.left[order])]),
            value=arrays.value[order],
            root=new_of[arrays.tree_start[:-1]],
            model_start=arrays.model_start,
            baseline=arrays.baseline,
        )

    def predict_proba(self, features: NDArray[np.floating]) -> NDArray[np.float64]:
        """(n, F) → (n, n_models): the probability each model gives to its positive class.

        Single and double precision features are both compared in double, NaN is a missing value.
        A row's answer does not depend on the rows beside it. Raises ModelError for another F.
        """
        table = np.asarray(features)
        if table.ndim != 2 or table.shape[1] != self.n_features:
            raise ModelError(f"the model takes (n, {self.n_features}) features, found {table.shape}")
        out = np.empty((table.shape[0], self.n_models))
        step = max(2, _BLOCK_CELLS // len(self.root))
        for first in range(0, table.shape[0], step):
            block = table[first : first + step]
            out[first : first + step] = expit(self._log_odds(block))
        return out

    def _log_odds(self, block: NDArray[np.floating]) -> NDArray[np.float64]:
        n = block.shape[0]
        width = max(n, 2)  # a single row would be summed pairwise, in another order than many
        doubled = np.empty((2, self.n_features, width))
        doubled[0, :, :n] = block.T
        doubled[0, :, n:] = 0.0
        doubled[1] = np.where(np.isnan(doubled[0]), -np.inf, doubled[0])
        flat = doubled.ravel()
        row = np.arange(width)
        node = np.repeat(self.root[:, None], width, axis=1)
        at = np.empty_like(node)
        x = np.empty(node.shape)
        limit = np.empty(node.shape)
        for _ in range(min(self.depth, _TOGETHER)):
            np.take(self.column, node, out=at, mode="clip")
            at *= width
            at += row
            np.take(flat, at, out=x, mode="clip")
            np.take(self.threshold, node, out=limit, mode="clip")
            np.take(self.left, node, out=at, mode="clip")
            np.add(at, ~(x <= limit), out=node, casting="unsafe")
        if self.depth > _TOGETHER:
            self._descend_rest(node.reshape(-1), flat, width)
        leaf = np.take(self.value, node, out=x, mode="clip")
        odds = np.empty((self.n_models, width))
        for model in range(self.n_models):
            trees = leaf[self.model_start[model] : self.model_start[model + 1]]
            odds[model] = self.baseline[model] + trees.sum(axis=0)
        return odds[:, :n].T

    def _descend_rest(self, node: NDArray[np.intp], flat: NDArray[np.float64], width: int) -> None:
        """The few that have not reached a leaf after _TOGETHER levels go on by themselves; changes ``node``."""
        left = self.left
        on = np.flatnonzero(left[node] != node)
        row = on % width
        for _ in range(self.depth - _TOGETHER):
            here = node[on]
            here = left[here] + ~(flat[self.column[here] * width + row] <= self.threshold[here])
            node[on] = here
            more = left[here] != here
            on, row = on[more], row[more]


def _join_starts(starts: Sequence[NDArray[np.int64]], offset: NDArray[np.int64]) -> NDArray[np.int64]:
    parts = [s[:-1] + o for s, o in zip(starts, offset, strict=False)]
    return np.concatenate([*parts, offset[-1:]]).astype(np.int64)


def _by_level(arrays: TreeArrays) -> tuple[NDArray[np.intp], int]:
    """Node order in which siblings are neighbours, and the greatest depth of a leaf."""
    level = arrays.tree_start[:-1].astype(np.intp)
    levels = [level]
    while True:
        inner = level[arrays.left[level] >= 0]
        if not len(inner):
            break
        level = np.stack([arrays.left[inner], arrays.right[inner]], axis=1).ravel().astype(np.intp)
        levels.append(level)
        if sum(map(len, levels)) > len(arrays.feature):  # nodes met twice: it would go on for ever
            raise ModelError("the model's trees have no end; the file is damaged, train it again")
    order = np.concatenate(levels)
    if len(order) != len(arrays.feature) or len(np.unique(order)) != len(order):
        raise ModelError("the model's nodes do not form trees; the file is damaged, train it again")
    return order, len(levels) - 1


def _check(arrays: TreeArrays, n_features: int) -> None:
    """Refuse arrays that would index outside themselves."""
    n = len(arrays.feature)
    inner = arrays.left >= 0
    same = all(len(getattr(arrays, k)) == n for k in ("threshold", "left", "right", "missing_left", "value"))
    sound = (
        same
        and n > 0
        and len(arrays.model_start) == arrays.n_models + 1
        and arrays.tree_start[0] == 0
        and arrays.tree_start[-1] == n
        and bool(np.all(np.diff(arrays.tree_start) > 0))
        and arrays.model_start[0] == 0
        and arrays.model_start[-1] == len(arrays.tree_start) - 1
        and bool(np.all(np.diff(arrays.model_start) > 0))
        and bool(np.all(arrays.left[inner] < n))
        and bool(np.all((arrays.right[inner] >= 0) & (arrays.right[inner] < n)))
        and bool(np.all((arrays.feature[inner] >= 0) & (arrays.feature[inner] < n_features)))
        and bool(np.all(np.isfinite(arrays.value)) and np.all(np.isfinite(arrays.baseline)))
        and not bool(np.any(np.isnan(arrays.threshold[inner])))
    )
    if not sound:
        raise ModelError("the model's arrays do not fit together; the file is damaged, train it again")
