"""The table of segments: one row for each lead and stretch, held as a struct of arrays."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields, replace

import numpy as np
from numpy.typing import NDArray

MEASUREMENTS = ("rate", "pr", "qrs", "qt", "st")
UNITS = {"rate": "1/min", "pr": "ms", "qrs": "ms", "qt": "ms", "qtc": "ms", "st": "mV"}
ABSENT = ("", "no-wave", "no-fixed-relation", "too-small-here")  # index 0: not absent
GRADES = ("none", "rhythm", "intervals", "all")  # ascending, so that grades compare as numbers
FAULTS = ("wander", "muscle", "mains", "motion", "flat", "clipped", "missing", "weak", "narrow-band")
STRENGTH_UNITS = (
    "uV range",
    "uV rms",
    "uV peak",
    "uV rms",
    "s",
    "s",
    "s",
    "uV QRS",
    "",
)  # in the order of FAULTS


@dataclass(frozen=True, slots=True, eq=False)
class FaultDetails:
    """More about the faults of n rows; columns over faults follow FAULTS, and speak only where one is called."""

    weight: NDArray[np.float32]  # (n, 9): measurements the fault is held to cost; the largest is named first
    harms: NDArray[np.bool_]  # (n, 9, 5): the measurements it takes
    strength: NDArray[np.float32]  # (n, 9): in STRENGTH_UNITS; NaN where there is none to give
    windows: NDArray[np.uint64]  # (n, 9): bit k set: it lies on the k-th of ``n_windows``
    n_windows: NDArray[np.uint8]  # (n,): equal windows of about 1 s the row is cut into, at most 64

    def rows(self, index: NDArray) -> FaultDetails:
        return FaultDetails(**{f.name: getattr(self, f.name)[index] for f in fields(self)})

    @classmethod
    def join(cls, parts: Sequence[FaultDetails]) -> FaultDetails:
        return cls(**{f.name: np.concatenate([getattr(p, f.name) for p in parts]) for f in fields(cls)})


@dataclass(frozen=True, slots=True, eq=False)
class Segments:
    """n rows, ordered by time and within one time by lead.

    Columns over measurements follow MEASUREMENTS, columns over faults follow FAULTS.
    """

    leads: tuple[str, ...]
    feature_names: tuple[str, ...]
    lead_index: NDArray[np.int32]  # (n,): index into leads
    start_s: NDArray[np.float64]  # (n,)
    end_s: NDArray[np.float64]  # (n,)
    value: NDArray[np.float64]  # (n, 5): 1/min, ms, ms, ms, mV; NaN where there is none
    score: NDArray[np.float64]  # (n, 5): P(within tolerance)
    bound: NDArray[np.float64]  # (n, 5): bound_95 in the unit of the value; NaN where none can be given
    reliable: NDArray[np.bool_]  # (n, 5)
    absent: NDArray[np.int8]  # (n, 5): index into ABSENT
    grade: NDArray[np.int8]  # (n,): index into GRADES
    fault: NDArray[np.float32]  # (n, 9): fraction of the segment the fault lies on, 0 where it is not called
    features: NDArray[np.float32]  # (n, n_features)
    details: FaultDetails | None = None

    def __len__(self) -> int:
        return len(self.start_s)

    def rows(self, index: NDArray) -> Segments:
        """The same table with only the rows of a mask or an index array."""
        picked = {
            f.name: getattr(self, f.name)[index]
            for f in fields(self)
            if f.name not in ("leads", "feature_names", "details")
        }
        picked["details"] = None if self.details is None else self.details.rows(index)
        return replace(self, **picked)
