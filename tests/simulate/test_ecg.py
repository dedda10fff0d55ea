"""The simulated ECG: lead laws, exact truth, reproducibility, and what each rhythm is."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.signal import welch

from sigguard.errors import UsageError
from sigguard.simulate.continuous import VF_TYPES
from sigguard.simulate.ecg import EDGE_FRACTION, LETHAL, RHYTHMS, draw_scene, simulate
from sigguard.simulate.shapes import BeatShape

INDEPENDENT = ("V1", "V2", "V3", "V4", "V5", "V6", "I", "II")


def strip(rhythm, seed, **options):
    rng = np.random.default_rng(seed)
    return simulate(draw_scene(rng, rhythm=rhythm, **options), rng)


def outside_calibration(ecg):
    keep = np.ones(ecg.n_samples, dtype=bool)
    for begin, end in ecg.calibration:
        keep[round(begin * ecg.fs_hz) : round(end * ecg.fs_hz)] = False
    return keep


def unfiltered(scene, **changes):
    """The scene through a recorder that alters nothing, without breathing or beat-to-beat change."""
    still = dict(breath_gain=0.0, breath_turn_rad=0.0, breath_rr=0.0, rr_jitter=0.0, beat_jitter=0.0)
    return replace(scene, highpass_hz=0.0, lowpass_hz=1e6, **still, **changes)


def dipole(ecg):
    """(3, n_samples): recovered from the eight independent leads by least squares."""
    rows = ecg.signal_mv[[ecg.leads.index(lead) for lead in INDEPENDENT]]
    return np.linalg.lstsq(ecg.scene.transfer, rows, rcond=None)[0]


@pytest.mark.parametrize("rhythm", RHYTHMS)
def test_einthoven_goldberger_and_wilson_hold(rhythm):
    ecg = strip(rhythm, 5)
    keep = outside_calibration(ecg)
    lead = dict(zip(ecg.leads, ecg.signal_mv[:, keep], strict=True))
    ra, la, ll, *chest = ecg.electrodes_mv[:, keep]
    np.testing.assert_allclose(lead["I"] + lead["III"], lead["II"], atol=1e-9)
    np.testing.assert_allclose(lead["aVR"] + lead["aVL"] + lead["aVF"], 0, atol=1e-9)
    np.testing.assert_allclose(lead["aVF"], (lead["II"] + lead["III"]) / 2, atol=1e-9)
    np.testing.assert_allclose(lead["I"], la - ra, atol=1e-9)
    np.testing.assert_allclose(lead["II"], ll - ra, atol=1e-9)
    for k, potential in enumerate(chest):
        np.testing.assert_allclose(lead[f"V{k + 1}"], potential - (ra + la + ll) / 3, atol=1e-9)


@pytest.mark.parametrize("rhythm", RHYTHMS)
def test_same_seed_same_signal_other_seed_another(rhythm):
    first, again, other = strip(rhythm, 8), strip(rhythm, 8), strip(rhythm, 9)
    assert np.array_equal(first.signal_mv, again.signal_mv)
    assert np.array_equal(first.beats_s, again.beats_s)
    assert not np.array_equal(first.signal_mv, other.signal_mv)


@pytest.mark.parametrize("rhythm", RHYTHMS)
@pytest.mark.parametrize(("fs_hz", "duration_s"), [(125.0, 5.0), (360.0, 30.0), (1000.0, 7.3)])
def test_shape_and_finiteness_at_other_rates_and_durations(rhythm, fs_hz, duration_s):
    ecg = strip(rhythm, 3, fs_hz=fs_hz, duration_s=duration_s)
    assert ecg.signal_mv.shape == (12, round(fs_hz * duration_s))
    assert ecg.electrodes_mv.shape == (9, ecg.n_samples)
    assert np.isfinite(ecg.signal_mv).all()
    assert np.abs(ecg.signal_mv).max() < 20
    n = len(ecg.beats_s)
    per_beat = (ecg.p_on_s, ecg.p_off_s, ecg.qrs_on_s, ecg.qrs_off_s, ecg.t_off_s, ecg.beat_kind)
    assert all(len(values) == n for values in per_beat)


def first_and_last_above(magnitude, fs_hz, low_s, high_s):
    """The edge rule on samples: where the magnitude first and last reaches its share of the peak."""
    part = slice(max(0, int(low_s * fs_hz)), int(high_s * fs_hz))
    local = magnitude[part]
    at = np.flatnonzero(local >= EDGE_FRACTION * local.max()) + part.start
    return at[0] / fs_hz, at[-1] / fs_hz


@pytest.mark.parametrize("rhythm", ["sinus", "sinus-slow", "lbbb", "rbbb", "wenckebach"])
@pytest.mark.parametrize("seed", range(4))
def test_onsets_and_ends_are_where_the_waves_of_the_dipole_are(rhythm, seed):
    rng = np.random.default_rng([seed, 1])
    scene = unfiltered(draw_scene(rng, rhythm=rhythm, fs_hz=2000.0, duration_s=8.0))
    shape = scene.beats[0]
    only = {
        "p": BeatShape(kind="usual", qrs=shape.qrs.times(0), t=shape.t.times(0)),
        "qrs": BeatShape(kind="usual", qrs=shape.qrs, t=shape.t.times(0)),
        "t": BeatShape(kind="usual", qrs=shape.qrs.times(0), t=shape.t),
    }
    for wave, beat in only.items():
        p = scene.p if wave == "p" else scene.p.times(0)
        ecg = simulate(replace(scene, beats=(beat, beat), p=p), np.random.default_rng(seed))
        size = np.linalg.norm(dipole(ecg), axis=0)
        on, off = {
            "p": (ecg.p_on_s, ecg.p_off_s),
            "qrs": (ecg.qrs_on_s, ecg.qrs_off_s),
            "t": (np.full(len(ecg.beats_s), np.nan), ecg.t_off_s),
        }[wave]
        compared = 0
        for k in range(1, len(ecg.beats_s) - 1):
            start = on[k] if wave != "t" else ecg.qrs_off_s[k]
            low, high = start - 0.05, off[k] + 0.05
            if low < 0 or high > 8 or np.isnan(low + high):
                continue
            found_on, found_off = first_and_last_above(size, ecg.fs_hz, low, high)
            if wave != "t":
                assert found_on == pytest.approx(on[k], abs=0.0015)
            assert found_off == pytest.approx(off[k], abs=0.0015)
            compared += 1
        assert compared >= 2


@pytest.mark.parametrize("seed", range(6))
def test_st_truth_is_the_level_in_the_leads(seed):
    rng = np.random.default_rng([seed, 2])
    scene = unfiltered(draw_scene(rng, rhythm="sinus", fs_hz=1000.0))
    ecg = simulate(scene, rng)
    levels = []
    for on_s, off_s in zip(ecg.qrs_on_s[2:-2], ecg.qrs_off_s[2:-2], strict=True):
        pq, st = round((on_s - 0.010) * 1000), round((off_s + 0.060) * 1000)
        levels.append(ecg.signal_mv[:, st] - ecg.signal_mv[:, pq])
    np.testing.assert_allclose(np.median(levels, axis=0), ecg.st_mv, atol=0.006)


def test_st_shifts_reach_far_and_most_scenes_have_none():
    peaks = [draw_scene(np.random.default_rng(seed), rhythm="sinus").st_peak_mv for seed in range(300)]
    assert max(peaks) > 0.3
    assert min(peaks) < -0.3
    assert np.mean(np.array(peaks) == 0) > 0.5


def test_intervals_cover_their_ranges():
    scenes = [draw_scene(np.random.default_rng(seed)) for seed in range(500)]
    pr = np.array([s.pr_ms for s in scenes if np.isfinite(s.pr_ms)])
    qrs, qt = np.array([s.qrs_ms for s in scenes]), np.array([s.qt_ms for s in scenes])
    assert pr.min() < 105 and pr.max() > 280
    assert qrs.min() < 80 and qrs.max() > 170
    assert qt.min() < 300 and qt.max() > 500
    assert ((pr >= 90) & (pr <= 320)).all()
    assert ((qrs >= 70) & (qrs <= 200)).all()
    assert ((qt >= 240) & (qt <= 620)).all()
    assert (qt > qrs + 100).all()


@pytest.mark.parametrize("rhythm", ["sinus", "sinus-fast", "ectopy-atrial", "lbbb"])
def test_a_fixed_pr_is_the_same_from_beat_to_beat(rhythm):
    ecg = strip(rhythm, 4)
    usual = np.array([kind == "usual" for kind in ecg.beat_kind])
    pr = (ecg.qrs_on_s - ecg.p_on_s)[usual]
    assert ecg.has_p and ecg.pr_fixed
    np.testing.assert_allclose(pr[np.isfinite(pr)] * 1000, ecg.scene.pr_ms, atol=1e-6)
    assert ecg.pr_ms == pytest.approx(ecg.scene.pr_ms)


@pytest.mark.parametrize("seed", range(5))
def test_atrial_fibrillation_has_no_p_and_irregular_beats(seed):
    ecg = strip("atrial-fibrillation", seed, duration_s=30.0)
    rr = np.diff(ecg.beats_s)
    assert not ecg.has_p and not ecg.pr_fixed and np.isnan(ecg.pr_ms)
    assert np.isnan(ecg.p_on_s).all()
    assert rr.std() / rr.mean() > 0.06
    assert rr.min() > 0.25


@pytest.mark.parametrize("seed", range(5))
def test_wenckebach_lengthens_then_drops(seed):
    ecg = strip("wenckebach", seed, duration_s=30.0)
    assert ecg.has_p and not ecg.pr_fixed and np.isnan(ecg.pr_ms)
    assert len(ecg.p_waves_s) > len(ecg.beats_s)
    pr = ecg.qrs_on_s - ecg.p_on_s
    steps = np.diff(pr[np.isfinite(pr)])
    assert (steps > 0.001).sum() >= 3
    assert (steps < -0.001).sum() >= 3  # back to the start after each blocked P


@pytest.mark.parametrize("seed", range(5))
def test_complete_block_has_ps_without_relation(seed):
    ecg = strip("complete-block", seed, duration_s=30.0)
    assert ecg.has_p and not ecg.pr_fixed
    before = [ecg.p_waves_s[:, 0][ecg.p_waves_s[:, 0] < on] for on in ecg.qrs_on_s]
    gaps = np.array([on - p[-1] for on, p in zip(ecg.qrs_on_s, before, strict=True) if len(p)])
    assert gaps.std() > 0.05
    assert len(ecg.p_waves_s) > 1.15 * len(ecg.beats_s)


@pytest.mark.parametrize("seed", range(5))
def test_a_ventricular_ectopic_beat_is_early_wide_and_compensated(seed):
    ecg = strip("ectopy-ventricular", seed, duration_s=30.0)
    at = [
        k for k, kind in enumerate(ecg.beat_kind) if kind == "ventricular" and 1 <= k < len(ecg.beats_s) - 1
    ]
    assert at
    usual_rr = 60 / ecg.scene.rate_bpm
    for k in at:
        before, after = ecg.beats_s[k] - ecg.beats_s[k - 1], ecg.beats_s[k + 1] - ecg.beats_s[k]
        assert before < after
        assert before + after == pytest.approx(2 * usual_rr, rel=0.25)
        assert ecg.qrs_off_s[k] - ecg.qrs_on_s[k] >= 0.12
        assert np.isnan(ecg.p_on_s[k])


def test_pacing_spikes_stand_before_each_paced_beat():
    ecg = strip("ventricular-pacing", 2)
    assert len(ecg.pacing_s) >= len(ecg.beats_s) - 1
    for on_s in ecg.qrs_on_s[1:]:
        assert np.min(np.abs(ecg.pacing_s - (on_s - 0.004))) < 1e-9
    assert len(strip("sinus", 2).pacing_s) == 0


def test_a_calibration_pulse_is_one_millivolt_on_every_lead_and_no_beat_is_claimed_in_it():
    ecg = strip("calibration", 6)
    ((begin, end),) = ecg.calibration
    part = ecg.signal_mv[:, round(begin * 500) : round(end * 500)]
    assert (part.max(axis=1) == 1.0).all()
    assert (part == 1.0).sum(axis=1).tolist() == [100] * 12  # 200 ms
    assert not ((ecg.beats_s > begin) & (ecg.beats_s < end)).any()


@pytest.mark.parametrize("seed", range(8))
def test_a_pause_is_longer_than_three_seconds_and_patient_first(seed):
    ecg = strip("pause", seed)
    edges = np.concatenate([ecg.beats_s, [10.0]])
    assert np.diff(edges).max() > 3.0
    assert [span[2] for span in ecg.patient_first] == ["standstill"]


@pytest.mark.parametrize("seed", range(10))
@pytest.mark.parametrize("rhythm", LETHAL)
def test_lethal_rhythms_are_marked_patient_first(rhythm, seed):
    ecg = strip(rhythm, seed, duration_s=20.0)
    pattern = {"asystole": "standstill", "wide-tachycardia": "wide-fast"}.get(
        rhythm, "fibrillation-or-flutter"
    )
    if rhythm == "wide-tachycardia" and ecg.scene.turn_s > 9:
        assert ecg.patient_first == ()  # less than 10 s of it
        return
    ((begin, end, found),) = ecg.patient_first
    assert found == pattern
    assert end == pytest.approx(20.0)
    assert begin == pytest.approx(ecg.scene.turn_s, abs=1.8)


@pytest.mark.parametrize(
    "rhythm", ["sinus", "sinus-slow", "ectopy-ventricular", "complete-block", "ventricular-pacing"]
)
def test_other_rhythms_are_not_marked(rhythm):
    for seed in range(25):
        ecg = strip(rhythm, seed)
        assert ecg.patient_first == (), (rhythm, seed)


@pytest.mark.parametrize("vf_type", VF_TYPES)
@pytest.mark.parametrize("seed", range(4))
def test_ventricular_fibrillation_lies_from_3_to_9_hz_and_has_no_beats(vf_type, seed):
    rng = np.random.default_rng(seed)
    scene = draw_scene(rng, rhythm="ventricular-fibrillation", duration_s=30.0)
    scene = replace(scene, vf_type=vf_type, turn_s=0.0)
    ecg = simulate(scene, rng)
    assert len(ecg.beats_s) == 0 and not ecg.has_p
    f_hz, power = welch(ecg.signal_mv, 500.0, nperseg=2000, axis=1)
    total = power[:, f_hz > 0.5].sum(axis=1)
    inside = power[:, (f_hz >= 3) & (f_hz <= 9)].sum(axis=1)
    assert np.median(inside / total) > 0.75
    assert (f_hz[power.argmax(axis=1)] < 0.5 * 500).all()
    size = np.median(ecg.signal_mv.std(axis=1))
    assert 0.01 < size < 2.5


def test_fibrillation_types_differ_in_size():
    def size(vf_type):
        out = []
        for seed in range(8):
            rng = np.random.default_rng(seed)
            scene = draw_scene(rng, rhythm="ventricular-fibrillation")
            ecg = simulate(replace(scene, vf_type=vf_type, turn_s=0.0), rng)
            out.append(np.median(ecg.signal_mv.std(axis=1)))
        return np.median(out)

    assert size("fine") < 0.5 * size("medium") < size("coarse")


@pytest.mark.parametrize("seed", range(5))
def test_ventricular_flutter_is_nearly_a_sine_of_200_to_300_a_minute(seed):
    rng = np.random.default_rng(seed)
    scene = replace(draw_scene(rng, rhythm="ventricular-flutter", duration_s=30.0), turn_s=0.0)
    ecg = simulate(scene, rng)
    f_hz, power = welch(ecg.signal_mv[1], 500.0, nperseg=4000)
    top = f_hz[power.argmax()]
    assert 200 / 60 - 0.3 < top < 300 / 60 + 0.3
    assert power[np.abs(f_hz - top) < 0.7].sum() / power.sum() > 0.7


@pytest.mark.parametrize("seed", range(5))
def test_torsades_twists(seed):
    rng = np.random.default_rng(seed)
    scene = replace(draw_scene(rng, rhythm="torsades", duration_s=30.0), turn_s=0.0)
    ecg = simulate(scene, rng)
    f_hz, power = welch(ecg.signal_mv[1], 500.0, nperseg=4000)
    assert 2.3 < f_hz[power.argmax()] < 5.0
    peak = np.array([np.abs(part).max() for part in np.array_split(ecg.signal_mv[1], 75)])
    assert peak.max() > 2 * peak.min()


def test_asystole_is_nearly_flat_and_may_hold_ps():
    seen = set()
    for seed in range(30):
        rng = np.random.default_rng(seed)
        scene = replace(draw_scene(rng, rhythm="asystole"), turn_s=0.0)
        ecg = simulate(scene, rng)
        assert len(ecg.beats_s) == 0
        assert np.abs(ecg.signal_mv).max() < (0.75 if ecg.has_p else 0.06)
        assert np.isnan(ecg.st_mv).all()
        seen.add(ecg.has_p)
    assert seen == {True, False}


def test_recorder_bands_take_what_they_should():
    rng = np.random.default_rng(11)
    scene = draw_scene(rng, rhythm="sinus")
    state = np.random.default_rng(1)
    wide = simulate(replace(scene, highpass_hz=0.05, lowpass_hz=150.0), state)
    narrow = simulate(replace(scene, highpass_hz=0.05, lowpass_hz=25.0), np.random.default_rng(1))
    f_hz, power_wide = welch(wide.signal_mv[7], 500.0, nperseg=1000)
    power_narrow = welch(narrow.signal_mv[7], 500.0, nperseg=1000)[1]
    above, below = f_hz > 60, (f_hz > 2) & (f_hz < 10)
    assert power_narrow[above].sum() < 0.01 * power_wide[above].sum()
    assert power_narrow[below].sum() == pytest.approx(power_wide[below].sum(), rel=0.02)
    lifted = simulate(replace(scene, highpass_hz=1.0, lowpass_hz=150.0), np.random.default_rng(1))
    power_lifted = welch(lifted.signal_mv[7], 500.0, nperseg=1000)[1]
    first_order = f_hz**2 / (f_hz**2 + 1.0**2)  # closed formula of a first-order high-pass at 1 Hz
    heart = (f_hz > 0.8) & (f_hz < 8)
    assert power_lifted[heart].sum() == pytest.approx((power_wide * first_order)[heart].sum(), rel=0.05)
    assert np.array_equal(wide.beats_s, lifted.beats_s)
    np.testing.assert_array_equal(wide.st_mv, lifted.st_mv)


def test_the_beat_time_is_the_largest_moment_of_qrs():
    rng = np.random.default_rng(21)
    scene = unfiltered(draw_scene(rng, rhythm="sinus-slow", fs_hz=2000.0))
    ecg = simulate(scene, rng)
    size = np.linalg.norm(dipole(ecg), axis=0)
    for beat_s, on_s, off_s in zip(ecg.beats_s[1:-1], ecg.qrs_on_s[1:-1], ecg.qrs_off_s[1:-1], strict=True):
        part = slice(int(on_s * 2000), int(off_s * 2000))
        assert (part.start + size[part].argmax()) / 2000 == pytest.approx(beat_s, abs=0.002)


@pytest.mark.parametrize(
    "bad", [{"rhythm": "samba"}, {"duration_s": 0.5}, {"duration_s": float("nan")}, {"fs_hz": 10.0}]
)
def test_what_cannot_be_is_refused(bad):
    with pytest.raises(UsageError):
        draw_scene(np.random.default_rng(0), **bad)


def test_rhythm_weights_are_obeyed():
    rng = np.random.default_rng(0)
    drawn = {
        draw_scene(rng, rhythm_weights={"sinus": 1.0, "lbbb": 1.0, "pause": 0.0}).rhythm for _ in range(40)
    }
    assert drawn == {"sinus", "lbbb"}
