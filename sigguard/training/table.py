"""The tables of training: a piece of work, the rows it gives, the corpus."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sigguard.simulate.recorded import RECORDED_KINDS
from sigguard.training.labels import Labels, Measured

GROUPS = (*RECORDED_KINDS, "simulated", "none")  # by what lies on the row; "none": nothing


@dataclass(frozen=True, slots=True)
class Procedure:
    """The measuring procedure under judgement, and the names of what it hands out."""

    analyse: Callable[..., Measured]
    feature_names: tuple[str, ...]
    analyse_global: Callable[..., Any] | None = None
    global_feature_names: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Chunk:
    """One piece of work. ``kind``: rows, cells (repeated draws) or strips (several leads)."""

    kind: str
    part: str
    seed: np.random.SeedSequence
    fs_hz: float
    duration_s: float
    n_carriers: int
    n_leads: int
    n_draws: int
    first_carrier: int
    real: tuple[str, ...] = ()  # record names instead of simulated patients


@dataclass(frozen=True, slots=True, eq=False)
class Rows:
    """n spoilt rows with their truth; measurement columns are 5 for leads and 3 for strips."""

    features: NDArray[np.float32]  # (n, F)
    judged: NDArray[np.bool_]  # (n, m), as in Labels, likewise the next three
    right: NDArray[np.bool_]
    valued: NDArray[np.bool_]
    error: NDArray[np.float64]
    fault: NDArray[np.bool_]  # (n, 4)
    fault_asked: NDArray[np.bool_]  # (n, 4)
    harm: NDArray[np.int8]  # (n, H, 5): which measurement each fault takes by itself, as in spoil.harm_truth
    carrier: NDArray[np.int32]  # (n,)
    group: NDArray[np.int8]  # (n,): index into GROUPS
    real: NDArray[np.bool_]  # (n,): the carrier is a real recording
    part: NDArray[np.int8]  # (n,): index into PARTS
    cell: NDArray[np.int32]  # (n,): rows of one number differ in the cut of noise only; -1: no such row
    snr_db: NDArray[np.float64]  # (n,)
    fs_hz: NDArray[np.float64]  # (n,)

    def __len__(self) -> int:
        return len(self.group)

    @property
    def labels(self) -> Labels:
        return Labels(judged=self.judged, right=self.right, valued=self.valued, error=self.error)

    def pick(self, index: NDArray) -> Rows:
        """The rows of a mask or an index array."""
        return Rows(**{f.name: getattr(self, f.name)[index] for f in fields(self)})

    @classmethod
    def join(cls, parts: Iterable[Rows]) -> Rows:
        """Rows of several chunks, in order; their cells stay apart."""
        parts = list(parts)
        columns = {f.name: np.concatenate([getattr(p, f.name) for p in parts]) for f in fields(cls)}
        return cls(**columns)


@dataclass(frozen=True, slots=True, eq=False)
class Corpus:
    """All lead rows and all strips; ``strips`` is None without a procedure for them."""

    rows: Rows
    strips: Rows | None
