"""When a fault lies on a row: bursts of known place and size."""

from __future__ import annotations

import numpy as np
import pytest

from sigguard.fault_windows import KINDS, fault_windows, n_windows

FS_HZ, N = 500.0, 5000
T_S = np.arange(N) / FS_HZ


def windows_of(x_mv, kind, *, qrs_mask=None, mains_hz=np.nan, tremor_uv=0.0, masks=None, residual_mv=None):
    """A row on which one kind is called; without a residual given it is the row itself, at half the rate."""
    x_mv = np.atleast_2d(x_mv)
    nothing = np.zeros(x_mv.shape, bool)
    called = np.zeros((len(x_mv), len(KINDS)), bool)
    called[:, KINDS.index(kind)] = True
    return fault_windows(
        x_mv,
        FS_HZ,
        called=called,
        qrs_mask=nothing if qrs_mask is None else qrs_mask,
        residual_mv=x_mv[:, ::2] if residual_mv is None else residual_mv,
        fs_res_hz=FS_HZ / 2,
        masks={"flat": nothing, "clipped": nothing, "missing": nothing} | (masks or {}),
        mains_hz=np.full(len(x_mv), mains_hz),
        tremor_uv=np.full(len(x_mv), tremor_uv),
    )


def burst(x, start_s=4.0, stop_s=6.0):
    return np.where((start_s <= T_S) & (stop_s > T_S), x, 0.0)


@pytest.mark.parametrize(
    ("kind", "shape", "mains_hz", "uv"),
    [
        ("muscle", np.sin(2 * np.pi * 40.3 * T_S) + np.sin(2 * np.pi * 71.7 * T_S), np.nan, 100.0),
        ("motion", np.sqrt(2) * np.sin(2 * np.pi * 3.0 * T_S), np.nan, 100.0),
        ("mains", np.sin(2 * np.pi * 50.0 * T_S), 50.0, 100.0),
    ],
)
def test_a_burst_of_two_seconds_is_two_seconds(kind, shape, mains_hz, uv):
    found = windows_of(0.1 * burst(shape), kind, mains_hz=mains_hz)
    k = KINDS.index(kind)
    np.testing.assert_array_equal(np.flatnonzero(found.on[0, :, k]), [4, 5])
    assert found.on.sum() == 2  # nothing else was called
    # The muscle band is scaled for broad noise, its skirts from 20 Hz: within a fifth.
    assert found.level[0, k] == pytest.approx(uv, rel=0.2)
    steady = windows_of(0.1 * shape, kind, mains_hz=mains_hz)
    assert steady.on[0, :, k].all()


def test_tremor_counts_as_muscle_only_where_the_feature_tells_it_from_noise():
    x = 0.1 * burst(np.sqrt(2) * np.sin(2 * np.pi * 6.0 * T_S))
    k = KINDS.index("muscle")
    assert windows_of(x, "muscle").level[0, k] < 5.0
    found = windows_of(x, "muscle", tremor_uv=100.0 * np.sqrt(0.2))
    np.testing.assert_array_equal(np.flatnonzero(found.on[0, :, k]), [4, 5])
    assert found.level[0, k] == pytest.approx(100.0, rel=0.1)


def test_wander_lies_where_the_baseline_moves():
    slide = 2.0 / (1.0 + np.exp(-(T_S - 2.0) / 0.3))  # 2 mV within about a second and a half, at 2 s
    found = windows_of(slide, "wander")
    on = found.on[0, :, KINDS.index("wander")]
    assert on[1:3].all() and not on[6:9].any()
    assert windows_of(np.sin(2 * np.pi * 0.2 * T_S), "wander").on[0, :, 0].all()


def test_seconds_of_masks():
    mask = (T_S >= 2.5) & (T_S < 4.0)
    found = windows_of(np.zeros(N), "flat", masks={"flat": mask[None]})
    k = KINDS.index("flat")
    np.testing.assert_array_equal(np.flatnonzero(found.on[0, :, k]), [2, 3])
    assert found.level[0, k] == pytest.approx(1.5)


def test_beats_do_not_count_as_muscle():
    spikes = np.where((np.abs((T_S % 1.0) - 0.5) < 0.02), 1.0, 0.0)
    mask = np.abs((T_S % 1.0) - 0.5) < 0.1
    x = spikes + 0.05 * burst(np.random.default_rng(0).standard_normal(N))
    found = windows_of(x, "muscle", qrs_mask=mask[None])
    np.testing.assert_array_equal(np.flatnonzero(found.on[0, :, KINDS.index("muscle")]), [4, 5])


def test_nothing_called_nothing_found_and_gaps_are_bridged():
    x = np.full((2, N), np.nan)
    called = np.zeros((2, len(KINDS)), bool)
    none = np.zeros((2, N), bool)
    given = {
        "qrs_mask": none,
        "residual_mv": np.zeros((2, N // 2)),
        "fs_res_hz": 250.0,
        "masks": {"flat": none, "clipped": none, "missing": ~none},
        "mains_hz": np.full(2, np.nan),
        "tremor_uv": np.full(2, np.nan),
    }
    found = fault_windows(x, FS_HZ, called=called, **given)
    assert not found.on.any() and np.isnan(found.level).all()
    called[0] = True
    found = fault_windows(x, FS_HZ, called=called, **given)
    assert found.on[0, :, KINDS.index("missing")].all() and not found.on[1].any()
    assert np.isfinite(found.level[0]).all()


@pytest.mark.parametrize(("length_s", "count"), [(0.3, 1), (5.0, 5), (10.0, 10), (34.9, 35)])
def test_windows_are_about_a_second(length_s, count):
    assert n_windows(length_s) == count <= 64
