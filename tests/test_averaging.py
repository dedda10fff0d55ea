"""Averaged beats: medians against numpy, weights against bursts, replicates against sigma over root n."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sigguard.averaging import (
    LENGTH,
    REPLICATES,
    ZERO,
    average,
    dominant,
    level_beats,
    masked_median,
    stack_beats,
)
from sigguard.waves import FS


def shape(u: np.ndarray) -> np.ndarray:
    """A beat over samples from its fiducial: P, QRS, T; 0 on the PQ segment."""

    def bump(at, width):
        return np.exp(-0.5 * ((u - at) / width) ** 2)

    return 0.1 * bump(-38, 4) + bump(0, 2.5) - 0.3 * bump(7, 2.5) + 0.3 * bump(75, 12)


def row_of_beats(at: np.ndarray, n: int) -> np.ndarray:
    t = np.arange(n)
    return sum(shape(t - b) for b in at)


def stack_of(row: np.ndarray, at: np.ndarray):
    return stack_beats(row[None], np.zeros(len(at), np.intp), np.asarray(at, float), np.ones(len(at)))


@settings(max_examples=60, deadline=None)
@given(st.integers(1, 4), st.integers(1, 9), st.integers(1, 5), st.integers(0, 10_000))
def test_masked_median_is_numpys(rows, beats, columns, seed):
    rng = np.random.default_rng(seed)
    values = rng.normal(size=(rows, beats, columns))
    mask = rng.random((rows, beats, columns)) < 0.6
    found = masked_median(values, mask)
    for r in range(rows):
        for c in range(columns):
            picked = values[r, mask[r, :, c], c]
            assert found[r, c] == pytest.approx(np.median(picked) if len(picked) else 0.0, abs=1e-12)


def test_masked_median_of_nothing_is_zero():
    np.testing.assert_array_equal(
        masked_median(np.zeros((2, 0, 3)), np.zeros((2, 0, 3), bool)), np.zeros((2, 3))
    )


def test_cuts_are_taken_between_samples():
    at = np.array([300.25, 520.5, 800.75])
    stack = stack_of(row_of_beats(at, 1100), at)
    u = np.arange(-ZERO, LENGTH - ZERO)
    for k in range(3):
        np.testing.assert_allclose(
            stack.cuts_mv[0, k][ZERO - 20 : ZERO + 60], shape(u)[ZERO - 20 : ZERO + 60], atol=0.004
        )


def test_what_lies_outside_the_row_is_marked_so():
    stack = stack_of(np.ones(400), np.array([20.0, 380.0]))
    assert stack.valid[0, 0].sum() == LENGTH - (ZERO - 20)
    assert stack.valid[0, 1].sum() == ZERO + 20
    assert not stack.cuts_mv[0, 0][~stack.valid[0, 0]].any()


@pytest.mark.parametrize(("offset", "per_sample"), [(0.0, 0.0), (2.5, 0.0), (0.0, 0.002), (-1.0, -0.004)])
def test_linear_drift_between_pq_points_goes_exactly(offset, per_sample):
    at = np.array([200.0, 405.0, 640.0, 830.0, 1060.0])
    row = row_of_beats(at, 1300)
    onset = np.array([-32.0])
    plain, _ = level_beats(stack_of(row, at), onset)
    drifted, level = level_beats(stack_of(row + offset + per_sample * np.arange(1300), at), onset)
    np.testing.assert_allclose(drifted, plain, atol=1e-9)
    place = at - 8 - 4  # onset is 8 samples before the beat; the level is taken around 4 before that
    np.testing.assert_allclose(level[0], offset + per_sample * place, atol=1e-3)


def test_a_single_beat_loses_its_level_only():
    row = row_of_beats(np.array([300.0]), 700) + 1.7
    cuts, level = level_beats(stack_of(row, np.array([300.0])), np.array([-32.0]))
    np.testing.assert_allclose(level, 1.7, atol=1e-3)
    np.testing.assert_allclose(cuts[0, 0][ZERO - 15 : ZERO - 9], 0.0, atol=1e-3)


def noisy_cuts(rng, n_rows: int, n_beats: int, sigma: float) -> np.ndarray:
    u = np.arange(-ZERO, LENGTH - ZERO)
    return shape(u) + sigma * rng.normal(size=(n_rows, n_beats, LENGTH))


def test_a_burst_over_two_beats_costs_two_beats_not_the_average():
    rng = np.random.default_rng(0)
    cuts = noisy_cuts(rng, 20, 12, 0.02)
    valid, group = np.ones_like(cuts, bool), np.ones((20, 12), bool)
    before = average(cuts, valid, group)
    burst = cuts.copy()
    burst[:, 4:6] += 1.0 * np.sin(np.arange(LENGTH) / 9.0)
    after = average(burst, valid, group)
    moved = np.sqrt(((after.beat_mv[:, 0] - before.beat_mv[:, 0]) ** 2).mean())
    assert moved < 0.01  # a plain mean would move by 0.12 mV rms
    assert np.all(after.weight[:, 4:6] < 0.01)
    np.testing.assert_allclose(after.weight.sum(axis=1), 1.0)
    assert np.all(np.abs(after.n_effective - 10) < 0.6)


@pytest.mark.parametrize("n_beats", [6, 8, 12, 16, 30])
def test_replicates_scatter_as_the_mean_itself_would(n_beats):
    """Monte Carlo: true scatter of the average over 150 draws, and sigma/sqrt(n), against the replicates'."""
    rng = np.random.default_rng(n_beats)
    sigma = 0.05
    cuts = noisy_cuts(rng, 150, n_beats, sigma)
    out = average(cuts, np.ones_like(cuts, bool), np.ones((150, n_beats), bool))
    assert out.beat_mv.shape == (150, 1 + REPLICATES, LENGTH)
    told = np.sqrt(((out.beat_mv[:, 1:] - out.beat_mv[:, :1]) ** 2).mean())
    true = out.beat_mv[:, 0].std(axis=0).mean()
    assert true == pytest.approx(sigma / np.sqrt(n_beats), rel=0.05)
    assert told == pytest.approx(true, rel=0.12)


def test_noise_free_beats_have_no_scatter():
    cuts = noisy_cuts(np.random.default_rng(1), 2, 8, 0.0)
    out = average(cuts, np.ones_like(cuts, bool), np.ones((2, 8), bool))
    np.testing.assert_allclose(out.beat_mv, np.broadcast_to(cuts[:1, :1], out.beat_mv.shape), atol=1e-9)


def test_rows_without_beats_are_zero():
    out = average(np.zeros((1, 3, LENGTH)), np.zeros((1, 3, LENGTH), bool), np.zeros((1, 3), bool))
    assert not out.beat_mv.any() and out.n_effective[0] == 0 and out.weight.sum() == 0
    assert np.isnan(out.stray_mv).all()


def test_the_dominant_kind_leaves_the_odd_beat_out():
    stack = stack_of(row_of_beats(np.arange(200, 2200, 210.0), 2400), np.arange(200, 2200, 210.0))
    stack.likeness[0, 3] = 0.4
    expected = np.ones(stack.present.shape, bool)
    expected[0, 3] = False
    np.testing.assert_array_equal(dominant(stack), expected)


def test_work_rate_of_the_beat_window():
    assert FS == 250.0 and 0 < ZERO < LENGTH
