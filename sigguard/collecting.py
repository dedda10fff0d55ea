"""Puts together what the batches of one recording gave, in order; long tables go to disk on the way."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sigguard.electrode_powers import ElectrodePowers
from sigguard.lead_laws import LawBreak
from sigguard.recording import RecordingInfo
from sigguard.segment_pass import Part
from sigguard.segments import FaultDetails, Segments
from sigguard.stored import StoredRows

LONG_ROWS = 20_000  # lead-segments from which the wide columns live on disk
MIN_BEAT_GAP_S = 0.2
_WIDE = ("value", "score", "bound", "features")
_NAMES = ("leads", "feature_names")


@dataclass(slots=True)
class Collector:
    """Takes the parts of a recording in order and gives its table, its beats and its short strips."""

    info: RecordingInfo
    n_rows: int
    strips: list[Part] = field(
        default_factory=list
    )  # parts with values over all leads: short recordings only
    powers: list[ElectrodePowers | None] = field(default_factory=list)
    laws: list[tuple[LawBreak, ...]] = field(default_factory=list)
    rests: bool = False  # a lead does not move for a while somewhere
    _columns: dict[str, list[NDArray]] = field(default_factory=dict)
    _stored: dict[str, StoredRows] = field(default_factory=dict)
    _names: dict[str, Any] = field(default_factory=dict)
    _lead_beats: list[list[NDArray]] = field(default_factory=list)
    _common: list[NDArray] = field(default_factory=list)
    _has_data: NDArray[np.bool_] | None = None

    def add(self, part: Part) -> None:
        """The next part; parts come in order of time."""
        table = part.segments
        for f in fields(Segments):
            value = getattr(table, f.name)
            if f.name in _NAMES:
                self._names.setdefault(f.name, value)
            elif f.name == "details":
                for g in fields(FaultDetails) if value is not None else ():
                    self._store(f"details.{g.name}", getattr(value, g.name))
            elif f.name in _WIDE:
                self._store(f.name, value)
            else:
                self._columns.setdefault(f.name, []).append(value)
        # Half the bytes hold any sample number of a recording shorter than two thousand million samples.
        small = np.int32 if self.info.n_samples < 2**31 else np.int64
        if not self._lead_beats:
            self._lead_beats = [[] for _ in self.info.leads]
        for k, at in enumerate(part.lead_beats):
            self._lead_beats[k].append(at.astype(small))
        self._common.append(_over_leads(part, self.info).astype(small))
        here = part.has_data
        self._has_data = here if self._has_data is None else self._has_data | here
        self.rests = self.rests or part.rests
        self.powers.append(part.electrode_powers)
        self.laws.append(part.law_breaks)
        if part.global_value is not None:
            self.strips.append(part)

    def _store(self, name: str, rows: NDArray) -> None:
        """Keep rows of a wide column: on disk if the recording is long."""
        if self.n_rows < LONG_ROWS:
            self._columns.setdefault(name, []).append(rows)
            return
        if name not in self._stored:
            self._stored[name] = StoredRows(rows.shape[1:], rows.dtype)
        self._stored[name].append(rows)

    @property
    def has_data(self) -> NDArray[np.bool_]:
        """(n_leads,): the lead holds at least one sample."""
        return np.zeros(self.info.n_leads, bool) if self._has_data is None else self._has_data

    def lead_beats(self) -> list[NDArray]:
        """For each lead its beats as sample indices."""
        return [merge_beats(parts, self.info.fs_hz) for parts in self._lead_beats]

    def beats(self) -> NDArray:
        """Beats over all leads, as sample indices."""
        return merge_beats(self._common, self.info.fs_hz)

    def segments(self) -> Segments:
        """The whole table; the parts are let go."""
        joined: dict[str, Any] = {
            name: np.concatenate(self._columns.pop(name)) for name in list(self._columns)
        }
        joined |= self._stored
        details = {name: joined.pop(name) for name in list(joined) if name.startswith("details.")}
        return Segments(
            **self._names,
            **joined,
            details=FaultDetails(**{name.partition(".")[2]: rows for name, rows in details.items()})
            if details
            else None,
        )


def _over_leads(part: Part, info: RecordingInfo) -> NDArray[np.int64]:
    """Common beats where they were looked for, else those of the lead whose rate scores best at the time."""
    if info.n_leads == 1:
        return part.lead_beats[0]
    if part.common_beats is not None:
        return part.common_beats
    table = part.segments
    best = table.score[:, 0].reshape(-1, info.n_leads).argmax(axis=1)
    chosen = []
    for k, lead in enumerate(best):
        start, end = table.start_s[k * info.n_leads], table.end_s[k * info.n_leads]
        at = part.lead_beats[lead]
        chosen.append(at[(at >= start * info.fs_hz) & (at < end * info.fs_hz)])
    return np.concatenate(chosen)


def merge_beats(parts: Sequence[NDArray], fs_hz: float) -> NDArray:
    """Beats of neighbouring segments put together; one found on both sides of a seam counts once."""
    at = np.sort(np.concatenate(parts))
    if len(at) < 2:
        return at
    return at[np.diff(at, prepend=at[0] - int(fs_hz)) > MIN_BEAT_GAP_S * fs_hz]
