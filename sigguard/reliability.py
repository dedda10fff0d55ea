"""From features to score, from score to bound, from bound to "reliable".

A score is the classifier's probability that the disturbance moved a measurement by less than its
tolerance. A table fitted on data the classifier never saw turns it into ``bound_95``: the half-width
that 95 % of the measurements with this score keep to. A measurement is reliable when its bound lies
within the tolerance; for ``rate``, whose tolerance is that no beat is missed or invented, when the
lower confidence limit of the share of flawless segments at that score is 95 % or more.

The model is one ``.npz`` of plain arrays. Before it answers anything it must prove itself: its
digest must fit its arrays, its feature table the running one, and its stored probe inputs must
give their stored answers. Otherwise ModelError.
"""

from __future__ import annotations

import hashlib
import zipfile
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from io import BytesIO
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import ModelError, UsageError
from sigguard.resources import resource_path
from sigguard.segments import MEASUREMENTS
from sigguard.trees import TreeArrays, TreeEnsemble

# Why these: two SDs of the IEC 60601-2-25 limit for pr and qrs (from memory), the CSE limit of the
# T end for qt (from memory), half the 0.5 mm depression threshold for st. For rate the tolerance is
# not a number but "no beat missed or invented, ±150 ms".
TOLERANCE = (np.nan, 20.0, 20.0, 30.0, 0.025)
GLOBAL_MEASUREMENTS = ("pr", "qrs", "qt")
GLOBAL_TOLERANCE = (20.0, 20.0, 30.0)
LEARNED_FAULTS = ("wander", "muscle", "mains", "motion")
HARM_FAULTS = (*LEARNED_FAULTS, "flat", "clipped", "missing")  # of which it is learned what they take
PROMISE = 0.95  # the share that keeps to the bound
LOCAL = 0.90  # the share of named absences asked for at any single score

FORMAT = 1
_PROBE_AGREEMENT = 1e-9  # relative: the exponential may differ in its last digit between machines
Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class StepTable:
    """A monotone step function of the score: ``level[i]`` holds from ``edge[i]`` up to the next edge.

    Below the first edge, and for a score that is NaN, the answer is ``below``.
    """

    edge: Array  # (k,), ascending
    level: Array  # (k,)
    below: float

    def __call__(self, score: NDArray[np.floating]) -> Array:
        """Scores of any shape → levels of that shape."""
        score = np.asarray(score, dtype=np.float64)
        levels = np.concatenate([[self.below], self.level])
        at = np.searchsorted(self.edge, score, side="right")
        return np.where(np.isnan(score), self.below, levels[at])

    def to_dict(self, prefix: str) -> dict[str, NDArray]:
        return {prefix + "_edge": self.edge, prefix + "_level": self.level}

    @classmethod
    def from_dict(
        cls, arrays: Mapping[str, NDArray], prefix: str, *, below: float, rising: bool
    ) -> StepTable:
        """Raises ModelError where the table is missing or not monotone."""
        try:
            edge, level = arrays[prefix + "_edge"], arrays[prefix + "_level"]
        except KeyError as err:
            raise ModelError(f"the model lacks the table {prefix}; train it again") from err
        first, then = (level[:-1], level[1:]) if rising else (level[1:], level[:-1])
        if (
            edge.shape != level.shape
            or edge.ndim != 1
            or np.any(np.diff(edge) <= 0)
            or not np.all(first <= then)
        ):
            raise ModelError(
                f"the model's table {prefix} is not monotone; the file is damaged, train it again"
            )
        return cls(edge=edge, level=level, below=below)


@dataclass(frozen=True, slots=True, eq=False)
class Calibration:
    """What the calibration set taught, a table for each of m measurements in order.

    ``bound``: score → bound_95 in the measurement's unit. ``share``: score → lower confidence limit
    of the share of right answers among rows with a value. ``absent``: the same among rows that
    name a reason for the absence of a value.
    """

    bound: tuple[StepTable, ...]
    share: tuple[StepTable, ...]
    absent: tuple[StepTable, ...]

    def to_dict(self, prefix: str, names: Sequence[str]) -> dict[str, NDArray]:
        out: dict[str, NDArray] = {}
        for part in ("bound", "share", "absent"):
            for name, table in zip(names, getattr(self, part), strict=True):
                out |= table.to_dict(f"{prefix}{part}_{name}")
        return out

    @classmethod
    def from_dict(cls, arrays: Mapping[str, NDArray], prefix: str, names: Sequence[str]) -> Calibration:
        def tables(part: str, below: float, rising: bool) -> tuple[StepTable, ...]:
            at = f"{prefix}{part}_"
            return tuple(StepTable.from_dict(arrays, at + n, below=below, rising=rising) for n in names)

        return cls(
            bound=tables("bound", np.inf, False),
            share=tables("share", 0.0, True),
            absent=tables("absent", 0.0, True),
        )

    def bounds(self, scores: Array) -> Array:
        """(n, m) scores → (n, m) bounds in each measurement's unit, inf where none can be given."""
        return np.stack([table(scores[:, k]) for k, table in enumerate(self.bound)], axis=1)

    def shares(self, scores: Array) -> Array:
        return np.stack([table(scores[:, k]) for k, table in enumerate(self.share)], axis=1)

    def absences(self, scores: Array) -> Array:
        return np.stack([table(scores[:, k]) for k, table in enumerate(self.absent)], axis=1)


@dataclass(frozen=True, slots=True, eq=False)
class ReliabilityModel:
    """The trained model. Lead columns follow MEASUREMENTS, global ones GLOBAL_MEASUREMENTS."""

    feature_names: tuple[str, ...]
    global_feature_names: tuple[str, ...]
    trees: TreeEnsemble  # the five measurements, then the four learned faults
    global_trees: TreeEnsemble
    calibration: Calibration
    global_calibration: Calibration
    fault_threshold: Array  # (4,): a fault is called from this probability on
    sha256: str
    harm_trees: TreeEnsemble | None = (
        None  # a model for each measurement; the last input is the fault's number
    )

    @classmethod
    def load(
        cls,
        path: str | Path | None = None,
        *,
        feature_names: Sequence[str] | None = None,
        global_feature_names: Sequence[str] | None = None,
    ) -> ReliabilityModel:
        """The model at ``path``, or the one that ships. Names given must be those it was trained on.

        Raises ModelError when the file is missing, damaged, of another format or feature table, or
        does not give its stored answers.
        """
        try:
            file = Path(path) if path is not None else resource_path("models", "reliability.npz")
            raw = file.read_bytes()
        except UsageError as err:
            raise ModelError(f"{err}; run sigguard train") from err
        except OSError as err:
            raise ModelError(
                f"{file.name}: no model can be read there ({err.strerror}); run sigguard train"
            ) from err
        model, arrays = cls._unpack(raw, file.name)
        _same_names("features", model.feature_names, feature_names)
        _same_names("global features", model.global_feature_names, global_feature_names)
        model._prove(arrays, file.name)
        return model

    @classmethod
    def _unpack(cls, raw: bytes, name: str) -> tuple[ReliabilityModel, dict[str, NDArray]]:
        try:
            with np.load(BytesIO(raw), allow_pickle=False) as archive:
                arrays = {key: archive[key] for key in archive.files}
        except (OSError, ValueError, EOFError, zipfile.BadZipFile, NotImplementedError) as err:
            raise ModelError(f"{name}: expected an archive of plain arrays, found something else") from err
        if int(arrays.get("format", np.array(-1))) != FORMAT:
            raise ModelError(f"{name}: not a model of format {FORMAT}; train it again")
        if str(arrays.pop("digest", "")) != digest(arrays):
            raise ModelError(
                f"{name}: the arrays do not fit their digest; the file was altered, train it again"
            )
        return cls.from_arrays(arrays, sha256=hashlib.sha256(raw).hexdigest()), arrays

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, NDArray], *, sha256: str = "") -> ReliabilityModel:
        """The model from its named arrays, unproved. Raises ModelError for arrays that do not fit."""
        try:
            names = tuple(str(n) for n in arrays["feature_names"])
            global_names = tuple(str(n) for n in arrays["global_feature_names"])
            threshold = arrays["fault_threshold"]
        except KeyError as err:
            raise ModelError(f"the model lacks the array {err.args[0]}; train it again") from err
        trees = TreeArrays.from_dict(arrays, "lead_tree_")
        global_trees = TreeArrays.from_dict(arrays, "global_tree_")
        if trees.n_models != len(MEASUREMENTS) + len(LEARNED_FAULTS) or global_trees.n_models != 3:
            raise ModelError("the model holds another number of classifiers than expected; train it again")
        return cls(
            feature_names=names,
            global_feature_names=global_names,
            trees=TreeEnsemble.build(trees, len(names)),
            global_trees=TreeEnsemble.build(global_trees, len(global_names)),
            calibration=Calibration.from_dict(arrays, "lead_", MEASUREMENTS),
            global_calibration=Calibration.from_dict(arrays, "global_", GLOBAL_MEASUREMENTS),
            fault_threshold=threshold,
            sha256=sha256,
            harm_trees=_harm_trees(arrays, len(names)),
        )

    def judge(self, features: NDArray[np.floating]) -> tuple[Array, Array]:
        """(n, F) → scores (n, 5) and fault probabilities (n, 4), in one descent through the trees."""
        answers = self.trees.predict_proba(finite_or_nan(features))
        return answers[:, : len(MEASUREMENTS)], answers[:, len(MEASUREMENTS) :]

    def score(self, features: NDArray[np.floating]) -> Array:
        """(n, F) → (n, 5): P(within tolerance)."""
        return self.judge(features)[0]

    def faults(self, features: NDArray[np.floating]) -> Array:
        """(n, F) → (n, 4): P(this disturbance alone would break a measurement), per LEARNED_FAULTS."""
        return self.judge(features)[1]

    def harm(self, features: NDArray[np.floating], fault: NDArray[np.integer]) -> Array:
        """(n, F) features and (n,) index into HARM_FAULTS → (n, 5): P(this fault alone takes the measurement).

        A half throughout for a model that was not taught it.
        """
        if self.harm_trees is None:
            return np.full((len(fault), len(MEASUREMENTS)), 0.5)
        table = np.column_stack([finite_or_nan(features), fault])
        return self.harm_trees.predict_proba(table)

    def bound(self, scores: Array) -> Array:
        """(n, 5) scores → (n, 5) bound_95 in 1/min, ms, ms, ms, mV; inf where none can be given."""
        return self.calibration.bounds(scores)

    def reliable(self, scores: Array, tolerance: Sequence[float] = TOLERANCE) -> NDArray[np.bool_]:
        """(n, 5) scores → (n, 5): the bound lies within the tolerance; for rate see the module.

        Speaks of rows that give a value; whether there is one is the caller's to know.
        """
        within = self.bound(scores) <= np.asarray(tolerance, dtype=np.float64)
        within[:, 0] = self.calibration.share[0](scores[:, 0]) >= PROMISE
        return within

    def least_reliable_rate(self) -> float:
        """The least score at which the rate counts as reliable; inf if none does."""
        table = self.calibration.share[0]
        good = table.edge[table.level >= PROMISE]
        return float(good.min()) if len(good) else np.inf

    def absence_holds(self, scores: Array) -> NDArray[np.bool_]:
        """(n, 5) scores of rows that name a reason of absence → whether such reasons stand: 95 % over all that are called, 90 % at this score."""
        return self.calibration.absences(scores) >= LOCAL

    def score_global(self, features: NDArray[np.floating]) -> Array:
        """(n, G) → (n, 3): P(within tolerance) of the global pr, qrs, qt."""
        return self.global_trees.predict_proba(finite_or_nan(features))

    def bound_global(self, scores: Array) -> Array:
        """(n, 3) scores → (n, 3) bound_95 in ms; inf where none can be given."""
        return self.global_calibration.bounds(scores)

    def reliable_global(
        self, scores: Array, tolerance: Sequence[float] = GLOBAL_TOLERANCE
    ) -> NDArray[np.bool_]:
        """(n, 3) scores → (n, 3): the bound lies within the tolerance."""
        return self.bound_global(scores) <= np.asarray(tolerance, dtype=np.float64)

    def answers(
        self, features: NDArray[np.floating], global_features: NDArray[np.floating]
    ) -> dict[str, Array]:
        """Everything the model says to some inputs, by name: what the probes store and must find again."""
        score, fault = self.judge(features)
        score_global = self.score_global(global_features)
        return {
            "probe_score": score,
            "probe_fault": fault,
            "probe_bound": self.bound(score),
            "probe_share": self.calibration.shares(score),
            "probe_global_score": score_global,
            "probe_global_bound": self.bound_global(score_global),
            **self._harm_answers(features),
        }

    def _harm_answers(self, features: NDArray[np.floating]) -> dict[str, Array]:
        if self.harm_trees is None:
            return {}
        return {"probe_harm": self.harm(features, np.arange(len(features)) % len(HARM_FAULTS))}

    def _prove(self, arrays: Mapping[str, NDArray], name: str) -> None:
        try:
            found = self.answers(arrays["probe_features"], arrays["probe_global_features"])
            stored = {key: arrays[key] for key in found}
        except KeyError as err:
            raise ModelError(f"{name}: the stored probe {err.args[0]} is missing; train it again") from err
        for key, value in found.items():
            if not value.size or not _agree(value, stored[key]):
                raise ModelError(
                    f"{name}: the model does not give its stored answers ({key}); train it again"
                )


def save_model(arrays: Mapping[str, NDArray], path: str | Path) -> None:
    """Write named plain arrays with their digest; the same arrays give the same bytes."""
    plain = {key: np.asarray(value) for key, value in arrays.items() if key != "digest"}
    np.savez_compressed(Path(path), allow_pickle=False, digest=np.array(digest(plain)), **plain)


def digest(arrays: Mapping[str, NDArray]) -> str:
    """SHA-256 over names, types, shapes and bytes of the arrays, in the order of the names."""
    total = hashlib.sha256()
    for key in sorted(arrays):
        value = np.ascontiguousarray(arrays[key])
        total.update(f"{key}|{value.dtype.str}|{value.shape}|".encode())
        total.update(value.tobytes())
    return total.hexdigest()


def finite_or_nan(features: NDArray[np.floating]) -> NDArray[np.floating]:
    """Features with infinities as missing: no tree was grown on them."""
    features = np.asarray(features)
    return np.where(np.isfinite(features), features, np.nan)


def qtc_bound(
    qt_ms: Array, qt_bound_ms: Array, rate: Array, rate_bound: Array, *, exponent: float = 0.5
) -> Array:
    """Bound of QTc = QT·(rate/60)^exponent from those of QT and rate; ms.

    First-order propagation with both errors taken at their bound and on the same side, so it is
    wider than a root sum of squares. exponent: 1/2 Bazett, 1/3 Fridericia.
    """
    qtc = qt_ms * (rate / 60.0) ** exponent
    return qtc * (qt_bound_ms / qt_ms + exponent * rate_bound / rate)


def _harm_trees(arrays: Mapping[str, NDArray], n_features: int) -> TreeEnsemble | None:
    if "harm_tree_feature" not in arrays:
        return None
    trees = TreeArrays.from_dict(arrays, "harm_tree_")
    if trees.n_models != len(MEASUREMENTS):
        raise ModelError("the model holds another number of harm models than expected; train it again")
    return TreeEnsemble.build(trees, n_features + 1)


def _same_names(what: str, trained: tuple[str, ...], running: Sequence[str] | None) -> None:
    if running is None or tuple(running) == trained:
        return
    differ = sorted(set(trained) ^ set(running))
    raise ModelError(
        f"the model was trained on other {what} than this version computes "
        f"({', '.join(differ[:5]) if differ else 'their order differs'}); train it again"
    )


def _agree(value: Array, stored: NDArray) -> bool:
    return value.shape == stored.shape and bool(np.allclose(value, stored, rtol=_PROBE_AGREEMENT, atol=1e-12))
