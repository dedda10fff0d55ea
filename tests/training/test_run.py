"""Training from end to end, on a crude procedure so that it takes seconds."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from sigguard.errors import ModelError, UsageError
from sigguard.reliability import ReliabilityModel
from sigguard.simulate.recipes import training_recipe
from sigguard.training import train
from sigguard.training.calibrate import CalibrationSettings
from sigguard.training.corpus import Shape, Size, build_corpus, plan_chunks
from sigguard.training.evaluate import evaluate_rows
from sigguard.training.fit import SMALL, Task, fit_all
from sigguard.training.run import fault_thresholds, harm_tasks, lead_tasks, learn
from sigguard.trees import TreeEnsemble
from training.fake import FAKE

TINY = Size(rows=(3, 2, 1), strips=(1, 1, 1), cells=1, shapes=3 * (Shape(3, 2, 4),))


@pytest.fixture(scope="module")
def trained(tmp_path_factory):
    folder = tmp_path_factory.mktemp("models")
    return train(seed=3, out_dir=folder, jobs=1, size=TINY, procedure=FAKE)


def test_writes_a_model_that_proves_itself_and_a_card(trained) -> None:
    model = ReliabilityModel.load(trained.model_path, feature_names=FAKE.feature_names)
    assert model.sha256 == trained.sha256
    assert sorted(p.name for p in trained.model_path.parent.iterdir()) == ["CARD.md", "reliability.npz"]
    card = trained.card_path.read_text()
    for text in ("Seed 3", "McSharry", "## Splits", "bound_95", "No recorded noise", "without real carriers"):
        assert text in card
    with pytest.raises(ModelError, match="features"):
        ReliabilityModel.load(trained.model_path, feature_names=("other",))


@pytest.mark.parametrize("jobs", [1, 2])
def test_same_seed_same_bytes_whatever_the_number_of_processes(trained, tmp_path, jobs: int) -> None:
    again = train(seed=3, out_dir=tmp_path, jobs=jobs, size=TINY, procedure=FAKE)
    assert again.model_path.read_bytes() == trained.model_path.read_bytes()
    assert again.card_path.read_text() == trained.card_path.read_text()


def test_another_seed_another_model(trained, tmp_path) -> None:
    other = train(seed=4, out_dir=tmp_path, jobs=1, size=TINY, procedure=FAKE)
    assert other.sha256 != trained.sha256


def test_unknown_size_is_a_usage_error(tmp_path) -> None:
    with pytest.raises(UsageError, match="size"):
        train(out_dir=tmp_path, size="huge", procedure=FAKE)


def test_promise_holds_on_the_untouched_part() -> None:
    """A middling corpus; the crude procedure is honest about nothing, the calibration must be."""
    size = Size(rows=(6, 6, 6), strips=(0, 0, 0), cells=0, shapes=3 * (Shape(4, 4, 8),))
    recipe = training_recipe()
    corpus = build_corpus(recipe, FAKE, plan_chunks(recipe, size, seed=11))
    settings = CalibrationSettings(window=200, confidence=0.9)  # for so small a corpus
    arrays, _ = learn(corpus, FAKE, seed=11, grid=(SMALL,), settings=settings)
    model = ReliabilityModel.from_arrays(arrays)
    results = evaluate_rows(model, corpus.rows.pick(corpus.rows.part == 2), seed=11)
    called = [r for r in results if r.noise == "all" and r.n_reliable >= 100]
    assert {r.measurement for r in called} >= {"pr", "qt"}
    for r in called:
        assert r.broken_low <= 0.05, r
        assert r.bound_broken <= 0.08, r


def test_scores_never_rise_with_what_harms(trained) -> None:
    rng = np.random.default_rng(0)
    x = rng.normal(size=(2000, 3)).astype(np.float32)
    y = -x[:, 0] + np.sin(3 * x[:, 1]) + rng.normal(size=2000) > 0
    task = Task("pr", y, np.ones(2000, dtype=bool), (-1, 0, 0))
    fitted = fit_all(x, [task], np.arange(2000), seed=0, grid=(SMALL,))[0]
    ensemble = TreeEnsemble.build(fitted.trees, 3)
    grid = np.tile(x[:50, None], (1, 40, 1))
    grid[:, :, 0] = np.linspace(-3, 3, 40)
    score = ensemble.predict_proba(grid.reshape(-1, 3)).reshape(50, 40)
    assert np.all(np.diff(score, axis=1) <= 0) and np.ptp(score) > 0.3


def test_tasks_know_which_features_harm() -> None:
    recipe = training_recipe()
    size = Size(rows=(1, 1, 1), strips=(0, 0, 0), cells=0, shapes=3 * (Shape(1, 1, 2),))
    rows = build_corpus(recipe, FAKE, plan_chunks(recipe, size, seed=1)).rows
    tasks = lead_tasks(rows, ("muscle_rms_uv", "rate", "missing_s"))
    assert [t.monotone for t in tasks] == [(-1, 0, -1)] * 5 + [None] * 4


def test_harm_is_asked_of_what_lies_on_a_row_alone() -> None:
    size = Size(rows=(2, 1, 1), strips=(0, 0, 0), cells=0, shapes=3 * (Shape(3, 2, 6),))
    recipe = training_recipe()
    rows = build_corpus(recipe, FAKE, plan_chunks(recipe, size, seed=2)).rows
    table, tasks = harm_tasks(rows)
    assert table.shape[1] == len(FAKE.feature_names) + 1 and [t.name for t in tasks][1] == "harm pr"
    laid = (rows.harm >= 0).any(axis=2)
    assert len(table) == laid.sum() > 0
    np.testing.assert_array_equal(table[:, -1], np.nonzero(laid)[1])
    assert all((t.answer <= t.asked).all() for t in tasks) and any(t.answer.any() for t in tasks)


def test_the_model_tells_what_a_fault_takes(trained) -> None:
    model = ReliabilityModel.load(trained.model_path)
    features = np.zeros((3, len(FAKE.feature_names)), np.float32)
    p = model.harm(features, np.array([0, 1, 6]))
    assert p.shape == (3, 5) and ((p > 0) & (p < 1)).all()
    untaught = replace(model, harm_trees=None)
    assert (untaught.harm(features, np.array([0, 1, 6])) == 0.5).all()


def test_fault_threshold_is_the_lowest_that_is_right_four_times_in_five() -> None:
    p = np.linspace(1, 0, 1000)[:, None]
    truth = (np.arange(1000) < 300)[:, None]
    threshold = fault_thresholds(truth, np.ones_like(truth), p)
    called = p[:, 0] >= threshold
    assert threshold > 0.3
    assert np.mean(truth[called]) == pytest.approx(0.8, abs=0.01)
    assert fault_thresholds(~truth & False, np.ones_like(truth), p)[0] == 0.95
