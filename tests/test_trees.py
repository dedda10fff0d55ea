"""The tree evaluator against the library that grew the trees."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from sklearn.ensemble import HistGradientBoostingClassifier
from threadpoolctl import threadpool_limits

from sigguard.errors import ModelError
from sigguard.training.fit import constant_model, pack
from sigguard.trees import TreeArrays, TreeEnsemble


def grown(n_features: int, *, seed: int, missing: float, max_iter: int = 25, **options):
    """A model of scikit-learn and fresh rows to ask it about, single precision, with NaN."""
    rng = np.random.default_rng(seed)
    x = rng.normal(size=(3000, n_features)).astype(np.float32)
    x[:, 1] = np.round(x[:, 1])  # ties exactly at thresholds
    x[rng.random(x.shape) < missing] = np.nan
    x[:, 2] = np.where(rng.random(3000) < 0.5, np.nan, 1.0)  # missing or not is all it says
    y = np.nansum(x[:, :4], axis=1) + 2 * np.isnan(x[:, 2]) + rng.normal(size=3000) > 0.5
    model = HistGradientBoostingClassifier(
        max_iter=max_iter, early_stopping=False, random_state=seed, **options
    )
    with threadpool_limits(1):  # two threads on a busy machine are slower than one
        model.fit(x[:2000], y[:2000])
    return model, x[2000:]


@pytest.mark.parametrize("missing", [0.0, 0.2])
@pytest.mark.parametrize(
    "options", [{"max_leaf_nodes": 15, "max_depth": 5}, {"max_leaf_nodes": 31}, {"max_depth": 1}]
)
def test_equals_the_library(missing: float, options: dict) -> None:
    model, x = grown(9, seed=3, missing=missing, **options)
    ensemble = TreeEnsemble.build(pack(model), 9)
    np.testing.assert_allclose(
        ensemble.predict_proba(x)[:, 0], model.predict_proba(x)[:, 1], rtol=0, atol=1e-12
    )


def test_equals_the_library_where_all_or_nothing_is_missing_and_for_doubles() -> None:
    model, x = grown(6, seed=5, missing=0.1)
    ensemble = TreeEnsemble.build(pack(model), 6)
    extreme = np.array([[np.nan] * 6, [np.inf] * 6, [-np.inf] * 6, [0.0] * 6, [1e300] * 6])
    on_threshold = np.tile(pack(model).threshold[:50, None], (1, 6))
    for rows in (extreme, on_threshold, np.nextafter(on_threshold, np.inf), x.astype(np.float64)):
        with np.errstate(over="ignore"):
            expected = model.predict_proba(np.where(np.isinf(rows), np.sign(rows) * 1e308, rows))[:, 1]
        np.testing.assert_allclose(ensemble.predict_proba(rows)[:, 0], expected, rtol=0, atol=1e-12)


def test_several_models_answer_as_each_alone() -> None:
    pairs = [grown(7, seed=s, missing=0.1, max_iter=5 + s) for s in range(4)]
    x = pairs[0][1]
    joined = TreeEnsemble.build(TreeArrays.join([pack(m) for m, _ in pairs] + [constant_model(0.25)]), 7)
    answers = joined.predict_proba(x)
    assert answers.shape == (len(x), 5)
    for k, (model, _) in enumerate(pairs):
        np.testing.assert_allclose(answers[:, k], model.predict_proba(x)[:, 1], rtol=0, atol=1e-12)
    np.testing.assert_allclose(answers[:, 4], 0.25, atol=1e-12)


def test_a_row_does_not_hear_its_neighbours() -> None:
    model, x = grown(8, seed=1, missing=0.1)
    ensemble = TreeEnsemble.build(pack(model), 8)
    whole = ensemble.predict_proba(x)
    for step in (1, 2, 7, 400):
        parts = [ensemble.predict_proba(x[i : i + step]) for i in range(0, len(x), step)]
        np.testing.assert_array_equal(np.concatenate(parts), whole)


def test_no_rows_and_wrong_width() -> None:
    model, x = grown(5, seed=2, missing=0.0)
    ensemble = TreeEnsemble.build(pack(model), 5)
    assert ensemble.predict_proba(x[:0]).shape == (0, 1)
    with pytest.raises(ModelError, match="takes"):
        ensemble.predict_proba(x[:, :4])


def test_arrays_survive_an_archive(tmp_path) -> None:
    model, x = grown(5, seed=2, missing=0.1)
    arrays = pack(model)
    np.savez(tmp_path / "trees.npz", **arrays.to_dict("a_"))
    with np.load(tmp_path / "trees.npz", allow_pickle=False) as archive:
        again = TreeArrays.from_dict({k: archive[k] for k in archive.files}, "a_")
    first, second = TreeEnsemble.build(arrays, 5), TreeEnsemble.build(again, 5)
    np.testing.assert_array_equal(first.predict_proba(x), second.predict_proba(x))
    with pytest.raises(ModelError, match="lacks"):
        TreeArrays.from_dict({}, "a_")


@pytest.mark.parametrize(
    "damage",
    [
        lambda a: replace(a, feature=a.feature + 5),
        lambda a: replace(a, left=np.where(a.left >= 0, len(a.left) + 3, -1).astype(np.int32)),
        lambda a: replace(a, left=np.where(a.left >= 0, 0, -1).astype(np.int32)),  # a loop
        lambda a: replace(a, value=np.full_like(a.value, np.nan)),
        lambda a: replace(a, threshold=a.threshold[:-1]),
        lambda a: replace(a, tree_start=a.tree_start[:-1]),
        lambda a: replace(a, model_start=np.array([0, 1])),
    ],
)
def test_damaged_arrays_are_refused(damage) -> None:
    model, _ = grown(5, seed=2, missing=0.1)
    with pytest.raises(ModelError):
        TreeEnsemble.build(damage(pack(model)), 5)


def test_models_of_several_classes_cannot_be_packed() -> None:
    rng = np.random.default_rng(0)
    x = rng.normal(size=(300, 3))
    model = HistGradientBoostingClassifier(max_iter=2).fit(x, rng.integers(0, 3, 300))
    with pytest.raises(ValueError, match="binary"):
        pack(model)
