"""Recordings whose samples are held in memory, each lead from the sample at which it begins."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from sigguard.readers.base import DigitalScale, OpenRecording
from sigguard.recording import RecordingInfo


class HeldLead(Protocol):
    """Stored steps (n,) of one lead, the sample of the recording its first one is, and its scale."""

    @property
    def steps(self) -> NDArray[np.integer]: ...

    @property
    def first(self) -> int: ...

    @property
    def scale(self) -> DigitalScale: ...


class OpenHeld(OpenRecording):
    """An open recording of held leads, missing where a lead does not reach; see OpenRecording."""

    def __init__(
        self, info: RecordingInfo, leads: Sequence[HeldLead], *, channels: tuple[int, ...], n_signals: int
    ) -> None:
        scales = tuple(lead.scale for lead in leads)
        super().__init__(info, scales=scales, channels=channels, n_signals=n_signals)
        self._held = leads

    def _read_digits(self, start: int, stop: int) -> NDArray[np.int64]:
        out = np.empty((len(self._held), stop - start), dtype=np.int64)
        for row, lead in zip(out, self._held, strict=True):
            row[:] = lead.scale.missing
            begin, end = max(start, lead.first), min(stop, lead.first + len(lead.steps))
            if begin < end:
                row[begin - start : end - start] = lead.steps[begin - lead.first : end - lead.first]
        return out
