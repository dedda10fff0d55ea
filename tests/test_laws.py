"""Laws of the whole way from samples to report: what sign, gain, offset, order, time and cutting may change."""

from __future__ import annotations

import numpy as np
import pytest
from simulated import strip, strips

from sigguard import Recording, check
from sigguard.report.document import Report
from sigguard.segments import MEASUREMENTS

ST = MEASUREMENTS.index("st")
LEADS = [1, 6, 10]  # II, V1, V5


def report_of(x: np.ndarray, *, fs_hz: float = 500.0, leads=("II", "V1", "V5"), **options) -> Report:
    return check(Recording(x, fs_hz, leads), **options)


def signals(n: int = 6, **kind) -> list[np.ndarray]:
    return [ecg.signal_mv[LEADS] for ecg in strips(n, first_seed=300, duration_s=20.0, **kind)]


def agree(a: Report, b: Report, *, columns=slice(0, 4)) -> np.ndarray:
    """Per measurement, the share of lead segments on which both say the same of reliability."""
    return (a.segments.reliable == b.segments.reliable)[:, columns]


@pytest.mark.parametrize(("factor", "least"), [(-1.0, 0.93), (0.5, 0.8), (2.0, 0.9)])
def test_sign_and_gain_scale_st_and_leave_times(factor, least):
    """At half the gain the smallest P and T waves sink below what can be seen, as they would on paper."""
    same = []
    for x in signals():
        a, b = report_of(x), report_of(factor * x)
        np.testing.assert_allclose(a.beats, b.beats, atol=1)
        both = np.isfinite(a.segments.value[:, ST]) & np.isfinite(b.segments.value[:, ST])
        np.testing.assert_allclose(
            b.segments.value[both, ST], factor * a.segments.value[both, ST], atol=0.003
        )
        same.append(agree(a, b))
    assert np.concatenate(same).mean() > least


def test_an_electrode_offset_changes_nothing():
    for x in signals(3):
        a, b = report_of(x), report_of(x + np.array([[120.0], [-3.0], [0.7]]))
        np.testing.assert_array_equal(a.beats, b.beats)
        np.testing.assert_array_equal(a.segments.reliable, b.segments.reliable)
        np.testing.assert_allclose(a.segments.value, b.segments.value, atol=0.05)


def test_the_order_of_leads_changes_their_order_only():
    for x in signals(3):
        a = report_of(x)
        b = report_of(x[::-1], leads=("V5", "V1", "II"))
        np.testing.assert_allclose(a.beats, b.beats, atol=1)
        turned = np.arange(len(a.segments)).reshape(-1, 3)[:, ::-1].ravel()
        np.testing.assert_allclose(a.segments.value, b.segments.value[turned], atol=1e-3)
        np.testing.assert_array_equal(a.segments.reliable, b.segments.reliable[turned])
        assert a.verdict == b.verdict
        for lead in ("II", "V1", "V5"):
            np.testing.assert_array_equal(a.lead_beats[lead], b.lead_beats[lead])


def test_a_lead_is_measured_alike_alone_and_in_company():
    """Scores and values of a lead are its own; only 'too small here' listens to the others."""
    for x in signals(3):
        together, alone = report_of(x), report_of(x[:1], leads=("II",))
        mine = together.segments.lead_index == 0
        np.testing.assert_allclose(together.segments.value[mine], alone.segments.value, atol=1e-3)
        np.testing.assert_allclose(together.segments.score[mine], alone.segments.score, atol=1e-3)


def test_a_shift_by_whole_segments_shifts_the_table():
    ecg = strip(310, duration_s=60.0)
    x = ecg.signal_mv[LEADS]
    a, b = report_of(x), report_of(x[:, 10000:])  # 20 s later: two segments
    later = a.segments.start_s >= 30  # the first left has no neighbour before it any more
    np.testing.assert_allclose(b.segments.start_s[3:], a.segments.start_s[later] - 20)
    np.testing.assert_allclose(b.segments.value[3:], a.segments.value[later], atol=1e-3)
    np.testing.assert_array_equal(b.segments.reliable[3:], a.segments.reliable[later])
    inner = a.lead_beats["V5"][a.lead_beats["V5"] > 15500] - 10000
    mine = b.lead_beats["V5"][b.lead_beats["V5"] > 5500]
    np.testing.assert_allclose(mine, inner, atol=1)


def test_a_shift_by_a_third_of_a_second_moves_beats_with_it():
    for ecg in strips(4, first_seed=320, duration_s=20.0):
        x = ecg.signal_mv[LEADS]
        a, b = report_of(x[:, :9500]), report_of(x[:, 185:9685])
        at = a.beats[(a.beats > 600) & (a.beats < 9300)]
        assert np.mean([np.abs(b.beats + 185 - t).min() <= 3 for t in at]) > 0.97


@pytest.mark.parametrize("fs_hz", [250.0, 1000.0])
def test_the_rate_of_sampling_decides_little(fs_hz):
    """The same patients, sampled at another rate: what is reliable agrees on nine of ten."""
    same = []
    for a, b in zip(signals(6), signals(6, fs_hz=fs_hz), strict=True):
        same.append(agree(report_of(a), report_of(b, fs_hz=fs_hz), columns=slice(0, 5)))
    assert np.concatenate(same).mean() > 0.85


def test_noise_on_one_lead_is_that_leads_trouble():
    ecg = strip(2)
    x = ecg.signal_mv.copy()
    x[8] += 0.5 * np.random.default_rng(0).normal(size=5000)
    clean = check(Recording(ecg.signal_mv, 500.0, ecg.leads)).segments
    noisy = check(Recording(x, 500.0, ecg.leads)).segments
    others = noisy.lead_index != 8
    np.testing.assert_array_equal(noisy.score[others], clean.score[others])
    assert noisy.score[~others].mean() < clean.score[~others].mean() - 0.2
