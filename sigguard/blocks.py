"""The only place that knows of segments, blocks and margins.

A segment's features depend on its own samples and on MARGIN_S to either side, never on the block it
was read in, so that any block size gives the same table.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import UsageError

MARGIN_S = 2.0
MIN_REST_S = 5.0
BLOCK_ROWS = (
    48  # lead-segments in one block: enough to work in bulk, little enough to stay small and in the cache
)


@dataclass(frozen=True, slots=True, eq=False)
class SegmentPlan:
    """Where the segments of a recording begin and end, in samples."""

    start: NDArray[np.int64]
    stop: NDArray[np.int64]
    fs_hz: float
    n_samples: int

    def __len__(self) -> int:
        return len(self.start)


def plan_segments(n_samples: int, fs_hz: float, segment_s: float = 10.0) -> SegmentPlan:
    """Segments of ``segment_s``; a rest of 5 s or more is one more, less joins the one before.

    A recording shorter than a segment is one segment. Raises UsageError outside 5 to 30 s.
    """
    if not 5.0 <= segment_s <= 30.0:
        raise UsageError(f"segments last from 5 to 30 s, found {segment_s:g}")
    size = int(round(segment_s * fs_hz))
    count = max(1, n_samples // size)
    if n_samples - count * size >= MIN_REST_S * fs_hz and n_samples > size:
        count += 1
    start = np.arange(count, dtype=np.int64) * size
    stop = np.append(start[1:], n_samples)
    return SegmentPlan(start, stop.astype(np.int64), fs_hz, n_samples)


@dataclass(frozen=True, slots=True)
class Batch:
    """Neighbouring segments of equal length and equal margins, read and measured together."""

    first: int  # index of the first segment
    count: int
    read_start: int
    read_stop: int
    size: int
    margin: tuple[int, int]


def batches(plan: SegmentPlan, n_leads: int, *, block_rows: int = BLOCK_ROWS) -> Iterator[Batch]:
    """The segments in order, in batches of about ``block_rows`` lead-segments."""
    margin = int(round(MARGIN_S * plan.fs_hz))
    most = max(1, block_rows // max(n_leads, 1))
    lead_in = np.minimum(plan.start, margin)
    lead_out = np.minimum(plan.n_samples - plan.stop, margin)
    size = plan.stop - plan.start
    k = 0
    while k < len(plan):
        alike = k + 1
        while (
            alike < len(plan)
            and alike - k < most
            and (size[alike], lead_in[alike], lead_out[alike]) == (size[k], lead_in[k], lead_out[k])
        ):
            alike += 1
        yield Batch(
            k,
            alike - k,
            int(plan.start[k] - lead_in[k]),
            int(plan.stop[alike - 1] + lead_out[k]),
            int(size[k]),
            (int(lead_in[k]), int(lead_out[k])),
        )
        k = alike


def rows_of(batch: Batch, block_mv: NDArray[np.float64]) -> NDArray[np.float64]:
    """(count * n_leads, margin + size + margin) rows, by time and then lead, from the block that was read."""
    length = batch.margin[0] + batch.size + batch.margin[1]
    windows = np.lib.stride_tricks.sliding_window_view(block_mv, length, axis=1)[:, :: batch.size]
    rows = windows[:, : batch.count].transpose(1, 0, 2)
    return np.ascontiguousarray(rows.reshape(-1, length))
