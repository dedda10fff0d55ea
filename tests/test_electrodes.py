"""Lead algebra: laws that must hold whatever the signal."""

from __future__ import annotations

import numpy as np
import pytest

from sigguard.electrodes import (
    ELECTRODES,
    LEAD_FROM_ELECTRODES,
    LEADS_12,
    beat_free_residual,
    einthoven_error,
    electrode_noise,
    goldberger_error,
    swap_matrix,
)
from sigguard.simulate.ecg import draw_scene, simulate

CHEST = ("V1", "V2", "V3", "V4", "V5", "V6")


def potentials(seed: int = 0, n: int = 5000, power: float = 1.0) -> np.ndarray:
    """(9, n) independent disturbances of different strength, coloured."""
    rng = np.random.default_rng(seed)
    steps = rng.normal(size=(9, n))
    return power * np.linspace(0.02, 0.3, 9)[:, None] * (steps + np.roll(steps, 1, axis=1))


def found(residual: np.ndarray, leads=LEADS_12) -> dict[str, tuple[float, float]]:
    return {f.electrode: (f.noise_uv, f.share) for f in electrode_noise(residual, leads)}


@pytest.mark.parametrize("worst", ELECTRODES)
@pytest.mark.parametrize("leads", [LEADS_12, ("I", "II", *CHEST), ("aVF", "V3", "III", *CHEST)])
def test_the_loud_electrode_is_named_first_with_its_rms(worst, leads):
    rng = np.random.default_rng(1)
    e = 0.01 * rng.normal(size=(9, 5000))
    e[ELECTRODES.index(worst)] += 0.3 * rng.normal(size=5000)
    leads = tuple(dict.fromkeys(leads))
    x = LEAD_FROM_ELECTRODES[[LEADS_12.index(name) for name in leads]] @ e
    first = electrode_noise(x, leads)[0]
    assert first.electrode == worst
    assert first.noise_uv == pytest.approx(300, rel=0.03)
    assert first.share > 0.95


@pytest.mark.parametrize("leads", [("I", "II"), ("I", "II", "III", "aVR", "aVL", "aVF"), ("II", "V1", "I")])
def test_fewer_leads_still_tell_their_own_electrodes(leads):
    e = potentials()
    x = LEAD_FROM_ELECTRODES[[LEADS_12.index(name) for name in leads]] @ e
    got = found(x, leads)
    assert set(got) == {"RA", "LA", "LL"} | ({"C1"} if "V1" in leads else set())
    for name, (noise_uv, _) in got.items():
        assert noise_uv == pytest.approx(1e3 * e[ELECTRODES.index(name)].std(), rel=0.15)


def test_relabelling_electrodes_relabels_the_finding():
    e = potentials(2)
    plain = found(LEAD_FROM_ELECTRODES @ e)
    order = np.random.default_rng(3).permutation(9)
    moved = found(LEAD_FROM_ELECTRODES @ e[order])
    for place, origin in enumerate(order):
        assert moved[ELECTRODES[place]] == pytest.approx(plain[ELECTRODES[origin]], rel=1e-6, abs=1e-9)


def test_what_moves_all_electrodes_changes_nothing():
    e = potentials(4)
    common = 5.0 * np.sin(np.arange(e.shape[1]) / 7)
    plain, moved = found(LEAD_FROM_ELECTRODES @ e), found(LEAD_FROM_ELECTRODES @ (e + common))
    for name in ELECTRODES:
        assert moved[name] == pytest.approx(plain[name], rel=1e-6)


def test_redundant_leads_and_their_order_change_nothing():
    x = LEAD_FROM_ELECTRODES @ potentials(5)
    eight = ["V6", "II", "V1", "I", "V2", "V5", "V4", "V3"]
    got = found(x[[LEADS_12.index(name) for name in eight]], eight)
    for name, pair in found(x).items():
        assert got[name] == pytest.approx(pair, rel=1e-6, abs=1e-9)


def test_scaling_scales_the_rms_and_leaves_the_shares():
    x = LEAD_FROM_ELECTRODES @ potentials(6)
    small, large = found(x), found(10 * x)
    for name in ELECTRODES:
        assert large[name][0] == pytest.approx(10 * small[name][0], rel=1e-6)
        assert large[name][1] == pytest.approx(small[name][1], rel=1e-6)
    assert sum(share for _, share in small.values()) == pytest.approx(1.0)


@pytest.mark.parametrize("leads", [("II",), ("MLII", "V5"), ("V1", "V2", "V3"), ("I",), ("I", "V1")])
def test_silent_where_the_leads_cannot_tell(leads):
    x = np.random.default_rng(7).normal(size=(len(leads), 1000))
    assert electrode_noise(x, leads) == []


def test_missing_flat_and_empty_input():
    x = LEAD_FROM_ELECTRODES @ potentials(8)
    gap = x.copy()
    gap[3, 1000:2000] = np.nan
    assert electrode_noise(gap, LEADS_12)[0].electrode == electrode_noise(x, LEADS_12)[0].electrode
    lost = x.copy()
    lost[LEADS_12.index("V6")] = np.nan
    assert "C6" not in found(lost)
    assert electrode_noise(np.full((12, 100), np.nan), LEADS_12) == []
    assert electrode_noise(np.empty((12, 0)), LEADS_12) == []
    assert all(f.noise_uv == 0 and f.share == 0 for f in electrode_noise(np.zeros((12, 100)), LEADS_12))


# textbook table of what an exchange of electrodes does to the limb leads: lead seen → sign and true lead
SWAPS = {
    ("LA", "RA"): {"I": "-I", "II": "III", "III": "II", "aVR": "aVL", "aVL": "aVR", "aVF": "aVF"},
    ("RA", "LL"): {"I": "-III", "II": "-II", "III": "-I", "aVR": "aVF", "aVF": "aVR", "aVL": "aVL"},
    ("LA", "LL"): {"I": "II", "II": "I", "III": "-III", "aVL": "aVF", "aVF": "aVL", "aVR": "aVR"},
}


@pytest.mark.parametrize("pair", SWAPS)
def test_limb_swaps_do_what_the_textbook_says(pair):
    x = LEAD_FROM_ELECTRODES @ potentials(9)
    seen = swap_matrix(LEADS_12, *pair) @ x
    for lead, true in SWAPS[pair].items():
        sign = -1 if true.startswith("-") else 1
        assert np.allclose(seen[LEADS_12.index(lead)], sign * x[LEADS_12.index(true.lstrip("-"))])
    for lead in CHEST:  # Wilson's terminal does not care which limb is which
        assert np.allclose(seen[LEADS_12.index(lead)], x[LEADS_12.index(lead)])


def test_a_chest_swap_exchanges_its_two_leads_and_unknown_names_are_refused():
    x = LEAD_FROM_ELECTRODES @ potentials(10)
    seen = swap_matrix(LEADS_12, "C1", "C2") @ x
    assert np.allclose(seen[6], x[7]) and np.allclose(seen[7], x[6])
    with pytest.raises(ValueError, match="expected leads"):
        swap_matrix(("I", "II"), "RA", "XX")
    with pytest.raises(ValueError, match="cannot show"):
        swap_matrix(("I", "V1"), "LA", "LL")


def test_lead_laws_hold_for_any_potentials_and_break_for_a_late_lead():
    x = LEAD_FROM_ELECTRODES @ potentials(11)
    assert einthoven_error(x, LEADS_12) == pytest.approx(0, abs=1e-9)
    assert goldberger_error(x, LEADS_12) == pytest.approx(0, abs=1e-9)
    swapped = swap_matrix(LEADS_12, "LA", "RA") @ x
    assert einthoven_error(swapped, LEADS_12) == pytest.approx(0, abs=1e-9)
    late = x.copy()
    late[1] = np.roll(late[1], 5)
    assert einthoven_error(late, LEADS_12) > 10
    assert np.isnan(einthoven_error(x[:2], ("I", "II")))
    assert np.isnan(goldberger_error(np.full((12, 50), np.nan), LEADS_12))


def test_einthoven_error_is_the_rms_of_what_is_added_to_one_lead():
    x = LEAD_FROM_ELECTRODES @ potentials(12)
    x[0] += 0.05 * np.sqrt(2) * np.sin(2 * np.pi * np.arange(x.shape[1]) / 50)
    assert einthoven_error(x, LEADS_12) == pytest.approx(50, rel=1e-6)


def test_beat_free_residual_names_the_disturbed_electrode_in_simulated_leads():
    right = 0
    for seed in range(20):
        rng = np.random.default_rng(seed)
        ecg = simulate(draw_scene(rng, rhythm="sinus", fs_hz=250.0), rng)
        k = int(rng.integers(9))
        noise = np.cumsum(rng.normal(size=ecg.n_samples))
        noise -= np.linspace(0, noise[-1], noise.size)
        x = ecg.signal_mv + np.outer(LEAD_FROM_ELECTRODES[:, k], 0.3 * noise / noise.std())
        right += electrode_noise(beat_free_residual(x, 250.0), ecg.leads)[0].electrode == ELECTRODES[k]
    assert right >= 18


def test_beat_free_residual_keeps_the_shape_and_takes_gaps():
    x = np.random.default_rng(13).normal(size=(3, 900))
    x[0, 100:300] = np.nan
    out = beat_free_residual(x, 300.0)
    assert out.shape == x.shape and np.isnan(out[0, 100:300]).all()
    assert beat_free_residual(np.empty((2, 0)), 300.0).shape == (2, 0)
    flat = beat_free_residual(np.ones((2, 900)), 300.0)
    assert np.allclose(flat[np.isfinite(flat)], 0)


def test_real_leads_with_recorded_noise_on_one_electrode(open_data):
    wfdb = pytest.importorskip("wfdb")
    from sigguard.simulate.recorded import NoiseBank

    bank = NoiseBank(open_data / "nstdb", "test")
    rng = np.random.default_rng(0)
    records = sorted((open_data / "ludb").glob("*.hea"))[:25]
    right = 0
    for path in records:
        record = wfdb.rdrecord(str(path.with_suffix("")))
        k = int(rng.integers(9))
        noise = bank.draw(
            rng, str(rng.choice(("em", "ma", "bw"))), n_samples=record.sig_len, fs_hz=float(record.fs)
        )
        upper = [lead.upper() for lead in record.sig_name]
        rows = LEAD_FROM_ELECTRODES[[[name.upper() for name in LEADS_12].index(name) for name in upper]]
        x = record.p_signal.T + np.outer(rows[:, k], 0.3 * noise / noise.std())
        right += electrode_noise(beat_free_residual(x, record.fs), upper)[0].electrode == ELECTRODES[k]
    assert right >= 0.9 * len(records)
