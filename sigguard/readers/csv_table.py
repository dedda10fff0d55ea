"""ECG as a table of text: one row a sample, one column a lead, named in a header row.

Taken: ``,`` ``;`` tab, ``|`` or blanks between fields, decimal comma beside any but the comma,
comments, a row of units, pairs such as ``Sample Rate,512 hertz`` above the table, a column of
time or sample numbers. Rate and unit are read from the file or given by the caller, never guessed.
The whole file is read at once.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import NoECGLead, ReadError, UsageError
from sigguard.leads import CHEST_LEADS, LIMB_LEADS, clean_name, normalise_lead, normalise_leads
from sigguard.readers import base, csv_time
from sigguard.readers.base import MAYBE, NO, YES, OpenRecording, Reader, ReadOptions, read_error
from sigguard.readers.csv_layout import (
    MISSING_WORDS,
    Layout,
    LayoutTrouble,
    decode,
    find_layout,
    is_clock,
    is_number,
    split,
)
from sigguard.readers.signals import device_stated, given_unit, is_ecg, mv_per_unit
from sigguard.recording import MAX_LEADS, RecordingInfo

MISSING_CODES = (-32768.0, 9999.0, -9999.0)
_UNIT_IN_NAME = re.compile(
    r"^(?P<name>.*?)[\s_]*[\[(]?\s*(?P<unit>[munµμ]?V|microvolts?|millivolts?)\s*[\])]?$", re.IGNORECASE
)
_RATE_KEY = re.compile(
    r"^(sampl\w*[ _]?)?(rate|frequency|freq|fs|f_s|hz)([ _]?(hz|\[hz\]|\(hz\)))?$|^sampling[ _]?(rate|frequency)",
    re.I,
)


@dataclass(frozen=True, slots=True)
class _Column:
    index: int
    name: str
    unit: str | None


def sniff(path: Path, head: bytes) -> int:
    """Sure of a table with a column of time or with leads or units by name; other text is explained here."""
    text = decode(head)
    if text is None:
        return NO
    lines = text.splitlines()
    try:
        layout = find_layout(lines[:-1] if len(lines) > 2 else lines)
    except LayoutTrouble:
        return MAYBE
    known = {normalise_lead(column.name) for column in _columns(layout)} & {*LIMB_LEADS, *CHEST_LEADS, "MLII"}
    with_units = any(c.unit is not None and is_ecg(c.name, c.unit) for c in _columns(layout))
    timed = any(csv_time.kind_of(name) for name in layout.names)
    return (
        YES
        if layout.names and (known or with_units or (timed and "ecg" in " ".join(layout.names).casefold()))
        else MAYBE
    )


def open_csv(path: Path, options: ReadOptions) -> OpenRecording:
    """Open a text table. Raises ReadError for all that cannot be read as one."""
    text = decode(path.read_bytes())
    if text is None:
        raise _error(path, "file", "text", "binary data", "export the recording again")
    lines = text.splitlines()
    try:
        layout = find_layout(lines)
    except LayoutTrouble as trouble:
        line, expected, found = trouble.args
        raise _error(
            path, f"line {line}", expected, found, "export the table with a header row of lead names"
        ) from None
    assumed: list[str] = []
    table, first_column = _numbers(path, lines, layout)
    columns = _named_columns(path, layout, table, options, assumed)
    rate_hz, place = _time(path, layout, table, first_column, options, assumed)
    leads, left_out = _leads(path, layout, columns, table, options, assumed, timed=bool(first_column))
    signal = np.stack([_in_mv(table[:, c.index], c, assumed) for c in leads])
    if place is not None:
        filled = np.full((len(signal), int(place[-1]) + 1), np.nan)
        filled[:, place] = signal
        signal = filled
    names = normalise_leads([c.name for c in leads])
    info = RecordingInfo(
        name=path.stem,
        leads=names,
        fs_hz=base.check_rate(rate_hz, str(path), "sampling rate"),
        n_samples=base.check_length(signal.shape[1], str(path), "rows of numbers"),
        path=str(path),
        format="CSV",
        sha256=base.sha256_of([path]) if options.with_sha256 else None,
        start_time=csv_time.start_of(first_column[0]) if first_column else None,
        step_mv=_steps(signal),
        assumed=tuple(assumed),
        left_out=tuple(left_out),
        device=device_stated(layout.preamble),
        identity=tuple((base.printable(k), base.printable(v)) for k, v in layout.preamble)
        if options.with_identity
        else (),
    )
    return OpenCsv(info, signal, channels=tuple(c.index for c in leads), n_signals=layout.n_columns)


def _numbers(path: Path, lines: list[str], layout: Layout) -> tuple[NDArray[np.float64], list[str]]:
    """(n_rows, n_columns) numbers, NaN where missing, and the first column as text if it is a clock.

    numpy's own parser takes what is plain; the rest goes field by field, so that the first one that
    is no number can be named.
    """
    rows = [
        (k, line) for k, line in enumerate(lines[layout.first_row :], layout.first_row + 1) if line.strip()
    ]
    rows = [(k, line) for k, line in rows if not line.lstrip().startswith(("#", "%", "//"))]
    timed = is_clock(split(rows[0][1], layout.separator)[0]) and layout.n_columns > 1
    if layout.decimal == "." and not timed:
        try:
            delimiter = None if layout.separator == " " else layout.separator
            table = np.loadtxt(
                [line for _, line in rows], delimiter=delimiter, comments=None, ndmin=2, dtype=np.float64
            )
            if table.shape[1] == layout.n_columns:
                return np.where(np.isfinite(table), table, np.nan), []
        except ValueError:
            pass
    first_column: list[str] = []
    table = np.empty((len(rows), layout.n_columns))
    for row, (number, line) in zip(table, rows, strict=True):
        fields = split(line, layout.separator)
        if len(fields) != layout.n_columns:
            raise _error(
                path,
                f"line {number}",
                f"{layout.n_columns} fields",
                str(len(fields)),
                "export the table again",
            )
        if timed:
            first_column.append(fields[0])
            fields[0] = "0"
        row[:] = [_value(path, number, field, layout.decimal) for field in fields]
    return np.where(np.isfinite(table), table, np.nan), first_column


def _value(path: Path, number: int, field: str, decimal: str) -> float:
    if field.casefold() in MISSING_WORDS:
        return np.nan
    if not is_number(field, decimal):
        raise _error(
            path,
            f"line {number}",
            "a number",
            repr(base.printable(field[:40])),
            "correct the value or leave the field empty",
        )
    return float(field.replace(",", ".") if decimal == "," else field)


def _columns(layout: Layout) -> list[_Column]:
    """Columns under a header row, with the unit that the name or the row of units states."""
    out = []
    for k, heading in enumerate(layout.names):
        name, unit = heading, layout.units[k].strip(" []()") if layout.units else None
        match = _UNIT_IN_NAME.match(heading)
        if match and match["name"].strip(" _") and (len(match["unit"]) > 1 or heading[-1] in ")]"):
            name, unit = match["name"].strip(" _"), match["unit"]
        out.append(_Column(k, clean_name(name) or f"column {k + 1}", unit or None))
    return out


def _named_columns(
    path: Path, layout: Layout, table: NDArray[np.float64], options: ReadOptions, assumed: list[str]
) -> list[_Column]:
    """Columns by the header row; without one only where the caller states both rate and unit."""
    if layout.names:
        return _columns(layout)
    stated = _stated_rate(layout) or options.fs_hz, _stated_unit(layout) or options.units
    if None in stated:
        raise _error(
            path,
            f"line {layout.first_row + 1}",
            "a header row of lead names",
            "numbers at once",
            "add one, or give both sampling rate and units",
        )
    names = [f"column {k + 1}" for k in range(layout.n_columns)]
    if (
        layout.n_columns > 1
        and (is_count := np.diff(table[:, 0])).size
        and np.ptp(is_count) == 0
        and is_count[0] == 1
    ):
        names[0] = "index"
        assumed.append("The first column counts up by one; taken for sample numbers.")
    assumed.append("There is no header row; each column was taken for an ECG lead.")
    return [_Column(k, name, None) for k, name in enumerate(names)]


def _time(
    path: Path,
    layout: Layout,
    table: NDArray[np.float64],
    first_column: list[str],
    options: ReadOptions,
    assumed: list[str],
) -> tuple[float, NDArray[np.int64] | None]:
    """The rate, and where each row belongs if rows are missing."""
    stated = _stated_rate(layout)
    column = next((k for k, name in enumerate(layout.names) if csv_time.kind_of(name) == "time"), None)
    try:
        if first_column:
            axis = csv_time.axis_of(csv_time.clock_seconds(first_column), 1.0, None)
        elif column is not None:
            unit = csv_time.unit_seconds(layout.names[column], layout.units[column] if layout.units else "")
            axis = csv_time.axis_of(table[:, column], unit, stated or options.fs_hz)
        elif stated is not None:
            assumed += base.stated_rate_wins(stated, options.fs_hz)
            return stated, None
        elif options.fs_hz is not None:
            return options.fs_hz, None
        else:
            raise _error(
                path,
                "header row",
                "a time column or a stated sampling rate",
                "neither",
                "give the sampling rate in Hz",
            )
    except csv_time.TimeTrouble as trouble:
        expected, found, remedy = trouble.args
        raise _error(path, "time column", expected, found, remedy) from None
    assumed += axis.notes
    given = stated or options.fs_hz
    if given is not None and abs(given - axis.fs_hz) > 0.01 * axis.fs_hz:
        assumed.append(f"The time column shows {axis.fs_hz:g} Hz; the {given:g} Hz stated was not used.")
    elif given is not None and axis.place is None:
        return given, None
    return axis.fs_hz, axis.place


def _leads(
    path: Path,
    layout: Layout,
    columns: list[_Column],
    table: NDArray[np.float64],
    options: ReadOptions,
    assumed: list[str],
    *,
    timed: bool,
) -> tuple[list[_Column], list[str]]:
    """Columns that are ECG leads, each with a unit, and the names of the others."""
    default = _stated_unit(layout) or given_unit(options.units)
    signals = [c for c in columns if not csv_time.kind_of(c.name) and not (timed and c.index == 0)]
    ecg = [c for c in signals if is_ecg(c.name, c.unit)]
    left_out = [c.name for c in signals if c not in ecg]
    if not 1 <= len(ecg) <= MAX_LEADS:
        found = ", ".join(c.name for c in columns)[:200] if not ecg else f"{len(ecg)}"
        raise read_error(
            kind=NoECGLead,
            file=str(path),
            where="header row",
            expected=f"1 to {MAX_LEADS} ECG leads",
            found=found or "none",
            remedy="name the ECG columns by their leads",
        )
    if silent := [c.name for c in ecg if c.unit is None]:
        if default is None:
            level = np.nanmedian(
                np.nanmax(np.abs(_centred(table[:, [c.index for c in ecg]])), axis=0, initial=0.0)
            )
            likely = (
                " (their size suggests mV)"
                if 0.2 <= level <= 20
                else " (their size suggests uV)"
                if 200 <= level <= 20_000
                else ""
            )
            raise _error(
                path,
                "header row",
                f"a unit for {', '.join(silent)[:80]}",
                f"none{likely}",
                "name columns like 'II [mV]' or give the units",
            )
        assumed.append(f"No unit is stated for {', '.join(silent)}; {default} was taken, as given.")
    return [c if c.unit is not None else _Column(c.index, c.name, default) for c in ecg], left_out


def _centred(x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Each column about its median, rows without any value left out."""
    sound = x[np.isfinite(x).all(axis=1)]
    return sound - np.median(sound, axis=0) if len(sound) else np.zeros((1, x.shape[1]))


def _in_mv(x: NDArray[np.float64], column: _Column, assumed: list[str]) -> NDArray[np.float64]:
    """A column as mV; a code for missing counts as one where it stands far beyond all other values."""
    out = x.copy()
    for code in MISSING_CODES:
        hit = out == code
        others = np.abs(out[~hit & np.isfinite(out)])
        if hit.any() and others.size and others.max() < abs(code) / 2:
            out[hit] = np.nan
            assumed.append(f"{int(hit.sum())} values of {code:g} in {column.name} were taken as missing.")
    return out * (mv_per_unit(column.unit or "") or 1.0)


def _steps(signal: NDArray[np.float64]) -> NDArray[np.float64]:
    """(n_leads, n) → (n_leads,): the smallest difference between two values met, mV; NaN if constant."""
    out = np.full(len(signal), np.nan)
    for k, x in enumerate(signal):
        values = np.unique(x[np.isfinite(x)])
        gaps = np.diff(values)
        gaps = gaps[gaps > 1e-9]
        out[k] = gaps.min() if gaps.size else np.nan
    return out


def _stated_rate(layout: Layout) -> float | None:
    for key, value in layout.preamble:
        if _RATE_KEY.match(key) and (
            match := re.match(r"(\d+(?:[.,]\d+)?)\s*(k?hz|hertz|/s|samples/s|sps)?\s*$", value, re.I)
        ):
            factor = 1000.0 if (match[2] or "").casefold() == "khz" else 1.0
            return float(match[1].replace(",", ".")) * factor
    return None


def _stated_unit(layout: Layout) -> str | None:
    units = [value for key, value in layout.preamble if re.fullmatch(r"units?", key, re.IGNORECASE)]
    return next((unit for unit in units if mv_per_unit(unit) is not None), None)


class OpenCsv(OpenRecording):
    """An open text table; see OpenRecording. It has no digital values."""

    def __init__(
        self, info: RecordingInfo, signal_mv: NDArray[np.float64], *, channels: Sequence[int], n_signals: int
    ) -> None:
        super().__init__(info, scales=None, channels=tuple(channels), n_signals=n_signals)
        self._signal_mv = signal_mv

    def _read_mv(self, start: int, stop: int) -> NDArray[np.float64]:
        return self._signal_mv[:, start:stop].copy()

    def _read_digits(self, start: int, stop: int) -> NDArray[np.int64]:
        raise UsageError(f"{self.info.name}: a text table has no digital values")


def _error(path: Path, where: str, expected: str, found: str, remedy: str) -> ReadError:
    return read_error(str(path), where=where, expected=expected, found=found, remedy=remedy)


READER = Reader("CSV", sniff, open_csv)
