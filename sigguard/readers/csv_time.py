"""The time column of a text table: which column it is, what it counts, what rate it shows."""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import datetime

import numpy as np
from numpy.typing import NDArray

from sigguard.recording import MAX_FS_HZ, MIN_FS_HZ

_TIME = re.compile(
    r"^(elapsed[ _]?time|time[ _]?stamps?|date[ _]?time|time|t|zeit|temps|tiempo|tempo|seconds?|sec|s|ms|millis(econds)?|epoch)"
    r"([ _]*[\[(]?\s*(s|sec|seconds?|ms|us|ns|hh:mm:ss[.m]*)\s*[\])]?)?$",
    re.IGNORECASE,
)
_INDEX = re.compile(
    r"^(sample[ _]?(s|numbers?|no\.?|index|#)?|index|idx|n|no\.?|#|'?sample #'?)$", re.IGNORECASE
)
_SECONDS = {
    "s": 1.0,
    "sec": 1.0,
    "second": 1.0,
    "seconds": 1.0,
    "ms": 1e-3,
    "millis": 1e-3,
    "milliseconds": 1e-3,
}
_SECONDS |= {"us": 1e-6, "µs": 1e-6, "μs": 1e-6, "ns": 1e-9}
MAX_FILL = 4  # filled gaps may make a recording at most this many times its rows


@dataclass(frozen=True, slots=True)
class TimeAxis:
    """The rate, and for each row the sample it is; None where rows are simply consecutive."""

    fs_hz: float
    place: NDArray[np.int64] | None
    notes: tuple[str, ...]


class TimeTrouble(Exception):
    """expected, found, remedy."""


def kind_of(name: str) -> str:
    """``time``, ``index`` or nothing, by the heading of a column."""
    text = name.strip()
    return "index" if _INDEX.match(text) else "time" if _TIME.match(text) else ""


def unit_seconds(name: str, unit: str) -> float | None:
    """Seconds in one step of the unit that the heading or the row of units states."""
    for text in (unit, *reversed(re.split(r"[\s_\[\]()]+", name))):
        if found := _SECONDS.get(text.strip(" []()").casefold()):
            return found
    return None


def clock_seconds(fields: list[str]) -> NDArray[np.float64]:
    """Times such as 0:01:02.500, [10:00:00.000 01/02/2020] or ISO 8601 as seconds; NaN where none.

    Midnight passed without a date is taken for the next day. Times with a date count from 1970.
    """
    out = np.array([_one_clock(field) for field in fields])
    if np.nanmax(out, initial=0.0) < 200_000.0:  # no dates
        drops = np.diff(out) < -43_200.0
        out[1:] += 86_400.0 * np.cumsum(drops)
    return out


def start_of(field: str) -> datetime | None:
    """The date and time of the first row where it states both."""
    try:
        return datetime.fromisoformat(field.strip(" []").replace(",", ".")).replace(tzinfo=None)
    except ValueError:
        pass
    match = re.fullmatch(r"\[?\s*(\d+):(\d+):(\d+)(?:[.,](\d{1,6})\d*)?\s+(\d+)/(\d+)/(\d{4})\s*\]?", field)
    try:
        if match:
            h, m, s = int(match[1]), int(match[2]), int(match[3])
            return datetime(
                int(match[7]), int(match[6]), int(match[5]), h, m, s, int((match[4] or "0").ljust(6, "0"))
            )
    except ValueError:
        pass
    return None


def axis_of(t: NDArray[np.float64], seconds: float | None, fs_hz: float | None) -> TimeAxis:
    """The time axis of rows at times ``t`` in steps of ``seconds`` (None: not stated).

    Raises TimeTrouble where times do not ascend, leave gaps too long to fill, or show no rate
    that an ECG can have.
    """
    if len(t) < 2 or not np.isfinite(t).all():
        raise TimeTrouble("a time in every row, two rows or more", "rows without", "complete the time column")
    steps = np.diff(t)
    if not (steps > 0).all():
        at = int(np.argmin(steps > 0)) + 2
        raise TimeTrouble(
            "times that ascend", f"row {at} at {t[at - 1]:g} after {t[at - 2]:g}", "sort the rows by time"
        )
    notes: list[str] = []
    typical = float(np.median(steps))
    if seconds is None:
        seconds = _guess_seconds(typical, fs_hz, notes)
    even = steps <= 1.5 * typical
    mean_step = float(steps[even].mean()) * seconds  # the mean, since times are often rounded
    rate = _snapped(1.0 / mean_step, _resolution(t) * seconds / (mean_step * max(int(even.sum()), 1)))
    if not MIN_FS_HZ <= rate <= MAX_FS_HZ:
        raise TimeTrouble(
            f"a rate from {MIN_FS_HZ:g} to {MAX_FS_HZ:g} Hz",
            f"{rate:g} Hz by the time column",
            "state the unit of time in its heading",
        )
    place = np.rint((t - t[0]) * (seconds * rate)).astype(np.int64)
    if even.all() and (np.abs(place - np.arange(len(t))) <= max(1, 0.01 * len(t))).all():
        return TimeAxis(rate, None, tuple(notes))
    if place[-1] + 1 > MAX_FILL * len(t) or (np.diff(place) < 1).any():
        raise TimeTrouble(
            "evenly spaced rows", "gaps or jitter too large to fill", "split the file at its gaps"
        )
    lost = int(place[-1]) + 1 - len(t)
    notes.append(f"The time column has gaps; {lost} samples count as missing.")
    return TimeAxis(rate, place, tuple(notes))


def _one_clock(field: str) -> float:
    moment = start_of(field)
    if moment is not None:
        return (moment - datetime(1970, 1, 1)).total_seconds()
    try:
        parts = [float(part.replace(",", ".")) for part in field.strip(" []").split(":")]
    except ValueError:
        return np.nan
    return sum(part * 60.0**k for k, part in enumerate(reversed(parts)))


def _guess_seconds(step: float, fs_hz: float | None, notes: list[str]) -> float:
    """Seconds or milliseconds, whichever gives a possible rate; never where both or neither would."""
    named = {"seconds": 1.0, "milliseconds": 1e-3}
    if fs_hz is not None:
        fits = {word: s for word, s in named.items() if abs(step * s * fs_hz - 1) < 0.05}
    else:  # a step of 1 may as well count samples
        fits = {w: s for w, s in named.items() if MIN_FS_HZ <= 1 / (step * s) <= MAX_FS_HZ and step != 1.0}
    if len(fits) != 1:
        raise TimeTrouble(
            "a time column whose unit is stated",
            f"steps of {step:g} without a unit",
            "name it time_s or time_ms, or give the sampling rate",
        )
    word, seconds = next(iter(fits.items()))
    notes.append(f"The time column states no unit; {word} were taken.")
    return seconds


def _resolution(t: NDArray[np.float64]) -> float:
    """The decimal step to which the times are rounded."""
    some = t[:2000] - np.floor(t[0])
    for digits in range(10):
        if np.abs(some * 10**digits - np.rint(some * 10**digits)).max() < 1e-3:
            return 10.0**-digits
    return 1e-9


def _snapped(rate_hz: float, relative_error: float) -> float:
    """The nearest whole rate if rounding of the times explains the difference, else the rate."""
    whole = round(rate_hz)
    return float(whole) if abs(rate_hz - whole) <= rate_hz * max(relative_error, 1e-6) else rate_hz
