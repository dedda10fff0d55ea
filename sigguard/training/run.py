"""The whole of training, from recipe to model and card, readable from top to bottom."""

from __future__ import annotations

import os
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import UsageError, WriteError
from sigguard.reliability import (
    FORMAT,
    GLOBAL_MEASUREMENTS,
    LEARNED_FAULTS,
    Calibration,
    ReliabilityModel,
    StepTable,
    digest,
    save_model,
)
from sigguard.segments import MEASUREMENTS
from sigguard.simulate.recipes import training_recipe
from sigguard.simulate.recorded import PARTS, RECORDED_KINDS
from sigguard.training.calibrate import CalibrationSettings, calibrate
from sigguard.training.card import CardFacts, write_card
from sigguard.training.carriers import real_subjects
from sigguard.training.corpus import SIZES, Progress, Size, build_corpus, plan_chunks
from sigguard.training.evaluate import FaultScore, Kept, evaluate_faults, evaluate_rows, evaluate_strips
from sigguard.training.fit import GRID, SMALL, Fitted, Task, constant_model, fit_all
from sigguard.training.table import GROUPS, Corpus, Procedure, Rows
from sigguard.trees import TreeArrays

NAMES = (*MEASUREMENTS, *LEARNED_FAULTS)
_FAULT_PRECISION = 0.8  # of what is called: a fault named wrongly sends somebody to the wrong electrode
_PROBES = 48
# More of these, all else equal, never earns a measurement more trust.
LESS_TRUST = (
    "wander_rms_uv",
    "wander_range_uv",
    "muscle_rms_uv",
    "muscle_burst_uv",
    "mains_uv",
    "tremor_uv",
    "motion_rms_uv",
    "motion_peak_uv",
    "step_change_uv",
    "clipped_s",
    "missing_s",
    "longest_flat_s",
)


@dataclass(frozen=True, slots=True, eq=False)
class TrainResult:
    """What training left: the files, and the figures on the untouched part."""

    model_path: Path
    card_path: Path
    sha256: str
    n_rows: int
    n_strips: int
    seconds: float
    results: list[Kept]
    strip_results: list[Kept]
    faults: list[FaultScore]


def train(
    noise_dir: str | Path | None = None,
    carriers_dir: str | Path | None = None,
    *,
    seed: int | None = None,
    out_dir: str | Path = "models",
    progress: Progress | None = None,
    jobs: int = 2,
    size: str | Size = "full",
    procedure: Procedure | None = None,
) -> TrainResult:
    """Build the corpus, grow the classifiers, calibrate, test, write ``reliability.npz`` and ``CARD.md``.

    ``noise_dir`` holds the noise-stress records bw, em, ma; ``carriers_dir`` clean 12-lead WFDB
    records. Without them the simulation stands alone. The same seed, data and versions give the
    same bytes, whatever ``jobs`` is. Raises UsageError for folders that do not hold what they
    should, WriteError where the files cannot be written.
    """
    began = time.monotonic()
    procedure = procedure or running_procedure()
    recipe = training_recipe()
    seed = recipe.seed if seed is None else seed
    plan = _size(size)
    real = real_subjects(carriers_dir, seed=seed) if carriers_dir is not None else None
    chunks = plan_chunks(recipe, plan, seed=seed, real=real)
    corpus = build_corpus(
        recipe,
        procedure,
        chunks,
        noise_dir=None if noise_dir is None else str(noise_dir),
        carriers_dir=None if carriers_dir is None else str(carriers_dir),
        jobs=jobs,
        progress=progress,
    )
    grid = GRID if size == "full" else (SMALL,)
    arrays, fitted = learn(corpus, procedure, seed=seed, grid=grid, jobs=jobs, progress=progress)
    model = ReliabilityModel.from_arrays(arrays)
    test = _part(corpus.rows, "test")
    results = evaluate_rows(model, test, seed=seed)
    strip_results = evaluate_strips(model, _part(corpus.strips, "test"), seed=seed) if corpus.strips else []
    faults = evaluate_faults(model, test)
    card = write_card(
        CardFacts(
            seed=seed,
            size=size if isinstance(size, str) else "own",
            recorded_noise=noise_dir is not None,
            real_carriers=real,
            recipe=recipe,
            rows=corpus.rows,
            strips=corpus.strips,
            names=(*NAMES, *(f"global {m}" for m in GLOBAL_MEASUREMENTS))[: len(fitted)],
            fitted=fitted,
            n_features=len(procedure.feature_names),
            results=results,
            strip_results=strip_results,
            faults=faults,
            content=digest(arrays),
        )
    )
    model_path, card_path = _write(arrays, card, Path(out_dir))
    return TrainResult(
        model_path=model_path,
        card_path=card_path,
        sha256=ReliabilityModel.load(model_path, feature_names=procedure.feature_names).sha256,
        n_rows=len(corpus.rows),
        n_strips=len(corpus.strips) if corpus.strips else 0,
        seconds=time.monotonic() - began,
        results=results,
        strip_results=strip_results,
        faults=faults,
    )


def running_procedure() -> Procedure:
    """The measuring procedure of this package, which every check uses."""
    from sigguard import global_values, measure  # the signal rooms load only when training starts

    return Procedure(
        analyse=measure.analyse,
        feature_names=tuple(measure.FEATURE_NAMES),
        analyse_global=global_values.analyse_global,
        global_feature_names=tuple(global_values.GLOBAL_FEATURE_NAMES),
    )


def learn(
    corpus: Corpus,
    procedure: Procedure,
    *,
    seed: int,
    grid: tuple = GRID,
    jobs: int = 1,
    progress: Progress | None = None,
    settings: CalibrationSettings | None = None,
) -> tuple[dict[str, NDArray], list[Fitted]]:
    """Corpus → the model's arrays, and how its classifiers grew (leads first, then global)."""
    say = progress or (lambda stage, done, total: None)
    say("classifiers", 0, 3)
    rows = _part(corpus.rows, "train")
    lead = fit_all(
        rows.features,
        lead_tasks(rows, procedure.feature_names),
        rows.carrier,
        seed=seed,
        grid=grid,
        jobs=jobs,
    )
    say("classifiers", 1, 3)
    strip_fits = _fit_strips(corpus.strips, seed=seed, grid=grid, jobs=jobs)
    say("classifiers", 2, 3)
    global_names = procedure.global_feature_names if strip_fits else ("none",)
    global_trees = [f.trees for f in strip_fits] or [constant_model(0.0)] * len(GLOBAL_MEASUREMENTS)
    arrays: dict[str, NDArray] = {
        "format": np.array(FORMAT),
        "seed": np.array(seed),
        "feature_names": np.array(procedure.feature_names),
        "global_feature_names": np.array(global_names),
        "fault_threshold": np.full(len(LEARNED_FAULTS), 0.5),
    }
    arrays |= TreeArrays.join([f.trees for f in lead]).to_dict("lead_tree_")
    arrays |= TreeArrays.join(global_trees).to_dict("global_tree_")
    harm_features, harm = harm_tasks(rows)
    harm_fits = fit_all(
        harm_features, harm, np.zeros(len(harm_features), dtype=np.int32), seed=seed, grid=grid[:1], jobs=jobs
    )
    arrays |= TreeArrays.join([f.trees for f in harm_fits]).to_dict("harm_tree_")
    arrays |= _no_calibration(len(MEASUREMENTS)).to_dict("lead_", MEASUREMENTS)
    arrays |= _no_calibration(len(GLOBAL_MEASUREMENTS)).to_dict("global_", GLOBAL_MEASUREMENTS)
    # The scores that calibrate are those of the model as it will run, not of the library that grew it.
    arrays |= _calibrate(corpus, ReliabilityModel.from_arrays(arrays), bool(strip_fits), settings)
    arrays |= _probes(corpus, ReliabilityModel.from_arrays(arrays), len(global_names))
    say("classifiers", 3, 3)
    return arrays, [*lead, *strip_fits]


def lead_tasks(rows: Rows, feature_names: tuple[str, ...]) -> list[Task]:
    """The questions asked of lead rows, in the order of NAMES."""
    down = tuple(-1 if name in LESS_TRUST else 0 for name in feature_names)
    tasks = [Task(m, rows.right[:, k], rows.judged[:, k], down) for k, m in enumerate(MEASUREMENTS)]
    tasks += [Task(f, rows.fault[:, k], rows.fault_asked[:, k]) for k, f in enumerate(LEARNED_FAULTS)]
    return tasks


def harm_tasks(rows: Rows) -> tuple[NDArray[np.float32], list[Task]]:
    """What each fault takes: (k, F + 1) features with the fault's number last, and a question a measurement.

    A row gives an entry for each fault that lies on it and of which is known what it does by itself.
    """
    row, fault = np.nonzero((rows.harm >= 0).any(axis=2))
    table = np.column_stack([rows.features[row], fault]).astype(np.float32)
    answers = rows.harm[row, fault]
    tasks = [Task(f"harm {m}", answers[:, k] == 1, answers[:, k] >= 0) for k, m in enumerate(MEASUREMENTS)]
    return table, tasks


def calibration_groups(rows: Rows) -> NDArray[np.bool_]:
    """(g, n): the kinds of noise, and real carriers, for each of which the promise must hold."""
    kinds = [rows.group == GROUPS.index(kind) for kind in (*RECORDED_KINDS, "simulated")]
    return np.stack([*kinds, rows.real])


def fault_thresholds(
    truth: NDArray[np.bool_], asked: NDArray[np.bool_], p: NDArray[np.float64]
) -> NDArray[np.float64]:
    """(4,): the lowest probability from which on four calls in five are right; 0.3 to 0.95."""
    out = np.empty(p.shape[1])
    for k in range(p.shape[1]):
        use = asked[:, k]
        order = np.argsort(-p[use, k], kind="stable")
        hits, at = truth[use, k][order], p[use, k][order]
        precision = np.cumsum(hits) / np.arange(1, len(hits) + 1)
        good = np.flatnonzero(precision >= _FAULT_PRECISION)
        out[k] = np.clip(at[good[-1]], 0.3, 0.95) if len(good) else 0.95
    return out


def _fit_strips(strips: Rows | None, *, seed: int, grid: tuple, jobs: int) -> list[Fitted]:
    if strips is None:
        return []
    rows = _part(strips, "train")
    tasks = [Task(m, rows.right[:, k], rows.judged[:, k]) for k, m in enumerate(GLOBAL_MEASUREMENTS)]
    return fit_all(rows.features, tasks, rows.carrier, seed=seed, grid=grid, jobs=jobs)


def _calibrate(
    corpus: Corpus, model: ReliabilityModel, has_strips: bool, settings: CalibrationSettings | None
) -> dict[str, NDArray]:
    rows = _part(corpus.rows, "calibrate")
    arrays = {"fault_threshold": fault_thresholds(rows.fault, rows.fault_asked, model.faults(rows.features))}
    rows = rows.pick(rows.group != GROUPS.index("none"))
    lead = calibrate(model.score(rows.features), rows.labels, calibration_groups(rows), settings)
    arrays |= lead.to_dict("lead_", MEASUREMENTS)
    if has_strips and corpus.strips is not None:
        strips = _part(corpus.strips, "calibrate")
        strips = strips.pick(strips.group != GROUPS.index("none"))
        scores = model.score_global(strips.features)
        table = calibrate(scores, strips.labels, calibration_groups(strips), settings)
        arrays |= table.to_dict("global_", GLOBAL_MEASUREMENTS)
    return arrays


def _probes(corpus: Corpus, model: ReliabilityModel, n_global: int) -> dict[str, NDArray]:
    """Rows of the test part, spread over the scores, with what the model says to them."""
    features = _spread(_part(corpus.rows, "test").features, model.score)
    if corpus.strips is not None:
        global_features = _spread(_part(corpus.strips, "test").features, model.score_global)
    else:
        global_features = np.zeros((1, n_global), dtype=np.float32)
    inputs = {"probe_features": features, "probe_global_features": global_features}
    return inputs | model.answers(features, global_features)


def _spread(features: NDArray[np.float32], score) -> NDArray[np.float32]:  # type: ignore[no-untyped-def]
    order = np.argsort(score(features).mean(axis=1), kind="stable")
    return features[order[np.unique(np.linspace(0, len(order) - 1, _PROBES).astype(int))]]


def _no_calibration(n: int) -> Calibration:
    """Tables that promise nothing."""
    nothing = (np.zeros(0), np.zeros(0))
    bound = tuple(StepTable(*nothing, below=np.inf) for _ in range(n))
    share = tuple(StepTable(*nothing, below=0.0) for _ in range(n))
    return Calibration(bound=bound, share=share, absent=share)


def _part(rows: Rows | None, part: str) -> Rows:
    if rows is None:
        raise UsageError("the corpus holds no strips")
    return rows.pick(rows.part == PARTS.index(part))


def _size(size: str | Size) -> Size:
    if isinstance(size, Size):
        return size
    if size not in SIZES:
        raise UsageError(f"the size of training must be one of {', '.join(SIZES)}, found {size!r}")
    return SIZES[size]


def _write(arrays: dict[str, NDArray], card: str, folder: Path) -> tuple[Path, Path]:
    """Both files under their final names, or neither."""
    model_path, card_path = folder / "reliability.npz", folder / "CARD.md"
    new_model, new_card = folder / ".reliability.new.npz", folder / ".CARD.new.md"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        save_model(arrays, new_model)
        new_card.write_text(card, encoding="utf-8")
        ReliabilityModel.load(new_model)  # a model that would refuse itself is not put in place
        os.replace(new_model, model_path)
        os.replace(new_card, card_path)
    except OSError as err:
        raise WriteError(f"{folder.name}: the model could not be written ({err.strerror})") from err
    finally:
        new_model.unlink(missing_ok=True)
        new_card.unlink(missing_ok=True)
    return model_path, card_path
