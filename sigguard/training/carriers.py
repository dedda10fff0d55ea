"""Clean ECG to spoil: simulated patients, and real recordings split by subject."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.electrodes import LEADS_12
from sigguard.errors import UsageError
from sigguard.simulate.ecg import draw_scene, simulate
from sigguard.simulate.recipes import TrainingRecipe
from sigguard.simulate.recorded import PARTS, qrs_peak_to_peak_mv

Array = NDArray[np.float64]

STEPS_MV = (0.001, 0.0024, 0.0025, 0.005, 0.005, 0.01)  # converter steps of usual recorders (practice)
PART_SHARE = (0.5, 0.4, 0.1)  # of real subjects to train, calibrate, test


@dataclass(frozen=True, slots=True, eq=False)
class Carrier:
    """Twelve clean leads of one patient. ``qrs_mv`` (12,): QRS peak to peak, NaN where it is not known."""

    signal_mv: Array  # (12, n_samples)
    fs_hz: float
    step_mv: float
    qrs_mv: Array


def simulated_carrier(
    rng: np.random.Generator, recipe: TrainingRecipe, *, fs_hz: float, duration_s: float
) -> Carrier:
    """One simulated patient by the recipe's rhythms."""
    ecg = simulate(draw_scene(rng, fs_hz=fs_hz, duration_s=duration_s, rhythm_weights=recipe.rhythms), rng)
    qrs_mv = np.array([qrs_peak_to_peak_mv(lead, ecg.beats_s, fs_hz) for lead in ecg.signal_mv])
    return Carrier(signal_mv=ecg.signal_mv, fs_hz=fs_hz, step_mv=float(rng.choice(STEPS_MV)), qrs_mv=qrs_mv)


def real_subjects(folder: str | Path, *, seed: int) -> dict[str, tuple[str, ...]]:
    """Record names of a folder of 12-lead WFDB records, by part. One record is one subject.

    Raises UsageError for a folder without records.
    """
    names = sorted(p.stem for p in Path(folder).glob("*.hea"))
    if len(names) < len(PARTS):
        raise UsageError(f"expected at least {len(PARTS)} records (*.hea) in {folder}, found {len(names)}")
    order = [names[i] for i in np.random.default_rng(seed).permutation(len(names))]
    n_train = int(round(PART_SHARE[0] * len(order)))
    n_calibrate = max(1, int(round(PART_SHARE[1] * len(order))))
    cuts = (0, n_train, n_train + n_calibrate, len(order))
    return {part: tuple(sorted(order[a:b])) for part, a, b in zip(PARTS, cuts[:-1], cuts[1:], strict=True)}


def real_carrier(folder: str | Path, name: str, *, duration_s: float = 10.0) -> Carrier:
    """One real 12-lead recording, its first ``duration_s``; UsageError if it is not what it should be."""
    import wfdb  # slow to import, and only here

    record = wfdb.rdrecord(str(Path(folder) / name), physical=True)
    lower = [lead.lower() for lead in record.sig_name]
    missing = [lead for lead in LEADS_12 if lead.lower() not in lower]
    if missing:
        raise UsageError(f"carrier {name}: expected the 12 standard leads, {', '.join(missing)} not found")
    signal = record.p_signal.T[[lower.index(lead.lower()) for lead in LEADS_12]]
    n = round(duration_s * record.fs)
    if signal.shape[1] < n or not np.isfinite(signal[:, :n]).all():
        raise UsageError(f"carrier {name}: expected {duration_s:g} s without gaps, found less")
    gain = float(np.max(record.adc_gain))
    return Carrier(
        signal_mv=np.ascontiguousarray(signal[:, :n], dtype=np.float64),
        fs_hz=float(record.fs),
        step_mv=1.0 / gain,
        qrs_mv=np.full(12, np.nan),
    )
