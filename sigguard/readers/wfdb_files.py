"""The signal files of one WFDB segment: checked against the header, then read through wfdb.

wfdb is never shown the header that arrived, only one written here from checked values, in a
temporary folder that links to the checked signal files. So it meets no name, length or unit that
it would read differently (or fetch from somewhere), and its answers need no second guess.
"""

from __future__ import annotations

import contextlib
import os
import tempfile
import warnings
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import ReadError
from sigguard.readers.base import DigitalScale, printable, read_error, reason
from sigguard.readers.signals import mv_per_unit
from sigguard.readers.wfdb_header import DEFAULT_GAIN, FORMATS, Header, SignalLine

ONE_BY_ONE = (8, 61, 508, 516, 524)  # formats read signal by signal
MAX_FLAC_RATIO = 500  # samples in a byte: a constant signal reaches about 300


@contextlib.contextmanager
def quiet_wfdb() -> Iterator[Any]:
    """The wfdb package, imported when first needed (it is heavy), without its warnings.

    They are about how it uses pandas, nothing a user could act on.
    """
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import wfdb

        yield wfdb


@dataclass(frozen=True, slots=True)
class _Line:
    """Where a signal's samples stand in the header written for wfdb: line, first column, columns a frame.

    ``first`` is kept out of comparison: signals of one line are one line.
    """

    number: int
    width: int
    first: int = field(compare=False)

    def part(self, stream: NDArray[np.integer], per_frame: int) -> NDArray[np.int64]:
        """One signal's samples out of the line's stream."""
        frames = np.asarray(stream).reshape(-1, self.width)
        return frames[:, self.first : self.first + per_frame].reshape(-1).astype(np.int64)


def _lines_for(signals: tuple[SignalLine, ...]) -> tuple[_Line, ...]:
    """A line for each file, as if it held one signal of many samples a frame: wfdb reads it faster so.

    Formats in which signals do not simply take turns keep a line for each signal.
    """
    out: list[_Line] = []
    number = -1
    for k, signal in enumerate(signals):
        alone = signal.fmt in ONE_BY_ONE
        if alone or k == 0 or signal.file != signals[k - 1].file:
            number, first = number + 1, 0
            width = signal.per_frame if alone else sum(s.per_frame for s in signals if s.file == signal.file)
        out.append(_Line(number, width, first))
        first += signal.per_frame
    return tuple(out)


class SegmentFiles:
    """The samples of a one-segment record.

    Raises ReadError where a signal file is missing, lies outside the record's folder, or holds
    less than the header promises.
    """

    def __init__(self, header: Header, *, min_frames: int = 0) -> None:
        self.header = header
        self.signals = header.signals
        self.paths: dict[str, Path] = {}
        files = [s.file for s in self.signals]
        if any(s.fmt == 0 for s in self.signals):
            raise self._header_error("signals with samples", "format 0, which has none")
        if any(files[k] in files[: k - 1] and files[k] != files[k - 1] for k in range(2, len(files))):
            raise self._header_error("signals of one file on lines that follow each other", "files in turn")
        for name in dict.fromkeys(files):
            self.paths[name] = inside_folder(header.path, name)
        self._lines = _lines_for(self.signals)
        self.n_frames, self.surplus = self._count_frames(min_frames)
        self.length_stated = header.n_frames is not None
        self._folder: tempfile.TemporaryDirectory[str] | None = None

    def _count_frames(self, min_frames: int) -> tuple[int, int]:
        """Frames of the segment, and how many more its files hold."""
        held = {name: self._frames_held(name) for name in self.paths}
        available = min(held.values(), default=0)
        promised = self.header.n_frames if self.header.n_frames is not None else max(available, min_frames)
        for name, n_held in held.items():
            if n_held < max(promised, min_frames):
                raise read_error(
                    str(self.paths[name]),
                    where="end of file",
                    expected=f"{max(promised, min_frames)} samples, as {self.header.path.name} says",
                    found=f"{n_held}",
                    remedy="the file is cut short: copy or export it again",
                )
        return promised, available - promised

    def _frames_held(self, name: str) -> int:
        group = [s for s in self.signals if s.file == name]
        first = group[0]
        if any((s.fmt, s.offset) != (first.fmt, first.offset) for s in group):
            raise self._header_error(
                "signals of one file with one format and offset", f"two kinds in {printable(name)}"
            )
        n_bytes = self.paths[name].stat().st_size - first.offset
        size, per_group, _, _ = FORMATS[first.fmt]
        if size == 0:
            return _flac_length(self.paths[name], self.header) // first.per_frame
        whole, rest = divmod(max(n_bytes, 0), size)
        n_samples = whole * per_group + (1 if per_group > 1 and rest >= 2 else 0)
        return n_samples // sum(s.per_frame for s in group)

    def _header_error(self, expected: str, found: str) -> ReadError:
        return read_error(
            str(self.header.path),
            where="signal lines",
            expected=expected,
            found=found,
            remedy="correct the header",
        )

    def scale(self, channel: int, default_unit: str | None = None) -> DigitalScale:
        """How the steps of a voltage signal become mV.

        200 steps per unit where it is uncalibrated, the default unit (else mV) where none is stated.
        """
        signal = self.signals[channel]
        _, _, bits, missing = FORMATS.get(signal.fmt, FORMATS[16])
        low, high = -(1 << (bits - 1)), (1 << (bits - 1)) - 1
        if missing is None:
            missing = -(1 << 31)  # format 8 sums differences: its values are not bound to 8 bits
            low, high = -(1 << 15), (1 << 15) - 1
        elif missing == low:
            low += 1
        if signal.adc_bits:
            half = 1 << (signal.adc_bits - 1)
            narrowed = max(low, signal.adc_zero - half), min(high, signal.adc_zero + half - 1)
            # a first sample beyond it shows that the stated resolution is wrong
            sound = narrowed[0] < narrowed[1] and narrowed[0] <= signal.initial <= narrowed[1]
            low, high = narrowed if sound else (low, high)
        per_unit = mv_per_unit(signal.unit or default_unit or "mV") or 1.0
        return DigitalScale(
            per_unit / (signal.gain or DEFAULT_GAIN), float(signal.baseline), low, high, missing
        )

    def read(self, channels: tuple[int, ...], start: int, stop: int) -> list[NDArray[np.int64]]:
        """Steps of these signals over frames start to stop; each (stop - start)·per_frame long.

        Skew is undone: samples a skewed signal does not have are its missing code.
        """
        per_frame = [self.signals[c].per_frame for c in channels]
        shift = [divmod(self.signals[c].skew, p) for c, p in zip(channels, per_frame, strict=True)]
        reach = max((frames + (rest > 0) for frames, rest in shift), default=0)
        # format 8 holds differences: it can only be read from its beginning
        from_start = any(self.signals[c].fmt == 8 for c in channels)
        first, last = 0 if from_start else start, min(stop + reach, self.n_frames)
        raw = (
            self._through_wfdb(channels, first, last)
            if last > first
            else [np.empty(0, np.int64)] * len(channels)
        )
        out = []
        for channel, steps, p in zip(channels, raw, per_frame, strict=True):
            begin = (start - first) * p + self.signals[channel].skew
            window = steps[begin : begin + (stop - start) * p]
            pad = (stop - start) * p - len(window)
            out.append(
                np.pad(window, (0, pad), constant_values=self.scale(channel).missing) if pad else window
            )
        return out

    def _through_wfdb(self, channels: tuple[int, ...], start: int, stop: int) -> list[NDArray[np.int64]]:
        if self._folder is None:
            self._folder = self._plain_copy()
        lines = sorted({self._lines[c].number for c in channels})
        # frame by frame only where a line holds several samples a frame: for format 61 wfdb cannot
        framed = any(self._lines[c].width > 1 for c in channels)
        try:
            with quiet_wfdb() as wfdb:
                record = wfdb.rdrecord(
                    os.path.join(self._folder.name, "r"),
                    sampfrom=start,
                    sampto=stop,
                    channels=lines,
                    physical=False,
                    smooth_frames=not framed,
                )
            columns = record.e_d_signal if framed else record.d_signal.T
            stored = dict(zip(lines, columns, strict=True))
            steps = [
                self._lines[c].part(stored[self._lines[c].number], self.signals[c].per_frame)
                for c in channels
            ]
        except Exception as err:  # wfdb has no error class of its own, it lets anything through
            raise read_error(
                str(self.header.path),
                where=f"samples {start} to {stop}",
                expected="readable samples",
                found=reason(err),
                remedy="copy or export the recording again",
            ) from err
        expected = [(stop - start) * self.signals[c].per_frame for c in channels]
        if [len(one) for one in steps] != expected:
            raise read_error(
                str(self.header.path),
                where=f"samples {start} to {stop}",
                expected="as many samples as the header says",
                found=f"{min(map(len, steps))}",
                remedy="copy or export the recording again",
            )
        return steps

    def _plain_copy(self) -> tempfile.TemporaryDirectory[str]:
        folder = tempfile.TemporaryDirectory(prefix="sigguard-")
        numbers = {name: k for k, name in enumerate(self.paths)}
        for name, k in numbers.items():
            os.symlink(self.paths[name], os.path.join(folder.name, f"f{k}.dat"))
        lines = []
        for line in dict.fromkeys(self._lines):
            signal = self.signals[self._lines.index(line)]
            offset = f"+{signal.offset}" if signal.offset else ""
            fmt = f"{signal.fmt}x{line.width}{offset}"
            lines.append(f"f{numbers[signal.file]}.dat {fmt} 1(0)/mV 0 0 {signal.initial} 0 0 s{line.number}")
        text = "\n".join([f"r {len(lines)} 250 {self.n_frames}", *lines, ""])
        Path(folder.name, "r.hea").write_text(text, encoding="ascii")
        return folder

    def close(self) -> None:
        if self._folder is not None:
            self._folder.cleanup()
            self._folder = None


def inside_folder(header_path: Path, name: str) -> Path:
    """The regular file of this name in the header's folder; ReadError for any way out of it."""
    folder = header_path.parent.resolve()
    plain = name not in ("", ".", "..", "-", "~") and not any(c in name for c in "/\\:\0")
    try:
        path = (folder / name).resolve() if plain else None
    except (OSError, RuntimeError):
        path = None
    if path is None or not path.is_relative_to(folder):
        raise read_error(
            str(header_path),
            where="signal or segment name",
            expected="a file in the record's own folder",
            found=repr(printable(name[:60])),
            remedy="put all files of the record into one folder and correct the header",
        )
    if not path.is_file():
        raise read_error(
            str(header_path),
            where="signal or segment name",
            expected=f"the file {printable(name)} beside the header",
            found="no such file",
            remedy="copy all files of the record together",
        )
    return path


def without_samples(signal: SignalLine) -> SignalLine:
    """The signal's line as a layout states it: gain and name count, file and format do not."""
    return replace(signal, fmt=16, file="~")


def _flac_length(path: Path, header: Header) -> int:
    """Samples of each channel by the stream information block that opens every FLAC file."""
    with path.open("rb") as file:
        head = file.read(42)
    if len(head) < 42 or head[:4] != b"fLaC" or head[4] & 0x7F != 0:
        raise read_error(
            str(path),
            where="start of file",
            expected=f"compressed samples (FLAC), as {header.path.name} says",
            found="something else",
            remedy="copy or export the file again",
        )
    n_samples = int.from_bytes(head[21:26], "big") & ((1 << 36) - 1)
    return min(n_samples, MAX_FLAC_RATIO * path.stat().st_size)
