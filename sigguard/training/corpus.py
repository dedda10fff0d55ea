"""The corpus: clean carriers, spoilt in known ways, measured before and after.

Work is cut into chunks of one sampling rate and one duration, so that the measuring procedure is
called on large batches. Each chunk draws from a seed of its own, and nothing else, so that the
corpus is the same whatever the number of processes. A chunk belongs to one part (train, calibrate,
test): its carriers and its cut of the recorded noise are met in no other part.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from joblib import Parallel, delayed, parallel_config

from sigguard.simulate.recipes import TrainingRecipe
from sigguard.simulate.recorded import PARTS
from sigguard.training.run_chunk import CELL_DRAWS, run_chunk
from sigguard.training.table import Chunk, Corpus, Procedure, Rows

_LEADS_AT_ONCE = (12, 12, 12, 3, 2)  # how many leads a strip has, drawn evenly
Progress = Callable[[str, int, int], None]


@dataclass(frozen=True, slots=True)
class Shape:
    """What is in a chunk: carriers, leads of each, and spoilt versions of each lead."""

    carriers: int = 10
    leads: int = 4
    draws: int = 8


@dataclass(frozen=True, slots=True)
class Size:
    """Chunks of each kind for train, calibrate, test; the shapes of those parts follow the same order.

    The calibration has many carriers and few rows of each: its allowance counts rows as
    independent, which rows of one patient are not.
    """

    rows: tuple[int, int, int]
    strips: tuple[int, int, int]
    cells: int
    shapes: tuple[Shape, Shape, Shape] = (Shape(), Shape(), Shape())
    real_every: int = 2  # one chunk in so many uses real carriers, if there are any


SIZES = {
    "full": Size(
        rows=(130, 110, 24),
        strips=(60, 80, 16),
        cells=30,
        shapes=(Shape(10, 4, 8), Shape(32, 2, 5), Shape(16, 4, 5)),
    ),
    "small": Size(
        rows=(5, 4, 2), strips=(2, 2, 1), cells=1, shapes=(Shape(5, 3, 5), Shape(8, 2, 4), Shape(5, 3, 5))
    ),
}
_CELL_CARRIERS = 10
_STRIP_CARRIERS = 12


def plan_chunks(
    recipe: TrainingRecipe, size: Size, *, seed: int, real: dict[str, tuple[str, ...]] | None = None
) -> list[Chunk]:
    """All pieces of work, in a fixed order, each with a seed of its own."""
    jobs: list[tuple[str, str]] = []
    for kind, counts in (("rows", size.rows), ("strips", size.strips), ("cells", (0, 0, size.cells))):
        for part, count in zip(PARTS, counts, strict=True):
            jobs += [(kind, part)] * count
    chunks = []
    for k, (child, (kind, part)) in enumerate(
        zip(np.random.SeedSequence(seed).spawn(len(jobs)), jobs, strict=True)
    ):
        names = real[part] if real and k % size.real_every == size.real_every - 1 else ()
        chunks.append(_chunk(recipe, size, child, kind=kind, part=part, first_carrier=1000 * k, real=names))
    return chunks


def _chunk(
    recipe: TrainingRecipe,
    size: Size,
    seed: np.random.SeedSequence,
    *,
    kind: str,
    part: str,
    first_carrier: int,
    real: tuple[str, ...],
) -> Chunk:
    rng = np.random.default_rng(seed.spawn(1)[0])
    rates = np.array([weight for _, weight in recipe.fs_hz])
    fs_hz = recipe.fs_hz[int(rng.choice(len(rates), p=rates / rates.sum()))][0]
    usual = kind == "cells" or rng.random() < recipe.duration_usual_share
    duration_s = recipe.duration_usual_s if usual else float(np.round(rng.uniform(*recipe.duration_s)))
    shape = size.shapes[PARTS.index(part)]
    strip_leads = int(rng.choice(_LEADS_AT_ONCE))
    shape = {
        "rows": shape,
        "cells": Shape(min(shape.carriers, _CELL_CARRIERS), 1, CELL_DRAWS),
        "strips": Shape(min(shape.carriers, _STRIP_CARRIERS), strip_leads, max(2, shape.draws // 2)),
    }[kind]
    if real:
        n = min(shape.carriers, len(real))
        real = tuple(str(name) for name in rng.choice(real, size=n, replace=False))
        fs_hz, duration_s = 0.0, 10.0  # as recorded
    return Chunk(
        kind=kind,
        part=part,
        seed=seed,
        fs_hz=fs_hz,
        duration_s=duration_s,
        n_carriers=len(real) or shape.carriers,
        n_leads=shape.leads,
        n_draws=shape.draws,
        first_carrier=first_carrier,
        real=real,
    )


def build_corpus(
    recipe: TrainingRecipe,
    procedure: Procedure,
    chunks: list[Chunk],
    *,
    noise_dir: str | None = None,
    carriers_dir: str | None = None,
    jobs: int = 1,
    progress: Progress | None = None,
) -> Corpus:
    """Run all chunks over ``jobs`` processes. The same chunks give the same corpus, whatever ``jobs`` is."""
    todo = [c for c in chunks if c.kind != "strips" or procedure.analyse_global is not None]
    lead_rows: list[Rows] = []
    strips: list[Rows] = []
    with parallel_config(backend="loky", inner_max_num_threads=1):
        results = Parallel(n_jobs=jobs, return_as="generator")(
            delayed(run_chunk)(c, recipe, procedure, noise_dir, carriers_dir) for c in todo
        )
        for done, (chunk, rows) in enumerate(zip(todo, results, strict=True), start=1):
            (strips if chunk.kind == "strips" else lead_rows).append(rows)
            if progress is not None:
                progress("corpus", done, len(todo))
    return Corpus(rows=Rows.join(lead_rows), strips=Rows.join(strips) if strips else None)
