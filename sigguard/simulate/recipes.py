"""Recipes of the simulated corpus and of the demonstration, read from TOML under synthetic/."""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from typing import Any

from sigguard.errors import UsageError
from sigguard.resources import resource_path
from sigguard.simulate.disturbance import ADDITIVE_KINDS, ENVELOPES, TRANSFORM_KINDS
from sigguard.simulate.recorded import RECORDED_KINDS
from sigguard.simulate.rhythms import RHYTHMS

DISTURBANCES = (*ADDITIVE_KINDS, *(f"recorded-{kind}" for kind in RECORDED_KINDS), *TRANSFORM_KINDS)


def load_recipe(name: str) -> dict[str, Any]:
    """The recipe synthetic/NAME.toml as plain tables. Raises UsageError if there is none or it is broken."""
    path = resource_path("synthetic", f"{name}.toml")
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as err:
        raise UsageError(f"recipe {path.name} cannot be read: {err}") from err


@dataclass(frozen=True, slots=True)
class TrainingRecipe:
    """How the training corpus is drawn; weights need not add up to 1.

    ``disturbances`` keys: ADDITIVE_KINDS, ``recorded-bw``, ``recorded-ma``, ``recorded-em``, TRANSFORM_KINDS.
    """

    seed: int
    fs_hz: tuple[tuple[float, float], ...]  # (rate, weight)
    duration_s: tuple[float, float]
    duration_usual_s: float
    duration_usual_share: float  # share of strips of the usual duration; the rest uniform over duration_s
    rhythms: dict[str, float]
    snr_db: tuple[float, float]
    n_disturbances: tuple[tuple[int, float], ...]  # (how many at once, weight); 0 is a clean strip
    disturbances: dict[str, float]
    envelopes: dict[str, float]
    targets: dict[str, float]  # one-lead, all-leads, electrodes


def training_recipe(name: str = "training") -> TrainingRecipe:
    """The corpus recipe, checked. Raises UsageError naming the entry that is wrong or missing."""
    raw = load_recipe(name)
    try:
        recipe = TrainingRecipe(
            seed=int(raw["seed"]),
            fs_hz=tuple((float(k), float(v)) for k, v in raw["fs_hz"].items()),
            duration_s=(float(raw["duration_s"]["low"]), float(raw["duration_s"]["high"])),
            duration_usual_s=float(raw["duration_s"]["usual"]),
            duration_usual_share=float(raw["duration_s"]["usual_share"]),
            rhythms={k: float(v) for k, v in raw["rhythms"].items()},
            snr_db=(float(raw["snr_db"]["low"]), float(raw["snr_db"]["high"])),
            n_disturbances=tuple((int(k), float(v)) for k, v in raw["n_disturbances"].items()),
            disturbances={k: float(v) for k, v in raw["disturbances"].items()},
            envelopes={k: float(v) for k, v in raw["envelopes"].items()},
            targets={k: float(v) for k, v in raw["targets"].items()},
        )
    except (KeyError, TypeError, ValueError, AttributeError) as err:
        raise UsageError(f"recipe {name}: missing or unusable entry {err}") from err
    _known(name, "rhythms", recipe.rhythms, RHYTHMS)
    _known(name, "disturbances", recipe.disturbances, DISTURBANCES)
    _known(name, "envelopes", recipe.envelopes, ENVELOPES)
    _known(name, "targets", recipe.targets, ("one-lead", "all-leads", "electrodes"))
    return recipe


def _known(recipe: str, table: str, found: dict[str, float], known: tuple[str, ...]) -> None:
    for key, weight in found.items():
        if key not in known:
            raise UsageError(f"recipe {recipe}: unknown {table} entry {key!r}; known: {', '.join(known)}")
        if not weight >= 0:
            raise UsageError(f"recipe {recipe}: weight of {table}.{key} must not be negative, found {weight}")
