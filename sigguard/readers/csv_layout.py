"""How a text table is laid out: encoding, separator, decimal sign, preamble, header and unit rows."""

from __future__ import annotations

import re
from dataclasses import dataclass

from sigguard.leads import STANDARD_LEADS, normalise_lead

SEPARATORS = (";", "\t", "|", ",")
MISSING_WORDS = frozenset({"", "nan", "na", "n/a", "null", "none", "-", "\\n", "?"})
MAX_PREAMBLE = 200
MAX_HEADING = 120
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_COMMA_NUMBER = re.compile(r"[+-]?(\d+,?\d*|,\d+)([eE][+-]?\d+)?")
_CLOCK = re.compile(r"\[?\s*(\d{1,2}:)?\d{1,3}:\d{1,2}([.,]\d+)?(\s+\d{1,2}/\d{1,2}/\d{4})?\s*\]?")
_STAMP = re.compile(r"\d{4}-\d{2}-\d{2}[T ]\d{2}:\d{2}:\d{2}([.,]\d+)?(Z|[+-]\d{2}:?\d{2})?")


@dataclass(frozen=True, slots=True)
class Layout:
    """Where the numbers begin and how they are written; ``first_row`` counts lines from 0."""

    separator: str  # " " stands for any run of blanks
    decimal: str
    first_row: int
    names: tuple[str, ...]  # empty: no header row
    units: tuple[str, ...]  # the row of units, where there is one
    preamble: tuple[tuple[str, str], ...]  # pairs above the table and in comments
    n_columns: int


class LayoutTrouble(Exception):
    """line (from 1), expected, found."""


def decode(data: bytes) -> str | None:
    """The bytes as text (UTF-8, UTF-16 with its mark, else Latin-1); None if they are no text."""
    if data[:2] in (b"\xff\xfe", b"\xfe\xff"):
        return data[: len(data) // 2 * 2].decode("utf-16", errors="replace")
    if b"\0" in data:
        return None
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as err:
        # the head of a file may end within a character
        text = data[: err.start].decode("utf-8-sig") if err.start >= len(data) - 3 else data.decode("latin-1")
    controls = sum(c < " " and c not in "\t\r\n\f" for c in text[:4096])
    return text if controls == 0 else None


def find_layout(lines: list[str]) -> Layout:
    """The layout of a table whose rows of numbers begin within the first 200 lines.

    Raises LayoutTrouble where no such row is found, or where it cannot be read in one way only.
    """
    named = None
    comments: list[tuple[str, str]] = []
    above: list[tuple[int, str]] = []
    for number, raw in enumerate(lines[: MAX_PREAMBLE + 1]):
        line = raw.strip("\r\n")
        if not line.strip():
            continue
        if named is None and not above and (match := re.fullmatch(r"\s*sep=(.)\s*", line, re.IGNORECASE)):
            named = match[1]
        elif line.lstrip().startswith(("#", "%", "//")):
            comments += _pair(line.lstrip(" #%/"))
        elif shape := _numeric_shape(line, named, above):
            separator, decimal = shape
            return _with_headings(separator, decimal, number, line, above, comments)
        else:
            above.append((number, line))
    at = above[-1][0] + 1 if above else 1
    raise LayoutTrouble(at, "rows of numbers under a row of lead names", "no row of numbers")


def split(line: str, separator: str) -> list[str]:
    """The fields of a line, without quotes and outer blanks."""
    parts = line.split() if separator == " " else line.split(separator)
    return [part.strip().strip("\"'").strip() for part in parts]


def is_number(field: str, decimal: str) -> bool:
    """Whether a field is a number or a word for a missing one."""
    pattern = _COMMA_NUMBER if decimal == "," else _NUMBER
    return bool(pattern.fullmatch(field)) or field.casefold() in MISSING_WORDS


def is_clock(field: str) -> bool:
    """Whether a field is a time of day, a time elapsed, or a date with time."""
    return bool(_CLOCK.fullmatch(field) or _STAMP.fullmatch(field))


def _numeric_shape(line: str, named: str | None, above: list[tuple[int, str]]) -> tuple[str, str] | None:
    """(separator, decimal sign) with which the line is a row of numbers, None if it is not one.

    A separator that also parts the line above it into as many fields goes first.
    """
    tried = [named] if named else [s for s in SEPARATORS if s in line]
    tried += [] if named else [" "]
    heading = above[-1][1] if above else None
    matches = []
    for separator in tried:
        fields = split(line, separator)
        for decimal in (".",) if separator == "," else (".", ","):
            body = fields[1:] if len(fields) > 1 and is_clock(fields[0]) else fields
            some = any(f.casefold() not in MISSING_WORDS for f in body) or len(body) > 1
            if body and some and all(is_number(f, decimal) for f in body):
                fits = heading is not None and len(split(heading, separator)) == len(fields)
                matches.append((fits, separator, decimal))
                break
    if not matches:
        return None
    return next(((s, d) for fits, s, d in matches if fits), matches[0][1:])


def _with_headings(
    separator: str,
    decimal: str,
    number: int,
    line: str,
    above: list[tuple[int, str]],
    comments: list[tuple[str, str]],
) -> Layout:
    width = len(split(line, separator))
    names: tuple[str, ...] = ()
    units: tuple[str, ...] = ()
    if width == 1:  # a heading of one column may hold blanks
        rows = [
            tuple(split(text, "\n")) if not _pair(text) or _names_leads(text) else () for _, text in above
        ]
    else:
        rows = [tuple(split(text, separator)) for _, text in above]
    if rows and len(rows[-1]) == width:
        names = rows.pop()
        if rows and len(rows[-1]) == width and _all_units(names) and not _all_units(rows[-1]):
            units, names = names, rows.pop()
    elif rows and (not _pair(above[-1][1]) or _names_leads(above[-1][1])):
        raise LayoutTrouble(
            number + 1,
            f"{len(rows[-1])} fields, as the row of names has",
            f"{width} (is the decimal sign a comma too?)",
        )
    names = tuple(name[:MAX_HEADING] for name in names)
    pairs = [pair for _, text in above[: len(rows)] for pair in _pair(text)]
    if width == 2 and len(names) == 2 and _is_preamble(names):  # a pair that merely looks like a header row
        pairs, names = [*pairs, (names[0], names[1])], ()
    return Layout(separator, decimal, number, names, units, (*comments, *pairs), width)


def _all_units(fields: tuple[str, ...]) -> bool:
    known = r"\[?\(?(mv|uv|µv|μv|v|nv|s|ms|sec|us|seconds|hh:mm:ss(\.m+)?|hh:mm:ss\.mmm|sample #?|samples?|#)\)?\]?"
    return all(re.fullmatch(known, f.strip(), re.IGNORECASE) for f in fields)


def _is_preamble(fields: tuple[str, ...]) -> bool:
    return bool(re.search(r"rate|frequen|^units?$|^fs$", fields[0], re.IGNORECASE)) and any(
        c.isdigit() for c in fields[1]
    )


def _names_leads(line: str) -> bool:
    """Whether what looks like a pair is rather a heading of two leads."""
    return any(normalise_lead(part) in STANDARD_LEADS for part in re.split(r"[,;:=\t]", line))


def _pair(line: str) -> list[tuple[str, str]]:
    """A line such as ``Sample Rate,512 hertz`` or ``fs = 500`` as its two parts, else nothing."""
    match = re.fullmatch(r"\s*([^,;:=\t]{1,60}?)\s*[,;:=\t]\s*([^,;\t]{1,120}?)\s*[,;]*\s*", line)
    return [(match[1].strip("\"' "), match[2].strip("\"' "))] if match else []
