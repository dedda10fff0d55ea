"""The table of segments as CSV: one row for each lead and stretch."""

from __future__ import annotations

import os
from collections.abc import Iterator
from dataclasses import dataclass, fields
from typing import TextIO

import numpy as np
from numpy.typing import NDArray

from sigguard.report.words import cell
from sigguard.segments import ABSENT, FAULTS, GRADES, MEASUREMENTS, UNITS, Segments
from sigguard.writers.atomic import atomic_file

CHUNK_ROWS = 4096
_DECIMALS = {"1/min": 1, "ms": 1, "mV": 4}
_YES_NO = np.array(["false", "true"], dtype=object)


@dataclass(frozen=True, slots=True, eq=False)
class SegmentTable(Segments):
    """The segments of a report, with ``to_csv`` added."""

    @classmethod
    def of(cls, segments: Segments) -> SegmentTable:
        """The same columns, not copied, as a SegmentTable."""
        return cls(**{f.name: getattr(segments, f.name) for f in fields(Segments)})

    def to_csv(self, path: str | os.PathLike[str] | TextIO) -> None:
        """Write the table to a path (whole or not at all) or an open text stream; WriteError if it cannot be."""
        segments_csv(self, path)


def csv_header(feature_names: tuple[str, ...]) -> str:
    """The header line, without its line end."""
    names = ["lead", "start_s", "end_s", "grade", "faults"]
    for m in MEASUREMENTS:
        names += [m, f"{m}_score", f"{m}_bound", f"{m}_reliable", f"{m}_absent"]
    return ",".join(cell(name) for name in (*names, *feature_names))


def segments_csv(segments: Segments, target: str | os.PathLike[str] | TextIO) -> None:
    """Write ``segments`` as CSV to a path or an open text stream.

    Times carry 3 decimals; bounds are rounded up, so that rounding never narrows one; faults
    that lie on any part of the segment are joined by ``;``; a missing number is an empty field.
    """
    if isinstance(target, (str, os.PathLike)):
        with atomic_file(target, "w") as out:
            out.writelines(_chunks(segments))
    else:
        for text in _chunks(segments):
            target.write(text)


def _chunks(segments: Segments) -> Iterator[str]:
    yield csv_header(segments.feature_names) + "\n"
    lead_cells = np.array([cell(lead) for lead in segments.leads], dtype=object)
    for first in range(0, len(segments), CHUNK_ROWS):
        part = segments.rows(np.arange(first, min(first + CHUNK_ROWS, len(segments))))
        heads = _heads(part, lead_cells)
        # Numbers are formatted apart from the names, so that blanking "nan" cannot touch a name.
        numbers = _numbers(part).replace(",nan", ",").split("\n")
        yield "".join(f"{head}{line}\n" for head, line in zip(heads, numbers, strict=True))


def _heads(part: Segments, lead_cells: NDArray[np.object_]) -> list[str]:
    """``lead,start_s,end_s,grade,faults`` for each row."""
    grades = np.array(GRADES, dtype=object)[part.grade].tolist()
    present = part.fault > 0
    # Few combinations of faults occur: name each once.
    codes = present @ (1 << np.arange(len(FAULTS)))
    kinds, where = np.unique(codes, return_inverse=True)
    words = [";".join(f for i, f in enumerate(FAULTS) if code >> i & 1) for code in kinds.tolist()]
    faults = np.array(words, dtype=object)[where].tolist()
    columns = (
        lead_cells[part.lead_index].tolist(),
        part.start_s.tolist(),
        part.end_s.tolist(),
        grades,
        faults,
    )
    return ["%s,%.3f,%.3f,%s,%s" % row for row in zip(*columns, strict=True)]  # noqa: UP031  (fastest here)


def _numbers(part: Segments) -> str:
    """Everything after the faults, one line a row, each field led by its comma; ``nan`` where missing."""
    columns: list[list] = []
    form = ""
    for i, m in enumerate(MEASUREMENTS):
        decimals = _DECIMALS[UNITS[m]]
        columns += [
            _finite(part.value[:, i], decimals=decimals),
            _finite(part.score[:, i], decimals=4),
            _finite(round_up(part.bound[:, i], decimals=decimals)),
            _YES_NO[part.reliable[:, i].astype(np.intp)].tolist(),
            np.array(ABSENT, dtype=object)[part.absent[:, i]].tolist(),
        ]
        form += f",%.{decimals}f,%.4f,%.{decimals}f,%s,%s"
    columns += [_finite(part.features[:, j]) for j in range(part.features.shape[1])]
    form += ",%.6g" * part.features.shape[1]
    return "\n".join([form % row for row in zip(*columns, strict=True)])


def _finite(x: NDArray, *, decimals: int | None = None) -> list[float]:
    """As plain floats, NaN for what is not finite and 0 for −0 (also for what rounds to it)."""
    x = np.where(np.isfinite(x), x, np.nan)
    if decimals is not None:
        x = np.round(x, decimals)
    return (x + 0.0).tolist()


def round_up(x: NDArray | float, *, decimals: int) -> NDArray:
    """``x`` rounded up to so many decimals, with room for the last bits of a float; NaN stays NaN."""
    scaled = np.asarray(x, dtype=np.float64) * 10**decimals
    nearest = np.round(scaled)
    return np.where(np.abs(scaled - nearest) < 1e-6, nearest, np.ceil(scaled)) / 10**decimals
