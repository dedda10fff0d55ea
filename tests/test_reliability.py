"""Tables, promises and the model file that must prove itself."""

from __future__ import annotations

import numpy as np
import pytest

from sigguard.errors import ModelError
from sigguard.reliability import (
    GLOBAL_MEASUREMENTS,
    LEARNED_FAULTS,
    Calibration,
    ReliabilityModel,
    StepTable,
    digest,
    qtc_bound,
    save_model,
)
from sigguard.segments import MEASUREMENTS
from sigguard.training.fit import SMALL, Task, fit_all
from sigguard.trees import TreeArrays

FEATURES, GLOBAL_FEATURES = ("a", "b", "c", "d"), ("g", "h")


@pytest.fixture(scope="module")
def arrays() -> dict[str, np.ndarray]:
    """A small but whole model, grown on random rows."""
    rng = np.random.default_rng(4)
    x, carrier = rng.normal(size=(1200, 4)).astype(np.float32), np.arange(1200) // 4
    tasks = [
        Task(name, x[:, k % 4] + 0.5 * rng.normal(size=1200) > 0, np.ones(1200, dtype=bool))
        for k, name in enumerate((*MEASUREMENTS, *LEARNED_FAULTS))
    ]
    lead = fit_all(x, tasks, carrier, seed=1, grid=(SMALL,))
    wide = fit_all(x[:, :2], tasks[:3], carrier, seed=1, grid=(SMALL,))
    bound = tuple(
        StepTable(np.array([0.2, 0.8]), np.array([50.0, t]), np.inf) for t in (3.0, 15.0, 15.0, 25.0, 0.02)
    )
    share = tuple(StepTable(np.array([0.3, 0.7]), np.array([0.5, 0.97]), 0.0) for _ in range(5))
    lead_table = Calibration(bound=bound, share=share, absent=share)
    global_table = Calibration(bound=bound[1:4], share=share[:3], absent=share[:3])
    out: dict[str, np.ndarray] = {
        "format": np.array(1),
        "feature_names": np.array(FEATURES),
        "global_feature_names": np.array(GLOBAL_FEATURES),
        "fault_threshold": np.full(4, 0.5),
    }
    out |= TreeArrays.join([f.trees for f in lead]).to_dict("lead_tree_")
    out |= TreeArrays.join([f.trees for f in wide]).to_dict("global_tree_")
    out |= lead_table.to_dict("lead_", MEASUREMENTS) | global_table.to_dict("global_", GLOBAL_MEASUREMENTS)
    probes = {"probe_features": x[:30], "probe_global_features": x[:9, :2]}
    return out | probes | ReliabilityModel.from_arrays(out).answers(x[:30], x[:9, :2])


@pytest.fixture
def model(arrays, tmp_path) -> ReliabilityModel:
    save_model(arrays, tmp_path / "m.npz")
    return ReliabilityModel.load(
        tmp_path / "m.npz", feature_names=FEATURES, global_feature_names=GLOBAL_FEATURES
    )


def test_step_table_holds_from_its_edge_on() -> None:
    table = StepTable(np.array([0.2, 0.8]), np.array([50.0, 15.0]), np.inf)
    score = np.array([[0.0, 0.2, 0.79], [0.8, 1.0, np.nan]])
    np.testing.assert_array_equal(table(score), [[np.inf, 50, 50], [15, 15, np.inf]])


def test_reliable_is_bound_within_tolerance_and_for_rate_the_share(model: ReliabilityModel) -> None:
    scores = np.array([[0.9] * 5, [0.75] * 5, [0.1] * 5])
    np.testing.assert_array_equal(model.reliable(scores), [[1, 1, 1, 1, 1], [1, 0, 0, 0, 0], [0, 0, 0, 0, 0]])
    strict = model.reliable(scores, (np.nan, 20.0, 10.0, 30.0, 0.01))
    np.testing.assert_array_equal(strict[0], [True, True, False, True, False])
    assert np.all(np.isinf(model.bound(scores)[2]))
    np.testing.assert_array_equal(model.absence_holds(scores)[:, 1], [True, True, False])
    np.testing.assert_array_equal(model.reliable_global(scores[:, :3]), [[1, 1, 1], [0, 0, 0], [0, 0, 0]])


def test_shapes_and_infinite_features(model: ReliabilityModel) -> None:
    x = np.array([[0.1, np.inf, -np.inf, np.nan], [0.1, np.nan, np.nan, np.nan]])
    score, fault = model.judge(x)
    assert score.shape == (2, 5) and fault.shape == (2, 4)
    np.testing.assert_array_equal(score[0], score[1])  # infinite is as good as missing
    assert model.score(x[:0]).shape == (0, 5)
    assert model.score_global(x[:, :2]).shape == (2, 3)


def test_file_opens_without_pickle_and_same_arrays_give_same_bytes(arrays, tmp_path) -> None:
    save_model(arrays, tmp_path / "a.npz")
    save_model(dict(reversed(arrays.items())), tmp_path / "b.npz")
    with np.load(tmp_path / "a.npz", allow_pickle=False) as archive:
        assert all(archive[key].dtype != object for key in archive.files)
    first, second = (ReliabilityModel.load(tmp_path / n) for n in ("a.npz", "b.npz"))
    assert len(first.sha256) == 64
    save_model(arrays, tmp_path / "c.npz")
    assert (tmp_path / "a.npz").read_bytes() == (tmp_path / "c.npz").read_bytes()
    x = arrays["probe_features"]
    np.testing.assert_array_equal(first.score(x), second.score(x))


@pytest.mark.parametrize(
    "key", ["lead_tree_value", "lead_tree_threshold", "lead_bound_pr_level", "probe_score"]
)
def test_an_altered_value_is_refused_by_the_digest(arrays, tmp_path, key: str) -> None:
    save_model(arrays, tmp_path / "m.npz")
    with np.load(tmp_path / "m.npz") as archive:
        altered = {k: archive[k] for k in archive.files}
    altered[key] = altered[key].copy()
    altered[key].flat[0] += 1e-6
    np.savez(tmp_path / "m.npz", **altered)
    with pytest.raises(ModelError, match="altered"):
        ReliabilityModel.load(tmp_path / "m.npz")


@pytest.mark.parametrize(
    "key", ["lead_tree_value", "lead_bound_pr_level", "global_tree_baseline", "probe_fault"]
)
def test_wrong_answers_are_refused_even_with_a_fitting_digest(arrays, tmp_path, key: str) -> None:
    save_model({**arrays, key: arrays[key] + 1e-3}, tmp_path / "m.npz")
    with pytest.raises(ModelError, match="stored answers"):
        ReliabilityModel.load(tmp_path / "m.npz")


def test_other_feature_table_is_refused(arrays, tmp_path) -> None:
    save_model(arrays, tmp_path / "m.npz")
    with pytest.raises(ModelError, match="other features.*e"):
        ReliabilityModel.load(tmp_path / "m.npz", feature_names=("a", "b", "c", "e"))
    with pytest.raises(ModelError, match="order"):
        ReliabilityModel.load(tmp_path / "m.npz", feature_names=("b", "a", "c", "d"))
    with pytest.raises(ModelError, match="global"):
        ReliabilityModel.load(tmp_path / "m.npz", global_feature_names=("g",))


def test_missing_broken_and_foreign_files_are_refused(arrays, tmp_path) -> None:
    with pytest.raises(ModelError, match="no model"):
        ReliabilityModel.load(tmp_path / "nowhere.npz")
    (tmp_path / "text.npz").write_text("no archive")
    np.savez(tmp_path / "pickled.npz", a=np.array([{}], dtype=object))
    save_model(arrays, tmp_path / "half.npz")
    whole = (tmp_path / "half.npz").read_bytes()
    (tmp_path / "half.npz").write_bytes(whole[: len(whole) // 2])
    for name in ("text", "pickled", "half"):
        with pytest.raises(ModelError, match="plain arrays"):
            ReliabilityModel.load(tmp_path / f"{name}.npz")
    save_model({**arrays, "format": np.array(99)}, tmp_path / "new.npz")
    with pytest.raises(ModelError, match="format"):
        ReliabilityModel.load(tmp_path / "new.npz")
    save_model({k: v for k, v in arrays.items() if k != "lead_tree_left"}, tmp_path / "part.npz")
    with pytest.raises(ModelError, match="lacks"):
        ReliabilityModel.load(tmp_path / "part.npz")


def test_a_table_that_is_not_monotone_is_refused(arrays, tmp_path) -> None:
    save_model({**arrays, "lead_bound_qt_level": np.array([10.0, 40.0])}, tmp_path / "m.npz")
    with pytest.raises(ModelError, match="monotone"):
        ReliabilityModel.load(tmp_path / "m.npz")


def test_digest_sees_names_types_and_shapes() -> None:
    base = {"a": np.arange(4), "b": np.zeros(2)}
    others = [
        {"a": np.arange(4), "c": np.zeros(2)},
        {"a": np.arange(4).reshape(2, 2), "b": np.zeros(2)},
        {"a": np.arange(4).astype(np.uint64), "b": np.zeros(2)},
    ]
    assert digest(base) == digest(dict(reversed(base.items())))
    assert all(digest(base) != digest(o) for o in others)


def test_qtc_bound_covers_both_errors_at_their_bound() -> None:
    qt, rate = np.array([400.0]), np.array([75.0])
    bound = qtc_bound(qt, np.array([10.0]), rate, np.array([2.0]))
    at_worst = 410.0 * np.sqrt(77 / 60) - 400.0 * np.sqrt(75 / 60)
    np.testing.assert_allclose(bound, at_worst, rtol=0.02)
