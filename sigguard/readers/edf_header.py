"""The headers of EDF, EDF+ and BDF files: fields of fixed width in plain characters, each checked before use.

Layout: Kemp et al. 1992, Kemp and Olivan 2003. Read here by hand, not by ``pyedflib``, which refuses
discontinuous files, micro signs and unknown dates, and hands out zeros where a file is cut.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

import numpy as np

from sigguard.errors import ReadError
from sigguard.readers.base import printable, read_error

EDF_MAGIC, BDF_MAGIC = b"0       ", b"\xffBIOSEMI"
ANNOTATIONS = ("EDF Annotations", "BDF Annotations")
_FIXED = 256
_WIDTHS = (16, 80, 8, 8, 8, 8, 8, 80, 8, 32)  # fields of a signal, all signals of a field together
_MONTHS = ("JAN", "FEB", "MAR", "APR", "MAY", "JUN", "JUL", "AUG", "SEP", "OCT", "NOV", "DEC")
_WHOLE = re.compile(r"[+-]?[0-9]{1,15}")
_DECIMAL = re.compile(r"[+-]?([0-9]+([.,][0-9]*)?|[.,][0-9]+)([eE][+-]?[0-9]+)?")
_CORNER = r"\b{}\s*:\s*([0-9]+(?:[.,][0-9]+)?)(?:\s*Hz\b|(?=\s+[A-Za-z]+\s*:|;|\s*$))"


@dataclass(frozen=True, slots=True)
class EdfSignal:
    """One signal: what its header fields say (NaN: no number), and where in a data record it lies."""

    label: str
    unit: str
    physical: tuple[float, float]  # in ``unit``, at the two steps of ``digital``
    digital: tuple[float, float]
    per_record: int
    offset: int  # bytes from the beginning of the data record
    n_bytes: int
    band_hz: tuple[float, float]  # high-pass and low-pass corner, NaN where not stated

    @property
    def is_annotation(self) -> bool:
        return self.label in ANNOTATIONS


@dataclass(frozen=True, slots=True)
class EdfHeader:
    """A header that agrees with itself and with the size of its file."""

    path: Path
    format: str  # EDF, EDF+C, EDF+D, BDF, BDF+C, BDF+D
    width: int  # bytes a sample
    patient: str
    recording: str
    start_time: datetime | None
    n_bytes: int
    n_records: int
    length_stated: bool
    surplus: int  # bytes behind the last data record
    record_s: float
    record_bytes: int
    signals: tuple[EdfSignal, ...]

    @property
    def plus(self) -> bool:
        """Whether the file is an EDF+ or BDF+, which keep times and annotations."""
        return "+" in self.format

    @property
    def discontinuous(self) -> bool:
        return self.format.endswith("+D")


def read_header(path: Path) -> EdfHeader:
    """Header of a file that begins like one. Raises ReadError if it contradicts itself or the file."""
    size = path.stat().st_size
    with path.open("rb") as file:
        fixed = file.read(_FIXED)
        if len(fixed) < _FIXED:
            raise trouble(
                path, "header", "256 bytes", f"{len(fixed)}", "the file is cut short: send it again"
            )
        n_signals = _whole(path, fixed[252:256], "number of signals", low=1)
        n_bytes = _whole(path, fixed[184:192], "header length", low=1)
        if n_bytes != _FIXED * (n_signals + 1):
            raise trouble(
                path, "header length", f"{_FIXED * (n_signals + 1)} for {n_signals} signals", f"{n_bytes}"
            )
        if n_bytes > size:
            cut = "the file is cut short: send it again"
            raise trouble(path, "header", f"{n_bytes} bytes", f"{size}", cut)
        table = file.read(n_bytes - _FIXED)
    kind, width = ("EDF", 2) if fixed[:8] == EDF_MAGIC else ("BDF", 3)
    reserved = fixed[192:197].decode("latin-1")
    if reserved[:3] in ("EDF", "BDF", "24B") and (reserved[:3] == "EDF") != (kind == "EDF"):
        other = "BDF" if kind == "EDF" else "EDF"
        raise trouble(path, "reserved field", f"the mark of an {kind} file", f"that of a {other} file")
    plus = reserved[3:] if reserved in (f"{kind}+C", f"{kind}+D") else ""
    signals = _signals(path, table, n_signals, width)
    record_bytes = sum(s.n_bytes for s in signals)
    record_s = _decimal(fixed[244:252])
    if not 0 <= record_s < 1e9:
        raise trouble(path, "duration of a data record", "seconds", _shown(fixed[244:252]))
    stated = _whole(path, fixed[236:244], "number of data records", low=-1)
    held = (size - n_bytes) // record_bytes if record_bytes else 0
    if stated > held:
        cut = "the file is cut short: send it again"
        raise trouble(path, "data records", f"{stated}, as the header says", f"{held} whole ones", cut)
    n_records = held if stated < 0 else stated
    return EdfHeader(
        path=path,
        format=kind + plus,
        width=width,
        patient=_text(fixed[8:88]),
        recording=_text(fixed[88:168]),
        start_time=_start(fixed[168:184], fixed[88:168] if plus else b""),
        n_bytes=n_bytes,
        n_records=n_records,
        length_stated=stated >= 0,
        surplus=size - n_bytes - n_records * record_bytes,
        record_s=record_s,
        record_bytes=record_bytes,
        signals=signals,
    )


def _signals(path: Path, table: bytes, n_signals: int, width: int) -> tuple[EdfSignal, ...]:
    columns: list[list[bytes]] = []
    at = 0
    for field in _WIDTHS:
        columns.append([table[at + k * field : at + (k + 1) * field] for k in range(n_signals)])
        at += field * n_signals
    out, offset = [], 0
    for k in range(n_signals):
        label, _, unit, p_low, p_high, d_low, d_high, prefilter, count, _ = (c[k] for c in columns)
        per_record = _whole(path, count, f"samples per data record of signal {k + 1}", low=0)
        signal = EdfSignal(
            label=_text(label),
            unit=_text(unit),
            physical=(_decimal(p_low), _decimal(p_high)),
            digital=(_decimal(d_low), _decimal(d_high)),
            per_record=per_record,
            offset=offset,
            n_bytes=per_record * width,
            band_hz=_band(_text(prefilter)),
        )
        offset += signal.n_bytes
        out.append(signal)
    return tuple(out)


def _text(field: bytes) -> str:
    """A field as text: UTF-8 where it is that, else Latin-1 (micro signs are met in both)."""
    try:
        text = field.decode("utf-8")
    except UnicodeDecodeError:
        text = field.decode("latin-1")
    return text.strip(" \0")


def _shown(field: bytes) -> str:
    return f"'{printable(_text(field))}'"


def _whole(path: Path, field: bytes, where: str, *, low: int) -> int:
    text = _text(field)
    if not _WHOLE.fullmatch(text) or int(text) < low:
        raise trouble(path, where, f"a whole number of {low} or more", _shown(field))
    return int(text)


def _decimal(field: bytes) -> float:
    """The number in a field, with a point or a comma; NaN if there is none."""
    text = _text(field)
    return float(text.replace(",", ".")) if _DECIMAL.fullmatch(text) else float("nan")


def _start(stamp: bytes, recording: bytes) -> datetime | None:
    """Date and time of the start, the century by the rule of the format (85 is 1985, 84 is 2084).

    EDF+ repeats the date with all four digits of the year. None where there is no such date.
    """
    found = re.fullmatch(rb"(\d\d)\.(\d\d)\.(\d\d)(\d\d)\.(\d\d)\.(\d\d)", stamp)
    if not found:
        return None
    day, month, year, hour, minute, second = map(int, found.groups())
    year += 1900 if year >= 85 else 2000
    full = re.match(rb"Startdate (\d\d)-([A-Za-z]{3})-(\d{4})", recording)
    if full and (name := full[2].decode().upper()) in _MONTHS:
        day, month, year = int(full[1]), _MONTHS.index(name) + 1, int(full[3])
    try:
        return datetime(year, month, day, hour, minute, second)
    except ValueError:
        return None


def _band(prefilter: str) -> tuple[float, float]:
    """``HP:0.05Hz LP:150Hz`` as corners in Hz; what cannot be read is unknown, not absent."""
    found = (re.search(_CORNER.format(kind), prefilter, re.IGNORECASE) for kind in ("HP", "LP"))
    low, high = (float(f[1].replace(",", ".")) if f else float("nan") for f in found)
    return low, (high if high > 0 else float(np.nan))


def trouble(
    path: Path, where: str, expected: str, found: str, remedy: str = "export the recording again"
) -> ReadError:
    return read_error(str(path), where=where, expected=expected, found=found, remedy=remedy)
