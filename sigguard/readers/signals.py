"""Which signals of a file are ECG, and how many millivolts their unit is."""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Iterable, Sequence

from sigguard.errors import UsageError
from sigguard.readers.base import printable

_MV_PER_UNIT = {"v": 1000.0, "mv": 1.0, "uv": 1e-3, "μv": 1e-3, "nv": 1e-6}
_WORDS = {
    "volt": "v",
    "volts": "v",
    "millivolt": "mv",
    "millivolts": "mv",
    "microvolt": "uv",
    "microvolts": "uv",
}
# Names that other bedside and sleep signals go by; an electrical unit alone does not make an ECG.
_OTHER = re.compile(
    r"^(abp|art|ap|bp|nbp|nibp|ibp|pap|cvp|icp|rap|lap|uap|uvp|p\d|pressure|presión|druck|"
    r"pleth\w*|ppg\w*|pulse|spo2|sao2|sp02|hr|pr|rr|resp\w*|thorax|abdomen|abdo|chest(?!.*lead)|airflow|flow|nasal|"
    r"co2|etco2|o2|imp\w*|temp\w*|t\d+|cardiac output|co|sv|eeg\w*|eog\w*|emg\w*|pcg|phono\w*|scg|bcg|acc\w*|"
    r"gyro\w*|marker|event\w*|trigger|status|snore|position|pos|sound|light|gsr|eda|annotations?)"
    r"([\s_\-#:(\[].*)?$",
    re.IGNORECASE,
)
_EEG = re.compile(
    r"^((fp?[12z]|[cfopt][34z]|o[12]|t[3-6]|f[78])[-:](a[12]|m[12]|ref|cz)|fp[12z]|f[3478z]|[cpo]z|o[12])$",
    re.IGNORECASE,
)
_EEG_OR_CHEST = re.compile(r"^[ca][1-4]$", re.IGNORECASE)

_DEVICE = re.compile(
    r"(ecg )?(device|recorder|cart|electrocardiograph)( (name|model|type))?|manufacturer( ?model ?name)?|model",
    re.IGNORECASE,
)
MAX_DEVICE = 80  # characters


def mv_per_unit(unit: str) -> float | None:
    """Millivolts in one of this unit, None if it is no voltage.

    Case is ignored: a lead of megavolts is not met, one whose header shouts ``MV`` is.
    """
    key = unicodedata.normalize("NFKC", unit).strip().casefold().replace(" ", "")
    return _MV_PER_UNIT.get(_WORDS.get(key, key))


def given_unit(unit: str | None) -> str | None:
    """The unit the caller stated; UsageError unless it is a voltage."""
    if unit is not None and mv_per_unit(unit) is None:
        raise UsageError(f"units must be mV or uV (also V, nV), found {unit!r}")
    return unit


def is_ecg(name: str, unit: str | None) -> bool:
    """Whether a signal of this name and unit is an ECG lead, as far as these two can tell."""
    if unit is not None and mv_per_unit(unit) is None:
        return False
    bare = name.strip()
    return not (_OTHER.match(bare) or _EEG.match(bare))


def is_scalp_beside(name: str, names: Sequence[str]) -> bool:
    """Whether a name that scalp and chest electrodes share (``C3``) means the scalp, by the signals beside it."""
    return bool(_EEG_OR_CHEST.match(name.strip())) and any(
        _EEG.match(other.strip()) or other.casefold().startswith("eeg") for other in names
    )


def device_stated(pairs: Iterable[tuple[str, str]]) -> str | None:
    """The recorder among pairs of a header (``Device``, ``Recorder``, ``Model`` …: text), None if not stated.

    Only what is called so in as many words: free notes may hold names of people.
    """
    found = [
        " ".join(printable(text).split())[:MAX_DEVICE]
        for key, text in pairs
        if _DEVICE.fullmatch(key.strip())
    ]
    return " ".join(dict.fromkeys(filter(None, found)))[:MAX_DEVICE] or None
