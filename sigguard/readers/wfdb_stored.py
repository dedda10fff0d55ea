"""All that a WFDB record stores, ECG or not, in its own steps: what a faithful copy is made from.

``wfdb_record`` reads the leads to be checked; here every signal of the record is read, at its own rate.
"""

from __future__ import annotations

import bisect
from dataclasses import replace
from datetime import datetime
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.readers.wfdb_files import SegmentFiles
from sigguard.readers.wfdb_header import DEFAULT_FS_HZ, FORMATS, SignalLine, read_header
from sigguard.readers.wfdb_record import Piece, pieces_of


class StoredWfdb:
    """An open record; a context manager. Raises ReadError for all that cannot be read.

    ``signals`` say how the steps are to be understood: format, gain and baseline are those of the stored pieces,
    the widest format where they differ. ``uniform`` is False where a signal changes its gain, baseline or unit
    on the way, so that its steps have no one meaning.
    """

    def __init__(self, header_path: Path) -> None:
        self.header = read_header(header_path)
        lines, self._pieces, files = pieces_of(self.header)
        self.files = tuple(dict.fromkeys(files))
        held = [self._stored_lines(k) for k in range(len(lines))]
        self.signals = tuple(_widest(own) or line for own, line in zip(held, lines, strict=True))
        self.uniform = all(len({(s.gain, s.baseline, s.unit) for s in own}) <= 1 for own in held)
        self.n_frames = self._pieces[-1].last if self._pieces else 0
        self.fs_hz = self.header.fs_hz or DEFAULT_FS_HZ
        self._lasts = [piece.last for piece in self._pieces]

    @property
    def start_time(self) -> datetime | None:
        return self.header.start_time

    @property
    def comments(self) -> tuple[str, ...]:
        return self.header.notes

    def _stored_lines(self, signal: int) -> list[SignalLine]:
        return [p.files.signals[p.source[signal]] for p in self._pieces if p.files and p.source[signal] >= 0]

    def read(self, start: int, stop: int, missing: tuple[int, ...]) -> list[NDArray[np.int64]]:
        """For each signal its steps over frames start to stop, ((stop - start)·per_frame,).

        ``missing`` is the step to put, for each signal, where the record has no sample.
        """
        out = [
            np.full((stop - start) * s.per_frame, code, dtype=np.int64)
            for s, code in zip(self.signals, missing, strict=True)
        ]
        for k in range(bisect.bisect_right(self._lasts, start), len(self._pieces)):
            piece = self._pieces[k]
            if piece.first >= stop:
                break
            if piece.files is not None:
                self._fill(out, piece, piece.files, start, stop, missing)
        return out

    def _fill(
        self,
        out: list[NDArray[np.int64]],
        piece: Piece,
        files: SegmentFiles,
        start: int,
        stop: int,
        missing: tuple[int, ...],
    ) -> None:
        begin, end = max(start, piece.first), min(stop, piece.last)
        held = [k for k, channel in enumerate(piece.source) if channel >= 0]
        channels = tuple(piece.source[k] for k in held)
        if begin >= end or not channels:
            return
        steps = files.read(channels, begin - piece.first, end - piece.first)
        for k, channel, one in zip(held, channels, steps, strict=True):
            p = self.signals[k].per_frame
            code = FORMATS[files.signals[channel].fmt][3]
            if code is not None and code != missing[k]:
                one = np.where(one == code, missing[k], one)
            out[k][(begin - start) * p : (end - start) * p] = one

    def close(self) -> None:
        for piece in self._pieces:
            if piece.files is not None:
                piece.files.close()

    def __enter__(self) -> StoredWfdb:
        return self

    def __exit__(self, *gone: object) -> None:
        self.close()


def _widest(lines: list[SignalLine]) -> SignalLine | None:
    """The first line with the format of the most bits; None where nothing is stored."""
    if not lines:
        return None
    fmt = max((s.fmt for s in lines), key=lambda f: FORMATS[f][2])
    return replace(lines[0], fmt=fmt)
