"""Whose noise, by kind: laws of the estimate, and what may and may not be said."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sigguard.electrode_algebra import (
    ELECTRODES,
    LEAD_FROM_ELECTRODES,
    LEADS_12,
    algebra_of,
    einthoven_error,
    goldberger_error,
    lead_in_electrodes,
    swap_matrix,
)
from sigguard.electrode_powers import (
    KINDS,
    ElectrodePowers,
    electrode_powers,
    independent_powers,
    join_powers,
)
from sigguard.electrodes import hum_of_one, whose_noise, worth_stating
from sigguard.features import FEATURE_NAMES
from sigguard.measure import analyse
from sigguard.simulate.disturbance import draw_disturbance
from sigguard.simulate.ecg import draw_scene, simulate

FS = 500.0


def powers_of(x_mv: np.ndarray, leads=LEADS_12, n_strips: int = 1) -> ElectrodePowers | None:
    strips = np.stack(np.split(x_mv, n_strips, axis=1))
    n_leads, n = strips.shape[1:]
    analysis = analyse(strips.reshape(-1, n), FS)
    hum = analysis.features[:, [FEATURE_NAMES.index("mains_hz"), FEATURE_NAMES.index("mains_uv")]]
    start = np.arange(n_strips) * n / FS
    return electrode_powers(
        strips, FS, tuple(leads), analysis, start_s=start, end_s=start + n / FS,
        mains_hz=hum[:, 0].reshape(n_strips, n_leads), mains_uv=hum[:, 1].reshape(n_strips, n_leads),
    )  # fmt: skip


@pytest.fixture(scope="module")
def ecg_mv() -> np.ndarray:
    rng = np.random.default_rng(3)
    return simulate(draw_scene(rng, rhythm="sinus", fs_hz=FS, duration_s=10.0), rng).signal_mv


def noise(seed: int, kind: str, **more) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return draw_disturbance(rng, kind, n_samples=5000, fs_hz=FS, envelope="constant", **more)


def on(electrode: str, x: np.ndarray) -> np.ndarray:
    return np.outer(LEAD_FROM_ELECTRODES[:, ELECTRODES.index(electrode)], x)


def moments(seed: int, n: int, shared: float = 0.0) -> tuple[np.ndarray, np.ndarray]:
    """(potentials (n, 400), their centred second moments (1, n, n))."""
    rng = np.random.default_rng(seed)
    e = rng.uniform(0.1, 3.0, n)[:, None] * rng.normal(size=(n, 400)) + shared * rng.normal(size=400)
    return e, centred_moments(e)


def centred_moments(e: np.ndarray) -> np.ndarray:
    c = e - e.mean(axis=0)
    return (c @ c.T / c.shape[1])[None]


# ── laws ──


@given(seed=st.integers(0, 10**6), n=st.integers(3, 9))
@settings(max_examples=50, deadline=None)
def test_relabelling_electrodes_relabels_the_finding(seed, n):
    e, squares = moments(seed, n)
    order = np.random.default_rng(seed + 1).permutation(n)
    plain, total, fit = independent_powers(squares)
    moved, total_2, fit_2 = independent_powers(centred_moments(e[order]))
    assert moved == pytest.approx(plain[order], rel=1e-6, abs=1e-9)
    assert (total_2, fit_2) == pytest.approx((total, fit), rel=1e-6)


@given(seed=st.integers(0, 10**6), shared=st.floats(0.1, 100.0))
@settings(max_examples=50, deadline=None)
def test_what_moves_all_electrodes_changes_nothing(seed, shared):
    rng = np.random.default_rng(seed)
    e = rng.normal(size=(9, 300))
    algebra = algebra_of(LEADS_12)
    common = shared * rng.normal(size=300)
    plain = algebra.to_potentials @ (LEAD_FROM_ELECTRODES @ e)
    moved = algebra.to_potentials @ (LEAD_FROM_ELECTRODES @ (e + common))
    assert np.allclose(plain, moved, atol=1e-9 * shared + 1e-9)
    assert np.allclose(plain, e - e.mean(axis=0), atol=1e-9)


@given(seed=st.integers(0, 10**6), pair=st.permutations(ELECTRODES))
@settings(max_examples=60, deadline=None)
def test_lead_laws_hold_after_every_swap(seed, pair):
    x = LEAD_FROM_ELECTRODES @ np.random.default_rng(seed).normal(size=(9, 200))
    seen = swap_matrix(LEADS_12, pair[0], pair[1]) @ x
    assert einthoven_error(seen, LEADS_12) == pytest.approx(0, abs=1e-7)
    assert goldberger_error(seen, LEADS_12) == pytest.approx(0, abs=1e-7)


@pytest.mark.parametrize("first, second", [("RA", "C3"), ("LA", "LL"), ("C1", "C6"), ("RA", "LA")])
def test_relabelled_recordings_get_the_relabelled_name(ecg_mv, first, second):
    x = ecg_mv + on(first, 0.3 * noise(1, "motion"))
    y = ecg_mv + on(second, 0.3 * noise(1, "motion"))
    assert whose_noise(powers_of(x))[0][0].electrode == first
    assert whose_noise(powers_of(y))[0][0].electrode == second


# ── what is said ──


def test_each_kind_names_its_own_electrode(ecg_mv):
    x = ecg_mv + on("C3", 0.5 * noise(2, "wander")) + on("RA", 0.06 * noise(3, "muscle"))
    found, _ = whose_noise(powers_of(x))
    kinds = {e.electrode: {k.kind: k for k in e.kinds} for e in found}
    assert "wander" in kinds["C3"] and "muscle" in kinds["RA"]
    assert "wander" not in kinds["RA"] and "muscle" not in kinds["C3"]
    assert (
        40 < kinds["RA"]["muscle"].noise_uv < 120
    )  # a line seen in muscle noise narrows the band it is read from
    assert all(not kinds[e] for e in ELECTRODES if e not in ("C3", "RA"))
    assert sum(e.share for e in found) == pytest.approx(1.0)


def test_noise_on_one_electrode_has_about_its_true_size(ecg_mv):
    found, _ = whose_noise(powers_of(ecg_mv + on("LL", 0.06 * noise(4, "muscle"))))
    muscle = next(k for k in found[0].kinds if k.kind == "muscle")
    assert found[0].electrode == "LL" and muscle.noise_uv == pytest.approx(60, rel=0.35)


@pytest.mark.parametrize("seed", range(6))
def test_hum_through_the_cable_is_nobodys_and_hum_of_one_electrode_is_its(ecg_mv, seed):
    hum = 0.05 * noise(seed, "mains", mains_hz=50.0)
    share = np.random.default_rng(seed).uniform(-0.3, 1.7, 9)
    found, common = whose_noise(powers_of(ecg_mv + LEAD_FROM_ELECTRODES @ np.outer(share, hum)))
    assert not any(k.kind == "mains" for e in found for k in e.kinds)
    assert [c.kind for c in common] == ["mains"]
    found, common = whose_noise(powers_of(ecg_mv + on("C4", hum)))
    assert [e.electrode for e in found if any(k.kind == "mains" for k in e.kinds)] == ["C4"]
    assert common == ()


def test_breathing_moves_many_and_one_loose_contact_one(ecg_mv):
    breath = 0.4 * np.sin(2 * np.pi * 0.25 * np.arange(5000) / FS)
    body = np.array([0.1, -0.2, 0.5, 0.9, 1.0, 0.8, 0.9, 0.6, 0.3])
    found, common = whose_noise(powers_of(ecg_mv + LEAD_FROM_ELECTRODES @ np.outer(body, breath)))
    assert [c.kind for c in common] == ["wander"]
    assert not any(k.kind == "wander" for e in found for k in e.kinds)
    found, common = whose_noise(powers_of(ecg_mv + on("C2", breath)))
    assert common == () and found[0].electrode == "C2"


@pytest.mark.parametrize("seed", range(8))
def test_a_clean_recording_has_no_culprit(seed):
    rng = np.random.default_rng(100 + seed)
    x = simulate(draw_scene(rng, rhythm="sinus", fs_hz=FS, duration_s=10.0), rng).signal_mv
    found, common = whose_noise(powers_of(x))
    assert worth_stating(found, lost=False) == ()
    assert not any(c.kind in ("muscle", "mains") for c in common)


def test_segments_speak_for_themselves(ecg_mv):
    x = np.concatenate(
        [ecg_mv + on("C1", 0.3 * noise(5, "motion")), ecg_mv + on("C6", 0.3 * noise(6, "motion"))], axis=1
    )
    powers = powers_of(x, n_strips=2)
    assert whose_noise(powers, segment=0)[0][0].electrode == "C1"
    assert whose_noise(powers, segment=1)[0][0].electrode == "C6"
    assert {e.electrode for e in whose_noise(powers)[0][:2]} == {"C1", "C6"}
    again = join_powers([powers, None, powers])
    assert again is not None and len(again.start_s) == 4 and again.power_uv2.shape == (4, len(KINDS), 9)


# ── lead sets ──


@pytest.mark.parametrize(
    "leads, electrodes",
    [
        (("I", "II", "III", "V"), ("RA", "LA", "LL", "C")),
        (("I", "II", "III", "aVR", "aVL", "aVF"), ("RA", "LA", "LL")),
        (("I", "II", "V1", "V5"), ("RA", "LA", "LL", "C1", "C5")),
        (("MCL1", "MCL6"), ("LA", "C1", "C6")),
        (("MLI", "MLIII"), ("RA", "LA", "LL")),
        (("-I", "II", "V3R", "X"), ("RA", "LA", "LL", "C3R")),
    ],
)
def test_lead_sets_of_known_algebra_tell(leads, electrodes):
    algebra = algebra_of(leads)
    assert algebra.tells and algebra.electrodes == electrodes
    e = np.random.default_rng(0).normal(size=(len(electrodes), 50))
    assert np.allclose(algebra.to_potentials @ (algebra.rows @ e), e - e.mean(axis=0))


@pytest.mark.parametrize(
    "leads", [("II",), ("MLII", "V1"), ("V1", "V2", "V3"), ("MCL1",), ("X", "Y", "Z"), ("II", "V")]
)
def test_silent_where_the_leads_cannot_tell(leads):
    assert not algebra_of(leads).tells
    assert powers_of(np.random.default_rng(1).normal(size=(len(leads), 5000)), leads) is None
    assert whose_noise(None) == ((), ())


def test_leads_are_differences_of_electrodes():
    for name in (*LEADS_12, "V", "VR", "MCL1", "CR5", "V4R", "-aVR"):
        assert sum((lead_in_electrodes(name) or {"": 1.0}).values()) == pytest.approx(0)
    assert lead_in_electrodes("ECG1") is None


def test_a_lost_lead_is_left_out_and_too_many_lost_say_nothing(ecg_mv):
    x = ecg_mv + on("C5", 0.3 * noise(7, "motion"))
    x[LEADS_12.index("V6")] = np.nan
    powers = powers_of(x)
    assert np.isnan(powers.power_uv2[0, :, ELECTRODES.index("C6")]).all()
    assert whose_noise(powers)[0][0].electrode == "C5"
    x[:6] = np.nan
    assert whose_noise(powers_of(x)) == ((), ())


def test_a_random_pattern_of_hum_seldom_looks_like_one_electrode():
    from scipy.stats import beta

    for n in range(3, 10):
        assert n * beta.sf(hum_of_one(n), 0.5, 0.5 * (n - 2)) <= 0.05 * 1.001
