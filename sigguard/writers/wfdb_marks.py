"""Annotation files beside a WFDB record: found, cut to a stretch and shifted, every field kept.

The layout is that of annot(5) of the WFDB Applications Guide (MIT format): words of 16 bits, six bits of code and
ten of time since the one before; longer times by SKIP; NUM and CHN hold until changed, SUB and AUX
belong to one annotation. Read here and not by the wfdb package because that loses what it does not know.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from sigguard.errors import ReadError

SKIP, NUM, SUB, CHN, AUX = 59, 60, 61, 62, 63
LAST_CODE = 49  # ACMAX of ecgcodes.h
NOTE = 22
MAX_BYTES = 64 << 20
_RESOLUTION = b"## time resolution: "
_NO_ANNOTATION = {
    "hea",
    "dat",
    "mat",
    "xyz",
    "json",
    "csv",
    "txt",
    "html",
    "xml",
    "pdf",
    "dcm",
    "edf",
    "toml",
}


@dataclass(frozen=True, slots=True)
class Mark:
    """One annotation; ``sub`` None where none is stored, ``num`` and ``chn`` as they hold here."""

    time: int
    code: int
    sub: int | None
    num: int
    chn: int
    aux: bytes


@dataclass(frozen=True, slots=True)
class MarkFile:
    """An annotation file: its extension, marks in the order stored, and ticks in a second where it says so."""

    extension: str
    marks: tuple[Mark, ...]
    ticks_hz: float | None


def beside(header_path: Path, record_files: set[Path], *, n_frames: int) -> list[Path]:
    """The annotation files of a record, ``NAME.ext`` in its folder, told by their content.

    ``record_files`` are the record's own files, resolved.
    """
    out = []
    for path in sorted(header_path.parent.glob("*")):
        extension = path.name[len(header_path.stem) + 1 :]
        if path.name[: len(header_path.stem) + 1] != f"{header_path.stem}." or not extension.isalnum():
            continue
        if path.resolve() in record_files or extension.casefold() in _NO_ANNOTATION or not path.is_file():
            continue
        if read_marks(path, n_frames=n_frames) is not None:
            out.append(path)
    return out


def read_marks(path: Path, *, n_frames: int | None = None) -> MarkFile | None:
    """The annotations of a file; None if it is none in this format, or not of a record so long."""
    try:
        if path.stat().st_size > MAX_BYTES:
            return None
        data = path.read_bytes()
    except OSError as err:
        found = err.strerror or str(err)
        raise ReadError(
            str(path), where="file", expected="annotations", found=found, remedy="check the access rights"
        ) from err
    marks = parse(data)
    if not marks:
        return None
    ticks_hz = _ticks_hz(marks[0])
    if n_frames is not None and ticks_hz is None and max(m.time for m in marks) > n_frames:
        return None
    return MarkFile(path.name.rpartition(".")[2], tuple(marks), ticks_hz)


def parse(data: bytes) -> list[Mark] | None:
    """The annotations in these bytes; None where they are not of this format."""
    if len(data) % 2 or len(data) < 2:
        return None
    words = np.frombuffer(data, dtype="<u2").tolist()
    out: list[Mark] = []
    at = time = num = chn = 0
    while at < len(words):
        code, value = words[at] >> 10, words[at] & 0x3FF
        at += 1
        if code == 0 and value == 0:
            return None if any(words[at:]) else out
        if code == SKIP:
            if at + 2 > len(words) or value:
                return None
            wide = (words[at] << 16) | words[at + 1]
            time += wide - (1 << 32) if wide >= 1 << 31 else wide
            at += 2
        elif code in (NUM, SUB, CHN):
            if not out:
                return None
            small = (value & 0xFF) - 256 if value & 0x80 else value & 0xFF
            last = out[-1]
            num, chn = (small if code == NUM else num), (value & 0xFF if code == CHN else chn)
            out[-1] = Mark(last.time, last.code, small if code == SUB else last.sub, num, chn, last.aux)
        elif code == AUX:
            n_words = (value + 1) // 2
            if not out or at + n_words > len(words):
                return None
            last = out[-1]
            aux = data[2 * at : 2 * at + value]
            out[-1] = Mark(last.time, last.code, last.sub, last.num, last.chn, aux)
            at += n_words
        elif 0 <= code <= LAST_CODE:
            time += value
            if time < 0:
                return None
            if code:
                out.append(Mark(time, code, None, num, chn, b""))
        else:
            return None
    return None  # the two zero bytes at the end are missing


def encode(marks: list[Mark] | tuple[Mark, ...]) -> bytes:
    """The annotations as bytes of the format."""
    out = bytearray()
    time = num = chn = 0
    for mark in marks:
        step = mark.time - time
        if not 0 <= step < 1024:
            wide = step & 0xFFFFFFFF
            out += _word(SKIP, 0) + (wide >> 16).to_bytes(2, "little") + (wide & 0xFFFF).to_bytes(2, "little")
            step = 0
        out += _word(mark.code, step)
        if mark.sub is not None:
            out += _word(SUB, mark.sub & 0xFF)
        if mark.chn != chn:
            out += _word(CHN, mark.chn & 0xFF)
        if mark.num != num:
            out += _word(NUM, mark.num & 0xFF)
        if mark.aux:
            out += _word(AUX, len(mark.aux)) + mark.aux + b"\0" * (len(mark.aux) % 2)
        time, num, chn = mark.time, mark.num, mark.chn
    return bytes(out) + b"\0\0"


def cut(file: MarkFile, start: int, stop: int, *, frame_hz: float) -> list[Mark]:
    """The marks within frames ``start`` to ``stop``, their times counted from ``start``.

    What an annotation file says of itself at its beginning (its time resolution, its own codes) stays.
    """
    ratio = 1.0 if file.ticks_hz is None else file.ticks_hz / frame_hz
    first, last = round(start * ratio), round(stop * ratio)
    n_own = _of_the_file(file.marks)
    own = list(file.marks[:n_own])
    return own + [
        Mark(m.time - first, m.code, m.sub, m.num, m.chn, m.aux)
        for m in file.marks[n_own:]
        if first <= m.time < last
    ]


def _of_the_file(marks: tuple[Mark, ...]) -> int:
    """How many marks at the beginning speak of the file: notes at time 0 that start with ``##``, and between two."""
    notes = [m.code == NOTE and m.time == 0 for m in marks]
    n = notes.index(False) if False in notes else len(notes)
    heads = [k for k in range(n) if marks[k].aux.startswith(b"## ")]
    return heads[-1] + 1 if heads and heads[0] == 0 else 0


def _ticks_hz(first: Mark) -> float | None:
    if first.code != NOTE or first.time != 0 or not first.aux.startswith(_RESOLUTION):
        return None
    try:
        value = float(first.aux[len(_RESOLUTION) :].strip(b"\0 "))
    except ValueError:
        return None
    return value if 0 < value < 1e9 else None


def _word(code: int, value: int) -> bytes:
    return ((code << 10) | value).to_bytes(2, "little")
