"""The table of noise features as a whole."""

from __future__ import annotations

import numpy as np
import pytest

from sigguard import noise
from sigguard.signal_table import ALWAYS_GIVEN, SIGNAL_FEATURES, signal_features

COLUMN = {name: k for k, name in enumerate(SIGNAL_FEATURES)}


def table(x: np.ndarray, fs_hz: float, mask: np.ndarray | None = None, **options):
    mask = np.zeros(x.shape, bool) if mask is None else mask
    residual = options.pop("residual_mv", np.zeros((len(x), int(x.shape[1] / fs_hz * 250))))
    return signal_features(x, fs_hz, qrs_mask=mask, residual_mv=residual, fs_res_hz=250.0, **options)


def ecg(fs_hz: float, rows: int, seconds: float = 10.0, seed: int = 1) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    t = np.arange(int(seconds * fs_hz)) / fs_hz
    d = (t + 0.3) % 0.8 - 0.3
    x = np.exp(-0.5 * (d / 0.011) ** 2) + 0.01 * rng.standard_normal((rows, t.size))
    return np.round(x / 0.005) * 0.005, np.broadcast_to(np.abs(d) <= 0.08, x.shape).copy()


@pytest.mark.parametrize("fs_hz", [50.0, 100.0, 128.0, 250.0, 257.0, 500.0, 1000.0])
@pytest.mark.parametrize("seconds", [5.0, 10.0, 30.0])
def test_any_rate_and_length(fs_hz, seconds):
    x, mask = ecg(fs_hz, 3, seconds)
    matrix, masks = table(x, fs_hz, mask)
    assert matrix.shape == (3, len(SIGNAL_FEATURES)) and matrix.dtype == np.float32
    assert {m.shape for m in masks.values()} == {x.shape}
    assert np.isfinite(
        matrix[:, [COLUMN[n] for n in ("wander_rms_uv", "k_sqi", "qrs_height_uv", *ALWAYS_GIVEN)]]
    ).all()
    assert not np.isinf(matrix).any()


@pytest.mark.parametrize("n", [2, 3, 7, 60, 300])
def test_very_short_rows(n):
    matrix, _ = table(np.random.default_rng(2).standard_normal((2, n)), 250.0)
    assert not np.isinf(matrix).any()


def test_no_rows():
    matrix, masks = table(np.zeros((0, 2500)), 250.0)
    assert matrix.shape == (0, len(SIGNAL_FEATURES)) and masks["flat"].shape == (0, 2500)


def test_rows_do_not_touch_each_other():
    x, mask = ecg(360.0, 6)
    x[1] = np.nan
    x[2] = 0.0
    x[3, 500:900] = np.nan
    x[4] += 0.3 * np.sin(2 * np.pi * 50 * np.arange(3600) / 360)
    x[5] = np.clip(x[5], -1, 0.4)
    residual = np.random.default_rng(3).standard_normal((6, 2500)) * 0.01
    whole, masks = table(x, 360.0, mask, residual_mv=residual)
    for k in range(6):
        alone, own = table(x[k : k + 1], 360.0, mask[k : k + 1], residual_mv=residual[k : k + 1])
        np.testing.assert_allclose(alone[0], whole[k], rtol=1e-5, atol=1e-5)
        for name in masks:
            np.testing.assert_array_equal(own[name][0], masks[name][k])


def test_a_missing_row_has_only_what_it_can():
    x = np.full((2, 2500), np.nan)
    x[1, :200] = 0.1
    matrix, masks = table(x, 250.0)
    given = [COLUMN[n] for n in ALWAYS_GIVEN]
    assert np.isnan(np.delete(matrix, given, axis=1)).all()
    np.testing.assert_allclose(matrix[:, COLUMN["missing_s"]], [10.0, 9.2])
    np.testing.assert_allclose(matrix[:, COLUMN["flat_s"]], [0.0, 0.8])
    assert masks["missing"][0].all()


def test_a_flat_row():
    matrix, masks = table(np.full((1, 2500), -0.7), 250.0, rails_mv=np.array([[-5.0, 5.0]]))
    value = dict(zip(SIGNAL_FEATURES, matrix[0], strict=True))
    assert value["flat_s"] == value["longest_flat_s"] == 10.0 and value["clipped_s"] == 0.0
    for name in (
        "wander_rms_uv",
        "muscle_rms_uv",
        "mains_uv",
        "tremor_uv",
        "motion_rms_uv",
        "step_change_uv",
    ):
        assert value[name] == pytest.approx(0.0, abs=1e-4)
    for name in ("p_sqi", "bas_sqi", "k_sqi", "s_sqi", "spectral_entropy", "resolution_uv", "qrs_height_uv"):
        assert np.isnan(value[name])


def test_scale_and_sign():
    x, mask = ecg(500.0, 4)
    residual = np.random.default_rng(4).standard_normal((4, 2500)) * 0.01
    one, _ = table(x, 500.0, mask, residual_mv=residual)
    two, _ = table(-2 * x, 500.0, mask, residual_mv=-2 * residual)
    for name, k in COLUMN.items():
        if name in ("s_sqi",):
            np.testing.assert_allclose(two[:, k], -one[:, k], rtol=1e-4)
        elif name.endswith("_log10_uv2"):
            np.testing.assert_allclose(two[:, k] - one[:, k], np.log10(4.0), atol=1e-3)
        elif "_uv" in name:
            np.testing.assert_allclose(two[:, k], 2 * one[:, k], rtol=1e-3, atol=1e-3)
        elif name != "low_pass_hz_est":  # chosen from a grid
            np.testing.assert_allclose(two[:, k], one[:, k], rtol=1e-3, atol=1e-3)


def test_more_noise_gives_more_of_its_own_feature():
    x, mask = ecg(500.0, 8)
    t = np.arange(5000) / 500.0
    rng = np.random.default_rng(5)
    for name, added in (
        ("wander_rms_uv", np.sin(2 * np.pi * 0.25 * t)),
        ("muscle_steady_uv", rng.standard_normal(5000)),
        ("mains_uv", np.sin(2 * np.pi * 50 * t)),
    ):
        levels = [table(x + a * added, 500.0, mask)[0][:, COLUMN[name]] for a in (0.0, 0.05, 0.1, 0.2, 0.4)]
        assert (np.diff(levels, axis=0) > 0).all(), name


def test_the_callers_arrays_stay_as_they_were():
    x, mask = ecg(360.0, 2)
    x[0, 100:120] = np.nan
    before, held = x.copy(), mask.copy()
    table(x, 360.0, mask)
    np.testing.assert_array_equal(x, before)
    np.testing.assert_array_equal(mask, held)


def test_recorded_noise_is_told_from_what_lies_under_it(open_data):
    """Record 118 with electrode-motion noise at 0 dB from 5:00 on, as clean as 118 before."""
    wfdb = pytest.importorskip("wfdb")
    record = wfdb.rdrecord(str(open_data / "nstdb" / "118e00"), sampto=7 * 60 * 360)
    rows = record.p_signal[:, 0].reshape(-1, 3600)
    steep = np.abs(np.diff(rows, axis=1, prepend=rows[:, :1]))
    near = noise.widen(steep > np.quantile(steep, 0.98, axis=1, keepdims=True), 29)
    matrix, _ = table(rows, 360.0, near)
    clean, noisy = matrix[2:28], matrix[31:41]
    for name, times in (("wander_rms_uv", 3.0), ("muscle_steady_uv", 2.0)):
        assert np.median(noisy[:, COLUMN[name]]) > times * np.median(clean[:, COLUMN[name]])
