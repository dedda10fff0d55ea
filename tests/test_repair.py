"""Each disturbance is put on a known signal; what is taken away must be that and nothing else."""

from __future__ import annotations

import numpy as np
import pytest

from sigguard.electrodes import ELECTRODES, LEAD_FROM_ELECTRODES, LEADS_12
from sigguard.repair import (
    DRIFT_FLOOR_MV,
    FAST_FLOOR_MV,
    electrode_powers,
    hum_part,
    split_strip,
    true_beats,
    unclipped,
    without_electrode,
    without_hum,
    without_movement,
    without_shivering,
)
from sigguard.simulate.disturbance import draw_disturbance

FS_HZ, N = 500.0, 5000
BEATS = np.arange(200, N - 200, 400)
NAN = float("nan")


def ecg() -> np.ndarray:
    """(12, N) mV: a P, a QRS and a T wave of Gaussians at each beat, in the proportions of one source."""
    t = np.arange(N)[:, None] - BEATS
    waves = ((0.1, -80, 12), (1.0, 0, 6), (0.25, 130, 25))
    beat = sum(a * np.exp(-0.5 * ((t - at) / width) ** 2) for a, at, width in waves).sum(axis=1)
    return (LEAD_FROM_ELECTRODES @ np.linspace(-0.5, 1.0, 9))[:, None] * beat


def noise(kind: str, seed: int = 0) -> np.ndarray:
    return draw_disturbance(np.random.default_rng(seed), kind, n_samples=N, fs_hz=FS_HZ)


def rms(x: np.ndarray) -> float:
    return float(np.sqrt((x**2).mean()))


def test_the_parts_add_up_to_what_does_not_recur():
    x = ecg() + 0.05 * noise("muscle") + 0.3 * noise("wander")
    split = split_strip(x, FS_HZ, BEATS, NAN)
    rest = x - x.mean(axis=1, keepdims=True) - split.residual_mv - split.hum_mv
    cuts = np.stack([rest[:, b - 150 : b + 200] for b in BEATS[1:-1]])
    assert np.ptp(cuts, axis=0).max() < 2e-3  # what is left is the same at every beat


def test_hum_that_swells_is_followed_and_a_quiet_strip_is_left_alone():
    t_s = np.arange(N) / FS_HZ
    hum = 0.1 * (1 + 0.3 * np.sin(2 * np.pi * 0.2 * t_s)) * np.sin(2 * np.pi * 50.1 * t_s + 1)
    everywhere = np.ones(N, dtype=bool)
    found = hum_part(hum[None], FS_HZ, 50.0, everywhere)[0]
    assert rms((found - hum)[250:-250]) < 0.03 * rms(hum)
    split = split_strip(ecg() + hum, FS_HZ, BEATS, 50.0)
    assert rms(split.hum_mv[1] - hum) < 0.1 * rms(hum)
    assert not without_hum(split).hum_mv.any()
    assert not split_strip(ecg(), FS_HZ, BEATS, NAN).hum_mv.any()


def test_muscle_takes_the_shaking_with_it_and_wander_what_is_fast_in_it():
    shaking = split_strip(ecg() + 0.1 * noise("muscle") + 0.2 * noise("wander", 1), FS_HZ, BEATS, NAN)
    assert shaking.shaking == 1.0 and shaking.stirring == 0.0
    still = without_shivering(shaking)
    assert still.rms_mv(still.muscle_mv).max() <= FAST_FLOOR_MV * 1.001
    assert still.rms_mv(still.drift_mv).max() <= DRIFT_FLOOR_MV * 1.001
    drifting = split_strip(ecg() + 0.5 * noise("wander"), FS_HZ, BEATS, NAN)
    assert drifting.shaking == 0.0 and drifting.stirring == 1.0
    kept = without_shivering(drifting)
    np.testing.assert_array_equal(kept.drift_mv, drifting.drift_mv)
    calm = without_movement(drifting)
    assert calm.rms_mv(calm.drift_mv).max() <= DRIFT_FLOOR_MV * 1.001


def test_tremor_goes_with_the_muscles_and_movement_does_not():
    tremor = split_strip(ecg() + 0.2 * noise("tremor"), FS_HZ, BEATS, NAN)
    motion = split_strip(ecg() + 0.2 * noise("motion"), FS_HZ, BEATS, NAN)
    assert tremor.rms_mv(tremor.muscle_mv)[0] > 2 * tremor.rms_mv(tremor.moving_mv)[0]
    assert motion.rms_mv(motion.moving_mv)[0] > 4 * motion.rms_mv(motion.muscle_mv)[0]


@pytest.mark.parametrize("electrode", ELECTRODES)
def test_what_one_electrode_puts_on_the_leads_is_found_and_taken_away(electrode):
    potential = np.zeros((9, N))
    potential[ELECTRODES.index(electrode)] = 0.3 * noise("motion", 3)
    own = LEAD_FROM_ELECTRODES @ potential
    background = LEAD_FROM_ELECTRODES @ np.stack([0.01 * noise("motion", 10 + k) for k in range(9)])
    split = split_strip(ecg() + own + background, FS_HZ, BEATS, NAN)
    powers = electrode_powers(split, LEADS_12)
    assert powers is not None
    assert int(powers.moving_mv2.argmax()) == ELECTRODES.index(electrode)
    left = without_electrode(split, powers, electrode)
    before, after = split.rms_mv(split.residual_mv), left.rms_mv(left.residual_mv)
    hit = np.abs(LEAD_FROM_ELECTRODES[:, ELECTRODES.index(electrode)]) > 0
    assert (after[hit] < 0.25 * before[hit]).all()
    np.testing.assert_allclose(left.residual_mv[~hit], split.residual_mv[~hit])


def test_leads_that_cannot_tell_electrodes_apart_give_no_powers():
    assert electrode_powers(split_strip(ecg()[:1], FS_HZ, BEATS, NAN), ("II",)) is None
    assert electrode_powers(split_strip(ecg()[6:], FS_HZ, BEATS, NAN), LEADS_12[6:]) is None


def test_a_bump_between_two_beats_is_no_beat_but_an_early_broad_beat_is_one():
    x = ecg()
    bump = np.sort(np.append(BEATS, 1200 + 200))  # halfway between two beats
    x[:, 1400:1440] -= 0.3
    np.testing.assert_array_equal(true_beats(x, bump, FS_HZ), BEATS)
    # a beat of another shape comes early, and the next only after a pause
    y = ecg()
    k = 5
    y[:, BEATS[k] - 100 : BEATS[k] + 60] = 0.0
    early = BEATS[k] - 90
    y[:, early - 40 : early + 40] -= 0.8 * np.hanning(80)
    seen = np.sort(np.append(np.delete(BEATS, k), early))
    np.testing.assert_array_equal(true_beats(y, seen, FS_HZ), seen)
    split = split_strip(y, FS_HZ, seen, NAN)
    assert np.abs(split.slow_mv + split.muscle_mv)[:, early].max() < 0.05  # a beat is not taken for noise


def test_a_cut_off_peak_is_bent_on_and_a_long_stretch_at_the_rail_stays():
    t = np.arange(1000)
    x = np.exp(-0.5 * ((t - 500) / 10) ** 2)[None] * 2.0
    cut = np.minimum(x, 1.5)
    mended = unclipped(cut, cut >= 1.5, FS_HZ)
    assert mended.max() > 1.7 and rms(mended - x) < 0.5 * rms(cut - x)
    rail = np.full((1, 1000), 1.5)
    rail[0, :100] = 0.0
    np.testing.assert_array_equal(unclipped(rail, rail >= 1.5, FS_HZ), rail)


@pytest.mark.parametrize("x", [np.zeros((2, N)), np.full((2, N), np.nan)])
def test_flat_and_empty_strips_hold_no_disturbance(x):
    split = split_strip(x, FS_HZ, np.array([], dtype=np.int64), NAN)
    assert not split.residual_mv.any()
    assert (
        electrode_powers(split, ("I", "II")) is None
        or not electrode_powers(split, ("I", "II")).moving_mv2.any()
    )
