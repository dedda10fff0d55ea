"""The text header of a WFDB record, parsed strictly: nothing in it is trusted before it is checked.

Follows the WFDB header description (header(5) of the WFDB Applications Guide). Parsed here and
not by the wfdb package because that decodes as ASCII and drops what does not fit (``/µV`` becomes
``V``), takes ``5e2`` Hz for 5 Hz, and answers malformed headers with a dozen kinds of error.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

from sigguard.errors import ReadError
from sigguard.readers.base import printable, read_error, reason

MAX_HEADER_BYTES = 16 << 20
MAX_SIGNALS = 256
NULL_SEGMENT = "~"
DEFAULT_FS_HZ, DEFAULT_GAIN = 250.0, 200.0
# format: (bytes, samples) of its smallest whole group, bits of a sample, code for "missing" (None: none)
FORMATS: dict[int, tuple[int, int, int, int | None]] = {
    8: (1, 1, 8, None),
    16: (2, 1, 16, -(1 << 15)),
    24: (3, 1, 24, -(1 << 23)),
    32: (4, 1, 32, -(1 << 31)),
    61: (2, 1, 16, -(1 << 15)),
    80: (1, 1, 8, -(1 << 7)),
    160: (2, 1, 16, -(1 << 15)),
    212: (3, 2, 12, -(1 << 11)),
    310: (4, 3, 10, -(1 << 9)),
    311: (4, 3, 10, -(1 << 9)),
    508: (0, 0, 8, -(1 << 7)),
    516: (0, 0, 16, -(1 << 15)),
    524: (0, 0, 24, -(1 << 23)),
}
_RECORD = re.compile(r"^[^\s/\\]+(/\d+)?\s+\d+(\s+[\d.+\-eE]+(/\S+)?(\s+\d+(\s+\S.*)?)?)?\s*$")
_FORMAT = re.compile(r"^(\d+)(?:x(\d+))?(?::(\d+))?(?:\+(\d+))?$")
_GAIN = re.compile(r"^([^(/]+)(?:\(([+-]?\d+)\))?(?:/(\S+))?$")


@dataclass(frozen=True, slots=True)
class SignalLine:
    """One signal as its line states it; None where the line is silent."""

    file: str
    fmt: int
    per_frame: int
    skew: int
    offset: int
    gain: float | None  # steps per unit; None: uncalibrated
    baseline: int
    unit: str | None
    adc_bits: int
    adc_zero: int
    initial: int
    name: str | None


@dataclass(frozen=True, slots=True)
class Header:
    """A record's header: of one segment (``signals``) or of several (``segments``: name, frames)."""

    path: Path
    fs_hz: float | None
    n_signals: int
    n_frames: int | None
    start_time: datetime | None
    signals: tuple[SignalLine, ...]
    segments: tuple[tuple[str, int], ...]
    notes: tuple[str, ...]

    @property
    def is_multi(self) -> bool:
        return bool(self.segments)


class _Trouble(Exception):
    """expected, found: turned into a ReadError where file and line are known."""


def looks_like_header(head: bytes) -> bool:
    """Whether the text begins with a record line followed by a signal or segment line that fits it."""
    if b"\0" in head:
        return False
    lines = [
        line for line in _decode(head).splitlines() if line.strip() and not line.lstrip().startswith("#")
    ]
    if not lines or not _RECORD.match(lines[0]):
        return False
    name, n_signals = lines[0].split()[:2]
    if len(lines) == 1:
        return int(n_signals) == 0
    tokens = lines[1].split()
    if "/" in name:
        return len(tokens) == 2 and tokens[1].isdigit()
    fmt = _FORMAT.match(tokens[1]) if len(tokens) > 1 else None
    return fmt is not None and int(fmt[1]) in {0, *FORMATS}


def read_header(path: Path) -> Header:
    """Parse a header file; ReadError, naming the line, for all that cannot be."""
    try:
        with path.open("rb") as file:
            data = file.read(MAX_HEADER_BYTES + 1)
    except (OSError, ValueError) as err:
        raise _error(
            path, "file", "a readable header file", reason(err), "check the record's folder"
        ) from err
    if not data.strip():
        raise _error(path, "file", "a WFDB header", "an empty file")
    if b"\0" in data or len(data) > MAX_HEADER_BYTES:
        raise _error(path, "file", "a WFDB header (text)", "binary data" if b"\0" in data else "over 16 MiB")
    body: list[tuple[int, str]] = []
    notes: list[str] = []
    for number, line in enumerate(_decode(data).splitlines(), start=1):
        text = line.strip()
        if text.startswith("#"):
            notes.append(text.lstrip("# "))
        elif text:
            body.append((number, text))
    if not body:
        raise _error(path, "file", "a record line", "comments only")
    number, text = body[0]
    try:
        n_segments, n_signals, fs_hz, n_frames, start = _record_line(text)
        n_wanted = n_segments if n_segments is not None else n_signals
        what = "segment" if n_segments is not None else "signal"
        if len(body) - 1 < n_wanted:
            raise _Trouble(f"{n_wanted} {what} lines", str(len(body) - 1))
        signals: list[SignalLine] = []
        segments: list[tuple[str, int]] = []
        for number, text in body[1 : 1 + n_wanted]:  # noqa: B007 - number is named if a line is wrong
            if n_segments is not None:
                segments.append(_segment_line(text))
            else:
                signals.append(_signal_line(text))
    except _Trouble as trouble:
        expected, found = trouble.args
        raise _error(path, f"line {number}", expected, found) from None
    return Header(
        path, fs_hz, n_signals, n_frames, start, tuple(signals), tuple(segments), tuple(filter(None, notes))
    )


def _record_line(text: str) -> tuple[int | None, int, float | None, int | None, datetime | None]:
    tokens = text.split()
    name, _, count = tokens[0].partition("/")
    n_segments = _integer(count, "a number of segments", 1, 1_000_000) if count else None
    if not name or len(tokens) < 2:
        raise _Trouble("a record name and a number of signals", _short(text))
    n_signals = _integer(tokens[1], "a number of signals", 0, MAX_SIGNALS)
    fs_hz = _real(tokens[2].partition("/")[0], "a sampling rate in Hz") if len(tokens) > 2 else None
    n_frames = _integer(tokens[3], "a number of samples", 0, 1 << 62) if len(tokens) > 3 else 0
    return n_segments, n_signals, fs_hz, n_frames or None, _start_time(tokens[4:])


def _start_time(tokens: list[str]) -> datetime | None:
    """Start of the recording where both time of day and date are stated and can be, else None."""
    if len(tokens) < 2:
        return None
    clock = tokens[0].strip("[]").split(":")
    date = tokens[1].strip("[]").split("/")
    try:
        hour, minute, second = ["0"] * (3 - len(clock)) + clock
        day, month, year = (int(part) for part in date)
        whole, _, fraction = second.partition(".")
        micro = int(fraction[:6].ljust(6, "0")) if fraction else 0
        return datetime(year, month, day, int(hour), int(minute), int(whole), micro) if year >= 1900 else None
    except (ValueError, OverflowError):
        return None


def _segment_line(text: str) -> tuple[str, int]:
    tokens = text.split()
    if len(tokens) < 2:
        raise _Trouble("a segment name and its length", _short(text))
    return tokens[0], _integer(tokens[1], "a segment length", 0, 1 << 62)


def _signal_line(text: str) -> SignalLine:
    tokens = text.split(maxsplit=8)
    match = _FORMAT.match(tokens[1]) if len(tokens) > 1 else None
    if match is None:
        raise _Trouble("a signal file name and a format", _short(text))
    fmt = int(match[1])
    if fmt != 0 and fmt not in FORMATS:
        raise _Trouble("a known signal format (16, 212, 24, …)", f"format {fmt}")
    gain, baseline, unit = _gain(tokens[2]) if len(tokens) > 2 else (None, None, None)
    bits, zero, initial = (
        _integer(tokens[k], "a whole number", -(1 << 31), (1 << 31) - 1) if len(tokens) > k else 0
        for k in (3, 4, 5)
    )
    return SignalLine(
        file=tokens[0],
        fmt=fmt,
        per_frame=_integer(match[2] or "1", "samples per frame", 1, 10_000),
        skew=_integer(match[3] or "0", "a skew", 0, 10_000_000),
        offset=_integer(match[4] or "0", "a byte offset", 0, 1 << 62),
        gain=gain,
        baseline=zero if baseline is None else baseline,
        unit=unit,
        adc_bits=bits if 0 <= bits <= 32 else 0,
        adc_zero=zero,
        initial=initial if len(tokens) > 5 else zero,
        name=tokens[8].strip() if len(tokens) > 8 else None,
    )


def _gain(token: str) -> tuple[float | None, int | None, str | None]:
    match = _GAIN.match(token)
    if match is None:
        raise _Trouble("a gain such as 200(0)/mV", _short(token))
    gain = _real(match[1], "a gain in steps per unit")
    baseline = None if match[2] is None else _integer(match[2], "a baseline", -(1 << 31), (1 << 31) - 1)
    return gain or None, baseline, match[3]


def _integer(token: str, what: str, low: int, high: int) -> int:
    # length first: int() of a very long string is slow and, beyond a limit, refused
    if len(token) <= 20 and re.fullmatch(r"[+-]?[0-9]+", token) and low <= int(token) <= high:
        return int(token)
    raise _Trouble(what, _short(token))


def _real(token: str, what: str) -> float:
    try:
        value = float(token) if len(token) <= 40 and "_" not in token else math.nan
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise _Trouble(what, _short(token))
    return value


def _decode(data: bytes) -> str:
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError:
        return data.decode("latin-1")


def _short(text: str) -> str:
    return repr(printable(text if len(text) <= 60 else text[:57] + "…"))


def _error(
    path: Path, where: str, expected: str, found: str, remedy: str = "correct the header"
) -> ReadError:
    return read_error(str(path), where=where, expected=expected, found=found, remedy=remedy)
