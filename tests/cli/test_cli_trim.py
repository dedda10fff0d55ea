"""``sigguard trim`` from the command line: lines, exit codes, sentences."""

from __future__ import annotations

import json

import numpy as np
import pytest

from sigguard.simulate.ecg import draw_scene, simulate


@pytest.fixture
def table(tmp_path):
    """A clean strip as a CSV file."""
    rng = np.random.default_rng(3)
    ecg = simulate(draw_scene(rng, rhythm="sinus", fs_hz=250.0, duration_s=20.0), rng)
    x = ecg.signal_mv[ecg.leads.index("II")] + rng.normal(0, 0.008, ecg.signal_mv.shape[1])
    path = tmp_path / "strip.csv"
    path.write_text("time,II\n" + "".join(f"{k / 250:.3f},{v:.5f}\n" for k, v in enumerate(x)))
    return path


def test_a_line_a_manifest_and_zero(sigguard, table, tmp_path):
    ran = sigguard("trim", table, "--keep", "rhythm", "--units", "mV", "--out", tmp_path / "out")
    assert ran.code == 0 and ran.err == []
    assert ran.out == ["strip: all of its 20.0 s kept (strip_1.hea)"]
    assert json.loads((tmp_path / "out" / "strip.cuts.json").read_text())["keep"] == "rhythm"
    # what was written is no source the next time
    again = sigguard("trim", tmp_path / "out", "--keep", "rhythm", "--out", tmp_path / "out")
    assert all("strip" not in line for line in again.out)


def test_an_unreadable_file_does_not_keep_the_others(sigguard, table, tmp_path):
    broken = tmp_path / "broken.hea"
    broken.write_text("broken 1 250 1000\nbroken.dat 16 200 0 0 0 0 0 II\n")
    ran = sigguard("trim", broken, table, "--keep", "rhythm", "--units", "mV", "--out", tmp_path / "out")
    assert ran.code == 1
    assert len(ran.out) == 1 and len(ran.err) == 1 and "broken" in ran.err[0]


@pytest.mark.parametrize(
    "wrong",
    [["--keep", "none"], [], ["--keep", "all", "--min-span", "-1"], ["--keep", "all", "--leads", "V9"]],
)
def test_wrong_usage_is_two(sigguard, table, tmp_path, wrong):
    assert sigguard("trim", table, *wrong, "--units", "mV", "--out", tmp_path / "out").code == 2


def test_patient_first_is_four_and_kept(sigguard, tmp_path):
    flat = tmp_path / "flat.csv"
    rng = np.random.default_rng(3)
    ecg = simulate(draw_scene(rng, rhythm="sinus", fs_hz=250.0, duration_s=30.0), rng)
    x = ecg.signal_mv[ecg.leads.index("II")].copy()
    x[2500:5000] = 0.004 * rng.normal(size=2500)  # ten seconds without a beat
    flat.write_text("time,II\n" + "".join(f"{k / 250:.3f},{v:.5f}\n" for k, v in enumerate(x)))
    ran = sigguard("trim", flat, "--keep", "all", "--units", "mV", "--out", tmp_path / "out")
    assert ran.code == 4 and "LOOK AT THE PATIENT FIRST" in ran.out[0]
    spans = json.loads((tmp_path / "out" / "flat.cuts.json").read_text())["spans"]
    kept = [s for s in spans if s["kept"] and s["start_s"] <= 11 and s["end_s"] >= 19]
    assert len(kept) == 1 and "patient first" in kept[0]["reason"]
