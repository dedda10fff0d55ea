"""Signal quality as a WFDB annotation file (``.sgq``) with the standard code ``~`` (NOISE, 14).

The subtype holds the state from that sample on (annot(5) and ecgcodes.h of the WFDB library): -1 all signals
unreadable, else bit s for signal s noisy and bit 4 + s for signal s unreadable, s from 0 to 3. For
a signal beyond these the channel field names it, a text says its state, and the subtype repeats
the state of the first four, so that a program which knows no more is not misled.
"""

from __future__ import annotations

import tempfile
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import UsageError, WriteError
from sigguard.readers.wfdb_files import quiet_wfdb
from sigguard.segments import GRADES, Segments
from sigguard.writers.atomic import write_bytes_atomic

EXTENSION = "sgq"
CLEAN, NOISY, UNREADABLE = 0, 1, 2
STATE_WORDS = ("clean", "noisy", "unreadable")
IN_SUBTYPE = 4  # signals whose state the subtype can hold
MAX_TEXT = 200  # longer texts (from 256 bytes) would corrupt the file


@dataclass(frozen=True, slots=True)
class QualityMark:
    """One annotation: from this sample on this holds. ``subtype`` is the signed byte as stored."""

    sample: int
    subtype: int
    channel: int = 0
    text: str = ""


def write_quality_annotation(
    record_path: str | Path,
    segments: Segments,
    *,
    fs_hz: float,
    n_samples: int,
    channels: Sequence[int] | None = None,
    n_signals: int | None = None,
) -> Path:
    """Write ``NAME.sgq`` beside ``record_path`` (header, signal file or bare name); its path.

    A lead whose segment is graded ``all`` is clean, ``none`` unreadable, in between noisy. ``channels``
    are the numbers of the leads among all ``n_signals`` signals of the record (an open recording
    has both); by default the leads are all there is. Raises WriteError if it cannot be written.
    """
    numbers = tuple(range(len(segments.leads))) if channels is None else tuple(channels)
    if len(numbers) != len(segments.leads):
        raise UsageError(f"{len(numbers)} signal numbers for {len(segments.leads)} leads; the two must agree")
    marks = quality_marks(
        segments, fs_hz=fs_hz, n_samples=n_samples, channels=numbers, n_signals=n_signals or len(numbers)
    )
    path = Path(record_path)
    stem = path.stem if path.suffix in (".hea", ".dat", ".mat") else path.name
    return write_bytes_atomic(path.with_name(f"{stem}.{EXTENSION}"), _encoded(marks))


def quality_marks(
    segments: Segments, *, fs_hz: float, n_samples: int, channels: Sequence[int], n_signals: int
) -> list[QualityMark]:
    """The annotations for a table of segments: the state at its start and at each change after it."""
    starts, states = _states(segments, fs_hz=fs_hz, n_samples=n_samples)
    marks: list[QualityMark] = []
    before = np.full(len(segments.leads), -1)
    said = None
    for sample, state in zip(starts, states, strict=True):
        subtype = _subtype(state, channels, n_signals)
        if subtype != said:
            marks.append(QualityMark(int(sample), subtype))
        for lead, number in enumerate(channels):
            if number >= IN_SUBTYPE and state[lead] != max(before[lead], CLEAN):
                text = f"{segments.leads[lead]} {STATE_WORDS[state[lead]]}"
                marks.append(QualityMark(int(sample), subtype, number, _one_byte_text(text)))
        before, said = state, subtype
    return marks


def _states(
    segments: Segments, *, fs_hz: float, n_samples: int
) -> tuple[NDArray[np.int64], NDArray[np.int8]]:
    """(n_times,) samples at which any lead may change, and (n_times, n_leads) states from there on."""
    first = np.clip(np.rint(segments.start_s * fs_hz), 0, n_samples).astype(np.int64)
    last = np.clip(np.rint(segments.end_s * fs_hz), 0, n_samples).astype(np.int64)
    times = np.unique(np.concatenate([first, last[last < n_samples]]))
    times = times[times < n_samples]
    states = np.full((len(times), len(segments.leads)), CLEAN, dtype=np.int8)
    grade = segments.grade
    row_state = np.where(
        grade == GRADES.index("all"), CLEAN, np.where(grade == GRADES.index("none"), UNREADABLE, NOISY)
    )
    for lead, begin, end, state in zip(segments.lead_index, first, last, row_state, strict=True):
        here = slice(*np.searchsorted(times, (begin, end)))
        states[here, lead] = np.maximum(states[here, lead], state)
    return times, states


def _subtype(state: NDArray[np.int8], channels: Sequence[int], n_signals: int) -> int:
    """The state of all leads as the signed byte of the annotation."""
    if len(channels) == n_signals and (state == UNREADABLE).all():
        return -1
    value = 0
    for number, one in zip(channels, state, strict=True):
        if number < IN_SUBTYPE and one != CLEAN:
            value |= (1 if one == NOISY else 0x10) << number
    return value - 256 if value > 127 else value


def _one_byte_text(text: str) -> str:
    return text.encode("latin-1", errors="replace")[:MAX_TEXT].decode("latin-1")


def _encoded(marks: list[QualityMark]) -> bytes:
    """The marks as the bytes of an annotation file; two zero bytes are an empty one."""
    if not marks:
        return b"\0\0"
    with tempfile.TemporaryDirectory(prefix="sigguard-") as folder:
        try:
            with quiet_wfdb() as wfdb:
                wfdb.wrann(
                    "r",
                    EXTENSION,
                    sample=np.array([m.sample for m in marks], dtype=np.int64),
                    symbol=["~"] * len(marks),
                    subtype=np.array([m.subtype for m in marks]),
                    chan=np.array([m.channel for m in marks]),
                    aux_note=[m.text for m in marks],
                    write_dir=folder,
                )
            return Path(folder, f"r.{EXTENSION}").read_bytes()
        except (ValueError, TypeError, OSError) as err:
            raise WriteError(f"quality annotations could not be encoded ({err})") from err
