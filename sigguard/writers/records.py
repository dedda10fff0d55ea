"""Our own writer of WFDB records: stored steps in, header and signal files out, block by block.

The formats are those of signal(5) of the WFDB Applications Guide, the header that of header(5). Steps are
written as they are handed in; nothing here scales, rounds or clips. A step that the format cannot hold is
an error, not a surprise.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import UsageError, WriteError
from sigguard.readers.base import printable
from sigguard.readers.wfdb_header import FORMATS, NULL_SEGMENT

Steps = NDArray[np.int64]
# Formats that are written as another one which holds every value they can: differences and compressed
# streams depend on what came before, packed tens on three samples at a time.
WRITTEN_AS = {8: 24, 310: 16, 311: 16, 508: 80, 516: 16, 524: 24}
BLOCK_SAMPLES = 1 << 18  # of all signals together


@dataclass(frozen=True, slots=True)
class SignalSpec:
    """One signal as its header line will state it; ``gain`` None where it is uncalibrated."""

    fmt: int
    per_frame: int
    gain: float | None
    baseline: int
    unit: str | None
    adc_bits: int
    adc_zero: int
    name: str | None

    @property
    def missing(self) -> int:
        """The step that says "no sample here"."""
        code = FORMATS[self.fmt][3]
        assert code is not None  # format 8 alone has none, and is not written
        return code


@dataclass(frozen=True, slots=True)
class RecordFrame:
    """What a record's header states of the whole; ``comments`` are lines after the signals."""

    fs_hz: float
    start_time: datetime | None = None
    comments: tuple[str, ...] = ()


def written_format(fmt: int) -> int:
    """The format in which steps of format ``fmt`` are written: itself where it is written at all."""
    return WRITTEN_AS.get(fmt, fmt)


def encode(steps: Steps, fmt: int) -> bytes:
    """Whole numbers in the order in which they are stored, (n,), as bytes of a format.

    An odd number of samples of format 212 ends with two bytes. Raises WriteError for a value that does not fit.
    """
    bits = FORMATS[fmt][2]
    x = np.asarray(steps, dtype=np.int64).ravel()
    if len(x) and (x.min() < -(1 << (bits - 1)) or x.max() >= 1 << (bits - 1)):
        raise WriteError(
            f"a sample of {bits} bits was expected for format {fmt}, found {int(np.abs(x).max())}"
        )
    if fmt == 212:
        return _encode_212(x)
    if fmt == 24:
        return x.astype("<i4").view(np.uint8).reshape(-1, 4)[:, :3].tobytes()
    offset = {80: 1 << 7, 160: 1 << 15}.get(fmt, 0)
    kinds = {16: "<i2", 32: "<i4", 61: ">i2", 80: "u1", 160: "<u2"}
    if fmt not in kinds:
        raise UsageError(f"format {fmt} is not written")
    return (x + offset).astype(kinds[fmt]).tobytes()


def _encode_212(x: Steps) -> bytes:
    odd = len(x) % 2
    pair = np.append(x, 0)[: len(x) + odd].reshape(-1, 2) & 0xFFF
    out = np.empty((len(pair), 3), dtype=np.uint8)
    out[:, 0] = pair[:, 0] & 0xFF
    out[:, 1] = (pair[:, 0] >> 8) | ((pair[:, 1] >> 8) << 4)
    out[:, 2] = pair[:, 1] & 0xFF
    return out.tobytes()[: len(x) // 2 * 3 + 2 * odd]


def block_frames(width: int) -> int:
    """Frames of ``width`` samples to hold at a time; even, so that no block parts a pair of format 212."""
    return max(2, BLOCK_SAMPLES // max(width, 1) // 2 * 2)


def write_record(
    folder: Path,
    name: str,
    specs: Sequence[SignalSpec],
    read: Callable[[int, int], list[Steps]],
    start: int,
    stop: int,
    frame: RecordFrame,
) -> list[str]:
    """Write frames ``start`` to ``stop`` as a record in ``folder``; the file names, the header last.

    ``read(a, b)`` gives for each signal its steps over frames a to b. Signals of one format that follow each
    other share a file. Raises OSError as the system does, WriteError for steps that do not fit.
    """
    groups = _groups(specs)
    files = [f"{name}.dat" if k == 0 else f"{name}-{k + 1}.dat" for k in range(len(groups))]
    first = [0] * len(specs)
    total = [0] * len(specs)
    handles = [(folder / file).open("wb") for file in files]
    try:
        size = block_frames(sum(s.per_frame for s in specs))
        for at in range(start, stop, size):
            block = read(at, min(at + size, stop))
            for k, steps in enumerate(block):
                total[k] += int(steps.sum())
                first[k] = int(steps[0]) if at == start else first[k]
            for handle, group in zip(handles, groups, strict=True):
                columns = [block[k].reshape(-1, specs[k].per_frame) for k in group]
                handle.write(encode(np.concatenate(columns, axis=1), specs[group[0]].fmt))
    finally:
        for handle in handles:
            handle.close()
    lines = [_record_line(name, len(specs), stop - start, frame)]
    for file, group in zip(files, groups, strict=True):
        lines += [_signal_line(file, specs[k], first[k], _checksum(total[k])) for k in group]
    _write_header(folder / f"{name}.hea", lines, frame)
    return [*files, f"{name}.hea"]


def write_master(
    folder: Path,
    name: str,
    specs: Sequence[SignalSpec],
    segments: Sequence[tuple[str | None, int]],
    frame: RecordFrame,
) -> list[str]:
    """Write the header of a record of several segments, (name, frames), None for a gap; the file names.

    The layout (variable, so that gaps are allowed) comes first: ``NAME_layout``. Signals are told apart by
    name there, so every one must have its own.
    """
    names = [s.name for s in specs]
    if None in names or len(set(names)) != len(names):
        raise UsageError("the signals of a record with gaps need names of their own")
    layout = f"{name}_layout"
    frame_only = RecordFrame(frame.fs_hz)
    lines = [_record_line(layout, len(specs), 0, frame_only)]
    lines += [_signal_line(NULL_SEGMENT, s, 0, 0, fmt=0) for s in specs]
    _write_header(folder / f"{layout}.hea", lines, frame_only)
    n_frames = sum(length for _, length in segments)
    master = [_record_line(f"{name}/{len(segments) + 1}", len(specs), n_frames, frame), f"{layout} 0"]
    master += [f"{segment or NULL_SEGMENT} {length}" for segment, length in segments]
    _write_header(folder / f"{name}.hea", master, frame)
    return [f"{layout}.hea", f"{name}.hea"]


def _groups(specs: Sequence[SignalSpec]) -> list[list[int]]:
    """Numbers of neighbouring signals of one format; format 61 is read signal by signal, so shares nothing."""
    out: list[list[int]] = []
    for k, spec in enumerate(specs):
        if out and specs[k - 1].fmt == spec.fmt:
            out[-1].append(k)
        else:
            out.append([k])
    return out


def _record_line(name: str, n_signals: int, n_frames: int, frame: RecordFrame) -> str:
    line = f"{name} {n_signals} {number_text(frame.fs_hz)} {n_frames}"
    at = frame.start_time
    if at is None:
        return line
    fraction = f".{at.microsecond:06d}" if at.microsecond else ""
    return f"{line} {at:%H:%M:%S}{fraction} {at.day:02d}/{at.month:02d}/{at.year:04d}"


def _signal_line(file: str, spec: SignalSpec, initial: int, checksum: int, *, fmt: int | None = None) -> str:
    width = f"x{spec.per_frame}" if spec.per_frame > 1 else ""
    unit = f"/{''.join(spec.unit.split())}" if spec.unit else ""
    gain = f"{number_text(spec.gain or 0.0)}({spec.baseline}){unit}"
    line = f"{file} {spec.fmt if fmt is None else fmt}{width} {gain} {spec.adc_bits} {spec.adc_zero}"
    name = " ".join(printable(spec.name).split()) if spec.name else ""
    return f"{line} {initial} {checksum} 0 {name}".rstrip()


def _checksum(total: int) -> int:
    """The sum of all samples as a signed number of 16 bits, as header(5) has it."""
    low = total & 0xFFFF
    return low - 0x10000 if low >= 0x8000 else low


def _write_header(path: Path, lines: list[str], frame: RecordFrame) -> None:
    comments = [f"# {' '.join(printable(text).split())}" for text in frame.comments]
    path.write_text("\n".join([*lines, *comments, ""]), encoding="utf-8", newline="\n")


def number_text(value: float) -> str:
    """A number as short as it can be without losing a digit: ``200``, ``0.1``."""
    return str(int(value)) if float(value).is_integer() and abs(value) < 1e15 else repr(float(value))


def later(start: datetime | None, seconds: float) -> datetime | None:
    """A start time moved on; None where there is none or the calendar ends."""
    try:
        return None if start is None else start + timedelta(seconds=seconds)
    except OverflowError:
        return None
