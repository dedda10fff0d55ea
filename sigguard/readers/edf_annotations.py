"""The annotation signals of EDF+ and BDF+: lists of times and texts, which also say when each record began."""

from __future__ import annotations

import re
from dataclasses import dataclass

_ONSET = re.compile(rb"([+-][0-9]{1,12}(?:\.[0-9]{0,12})?)(?:\x15([0-9]{0,12}(?:\.[0-9]{0,12})?))?\x14")


@dataclass(frozen=True, slots=True)
class Annotation:
    """A text at a time, s from the first sample; ``duration_s`` is None where none is stated.

    The text is what somebody typed: it may name people and goes into no output by itself.
    """

    start_s: float
    duration_s: float | None
    text: str


def record_start(stored: bytes) -> float | None:
    """When a data record began, s from the start time of the header, by the bytes of its first annotation
    signal; None where they do not say."""
    found = _ONSET.match(stored)
    return float(found[1]) if found else None


def annotations_in(stored: bytes, *, zero_s: float, keeps_time: bool) -> list[Annotation]:
    """Annotations in the bytes of one annotation signal of one data record.

    ``zero_s`` is when the first record began. The empty text by which the first signal
    ``keeps_time`` is no annotation. What does not follow the format is passed over.
    """
    out = []
    for number, part in enumerate(stored.split(b"\0")):
        found = _ONSET.match(part)
        if not found:
            continue
        texts = part[found.end() :].split(b"\x14")[:-1]
        if number == 0 and keeps_time and texts and not texts[0]:
            texts = texts[1:]
        duration = found[2] if found[2] and found[2] != b"." else None
        out += [
            Annotation(
                float(found[1]) - zero_s,
                None if duration is None else float(duration),
                text.decode("utf-8", "replace"),
            )
            for text in texts
        ]
    return out
