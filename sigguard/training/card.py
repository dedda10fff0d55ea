"""The model's card: what it was trained on, how the data were split, what came out, where it ends."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sigguard.reliability import GLOBAL_TOLERANCE, MEASUREMENTS, TOLERANCE
from sigguard.simulate.recipes import TrainingRecipe
from sigguard.training.evaluate import FaultScore, Kept
from sigguard.training.fit import Fitted
from sigguard.training.table import GROUPS, Rows

_PARTS = ("train", "calibrate", "test")


@dataclass(frozen=True, slots=True, eq=False)
class CardFacts:
    """Everything the card states; nothing in it is written by hand."""

    seed: int
    size: str
    recorded_noise: bool
    real_carriers: dict[str, tuple[str, ...]] | None
    recipe: TrainingRecipe
    rows: Rows
    strips: Rows | None
    names: tuple[str, ...]
    fitted: list[Fitted]
    n_features: int
    results: list[Kept]
    strip_results: list[Kept]
    faults: list[FaultScore]
    content: str  # digest of the arrays


def write_card(facts: CardFacts) -> str:
    """The card as Markdown. The same facts give the same text."""
    parts = [
        "# Reliability model",
        "",
        "Says for each measurement on an ECG segment how far a disturbance may have moved it, and which",
        "disturbance it is. Screening aid, no diagnosis. This page is written by `sigguard train`.",
        "",
        f"Seed {facts.seed}, size {facts.size}, {facts.n_features} features a row. Digest of the arrays:",
        f"`{facts.content}`. The same seed, data and library versions give the same bytes.",
        "",
        *_data(facts),
        *_splits(facts),
        *_growth(facts),
        *_results("Results on the test part, single leads", facts.results),
        *_results("Results on the test part, several leads together", facts.strip_results),
        *_faults(facts.faults),
        *_limits(facts),
    ]
    return "\n".join(parts) + "\n"


def _data(facts: CardFacts) -> list[str]:
    out = [
        "## Data",
        "",
        "- Simulated ECG (dipole of Gaussian waves after McSharry 2003 and Sameni 2007, Dower's transform), made",
        f"  by this package; {len(facts.recipe.rhythms)} rhythms, licence of the package.",
        "- Simulated disturbances: "
        + ", ".join(k for k in facts.recipe.disturbances if not k.startswith("recorded"))
        + ".",
    ]
    if facts.recorded_noise:
        out += [
            "- Recorded noise: records bw, em and ma of the MIT-BIH Noise Stress Test Database 1.0.0 (Moody,",
            "  Muldrow, Mark 1984), Open Data Commons Attribution Licence 1.0.",
        ]
    else:
        out.append("- No recorded noise: this model knows simulated disturbances only.")
    if facts.real_carriers:
        n = sum(len(names) for names in facts.real_carriers.values())
        out += [
            f"- {n} real 12-lead recordings as carriers, from the folder given at training. With the Lobachevsky",
            "  University Electrocardiography Database 1.0.1 (Kalyakulina et al. 2020): Open Data Commons",
            "  Attribution Licence 1.0.",
        ]
        out += [f"  Records to {part}: {', '.join(names)}." for part, names in facts.real_carriers.items()]
    out += [
        "- Beats come from the judge in `beats.npz`, grown before on simulated ECG with known beats (and the train",
        "  part of the recorded noise where it is given): `python -m sigguard.training.beats --noise DIR`.",
    ]
    low, high = facts.recipe.snr_db
    return [*out, f"- Signal-to-noise ratio {low:g} to {high:g} dB on the noise-stress definition.", ""]


def _splits(facts: CardFacts) -> list[str]:
    out = [
        "## Splits",
        "",
        "Carriers by subject (simulated patients by seed), recorded noise by time: no patient and no second of",
        "noise is in two parts. Rows with nothing on them train and test but do not calibrate.",
        "",
        "| part | lead rows | of them on real carriers | patients | strips | " + " | ".join(GROUPS) + " |",
        "|---|---|---|---|---|" + "---|" * len(GROUPS),
    ]
    for k, part in enumerate(_PARTS):
        rows = facts.rows.part == k
        strips = int(np.sum(facts.strips.part == k)) if facts.strips is not None else 0
        groups = [int(np.sum(rows & (facts.rows.group == g))) for g in range(len(GROUPS))]
        patients = len(np.unique(facts.rows.carrier[rows]))
        out.append(
            f"| {part} | {int(rows.sum())} | {int(np.sum(rows & facts.rows.real))} | {patients} | {strips} | "
            + " | ".join(map(str, groups))
            + " |"
        )
    return [*out, ""]


def _growth(facts: CardFacts) -> list[str]:
    out = [
        "## Classifiers",
        "",
        "Histogram gradient boosting; size chosen by log loss on a split of the training part by patient.",
        "",
        "| question | trees | leaves | rate | l2 | log loss held out |",
        "|---|---|---|---|---|---|",
    ]
    for name, fit in zip(facts.names, facts.fitted, strict=True):
        loss = min((loss for _, loss in fit.tried), default=float("nan"))
        g = fit.growth
        out.append(
            f"| {name} | {len(fit.trees.tree_start) - 1} | {g.max_leaf_nodes} | {g.learning_rate:g} | {g.l2:g} "
            f"| {_number(loss)} |"
        )
    return [*out, ""]


def _results(title: str, results: list[Kept]) -> list[str]:
    if not results:
        return []
    out = [
        f"## {title}",
        "",
        "beyond: values called reliable that the disturbance moved beyond the tolerance (promise: at most 5 %),",
        "95 % interval over patients. bound: values moved beyond their stated bound_95. kept: of what is",
        "right in 9 of 10 draws of the noise, the share called reliable.",
        "",
        "| measurement | noise | values | called reliable | beyond | interval | bound | cells | kept |",
        "|---|---|---|---|---|---|---|---|---|",
    ]
    for r in results:
        out.append(
            f"| {r.measurement} | {r.noise} | {r.n_values} | {r.n_reliable} | {_percent(r.broken)} "
            f"| {_percent(r.broken_low)} to {_percent(r.broken_high)} | {_percent(r.bound_broken)} "
            f"| {r.n_cells} | {_percent(r.kept)} |"
        )
    return [*out, ""]


def _faults(faults: list[FaultScore]) -> list[str]:
    out = [
        "## Faults",
        "",
        "Truth: this disturbance alone moved a measurement by more than half its tolerance, lost or invented one.",
        "",
        "| fault | rows | lies there | recall | precision |",
        "|---|---|---|---|---|",
    ]
    for f in faults:
        out.append(
            f"| {f.fault} | {f.n} | {_percent(f.prevalence)} | {_percent(f.recall)} | {_percent(f.precision)} |"
        )
    return [*out, ""]


def _limits(facts: CardFacts) -> list[str]:
    pairs = zip(MEASUREMENTS[1:], TOLERANCE[1:], strict=True)
    tolerances = ", ".join(f"{name} {value:g}" for name, value in pairs)
    out = [
        "## Limits",
        "",
        f"- Tolerances learned: {tolerances} (ms, mV); rate: no beat missed or invented, ±150 ms. Global:",
        f"  {', '.join(f'{t:g}' for t in GLOBAL_TOLERANCE)} ms for pr, qrs, qt. A profile with other tolerances",
        "  uses the bounds as they are; the score still speaks of these.",
        "- A bound is about the disturbance. What the procedure itself differs from a careful hand is apart.",
        "- The promise is for disturbances like those listed; a rarer one may break it.",
        "- Bounds are for rows that give a value. A lost value is not called reliable and has no bound.",
    ]
    if not facts.recorded_noise or not facts.real_carriers:
        lacking = [
            name
            for name, have in (
                ("recorded noise", facts.recorded_noise),
                ("real carriers", bool(facts.real_carriers)),
            )
            if not have
        ]
        out.append(f"- Trained without {' and without '.join(lacking)}.")
    return out


def _percent(share: float) -> str:
    return f"{100 * share:.1f} %" if np.isfinite(share) else "–"


def _number(value: float) -> str:
    return f"{value:.4f}" if np.isfinite(value) else "–"
