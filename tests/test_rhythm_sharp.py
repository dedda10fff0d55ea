"""Pacing spikes are no beats, a QRS of fast deflections is one, and neither may hide fibrillation. All on simulated leads."""

from __future__ import annotations

import numpy as np
import pytest

from sigguard import patient_first
from sigguard.findings import PatientFirst
from sigguard.patient_first import MARGIN_S, cut_findings, find_patient_first, join_findings
from sigguard.rhythm_shape import grid_samples, prepare, sharpness_lag, without_spikes
from sigguard.rhythm_sharp import sharp_beats
from sigguard.simulate.disturbance import draw_disturbance
from sigguard.simulate.ecg import draw_scene, simulate
from sigguard.simulate.rhythm_noise import draw_like_rhythm, draw_pacing_spikes, with_fast_qrs

FS = 250.0
NONE = np.empty(0)


def search(x: np.ndarray) -> list[PatientFirst]:
    x = np.atleast_2d(x)
    return find_patient_first(x, FS, [f"L{i}" for i in range(len(x))], lead_beats_s=[NONE] * len(x))


def scene(rhythm: str, seed: int, *, duration_s: float = 24.0):
    rng = np.random.default_rng([seed, 21])
    return simulate(draw_scene(rng, rhythm=rhythm, fs_hz=FS, duration_s=duration_s), rng), rng


def fast_qrs(seed: int, *, rhythm: str = "sinus", duration_s: float = 24.0) -> np.ndarray:
    ecg, rng = scene(rhythm, seed, duration_s=duration_s)
    x = ecg.signal_mv[int(rng.integers(12))]
    x = with_fast_qrs(x, rng, on_s=ecg.qrs_on_s, off_s=ecg.qrs_off_s, fs_hz=FS)
    return x + 0.008 * rng.standard_normal(len(x))


def like_a_sine(n: int, *, rate_bpm: float = 105.0, p_mv: float = 0.28) -> np.ndarray:
    """P and T half a beat apart, and a QRS of five deflections of some 8 ms."""
    t, rr = np.arange(n) / FS, 60 / rate_bpm
    x = np.zeros(n)
    for b in np.arange(0.3, n / FS, rr):
        x += 0.4 * np.exp(-0.5 * ((t - b - 0.5 * rr) / 0.07) ** 2)
        x += p_mv * np.exp(-0.5 * ((t - b - 0.96 * rr) / 0.06) ** 2)
        for k in range(5):
            x += 0.7 * (-1) ** k * np.exp(-0.5 * ((t - b + 0.02 - 0.01 * k) / 0.0035) ** 2)
    return x


def hiss(n: int, seed: int) -> np.ndarray:
    return 0.008 * np.random.default_rng(seed).normal(size=n)


def test_nothing_is_taken_from_leads_without_pacing():
    for rhythm in ("sinus", "sinus-fast", "ventricular-fibrillation", "wide-tachycardia"):
        for seed in range(5):
            ecg, _ = scene(rhythm, seed)
            assert without_spikes(ecg.signal_mv, FS) is ecg.signal_mv
    x = np.stack([fast_qrs(seed) for seed in range(5)])
    kept = without_spikes(x, FS)
    assert np.mean(kept != x) < 0.002  # a lone deflection of them may look like a spike
    short = np.zeros((1, 3))
    assert without_spikes(short, FS) is short


@pytest.mark.parametrize("fs_hz", [200.0, 250.0, 360.0, 500.0, 1000.0])
def test_spikes_are_taken_out_and_what_lies_under_them_stays(fs_hz):
    n = int(20 * fs_hz)
    slow = 0.4 * np.sin(2 * np.pi * 4.5 * np.arange(n) / fs_hz)[None]
    x = slow.copy()
    at = np.arange(int(0.5 * fs_hz), n - 10, int(0.8 * fs_hz))
    x[:, at] += 2.0  # one sample wide
    across_s = (
        2 * sharpness_lag(fs_hz) / fs_hz
    )  # a straight line over so much to either side stands for the sine
    assert (
        np.abs(without_spikes(x, fs_hz) - slow).max() < 0.4 * (1 - np.cos(2 * np.pi * 4.5 * across_s)) + 1e-6
    )


def test_fibrillation_under_a_pacemaker_that_goes_on_is_raised():
    raised = []
    for seed in range(60):
        rhythm = ("ventricular-fibrillation", "ventricular-flutter", "torsades")[seed % 3]
        ecg, rng = scene(rhythm, seed)
        x = ecg.signal_mv[1] + draw_pacing_spikes(rng, ecg.n_samples, fs_hz=FS)
        found = search(x + 0.008 * rng.standard_normal(ecg.n_samples))
        raised += [any(f.start_s <= a + 10 and f.end_s > a for f in found) for a, _, _ in ecg.patient_first]
    assert np.mean(raised) >= 0.96


def test_spikes_that_no_beat_follows_are_a_standstill():
    raised = 0
    for seed in range(20):
        ecg, rng = scene("sinus", seed, duration_s=30.0)
        x = np.where(np.arange(ecg.n_samples) < 15 * FS, ecg.signal_mv[1], 0.0)
        t = np.arange(ecg.n_samples)
        spikes = 2.0 * (t % int(0.9 * FS) == 0)  # 2 mV, one sample wide
        found = search(x + spikes + 0.008 * rng.standard_normal(ecg.n_samples))
        raised += any(f.pattern == "standstill" and f.start_s < 25 and f.end_s > 25 for f in found)
    assert raised == 20


def test_a_qrs_of_fast_deflections_clears_what_looks_like_a_sine(monkeypatch):
    n = int(24 * FS)
    rows = [
        like_a_sine(n, rate_bpm=rate, p_mv=p_mv) + hiss(n, rate)
        for rate in range(96, 132, 4)
        for p_mv in (0.24, 0.28, 0.31)
    ]
    rows += [fast_qrs(seed, rhythm=("sinus", "sinus-fast")[seed % 2]) for seed in range(60)]
    with_rule = [any(f.pattern == "fibrillation-or-flutter" for f in search(x)) for x in rows]
    monkeypatch.setattr(patient_first, "sharp_beats", lambda work: np.zeros(1, bool)[None])
    without = [any(f.pattern == "fibrillation-or-flutter" for f in search(x)) for x in rows]
    assert sum(without) >= 5  # the cases are hard indeed
    assert sum(with_rule) <= sum(without) / 2


@pytest.mark.parametrize("seed", range(12))
def test_flutter_in_step_with_a_pacemaker_is_not_taken_for_beats(seed):
    rng, n = np.random.default_rng(seed), int(24 * FS)
    t, rate_bpm = np.arange(n) / FS, rng.uniform(55, 110)
    f_hz = (
        max(2, round(rng.uniform(3, 5.5) * 60 / rate_bpm)) * rate_bpm / 60
    )  # a whole number of waves a spike
    flutter = np.cos(2 * np.pi * f_hz * t) + rng.uniform(0, 0.5) * np.cos(4 * np.pi * f_hz * t + 1)
    x = rng.uniform(0.1, 0.7) * flutter + draw_pacing_spikes(rng, n, fs_hz=FS, rate_bpm=rate_bpm)
    assert not sharp_beats(prepare((x + 0.006 * rng.standard_normal(n))[None], FS)).any()


@pytest.mark.parametrize("kind", ["compressions", "muscle", "spikes"])
def test_what_lies_on_fibrillation_makes_no_beats_of_it(kind):
    shown = []
    for seed in range(30):
        ecg, rng = scene("ventricular-fibrillation", seed)
        start = round(ecg.scene.turn_s * FS)
        x, n = ecg.signal_mv[1], ecg.n_samples
        size = x[start:].std()
        if kind == "compressions":
            press = draw_like_rhythm(rng, "compressions", n_samples=n, fs_hz=FS)
            x = x + 2 * size * press
            for at in np.flatnonzero((press[:-1] < 0) & (press[1:] >= 0)):  # a contact that clicks each time
                x[at : at + 12] += size * rng.uniform(1, 4) * rng.standard_normal(len(x[at : at + 12]))
        elif kind == "muscle":
            x = x + rng.uniform(0.3, 1) * size * draw_disturbance(
                rng, "muscle", n_samples=n, fs_hz=FS, envelope="bursting"
            )
        else:
            x = x + draw_pacing_spikes(rng, n, fs_hz=FS)
        shown.append(sharp_beats(prepare(x[None], FS))[0, int(np.ceil(ecg.scene.turn_s)) :])
    assert np.concatenate(shown).mean() <= (0.01 if kind == "compressions" else 0.0)


def test_blocks_with_margin_find_what_the_whole_finds():
    n = int(150 * FS)
    t = np.arange(n) / FS
    x = like_a_sine(n)
    vf = (t > 80) & (t < 100)
    x = np.where(vf, 0.6 * np.sin(2 * np.pi * 4.3 * t + 1.5 * np.sin(t)), x)
    x = (x + hiss(n, 1))[None]
    whole = join_findings(search(x))
    assert any(f.pattern == "fibrillation-or-flutter" and f.start_s < 90 < f.end_s for f in whole)
    grid = grid_samples(FS)
    margin = round(MARGIN_S * FS) // grid * grid
    for core in (20 * grid, 37 * grid):
        parts: list[PatientFirst] = []
        for start in range(0, n, core):
            first, last = max(0, start - margin), min(n, start + core + margin)
            end_s = min(n, start + core) / FS
            parts += cut_findings(
                search(x[:, first:last]), offset_s=first / FS, start_s=start / FS, end_s=end_s
            )
        assert [(f.pattern, round(f.start_s, 2), round(f.end_s, 2)) for f in join_findings(parts)] == [
            (f.pattern, round(f.start_s, 2), round(f.end_s, 2)) for f in whole
        ]
