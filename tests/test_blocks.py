"""Segments, batches and margins: laws of the plan, and the same table whatever the block."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sigguard.blocks import MARGIN_S, MIN_REST_S, batches, plan_segments, rows_of
from sigguard.errors import UsageError
from sigguard.measure import analyse

plans = st.builds(
    plan_segments,
    st.integers(2, 60_000),
    st.sampled_from([50.0, 125.0, 128.0, 257.0, 360.0, 500.0]),
    st.sampled_from([5.0, 7.5, 10.0, 30.0]),
)


@settings(max_examples=200, deadline=None)
@given(
    st.integers(2, 100_000), st.sampled_from([50.0, 125.0, 257.0, 500.0]), st.sampled_from([5.0, 10.0, 30.0])
)
def test_segments_cover_everything_once_and_the_rest_rule_holds(n, fs_hz, segment_s):
    plan = plan_segments(n, fs_hz, segment_s)
    assert plan.start[0] == 0 and plan.stop[-1] == n
    np.testing.assert_array_equal(plan.start[1:], plan.stop[:-1])
    size = round(segment_s * fs_hz)
    length = plan.stop - plan.start
    assert np.all(length[:-1] == size)
    if n < size:
        assert len(plan) == 1
    else:
        # The last: whole, or a rest of 5 s or more on its own, or a whole one with a shorter rest joined.
        rest = n % size
        joined = 0 < rest < MIN_REST_S * fs_hz
        assert length[-1] == (size + rest if joined else rest or size)


@pytest.mark.parametrize(
    ("seconds", "lengths"),
    [(0.5, [0.5]), (3, [3]), (9.9, [9.9]), (10, [10]), (14.9, [14.9]), (15, [10, 5]), (24.9, [10, 14.9]), (25, [10, 10, 5]), (30, [10] * 3)],
)  # fmt: skip
def test_plans_by_hand(seconds, lengths):
    plan = plan_segments(round(seconds * 100), 100.0)
    np.testing.assert_allclose((plan.stop - plan.start) / 100, lengths)


@pytest.mark.parametrize("segment_s", [4.9, 30.1, 0.0, -10.0, np.nan])
def test_segments_last_from_5_to_30_s(segment_s):
    with pytest.raises(UsageError, match="5 to 30"):
        plan_segments(5000, 500.0, segment_s)


@settings(max_examples=100, deadline=None)
@given(plans, st.integers(1, 15), st.integers(1, 400))
def test_batches_hold_every_segment_once_with_its_margins(plan, n_leads, block_rows):
    margin = round(MARGIN_S * plan.fs_hz)
    covered = []
    for batch in batches(plan, n_leads, block_rows=block_rows):
        assert batch.count >= 1 and (batch.count == 1 or batch.count * n_leads <= block_rows)
        assert 0 <= batch.read_start < batch.read_stop <= plan.n_samples
        for k in range(batch.first, batch.first + batch.count):
            assert plan.stop[k] - plan.start[k] == batch.size
            assert batch.margin == (min(plan.start[k], margin), min(plan.n_samples - plan.stop[k], margin))
            covered.append(k)
        assert batch.read_start == plan.start[batch.first] - batch.margin[0]
        assert batch.read_stop == plan.stop[batch.first + batch.count - 1] + batch.margin[1]
    assert covered == list(range(len(plan)))


@settings(max_examples=40, deadline=None)
@given(plans, st.integers(1, 4), st.integers(1, 60))
def test_rows_hold_the_samples_of_their_segment_and_lead(plan, n_leads, block_rows):
    signal = np.arange(n_leads * plan.n_samples, dtype=float).reshape(n_leads, -1)
    for batch in batches(plan, n_leads, block_rows=block_rows):
        rows = rows_of(batch, signal[:, batch.read_start : batch.read_stop])
        assert rows.shape == (batch.count * n_leads, sum(batch.margin) + batch.size)
        for i, row in enumerate(rows):
            k, lead = batch.first + i // n_leads, i % n_leads
            expected = signal[lead, plan.start[k] - batch.margin[0] : plan.stop[k] + batch.margin[1]]
            np.testing.assert_array_equal(row, expected)


def two_minutes() -> tuple[np.ndarray, float]:
    """Two leads over 124 s, the last 4 s joined to the last segment, with a hole and a burst."""
    from simulated import strip

    ecg = strip(4, fs_hz=250.0, duration_s=124.0)
    x = ecg.signal_mv[[1, 7]].copy()
    x[0, 8000:8600] = np.nan
    x[1, 15000:16500] += np.random.default_rng(0).normal(size=1500)
    return x, 250.0


def measured(x: np.ndarray, fs_hz: float, block_rows: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    plan = plan_segments(x.shape[1], fs_hz)
    value, features, beats = [], [], []
    for batch in batches(plan, len(x), block_rows=block_rows):
        found = analyse(rows_of(batch, x[:, batch.read_start : batch.read_stop]), fs_hz, margin=batch.margin)
        value.append(found.value)
        features.append(found.features)
        beats.append(found.beat_s + plan.start[batch.first + found.beat_row // len(x)] / fs_hz)
    return np.concatenate(value), np.concatenate(features), np.concatenate(beats)


@pytest.mark.parametrize("block_rows", [1, 5, 7, 1000])
def test_any_block_gives_the_same_table(block_rows):
    """Times and values to rounding; features are kept in single precision."""
    x, fs_hz = two_minutes()
    value, features, beats = measured(x, fs_hz, 192)
    assert len(value) == 24
    other = measured(x, fs_hz, block_rows)
    np.testing.assert_allclose(other[2], beats, atol=1e-9)
    np.testing.assert_allclose(other[0][:, [0, 2, 3, 4]], value[:, [0, 2, 3, 4]], rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(other[0][:, 1], value[:, 1], atol=1e-3)
    np.testing.assert_allclose(other[1], features, rtol=1e-3, atol=1e-3)


@pytest.mark.parametrize("block_rows", [2, 9])
def test_any_block_gives_the_same_report(monkeypatch, block_rows):
    from sigguard import blocks, screening, segment_pass
    from sigguard.recording import Recording

    x, fs_hz = two_minutes()
    recording = Recording(x, fs_hz, ["II", "V2"])
    usual = screening.check(recording).segments
    monkeypatch.setattr(
        segment_pass, "batches", lambda plan, n_leads: blocks.batches(plan, n_leads, block_rows=block_rows)
    )
    other = screening.check(recording).segments
    np.testing.assert_array_equal(other.start_s, usual.start_s)
    np.testing.assert_array_equal(other.reliable, usual.reliable)
    np.testing.assert_array_equal(other.grade, usual.grade)
    np.testing.assert_allclose(other.score, usual.score, atol=1e-3)
    np.testing.assert_allclose(other.value, usual.value, atol=1e-3)
