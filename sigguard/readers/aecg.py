"""HL7 annotated ECG (release 1, 2004): the recorded rhythm of a document, never the derived beat.

Leads stand in sets of one time head each. Sets recorded one after the other (4 × 3 leads) are put
on one time axis, missing where a set does not reach. The format does not tell what the converter
could give, so no rails are known. Samples are held in memory.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import NoECGLead
from sigguard.leads import clean_name, normalise_lead, normalise_leads
from sigguard.readers import base
from sigguard.readers.aecg_xml import ROOT, Node, parse, trouble, whole_numbers
from sigguard.readers.base import MAYBE, NO, YES, DigitalScale, OpenRecording, Reader, ReadOptions, read_error
from sigguard.readers.held import OpenHeld
from sigguard.readers.signals import given_unit, is_ecg, mv_per_unit
from sigguard.recording import MAX_LEADS, RecordingInfo

_RHYTHM = "RHYTHM"
_SECONDS = {"s": 1.0, "ms": 1e-3, "us": 1e-6, "µs": 1e-6, "μs": 1e-6}
_USUAL_HZ = (100, 120, 125, 128, 150, 180, 200, 240, 250, 256, 300, 360, 400, 480, 500, 512, 600, 800, 1000)
_ROOT_TAG = re.compile(rf"<([A-Za-z_][\w.\-]*:)?{ROOT}[\s/>]")
_NUMBER = re.compile(r"[+-]?([0-9]+(\.[0-9]*)?|\.[0-9]+)([eE][+-]?[0-9]{1,3})?")
_AGAIN = "export the recording again"


def sniff(path: Path, head: bytes) -> int:
    """An XML document with the root of an aECG; other XML is explained here."""
    text = head.decode("utf-16" if head[:2] in (b"\xff\xfe", b"\xfe\xff") else "utf-8", "replace")
    if not text.lstrip("\ufeff \t\r\n").startswith("<"):
        return NO
    return YES if _ROOT_TAG.search(text) else MAYBE


@dataclass(frozen=True, slots=True)
class _Set:
    """Leads that share one time head: a moment, or seconds on the clock of the series, or not stated."""

    head: datetime | float | None
    fs_hz: float
    leads: tuple[tuple[str, Node], ...]  # name, value element


@dataclass(frozen=True, slots=True)
class _Lead:
    """One lead: its steps, the sample of the recording its first one is, its scale."""

    name: str
    steps: NDArray[np.integer]
    first: int
    scale: DigitalScale


def open_aecg(path: Path, options: ReadOptions) -> OpenRecording:
    """Open an aECG document. Raises ReadError for all that cannot be read."""
    root = parse(path)
    assumed: list[str] = []
    left_out: list[str] = []
    unit = given_unit(options.units)
    series, sets = _rhythm(path, root, assumed, left_out)
    fs_hz = max(s.fs_hz for s in sets)
    base.check_rate(fs_hz, str(path), "increment of time")
    assumed += base.stated_rate_wins(fs_hz, options.fs_hz)
    zero, starts = _starts(path, sets, assumed)
    leads: list[_Lead] = []
    numbers: list[int] = []
    count = 0
    for one, start_s in zip(sets, starts, strict=True):
        held = set()
        for name, value in one.leads:
            count += 1
            why = _why_not(name, value, unit)
            if not why and one.fs_hz != fs_hz:
                why = f"{one.fs_hz:g} Hz beside {fs_hz:g} Hz"
            if why:
                left_out.append(f"{name} ({why})")
                continue
            leads.append(_lead(path, name, value, round(start_s * fs_hz), unit, assumed))
            numbers.append(count - 1)
            held.add(len(leads[-1].steps))
        if len(held) > 1:
            found = " and ".join(str(n) for n in sorted(held)[:2])
            raise trouble(
                path, "sequence set", "as many digits for each lead", found, "the file is damaged: " + _AGAIN
            )
    if not leads:
        raise read_error(
            kind=NoECGLead,
            file=str(path),
            where="rhythm series",
            expected="at least one ECG lead with its digits",
            found=", ".join(left_out)[:200] or "no waveform in this document",
            remedy="send the document with its waveforms",
        )
    return _opened(path, root, series, options, fs_hz, zero, leads, tuple(numbers), count, assumed, left_out)


def _opened(
    path: Path,
    root: Node,
    series: Node,
    options: ReadOptions,
    fs_hz: float,
    zero: datetime | None,
    leads: list[_Lead],
    numbers: tuple[int, ...],
    n_signals: int,
    assumed: list[str],
    left_out: list[str],
) -> OpenRecording:
    if len(leads) > MAX_LEADS:
        raise trouble(path, "rhythm series", f"at most {MAX_LEADS} leads", str(len(leads)), _AGAIN)
    ends = [lead.first + len(lead.steps) for lead in leads]
    factor, spare_s = base.GAP_LIMIT
    if max(ends) > (factor + 1) * sum(len(lead.steps) for lead in leads) + spare_s * fs_hz:
        found = f"a recording of {max(ends) / fs_hz:g} s"
        raise trouble(path, "time heads", "sets that were recorded together", found, "split the document")
    if len(set(ends)) > 1 or any(lead.first for lead in leads):
        assumed.append(
            "Leads were recorded at differing times; they count as missing where they were not recorded."
        )
    band = np.tile(_band(series), (len(leads), 1))
    info = RecordingInfo(
        name=path.stem,
        leads=normalise_leads([lead.name for lead in leads]),
        fs_hz=fs_hz,
        n_samples=base.check_length(max(ends), str(path), "digits"),
        path=str(path),
        format="aECG",
        sha256=base.sha256_of([path]) if options.with_sha256 else None,
        start_time=zero,
        step_mv=np.array([abs(lead.scale.step_mv) for lead in leads]),
        band_hz=band if np.isfinite(band).any() else None,
        assumed=tuple(dict.fromkeys(assumed)),
        left_out=tuple(left_out),
        identity=_identity(root) if options.with_identity else (),
    )
    return OpenHeld(info, leads, channels=numbers, n_signals=n_signals)


def _rhythm(path: Path, root: Node, assumed: list[str], left_out: list[str]) -> tuple[Node, tuple[_Set, ...]]:
    """The rhythm series that holds most, and its sets."""
    found: list[tuple[int, Node, tuple[_Set, ...]]] = []
    for series in root.all("series"):
        code = series.first("code")
        stated = code.get("code").upper() if code else ""
        if stated and stated != _RHYTHM:
            left_out.append(f"series {clean_name(stated)}")
            continue
        if not stated:
            assumed.append("A series does not say what it is; taken as the recorded rhythm.")
        sets = tuple(_sets(path, series, assumed))
        size = sum(len(piece) for s in sets for _, value in s.leads for piece in _digits(value))
        if sets:
            found.append((size, series, sets))
    if not found:
        raise read_error(
            kind=NoECGLead,
            file=str(path),
            where="series",
            expected="a rhythm series with sequence sets",
            found=", ".join(left_out)[:200] or "no waveform in this document",
            remedy="send the document with its waveforms",
        )
    size, series, sets = max(found, key=lambda one: one[0])
    left_out += ["another rhythm series, recorded apart"] * (len(found) - 1)
    return series, sets


def _digits(value: Node) -> list[str]:
    digits = value.first("digits")
    return digits.pieces if digits else []


def _sets(path: Path, series: Node, assumed: list[str]) -> Iterator[_Set]:
    for number, table in enumerate(series.below("component", "sequenceSet"), start=1):
        time: Node | None = None
        absolute = False
        leads: list[tuple[str, Node]] = []
        for sequence in table.below("component", "sequence"):
            code, value = sequence.first("code"), sequence.first("value")
            name = (code.get("code") or code.get("displayName")) if code else ""
            if value is None:
                continue
            if name.upper() in ("TIME_ABSOLUTE", "TIME_RELATIVE"):
                time, absolute = value, name.upper() == "TIME_ABSOLUTE"
            else:
                leads.append((normalise_lead(name) or f"lead {len(leads) + 1}", value))
        if not leads:
            continue
        where = f"sequence set {number}"
        increment = time.first("increment") if time else None
        step_s = _quantity(increment) * _SECONDS.get(increment.get("unit"), math.nan) if increment else 0.0
        if not step_s > 0:
            found = increment.get("value") + " " + increment.get("unit") if increment else "none"
            raise trouble(path, where, "an increment of time in s, ms or us", found[:60], _AGAIN)
        fs_hz = _snapped(step_s, increment.get("value") if increment else "", assumed)
        base.check_rate(fs_hz, str(path), f"{where}, increment")
        yield _Set(_head(path, where, time, absolute), fs_hz, tuple(leads))


def _snapped(step_s: float, written: str, assumed: list[str]) -> float:
    """The rate of an increment; a usual rate where only the rounding of the increment keeps it from that.

    0.00278 s is 359.712 Hz as written and stands for 360 Hz.
    """
    fs_hz = float(f"{1.0 / step_s:.9g}")
    decimals = len(written.partition(".")[2].lower().partition("e")[0].rstrip("0"))
    number = abs(float(written))
    slack = 0.5 * 10.0**-decimals / number if decimals and "e" not in written.lower() else 0.0
    near = [hz for hz in _USUAL_HZ if abs(hz * step_s - 1.0) <= slack * (1 + 1e-9)]
    if any(abs(hz - fs_hz) <= 1e-6 * hz for hz in _USUAL_HZ) or len(near) != 1:
        return fs_hz
    assumed.append(f"The time between samples is written as {written}; {near[0]} Hz was taken.")
    return float(near[0])


def _head(path: Path, where: str, time: Node | None, absolute: bool) -> datetime | float | None:
    """When a set begins; None where the head is absent or only a date."""
    head = time.first("head") if time else None
    if head is None or not head.get("value"):
        return None
    if absolute:
        return _moment(head.get("value"))
    seconds = _quantity(head) * _SECONDS.get(head.get("unit") or "s", math.nan)
    if not abs(seconds) < 1e9:
        raise trouble(path, where, "a time head in seconds", head.get("value")[:40], _AGAIN)
    return seconds


def _moment(text: str) -> datetime | None:
    """``YYYYMMDDHHMMSS[.fff][±ZZZZ]`` as local time; None for anything less."""
    found = re.fullmatch(r"([0-9]{14})(?:\.([0-9]{1,6})[0-9]*)?([+-][0-9]{4})?", text)
    if not found:
        return None
    try:
        moment = datetime.strptime(found[1], "%Y%m%d%H%M%S")
    except ValueError:
        return None
    return moment.replace(microsecond=int((found[2] or "0").ljust(6, "0")))


def _starts(path: Path, sets: tuple[_Set, ...], assumed: list[str]) -> tuple[datetime | None, list[float]]:
    """The moment of the first sample (None: unknown), and when each set begins, s after it."""
    heads = [s.head for s in sets]
    moments = [head for head in heads if isinstance(head, datetime)]
    seconds = [head for head in heads if isinstance(head, float)]
    if len(moments) == len(sets):
        zero = min(moments)
        return zero, [(moment - zero).total_seconds() for moment in moments]
    if len(seconds) == len(sets):
        return None, [s - min(seconds) for s in seconds]
    if len(sets) > 1:
        assumed.append("Not all sets of leads say when they begin; taken as recorded at the same time.")
    return None, [0.0] * len(sets)


def _why_not(name: str, value: Node, unit: str | None) -> str:
    """Why a sequence is no ECG lead that can be used; empty where it is one."""
    scale = value.first("scale")
    stated = scale.get("unit") if scale else ""
    if not is_ecg(name, stated or None):
        return base.printable(stated or "no ECG")[:20]
    if not "".join(_digits(value)).strip():
        return "no digits"
    return "" if stated or unit else "no unit stated"


def _lead(path: Path, name: str, value: Node, first: int, unit: str | None, assumed: list[str]) -> _Lead:
    scale, origin, digits = value.first("scale"), value.first("origin"), value.first("digits")
    assert digits is not None
    where = f"digits of {name}"
    try:
        steps = whole_numbers(digits)
    except (ValueError, OverflowError) as err:
        raise trouble(path, where, "whole numbers", base.reason(err), _AGAIN) from err
    stated = scale.get("unit") if scale else ""
    if not stated:
        assumed.append(f"No unit is stated for {name}; {unit} was taken, as given.")
    per_unit = mv_per_unit(stated or unit or "") or 1.0
    step_mv = (_quantity(scale) if scale else 1.0) * per_unit
    if not 1e-12 < abs(step_mv) < 1e12:
        raise trouble(
            path,
            f"scale of {name}",
            "a number other than 0",
            scale.get("value")[:40] if scale else "none",
            _AGAIN,
        )
    origin_mv = 0.0
    if origin is not None and origin.get("value"):
        origin_mv = _quantity(origin) * (mv_per_unit(origin.get("unit")) or per_unit)
        if not abs(origin_mv) < 1e12:
            raise trouble(path, f"origin of {name}", "a voltage", origin.get("value")[:40], _AGAIN)
    small = not len(steps) or bool((np.abs(steps) < 1 << 15).all())
    half = 1 << (15 if small else 31)
    facts = DigitalScale(step_mv, -origin_mv / step_mv, -half, half - 1, -half - 1)
    return _Lead(name, steps.astype(np.int16 if small else np.int32), first, facts)


def _quantity(node: Node) -> float:
    """The value of a physical quantity; NaN where it is no number."""
    text = node.get("value")
    return float(text) if _NUMBER.fullmatch(text) else math.nan


def _band(series: Node) -> tuple[float, float]:
    """High-pass and low-pass corner, Hz, by the control variables; NaN where not stated."""
    corners = {"HIGH_PASS": math.nan, "LOW_PASS": math.nan}
    for variable in series.all("controlVariable"):
        code = variable.first("code")
        ending = next((e for e in corners if code and code.get("code").upper().endswith(f"FILTER_{e}")), None)
        if ending is None:
            continue
        values = [v for v in variable.all("value") if v.get("unit").casefold() == "hz"]
        if values and _quantity(values[0]) > 0:
            corners[ending] = _quantity(values[0])
    return corners["HIGH_PASS"], corners["LOW_PASS"]


def _identity(root: Node) -> tuple[tuple[str, str], ...]:
    out = []
    for subject in root.all("trialSubject"):
        number = subject.first("id")
        if number is not None:
            out.append(("subject", number.get("extension")))
    for person in root.all("subjectDemographicPerson"):
        name = person.first("name")
        parts = [name.text, *(n.text for n in name.children)] if name else []
        out.append(("name", " ".join(p for p in parts if p)))
        for key, tag, attribute in (
            ("sex", "administrativeGenderCode", "code"),
            ("birth date", "birthTime", "value"),
        ):
            node = person.first(tag)
            out.append((key, node.get(attribute) if node else ""))
    return tuple((key, base.printable(text)) for key, text in out if text)


READER = Reader("aECG", sniff, open_aecg)
