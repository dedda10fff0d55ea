"""Acceptance profiles: tolerances and the rules for accepting a recording, read from TOML.

Three profiles ship with the package (``profiles/*.toml``); a lab can hand its own file. A profile
asks for things, each by its own key; a key that is left out asks for nothing:

=====================  ==========================================================================
``values``             these measurements of the recording must be reliable; absent counts as met
``values_time_share``  ... and hold for at least this share of the time
``st_lead_share``      ST must be reliable (or absent) in at least this share of the leads present
``grade``              the grade meant by ``grade_lead_share``
``grade_lead_share``   this share of the leads, averaged over time, must reach that grade
``rate_time_share``    one lead at least must give a reliable rate for this share of the time
``rate_run_s``         one lead at least must give a reliable rate for so many seconds on end
``somewhere``          these measurements must be reliable in some lead at some time
=====================  ==========================================================================

A recording that meets ``[accept]`` is accepted, one that meets ``[in_part]`` in part, any other
must be repeated.
"""

from __future__ import annotations

import hashlib
import tomllib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sigguard.errors import ProfileError

SHIPPED = ("resting", "strip", "ambulatory")  # in the order in which choose_profile tries them
_FOLDER = Path(__file__).with_name("profiles")
_VALUES = ("rate", "pr", "qrs", "qt")
_MEASUREMENTS = (*_VALUES, "st")
_GRADES = ("rhythm", "intervals", "all")
_MAX_BYTES = 64 * 1024  # a profile is a page of text; anything longer is some other file


@dataclass(frozen=True, slots=True)
class Tolerance:
    """How far a disturbance may move a measurement; ``rate_ms`` is the beat-match window."""

    rate_ms: float
    pr_ms: float
    qrs_ms: float
    qt_ms: float
    st_mv: float

    def as_tuple(self) -> tuple[float, float, float, float, float]:
        """In the order of the measurements: rate, pr, qrs, qt (ms), st (mV)."""
        return self.rate_ms, self.pr_ms, self.qrs_ms, self.qt_ms, self.st_mv


@dataclass(frozen=True, slots=True)
class Use:
    """For which recordings a profile is chosen when none is named; None where there is no limit."""

    min_leads: int = 1
    max_duration_s: float | None = None

    def fits(self, n_leads: int, duration_s: float) -> bool:
        return n_leads >= self.min_leads and (
            self.max_duration_s is None or duration_s <= self.max_duration_s
        )


@dataclass(frozen=True, slots=True)
class Rule:
    """What must hold; every field left at its default asks for nothing. Shares run from 0 to 1."""

    values: tuple[str, ...] = ()
    values_time_share: float = 0.0
    st_lead_share: float = 0.0
    grade: str = "rhythm"
    grade_lead_share: float = 0.0
    rate_time_share: float = 0.0
    rate_run_s: float = 0.0
    somewhere: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Profile:
    """Tolerances and acceptance rules for one use, and the checksum of the file they came from."""

    name: str
    purpose: str
    tolerance: Tolerance
    accept: Rule
    in_part: Rule
    use: Use
    sha256: str


def choose_profile(n_leads: int, duration_s: float) -> str:
    """Name of the shipped profile for a recording nobody named one for.

    ``resting`` for 8 or more leads over up to 60 s, ``strip`` for anything else up to 5 minutes,
    ``ambulatory`` for what is longer, whatever its leads. The limits stand in the profiles' ``[use]``.
    """
    for name in SHIPPED[:-1]:
        if load_profile(name).use.fits(n_leads, duration_s):
            return name
    return SHIPPED[-1]


def load_profile(name_or_path: str | Path) -> Profile:
    """The profile of that name, or the one in that TOML file.

    A shipped name wins over a file of the same name in the working folder; write ``./resting`` for
    the file. Raises ProfileError, saying which file and key, what was expected and what was found.
    """
    text = str(name_or_path)
    path = _FOLDER / f"{text}.toml" if text in SHIPPED else Path(text)
    try:
        with path.open("rb") as file:
            raw = file.read(_MAX_BYTES + 1)
    except (OSError, ValueError) as err:
        reason = getattr(err, "strerror", None) or "no such profile"
        raise ProfileError(
            f"profile {text}: expected one of {', '.join(SHIPPED)} or a TOML file, found none ({reason})"
        ) from err
    if len(raw) > _MAX_BYTES:
        raise ProfileError(f"profile {text}: expected at most {_MAX_BYTES} bytes of TOML, found more")
    return parse_profile(raw, source=text)


def parse_profile(raw: bytes, *, source: str) -> Profile:
    """The profile in these bytes of TOML; ``source`` names them in messages. Raises ProfileError."""
    try:
        document = tomllib.loads(raw.decode("utf-8"))
    except (UnicodeDecodeError, tomllib.TOMLDecodeError) as err:
        raise ProfileError(f"profile {source}: expected TOML text in UTF-8, found a fault: {err}") from err
    top = _Table(source, "", document)
    name = top.take("name", _text, "a short name")
    purpose = top.take("purpose", _text, "a line of text", default="")
    tables = {
        key: _Table(source, key, top.take(key, _table, "a table"))
        for key in ("tolerance", "accept", "in_part")
    }
    use = _Table(source, "use", top.take("use", _table, "a table", default={}))
    top.finish()
    return Profile(
        name=name,
        purpose=purpose,
        tolerance=_read_tolerance(tables["tolerance"]),
        accept=_read_rule(tables["accept"]),
        in_part=_read_rule(tables["in_part"]),
        use=_read_use(use),
        sha256=hashlib.sha256(raw).hexdigest(),
    )


def _read_tolerance(table: _Table) -> Tolerance:
    keys = ("rate_ms", "pr_ms", "qrs_ms", "qt_ms", "st_mv")
    found = {key: table.take(key, _positive, "a number above 0") for key in keys}
    table.finish()
    return Tolerance(**found)


def _read_use(table: _Table) -> Use:
    use = Use(
        min_leads=table.take("min_leads", _count, "a whole number from 1", default=1),
        max_duration_s=table.take("max_duration_s", _positive, "seconds above 0", default=None),
    )
    table.finish()
    return use


def _read_rule(table: _Table) -> Rule:
    share, seconds = "a share from 0 to 1", "seconds from 0"
    rule = Rule(
        values=table.take("values", _names(_VALUES), f"a list out of {', '.join(_VALUES)}", default=()),
        values_time_share=table.take("values_time_share", _share, share, default=0.0),
        st_lead_share=table.take("st_lead_share", _share, share, default=0.0),
        grade=table.take("grade", _one_of(_GRADES), f"one of {', '.join(_GRADES)}", default="rhythm"),
        grade_lead_share=table.take("grade_lead_share", _share, share, default=0.0),
        rate_time_share=table.take("rate_time_share", _share, share, default=0.0),
        rate_run_s=table.take("rate_run_s", _not_negative, seconds, default=0.0),
        somewhere=table.take(
            "somewhere", _names(_MEASUREMENTS), f"a list out of {', '.join(_MEASUREMENTS)}", default=()
        ),
    )
    table.finish()
    asks = (rule.values, rule.st_lead_share, rule.grade_lead_share, rule.rate_time_share, rule.rate_run_s)
    if not any((*asks, rule.somewhere)):
        # A slip of the pen must not turn the gate into an open door.
        raise ProfileError(f"profile {table.source}: {table.name}: expected at least one demand, found none")
    return rule


# ── reading one table, key by key ──


class _Table:
    """A TOML table from which each known key is taken once; what is left over is a mistake."""

    def __init__(self, source: str, name: str, content: dict[str, Any]) -> None:
        self.source, self.name = source, name
        self._left = dict(content)
        self._known: list[str] = []

    def take(self, key: str, read: Callable[[Any], Any], expected: str, **default: Any) -> Any:
        self._known.append(key)
        if key not in self._left:
            if "default" in default:
                return default["default"]
            raise self._error(key, expected, "nothing")
        found = self._left.pop(key)
        value = read(found)
        if value is None:
            raise self._error(key, expected, repr(found)[:80])
        return value

    def finish(self) -> None:
        for key in self._left:
            place = f"{self.name}.{key}" if self.name else key
            raise ProfileError(
                f"profile {self.source}: {place}: expected only {', '.join(self._known)}, found an unknown key"
            )

    def _error(self, key: str, expected: str, found: str) -> ProfileError:
        place = f"{self.name}.{key}" if self.name else key
        return ProfileError(f"profile {self.source}: {place}: expected {expected}, found {found}")


# Each reader gives the value, or None for what it cannot take. A bool is no number here.


def _text(found: Any) -> str | None:
    fits = isinstance(found, str) and found.strip() and len(found) <= 200 and found.isprintable()
    return found.strip() if fits else None


def _table(found: Any) -> dict[str, Any] | None:
    return found if isinstance(found, dict) else None


def _not_negative(found: Any) -> float | None:
    is_number = isinstance(found, int | float) and not isinstance(found, bool)
    return float(found) if is_number and 0 <= found < 1e9 else None


def _positive(found: Any) -> float | None:
    return _not_negative(found) or None


def _share(found: Any) -> float | None:
    value = _not_negative(found)
    return value if value is not None and value <= 1 else None


def _count(found: Any) -> int | None:
    return found if isinstance(found, int) and not isinstance(found, bool) and 1 <= found <= 1000 else None


def _one_of(known: tuple[str, ...]) -> Callable[[Any], str | None]:
    return lambda found: found if isinstance(found, str) and found in known else None


def _names(known: tuple[str, ...]) -> Callable[[Any], tuple[str, ...] | None]:
    def read(found: Any) -> tuple[str, ...] | None:
        fits = isinstance(found, list) and all(isinstance(name, str) and name in known for name in found)
        return tuple(dict.fromkeys(found)) if fits else None

    return read
