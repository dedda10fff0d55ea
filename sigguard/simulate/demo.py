"""The demonstration recordings: eight invented strips from an invented ferry, written as WFDB.

The recipe is synthetic/demo.toml; what it says is all that distinguishes one recording from the next.
"""

from __future__ import annotations

import os
import tempfile
from collections.abc import Collection
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from sigguard.errors import UsageError, WriteError
from sigguard.readers.wfdb_files import quiet_wfdb
from sigguard.simulate.disturbance import apply_clipping, draw_disturbance
from sigguard.simulate.ecg import SimulatedECG, simulate
from sigguard.simulate.projection import ELECTRODES, LEADS, to_leads
from sigguard.simulate.recipes import load_recipe
from sigguard.simulate.scene import Scene, draw_scene
from sigguard.simulate.shapes import Array

NOTE = "Invented recording made by the simulator of sigguard; no real person."
SHORT_GAIN = 1000.0  # steps per mV of the 16-bit files
LONG_GAIN = 200.0  # of the 12-bit packed file


@dataclass(frozen=True, slots=True)
class DemoRecording:
    """One recording of the demonstration before it is written: samples and what was done to them."""

    name: str
    story: str
    ecg: SimulatedECG  # the truth without disturbance
    leads: tuple[str, ...]
    signal_mv: Array  # (n_leads, n_samples)


def make_demo(*, seed: int | None = None, names: Collection[str] | None = None) -> list[DemoRecording]:
    """The recordings in the recipe's order, all or those named; another seed gives other patients.

    Raises UsageError if the recipe cannot be used.
    """
    recipe = load_recipe("demo")
    seed = int(recipe["seed"]) if seed is None else seed
    try:
        return [
            _make(entry, np.random.default_rng([seed, k]))
            for k, entry in enumerate(recipe["recording"])
            if names is None or entry["name"] in names
        ]
    except (KeyError, TypeError) as err:
        raise UsageError(f"recipe demo: missing or unusable entry {err}") from err


def write_demo(folder: str | Path, *, seed: int | None = None) -> list[Path]:
    """Write the demonstration recordings into the folder; gives the paths of the headers.

    Each file is written beside its place and moved in, the header last. Raises WriteError if that fails.
    """
    folder = Path(folder)
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryDirectory(dir=folder, prefix=".demo-") as aside:
            recordings = make_demo(seed=seed)
            for recording in recordings:
                _write(recording, Path(aside))
            for suffix in (".dat", ".hea"):
                for path in sorted(Path(aside).glob(f"*{suffix}")):
                    os.replace(path, folder / path.name)
    except OSError as err:
        raise WriteError(f"demonstration recordings could not be written to {folder}: {err}") from err
    return [folder / f"{recording.name}.hea" for recording in recordings]


def _make(entry: dict[str, Any], rng: np.random.Generator) -> DemoRecording:
    scene = _ordinary_scene(entry, rng)
    ecg = simulate(scene, rng)
    noise_mv = np.zeros((len(ELECTRODES), ecg.n_samples))
    for part in entry["disturbances"]:
        _disturb(noise_mv, part, rng, fs_hz=scene.fs_hz, mains_hz=entry.get("mains_hz"))
    signal_mv = ecg.signal_mv + to_leads(noise_mv)
    if "rails_mv" in entry:
        signal_mv = apply_clipping(signal_mv, low_mv=-entry["rails_mv"], high_mv=entry["rails_mv"])
    leads = LEADS if entry["leads"] == "12" else tuple(entry["leads"].split())
    rows = [LEADS.index(lead) for lead in leads]
    return DemoRecording(entry["name"], entry["story"], ecg, leads, signal_mv[rows])


def _ordinary_scene(entry: dict[str, Any], rng: np.random.Generator) -> Scene:
    """A scene of the named rhythm without anything else that is out of the ordinary."""
    while True:
        scene = draw_scene(
            rng, rhythm=entry["rhythm"], fs_hz=float(entry["fs_hz"]), duration_s=float(entry["duration_s"])
        )
        if scene.st_peak_mv == 0 and scene.low_voltage_factor == 1 and _looks_ordinary(scene):
            break
    turn_s = float(entry.get("turn_s", scene.turn_s))
    vf_type = entry.get("vf_type", scene.vf_type)
    lowpass_hz = min(150.0, 0.4 * scene.fs_hz)
    return replace(scene, highpass_hz=0.05, lowpass_hz=lowpass_hz, turn_s=turn_s, vf_type=vf_type)


def _looks_ordinary(scene: Scene) -> bool:
    """Upright P, QRS and T of usual size and width in leads I and II, usual intervals."""
    beat = scene.beats[0]
    if scene.p is None:
        return False
    p, qrs, t = (
        scene.transfer[6:8] @ wave.at(np.linspace(wave.on_s, wave.off_s, 100))
        for wave in (scene.p, beat.qrs, beat.t)
    )
    upright = p[1].max() > 0.05 and p.min() > -0.03 and t[1].max() > 0.12 and t.min() > -0.06
    tall = 0.6 < qrs[1].max() < 2.2 and qrs[0].max() > 0.3
    return bool(upright and tall and 125 < scene.pr_ms < 200 and scene.qrs_ms < 110 and scene.rate_bpm < 125)


def _disturb(
    noise_mv: Array, part: dict[str, Any], rng: np.random.Generator, *, fs_hz: float, mains_hz: float | None
) -> None:
    """Add one disturbance of the recipe to the electrodes' noise, (9, n_samples), in place."""
    n = noise_mv.shape[1]
    first, last = round(part.get("from_s", 0) * fs_hz), min(n, round(part.get("to_s", n / fs_hz) * fs_hz))
    where = ELECTRODES if part["where"] == ["all"] else tuple(part["where"])

    def source() -> Array:
        return draw_disturbance(
            rng,
            part["kind"],
            n_samples=last - first,
            fs_hz=fs_hz,
            envelope=part.get("envelope", "constant"),
            mains_hz=mains_hz,
        )

    shared = source() if part.get("together", False) else None
    for electrode in where:
        x = source() if shared is None else shared * rng.uniform(-0.3, 1.7)
        noise_mv[ELECTRODES.index(electrode), first:last] += part["rms_mv"] * x


def _write(recording: DemoRecording, folder: Path) -> None:
    long = recording.ecg.scene.duration_s > 60
    gain, largest, fmt = (LONG_GAIN, 2047, "212") if long else (SHORT_GAIN, 32767, "16")
    digital = np.clip(np.round(recording.signal_mv.T * gain), -largest, largest).astype(np.int64)
    n_leads = len(recording.leads)
    with quiet_wfdb() as wfdb:
        wfdb.wrsamp(
            recording.name,
            fs=recording.ecg.fs_hz,
            units=["mV"] * n_leads,
            sig_name=list(recording.leads),
            d_signal=digital,
            fmt=[fmt] * n_leads,
            adc_gain=[gain] * n_leads,
            baseline=[0] * n_leads,
            comments=[NOTE, recording.story],
            write_dir=str(folder),
        )
