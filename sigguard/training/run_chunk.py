"""Runs one piece of the corpus: carriers, disturbances, the procedure before and after, the truth."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sigguard.reliability import GLOBAL_TOLERANCE, LEARNED_FAULTS, TOLERANCE
from sigguard.simulate.recipes import TrainingRecipe
from sigguard.simulate.recorded import PARTS, RECORDED_KINDS, qrs_peak_to_peak_mv
from sigguard.training.carriers import Carrier, real_carrier, simulated_carrier
from sigguard.training.labels import Labels, Measured, label_rows, label_values
from sigguard.training.spoil import (
    FAULT_OF,
    STRONGER_DB,
    TRANSFORM_FAULT,
    NoiseSource,
    SpoiltRow,
    draw_kinds,
    fault_truth,
    harm_truth,
    spoil_row,
    spoil_strip,
)
from sigguard.training.table import GROUPS, Chunk, Procedure, Rows

CELL_KINDS = ("recorded-bw", "recorded-ma", "recorded-em", "muscle", "motion", "mains")
CELL_DRAWS = 10
FELT = 0.5  # share of the tolerance
TOLD = 0.5  # share of the rows whose header tells the converter's step and rails
USUAL_RAIL_MV = 5.0


def run_chunk(
    chunk: Chunk,
    recipe: TrainingRecipe,
    procedure: Procedure,
    noise_dir: str | None,
    carriers_dir: str | None,
) -> Rows:
    """The rows of one chunk."""
    rng = np.random.default_rng(chunk.seed)
    source = NoiseSource(recipe=recipe, folder=noise_dir, part=chunk.part)
    if chunk.real:
        carriers = [real_carrier(str(carriers_dir), name, duration_s=chunk.duration_s) for name in chunk.real]
        fs_hz = carriers[0].fs_hz
        carriers = [c for c in carriers if c.fs_hz == fs_hz]
    else:
        carriers = [
            simulated_carrier(rng, recipe, fs_hz=chunk.fs_hz, duration_s=chunk.duration_s)
            for _ in range(chunk.n_carriers)
        ]
    if chunk.kind == "strips":
        return _run_strips(rng, chunk, carriers, source, procedure)
    return _run_rows(rng, chunk, carriers, source, procedure)


def _run_rows(
    rng: np.random.Generator, chunk: Chunk, carriers: list[Carrier], source: NoiseSource, procedure: Procedure
) -> Rows:
    picked = [(k, int(lead)) for k, _ in enumerate(carriers) for lead in _some_leads(rng, chunk.n_leads)]
    fs_hz = carriers[0].fs_hz
    clean_mv = np.stack([carriers[k].signal_mv[lead] for k, lead in picked])
    step_mv = np.array([carriers[k].step_mv for k, _ in picked])
    told_mv = np.where(rng.random(len(picked)) < TOLD, step_mv, np.nan)  # a header may say the step, or not
    clean = procedure.analyse(_stepped(clean_mv, step_mv), fs_hz, step_mv=told_mv)
    qrs_mv = np.array([carriers[k].qrs_mv[lead] for k, lead in picked])
    qrs_mv = _with_measured_qrs(qrs_mv, clean, clean_mv, fs_hz)
    spoilt: list[SpoiltRow] = []
    of, cell = [], []
    for row in range(len(picked)):
        for kinds, snr_db, number in _draws(rng, chunk, source, row):
            spoilt.append(
                spoil_row(
                    rng,
                    clean_mv[row],
                    kinds=kinds,
                    snr_db=snr_db,
                    qrs_mv=float(qrs_mv[row]),
                    step_mv=float(step_mv[row]),
                    fs_hz=fs_hz,
                    source=source,
                    stronger={} if number >= 0 else STRONGER_DB,  # cells keep to the ratio asked for
                )
            )
            of.append(row)
            cell.append(number)
    return _judge_rows(chunk, clean, spoilt, np.array(of), np.array(cell), picked, told_mv, fs_hz, procedure)


def _judge_rows(
    chunk: Chunk,
    clean: Measured,
    spoilt: list[SpoiltRow],
    of: NDArray[np.intp],
    cell: NDArray[np.intp],
    picked: list[tuple[int, int]],
    told_mv: NDArray[np.float64],
    fs_hz: float,
    procedure: Procedure,
) -> Rows:
    duration_s = spoilt[0].x_mv.shape[0] / fs_hz
    step_mv, rails_mv = _header(spoilt, told_mv[of])
    found = procedure.analyse(
        np.stack([row.x_mv for row in spoilt]), fs_hz, step_mv=step_mv, rails_mv=rails_mv
    )
    labels = label_rows(clean, found, duration_s, of=of)
    felt, taken = _alone(clean, spoilt, of, labels, told_mv, fs_hz, procedure)
    fault, asked = fault_truth([row.kinds for row in spoilt], felt)
    n = len(spoilt)
    return Rows(
        features=np.asarray(found.features, dtype=np.float32),
        judged=labels.judged,
        right=labels.right,
        valued=labels.valued,
        error=labels.error,
        fault=fault,
        fault_asked=asked,
        harm=harm_truth(taken),
        carrier=np.array([chunk.first_carrier + picked[r][0] for r in of], dtype=np.int32),
        group=np.array([group_of(row.kinds) for row in spoilt], dtype=np.int8),
        real=np.full(n, bool(chunk.real)),
        part=np.full(n, PARTS.index(chunk.part), dtype=np.int8),
        cell=np.where(cell >= 0, 1000 * chunk.first_carrier + cell, -1).astype(np.int32),
        snr_db=np.array([row.snr_db for row in spoilt]),
        fs_hz=np.full(n, fs_hz),
    )


def _alone(
    clean: Measured,
    spoilt: list[SpoiltRow],
    of: NDArray[np.intp],
    labels: Labels,
    told_mv: NDArray[np.float64],
    fs_hz: float,
    procedure: Procedure,
) -> tuple[list[dict[str, bool]], list[dict[str, NDArray[np.int8]]]]:
    """What each disturbance does by itself, row by row: whether it is felt by kind, and what it takes by fault."""
    felt_here, taken_here = _felt(labels), _taken(labels)
    felt: list[dict[str, bool]] = [{} for _ in spoilt]
    taken: list[dict[str, NDArray[np.int8]]] = [{} for _ in spoilt]
    for r, row in enumerate(spoilt):
        if len(row.kinds) != 1:
            continue
        kind = row.kinds[0]
        if kind in FAULT_OF:
            felt[r][kind] = bool(felt_here[r])
            taken[r][FAULT_OF[kind]] = taken_here[r]
        elif kind in TRANSFORM_FAULT:
            lost = bool(np.isnan(row.x_mv).any())
            taken[r]["missing" if lost else TRANSFORM_FAULT[kind]] = taken_here[r]
    each = [(r, kind, x) for r, row in enumerate(spoilt) for kind, x in row.alone]
    if each:
        base = of[[r for r, _, _ in each]]
        run = procedure.analyse(np.stack([x for _, _, x in each]), fs_hz, step_mv=told_mv[base])
        judged = label_rows(clean, run, spoilt[0].x_mv.shape[0] / fs_hz, of=base)
        for (r, kind, _), hit, answers in zip(each, _felt(judged), _taken(judged), strict=True):
            felt[r][kind] = bool(hit)
            before = taken[r].get(FAULT_OF[kind], answers)
            taken[r][FAULT_OF[kind]] = np.maximum(before, answers)
    return felt, taken


def _header(
    spoilt: list[SpoiltRow], told_mv: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Steps (n,) and rails (n, 2) as a header tells them, NaN where it does not."""
    coarse = np.array(["quantisation" in row.kinds for row in spoilt])
    rails_mv = np.array([row.rails_mv for row in spoilt])
    reach_mv = np.array([np.nanmax(np.abs(row.x_mv), initial=0.0) for row in spoilt])
    wide_mv = np.maximum(USUAL_RAIL_MV, reach_mv + 1.0)  # a converter whose rails nothing touches
    rails_mv = np.where(np.isnan(rails_mv), wide_mv[:, None] * (-1.0, 1.0), rails_mv)
    rails_mv[np.isnan(told_mv)] = np.nan
    return np.where(coarse, np.nan, told_mv), rails_mv


def _felt(labels: Labels) -> NDArray[np.bool_]:
    """(n,): some measurement was moved by more than a share of its tolerance, lost or invented.

    A measurement is not to be trusted well before the disturbance moves it by the whole tolerance.
    """
    moved = labels.error > FELT * np.asarray((np.inf, *TOLERANCE[1:]))
    return np.any(labels.judged & (~labels.right | moved), axis=1)


def _taken(labels: Labels) -> NDArray[np.int8]:
    """(n, 5): 1 moved beyond the tolerance, 0 not, -1 nothing to judge."""
    return np.where(labels.judged, (~labels.right).astype(np.int8), np.int8(-1))


def _run_strips(
    rng: np.random.Generator, chunk: Chunk, carriers: list[Carrier], source: NoiseSource, procedure: Procedure
) -> Rows:
    assert procedure.analyse_global is not None
    fs_hz = carriers[0].fs_hz
    leads = _some_leads(rng, chunk.n_leads)  # one choice for the chunk: strips of one shape go together
    step_mv = np.array([c.step_mv for c in carriers])
    clean_mv = np.stack([_stepped(c.signal_mv[leads], np.full(len(leads), c.step_mv)) for c in carriers])
    clean = procedure.analyse_global(clean_mv, fs_hz)
    low, high = source.recipe.snr_db
    spoilt, of, kinds_of, snr_of = [], [], [], []
    for k, carrier in enumerate(carriers):
        qrs_mv = float(np.nanmedian(carrier.qrs_mv)) if np.isfinite(carrier.qrs_mv).any() else np.nan
        for _ in range(chunk.n_draws):
            kinds, snr_db = draw_kinds(rng, source), float(rng.uniform(low, high))
            x = spoil_strip(
                rng, carrier.signal_mv, kinds=kinds, snr_db=snr_db, qrs_mv=qrs_mv, fs_hz=fs_hz, source=source
            )
            spoilt.append(_stepped(x[leads], np.full(len(leads), step_mv[k])))
            of.append(k)
            kinds_of.append(kinds)
            snr_of.append(snr_db)
    found = procedure.analyse_global(np.stack(spoilt), fs_hz)
    labels = label_values(
        clean.value[of],
        found.value,
        clean_absent=clean.absent[of],
        spoilt_absent=found.absent,
        tolerance=GLOBAL_TOLERANCE,
    )
    n = len(spoilt)
    return Rows(
        features=np.asarray(found.features, dtype=np.float32),
        judged=labels.judged,
        right=labels.right,
        valued=labels.valued,
        error=labels.error,
        fault=np.zeros((n, len(LEARNED_FAULTS)), dtype=bool),
        fault_asked=np.zeros((n, len(LEARNED_FAULTS)), dtype=bool),
        harm=harm_truth([{} for _ in range(n)]),
        carrier=(chunk.first_carrier + np.array(of)).astype(np.int32),
        group=np.array([group_of(kinds) for kinds in kinds_of], dtype=np.int8),
        real=np.full(n, bool(chunk.real)),
        part=np.full(n, PARTS.index(chunk.part), dtype=np.int8),
        cell=np.full(n, -1, dtype=np.int32),
        snr_db=np.array(snr_of),
        fs_hz=np.full(n, fs_hz),
    )


def group_of(kinds: tuple[str, ...]) -> int:
    """Index into GROUPS: a recorded kind counts before a simulated one."""
    for k, recorded in enumerate(RECORDED_KINDS):
        if f"recorded-{recorded}" in kinds:
            return k
    return GROUPS.index("simulated" if kinds else "none")


def _draws(
    rng: np.random.Generator, chunk: Chunk, source: NoiseSource, row: int
) -> list[tuple[tuple[str, ...], float, int]]:
    """Disturbances, ratio in dB and number of the cell (-1: none) of each spoilt version of a clean row."""
    low, high = source.recipe.snr_db
    if chunk.kind == "cells":
        known = [k for k in CELL_KINDS if k in source.kinds()[0]]
        kind, snr_db = known[row % len(known)], float(rng.uniform(low, high))
        return [((kind,), snr_db, row)] * chunk.n_draws
    return [(draw_kinds(rng, source), float(rng.uniform(low, high)), -1) for _ in range(chunk.n_draws)]


def _some_leads(rng: np.random.Generator, n_leads: int) -> NDArray[np.intp]:
    return np.sort(rng.choice(12, size=n_leads, replace=False))


def _stepped(x_mv: NDArray[np.float64], step_mv: NDArray[np.float64]) -> NDArray[np.float64]:
    """Rows (R, n_samples) in whole converter steps (R,)."""
    return np.round(x_mv / step_mv[:, None]) * step_mv[:, None]


def _with_measured_qrs(
    qrs_mv: NDArray[np.float64], clean: Measured, clean_mv: NDArray[np.float64], fs_hz: float
) -> NDArray[np.float64]:
    """QRS sizes (R,), those not known taken about the beats found on the clean row."""
    out = qrs_mv.copy()
    for row in np.flatnonzero(~np.isfinite(out)):
        out[row] = qrs_peak_to_peak_mv(clean_mv[row], clean.beat_s[clean.beat_row == row], fs_hz)
    return out
