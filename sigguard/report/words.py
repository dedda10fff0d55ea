"""Plain words for the short names of the report, and text made safe for lines and cells."""

from __future__ import annotations

import re
from collections.abc import Iterable

from sigguard.findings import PatientFirst, under_alarm

GRADE_WORDS = {
    "all": "everything",
    "intervals": "all but ST",
    "rhythm": "rhythm only",
    "none": "nothing",
}
FAULT_WORDS = {
    "wander": "baseline wander",
    "muscle": "muscle or tremor",
    "mains": "mains hum",
    "motion": "movement",
    "flat": "flat line",
    "clipped": "cut off at the limit",
    "missing": "no signal",
    "weak": "QRS too small",
    "narrow-band": "recorded too coarsely",
}
MEASUREMENT_WORDS = {
    "rate": "Heart rate",
    "pr": "PR interval",
    "qrs": "QRS duration",
    "qt": "QT interval",
    "qtc": "QTc",
    "st": "ST level",
}
SHORT_WORDS = {"rate": "rate", "pr": "PR", "qrs": "QRS", "qt": "QT", "qtc": "QTc", "st": "ST"}
UNIT_WORDS = {"1/min": "per min", "ms": "ms", "mV": "mV"}
ABSENT_WORDS = {
    "no-wave": "no such wave in this rhythm",
    "no-fixed-relation": "P waves without a steady PR",
    "too-small-here": "too small to see here, seen in other leads",
}
VERDICT_WORDS = {"accept": "Accept", "accept-in-part": "Accept in part", "repeat": "Repeat the recording"}
PATTERN_WORDS = {
    "fibrillation-or-flutter": "looks like fibrillation or flutter of the ventricles",
    "wide-fast": "looks like a wide, fast rhythm",
    "standstill": "looks like a standstill",
}
ALARM_WORDS = "patient first"
PROFILE_WORDS = {
    "resting": "for a resting ECG",
    "strip": "for a rhythm strip",
    "ambulatory": "for a long-term recording",
}

_CONTROL = re.compile(r"[\x00-\x1f\x7f-\x9f\u2028\u2029\u202a-\u202e\u2066-\u2069]")
_FORMULA = re.compile(r"[=@]|[+-].*[(|!]", re.DOTALL)


def clean(text: object) -> str:
    """Text that can be encoded: half characters from odd file names become visible escapes."""
    return str(text).encode("utf-8", "backslashreplace").decode("utf-8")


def plain(text: object) -> str:
    """Text for one line on a terminal: no line ends, no escape sequences, no turned direction."""
    return _CONTROL.sub("\N{REPLACEMENT CHARACTER}", clean(text))


def cell(text: object) -> str:
    """One quoted CSV cell (RFC 4180); what a spreadsheet would run as a formula gets a leading ``'``."""
    text = clean(text).replace("\x00", "\N{REPLACEMENT CHARACTER}")
    if _FORMULA.match(text):
        text = "'" + text
    if any(sign in text for sign in ',"\r\n') or text != text.strip():
        text = '"' + text.replace('"', '""') + '"'
    return text


def alarm_between(alarms: Iterable[PatientFirst], start_s: float, end_s: float) -> bool:
    """Whether a patient-first stretch lies on any part of the time from start to end."""
    return bool(under_alarm(alarms, start_s, end_s))


def listing(words: Iterable[str], *, last: str = "and") -> str:
    """``a, b and c``."""
    words = list(words)
    if len(words) < 2:
        return "".join(words)
    return f"{', '.join(words[:-1])} {last} {words[-1]}"


def clock(t_s: float, *, decimals: int = 0) -> str:
    """Seconds since the start for a reader: ``4 s``, ``2:05``, ``1:02:05``, ``2 d 03:00:00``."""
    scale = 10**decimals
    ticks = round(t_s * scale)
    whole, rest = divmod(ticks, scale)
    tail = f".{rest:0{decimals}d}" if decimals and rest else ""
    if whole < 60:
        return f"{whole}{tail} s"
    minutes, seconds = divmod(whole, 60)
    hours, minutes = divmod(minutes, 60)
    days, hours = divmod(hours, 24)
    if days:
        return f"{days} d {hours:02d}:{minutes:02d}:{seconds:02d}{tail}"
    if hours:
        return f"{hours}:{minutes:02d}:{seconds:02d}{tail}"
    return f"{minutes}:{seconds:02d}{tail}"


def strength_words(value: float, unit: str) -> str:
    """``25 µV rms``, ``1.2 mV range``, ``2.0 s``."""
    size, _, kind = unit.partition(" ")
    if size == "s":
        return f"{value:.1f} s"
    amount = (
        f"{value / 1000:.1f} mV" if value >= 999.5 else f"{value:.2g} µV" if value < 10 else f"{value:.0f} µV"
    )
    return f"{amount} {kind}".strip()


def stretch(start_s: float, end_s: float) -> str:
    """``from 2:05 to 2:15``, with tenths where the stretch is short."""
    decimals = 1 if end_s - start_s < 20 else 0
    return f"from {clock(start_s, decimals=decimals)} to {clock(end_s, decimals=decimals)}"
