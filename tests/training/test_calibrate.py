"""The promise in repeated experiments whose truth is known in closed form."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import beta, norm

from sigguard.training.calibrate import (
    EACH_KIND,
    CalibrationSettings,
    calibrate,
    fit_bound,
    fit_share,
    isotonic_windows,
    lower_share,
    upper_quantile,
)
from sigguard.training.labels import Labels

Z95 = norm.ppf(0.975)  # 95 % of |N(0, 1)| lie below


def drawn(rng: np.random.Generator, n: int) -> tuple[np.ndarray, np.ndarray]:
    """Scores uniform, errors half-normal with a spread that falls from 40 to 4."""
    score = rng.random(n)
    return score, np.abs(rng.normal(size=n)) * spread(score)


def spread(score: np.ndarray) -> np.ndarray:
    return 40.0 - 36.0 * score


def test_upper_quantile_lies_above_the_truth_as_often_as_it_says() -> None:
    rng = np.random.default_rng(0)
    for n in (50, 120, 1000):
        safe = [upper_quantile(np.abs(rng.normal(size=n)), confidence=0.9) >= Z95 for _ in range(600)]
        assert np.mean(safe) >= 0.9 - 3 * np.sqrt(0.09 / 600)
    assert upper_quantile(np.zeros(20), confidence=0.9) == np.inf  # twenty cannot vouch for 95 %
    assert upper_quantile(np.zeros(0)) == np.inf


def test_lower_share_is_the_clopper_pearson_limit() -> None:
    right = np.r_[np.ones(97), np.zeros(3)]
    assert lower_share(right, confidence=0.95) == pytest.approx(beta.ppf(0.05, 97, 4))
    assert lower_share(np.zeros(10)) == 0.0 and lower_share(np.zeros(0)) == 0.0


def test_promise_holds_on_fresh_data_in_repeated_experiments() -> None:
    rng = np.random.default_rng(1)
    none = np.zeros((0, 3000), dtype=bool)
    kept_to, reliable_wrong, called = [], [], []
    for _ in range(25):
        table = fit_bound(*drawn(rng, 3000), none)
        score, error = drawn(rng, 4000)
        bound = table(score)
        kept_to.append(np.mean(error <= bound))
        reliable = bound <= 20.0
        called.append(reliable.mean())
        reliable_wrong.append(np.mean(error[reliable] > 20.0))
    assert min(kept_to) >= 0.945 and np.mean(kept_to) >= 0.955
    assert max(reliable_wrong) <= 0.05
    # True 95 % bound is 20 at a score of 0.83: most of what is above must be kept, or the safety is a dodge.
    assert np.mean(called) >= 0.6 * (1 - (40 - 20 / Z95) / 36)


def test_bound_is_monotone_and_no_promise_is_made_below_the_scores_seen() -> None:
    rng = np.random.default_rng(2)
    for _ in range(20):
        table = fit_bound(*drawn(rng, 800), np.zeros((0, 800), dtype=bool))
        grid = table(np.linspace(0, 1, 500))
        assert np.all(grid[1:] <= grid[:-1])
    assert table(np.array([-1.0])) == np.inf
    assert np.isfinite(table(np.array([1.0])))


def test_promise_holds_for_the_worst_kind_of_noise() -> None:
    rng = np.random.default_rng(3)
    for _ in range(8):
        score, error = drawn(rng, 6000)
        bad = rng.random(6000) < 0.15
        error[bad] *= 3.0  # one kind of noise in seven errs three times as far at the same score
        groups = np.stack([bad, ~bad])
        safe, blind = fit_bound(score, error, groups), fit_bound(score, error, groups[:0])
        fresh_score, fresh = drawn(rng, 4000)
        assert np.mean(3.0 * fresh <= safe(fresh_score)) >= EACH_KIND - 0.01  # what 900 rows of a kind allow
        assert (
            np.mean(3.0 * fresh <= blind(fresh_score)) < EACH_KIND - 0.01
        )  # what it would be without the groups


def test_lost_values_push_the_bound_to_infinity_where_they_are_common() -> None:
    rng = np.random.default_rng(4)
    score, error = drawn(rng, 3000)
    error[(score < 0.5) & (rng.random(3000) < 0.2)] = np.inf
    table = fit_bound(score, error, np.zeros((0, 3000), dtype=bool))
    assert table(np.array([0.3])) == np.inf
    assert np.isfinite(table(np.array([0.7])))


def test_share_is_a_lower_limit_and_rises() -> None:
    rng = np.random.default_rng(5)
    for _ in range(10):
        score = rng.random(4000)
        right = rng.random(4000) < 0.5 + 0.5 * score
        settings = CalibrationSettings(window=200, confidence=0.9)
        table = fit_share(score, right, np.zeros((0, 4000), dtype=bool), settings)
        grid = np.linspace(0.02, 1, 300)
        levels = table(grid)
        assert np.all(levels[1:] >= levels[:-1])
        assert np.mean(levels <= 0.5 + 0.5 * grid + 0.02) > 0.9
        assert levels[-1] > 0.93


def test_equal_scores_are_never_parted() -> None:
    score = np.repeat([0.1, 0.5, 0.9], 300)
    error = np.repeat([30.0, 20.0, 10.0], 300)
    edge, level = isotonic_windows(score, error, upper_quantile, rising=False, window=100)
    np.testing.assert_allclose(level, [30, 20, 10])
    np.testing.assert_allclose(edge, [0.1, 0.3, 0.7])


def test_values_and_reasons_of_absence_are_calibrated_apart() -> None:
    n = 1000
    score = np.full((n, 1), 0.9)
    valued = np.arange(n)[:, None] < 500
    labels = Labels(
        judged=np.ones((n, 1), dtype=bool),
        right=valued,  # every value right, every reason wrong
        valued=valued,
        error=np.where(valued, 1.0, np.nan),
    )
    table = calibrate(score, labels, np.zeros((0, n), dtype=bool), CalibrationSettings())
    assert table.bound[0](np.array([0.95])) == 1.0
    assert table.share[0](np.array([0.95])) > 0.99
    assert table.absent[0](np.array([0.95])) == 0.0


def test_no_rows_promise_nothing() -> None:
    table = fit_bound(np.zeros(0), np.zeros(0), np.zeros((0, 0), dtype=bool))
    assert table(np.array([1.0])) == np.inf
