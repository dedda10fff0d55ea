"""Copies of stretches of a recording as WFDB records, in the source's own steps.

A WFDB source is copied with all its signals, ECG or not, in its own formats. Another source that has steps
(DICOM) keeps them; one that has none (text) is put into steps of one nanovolt. Every copy is read
again and compared with the source before it counts.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from datetime import datetime
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import WriteError
from sigguard.leads import clean_name
from sigguard.readers.base import GAP_LIMIT, DigitalScale, OpenRecording
from sigguard.readers.wfdb_header import SignalLine
from sigguard.readers.wfdb_stored import StoredWfdb
from sigguard.recording import unique_names
from sigguard.writers import wfdb_marks
from sigguard.writers.records import (
    RecordFrame,
    SignalSpec,
    block_frames,
    later,
    write_master,
    write_record,
    written_format,
)

Steps = NDArray[np.int64]
FINE_STEPS_PER_MV = 1e6  # text sources: one nanovolt
FINEST, WIDE = 32, (1 << 31) - 1
# formats tried in turn for steps of no WFDB format, with the largest step each takes beside its missing code
FITTING = ((16, (1 << 15) - 1), (24, (1 << 23) - 1), (32, WIDE))


@dataclass(frozen=True, slots=True)
class CopySource:
    """What copies are made from: signals as they will be written, and frames of them in their own steps."""

    specs: tuple[SignalSpec, ...]
    read: Callable[[int, int], list[Steps]]
    n_frames: int
    fs_hz: float  # frames in a second
    per_frame: int  # samples of an ECG lead in a frame
    start_time: datetime | None
    comments: tuple[str, ...]
    marks: tuple[tuple[Path, wfdb_marks.MarkFile], ...]
    files: tuple[Path, ...]
    notes: tuple[str, ...]  # what could not be kept as it was


@dataclass(frozen=True, slots=True)
class Written:
    """One record written to a folder: its name and its files, in the order in which they may be moved into place."""

    name: str
    files: tuple[str, ...]


@contextmanager
def copy_source(opened: OpenRecording, *, with_identity: bool) -> Iterator[CopySource]:
    """What the open recording can be copied from. ``with_identity``: with the remarks of its header."""
    path = Path(opened.info.path) if opened.info.path else None
    if opened.info.format == "WFDB" and path is not None:
        with StoredWfdb(path) as stored:
            if stored.uniform:
                yield _of_wfdb(opened, stored, path, with_identity)
            else:
                changed = "the gain of a signal changes on the way"
                yield _of_other(opened, _marks(path, stored), stored.files, with_identity, changed)
    else:
        yield _of_other(
            opened, (), (path,) if path else (), with_identity, "the source has no steps of its own"
        )


def _of_wfdb(opened: OpenRecording, stored: StoredWfdb, path: Path, with_identity: bool) -> CopySource:
    names = unique_names(
        [clean_name(s.name or "") or f"signal {k + 1}" for k, s in enumerate(stored.signals)]
    )
    specs = tuple(_spec(line, name) for line, name in zip(stored.signals, names, strict=True))
    missing = tuple(spec.missing for spec in specs)
    per_frame = stored.signals[opened.channels[0]].per_frame
    changed = sorted(
        {f"{a.fmt} as {b.fmt}" for a, b in zip(stored.signals, specs, strict=True) if a.fmt != b.fmt}
    )
    notes: tuple[str, ...] = (
        (f"Same values in another storage format: {', '.join(changed)}.",) if changed else ()
    )
    if any(line.skew for line in stored.signals):
        notes += ("Signals stored with a skew are written aligned.",)
    return CopySource(
        specs,
        lambda start, stop: stored.read(start, stop, missing),
        stored.n_frames,
        opened.info.fs_hz / per_frame,
        per_frame,
        stored.start_time,
        stored.comments if with_identity else (),
        _marks(path, stored),
        stored.files,
        notes,
    )


def _spec(line: SignalLine, name: str) -> SignalSpec:
    fmt = written_format(line.fmt)
    return SignalSpec(
        fmt, line.per_frame, line.gain, line.baseline, line.unit, line.adc_bits, line.adc_zero, name
    )


def _marks(path: Path, stored: StoredWfdb) -> tuple[tuple[Path, wfdb_marks.MarkFile], ...]:
    found = wfdb_marks.beside(path, {file.resolve() for file in stored.files}, n_frames=stored.n_frames)
    read = [(file, wfdb_marks.read_marks(file)) for file in found]
    return tuple((file, marks) for file, marks in read if marks is not None)


def _of_other(
    opened: OpenRecording,
    marks: tuple[tuple[Path, wfdb_marks.MarkFile], ...],
    files: tuple[Path, ...],
    with_identity: bool,
    why_not_steps: str,
) -> CopySource:
    info = opened.info
    notes: tuple[str, ...] = ()
    if opened.scales is not None:
        top = _largest(lambda a, b: _known(opened.read_digital(a, b), opened.scales), info.n_samples)
        fmt = next((f for f, most in FITTING if top <= most), FINEST)
        scales: Sequence[DigitalScale] = opened.scales
        specs = tuple(
            SignalSpec(fmt, 1, 1.0 / s.step_mv, round(s.zero), "mV", 0, 0, name)
            for s, name in zip(scales, info.leads, strict=True)
        )
        off = max(abs(s.zero - round(s.zero)) * abs(s.step_mv) for s in scales)
        if off:
            notes += (f"The zero lies between two steps; the copy's is off by {off * 1e3:.3g} uV at most.",)
        read = _steps_of(opened, specs)
    else:
        top = _largest(lambda a, b: np.nan_to_num(opened.read(a, b)), info.n_samples)
        per_mv = FINE_STEPS_PER_MV
        while top * per_mv > WIDE - 1:
            per_mv /= 10.0
        specs = tuple(SignalSpec(FINEST, 1, per_mv, 0, "mV", 0, 0, name) for name in info.leads)
        notes += (f"Values rounded to {1e6 / per_mv:g} nV and stored as 32-bit steps: {why_not_steps}.",)
        read = _rounded(opened, specs, per_mv)
    if info.left_out:
        notes += (f"Not copied: {', '.join(info.left_out)}.",)
    comments = tuple(f"{key}: {value}" for key, value in info.identity) if with_identity else ()
    return CopySource(
        specs, read, info.n_samples, info.fs_hz, 1, info.start_time, comments, marks, files, notes
    )


def _steps_of(opened: OpenRecording, specs: tuple[SignalSpec, ...]) -> Callable[[int, int], list[Steps]]:
    def read(start: int, stop: int) -> list[Steps]:
        assert opened.scales is not None
        digits = opened.read_digital(start, stop)
        return [
            np.where(d == scale.missing, spec.missing, d)
            for d, scale, spec in zip(digits, opened.scales, specs, strict=True)
        ]

    return read


def _rounded(
    opened: OpenRecording, specs: tuple[SignalSpec, ...], per_mv: float
) -> Callable[[int, int], list[Steps]]:
    def read(start: int, stop: int) -> list[Steps]:
        x = opened.read(start, stop)
        steps = np.rint(np.nan_to_num(x) * per_mv).astype(np.int64)
        return [
            np.where(np.isnan(row), spec.missing, s) for row, s, spec in zip(x, steps, specs, strict=True)
        ]

    return read


def _known(digits: Steps, scales: Sequence[DigitalScale] | None) -> Steps:
    assert scales is not None
    missing = np.array([s.missing for s in scales])[:, np.newaxis]
    return np.where(digits == missing, 0, digits)


def _largest(read: Callable[[int, int], NDArray], n_samples: int) -> float:
    """The largest absolute value, read block by block."""
    size = 1 << 16
    return max(float(np.abs(read(a, min(a + size, n_samples))).max()) for a in range(0, n_samples, size))


# ── writing ──


def write_copy(folder: Path, name: str, source: CopySource, start: int, stop: int) -> Written:
    """Frames ``start`` to ``stop`` as the record ``name``, with its annotations, read again and compared."""
    frame = RecordFrame(source.fs_hz, later(source.start_time, start / source.fs_hz), source.comments)
    *files, header = write_record(folder, name, source.specs, source.read, start, stop, frame)
    for path, marks in source.marks:
        own = wfdb_marks.cut(marks, start, stop, frame_hz=source.fs_hz)
        file = f"{name}.{path.name.rpartition('.')[2]}"
        (folder / file).write_bytes(wfdb_marks.encode(own))
        files.append(file)
    with StoredWfdb(folder / header) as copy:
        _compare(copy, source, start, stop, at=0)
    return Written(name, (*files, header))


def write_blank(
    folder: Path, name: str, source: CopySource, kept: Sequence[tuple[int, int]]
) -> tuple[Written, list[Written]]:
    """One record of the source's length with the stretches ``kept`` (frames); all else is a gap.

    The whole and its pieces, which are records themselves. Annotations stay where they are, all of them.
    """
    n_kept = sum(stop - start for start, stop in kept)
    factor, spare_s = GAP_LIMIT
    if source.n_frames - n_kept > factor * n_kept + spare_s * source.fs_hz:
        raise WriteError(
            f"{name}: too little is kept for one record with gaps; write the pieces (--gaps split)"
        )
    bare = replace(source, marks=())
    pieces = [write_copy(folder, f"{name}_{k}", bare, *span) for k, span in enumerate(kept, start=1)]
    segments: list[tuple[str | None, int]] = []
    at = 0
    for piece, (start, stop) in zip(pieces, kept, strict=True):
        segments += [(None, start - at)] if start > at else []
        segments.append((piece.name, stop - start))
        at = stop
    segments += [(None, source.n_frames - at)] if source.n_frames > at else []
    frame = RecordFrame(source.fs_hz, source.start_time, source.comments)
    files = write_master(folder, name, source.specs, segments, frame)
    marks = []
    for path, found in source.marks:
        marks.append(f"{name}.{path.name.rpartition('.')[2]}")
        (folder / marks[-1]).write_bytes(wfdb_marks.encode(found.marks))
    with StoredWfdb(folder / f"{name}.hea") as copy:
        if copy.n_frames != source.n_frames:
            raise WriteError(f"{name}: the copy has {copy.n_frames} frames, expected {source.n_frames}")
        for start, stop in kept:
            _compare(copy, source, start, stop, at=start)
    return Written(name, (*marks, *files)), pieces


def _compare(copy: StoredWfdb, source: CopySource, start: int, stop: int, *, at: int) -> None:
    """WriteError unless the copy from frame ``at`` on holds what the source holds from ``start`` to ``stop``."""
    missing = tuple(spec.missing for spec in source.specs)
    size = block_frames(sum(spec.per_frame for spec in source.specs))
    for first in range(start, stop, size):
        last = min(first + size, stop)
        here = copy.read(first - start + at, last - start + at, missing)
        there = source.read(first, last)
        if not all(np.array_equal(a, b) for a, b in zip(here, there, strict=True)):
            raise WriteError(f"{copy.header.path.name}: the copy read again differs from the source")
