"""Signal quality as a WFDB annotation file (``.sgq``) with the standard code ``~`` (NOISE, 14).

The subtype holds the state from that sample on (annot(5) and ecgcodes.h of the WFDB library): -1 all signals
unreadable, else bit s for signal s noisy and bit 4 + s for signal s unreadable, s from 0 to 3. For
a signal beyond these the channel field names it, a text says its state, and the subtype repeats
the state of the first four, so that a program which knows no more is not misled.

What may be a lethal rhythm is neither noise nor unreadable: no such mark lies on a segment that a patient-first
stretch touches. The stretch itself is told by a comment (NOTE, 22) where it begins and where it ends.
"""

from __future__ import annotations

import tempfile
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import UsageError, WriteError
from sigguard.findings import PatientFirst, under_alarm
from sigguard.patient_first import join_to_at_most
from sigguard.readers.wfdb_files import quiet_wfdb
from sigguard.segments import GRADES, Segments
from sigguard.writers.atomic import write_bytes_atomic

EXTENSION = "sgq"
CLEAN, NOISY, UNREADABLE = 0, 1, 2
States = NDArray[np.int8]
STATE_WORDS = ("clean", "noisy", "unreadable")
IN_SUBTYPE = 4  # signals whose state the subtype can hold
ALL = GRADES.index("all")
NOTE = '"'  # the comment annotation of WFDB
MAX_MARKS = 20_000  # more are told in longer steps, each at its worst
COARSE_S = 10.0  # the first of these steps
MAX_NOTES = 500  # patient-first stretches told one by one
MAX_TEXT = 200  # longer texts (from 256 bytes) would corrupt the file


@dataclass(frozen=True, slots=True)
class QualityMark:
    """One annotation: from this sample on this holds. ``subtype`` is the signed byte as stored."""

    sample: int
    subtype: int
    channel: int = 0
    text: str = ""
    symbol: str = "~"


def write_quality_annotation(
    record_path: str | Path,
    segments: Segments,
    *,
    fs_hz: float,
    n_samples: int,
    channels: Sequence[int] | None = None,
    n_signals: int | None = None,
    patient_first: Sequence[PatientFirst] = (),
    samples_per_frame: int = 1,
) -> Path:
    """Write ``NAME.sgq`` beside ``record_path`` (header, signal file or bare name); its path.

    A lead whose segment is graded ``all`` is clean, ``none`` unreadable, in between noisy; where the table knows
    when within the segment its faults lie, these seconds alone. ``channels`` are the numbers of the leads among
    all ``n_signals`` signals of the record (an open recording has both); by default the leads are all there is.
    Where the leads have ``samples_per_frame`` samples in a frame of the record, time is counted in frames, as
    programs that read annotations do. Raises WriteError if it cannot be written.
    """
    numbers = tuple(range(len(segments.leads))) if channels is None else tuple(channels)
    if len(numbers) != len(segments.leads):
        raise UsageError(f"{len(numbers)} signal numbers for {len(segments.leads)} leads; the two must agree")
    marks = quality_marks(
        segments,
        fs_hz=fs_hz / samples_per_frame,
        n_samples=n_samples // samples_per_frame,
        channels=numbers,
        n_signals=n_signals or len(numbers),
        patient_first=patient_first,
    )
    path = Path(record_path)
    stem = path.stem if path.suffix in (".hea", ".dat", ".mat") else path.name
    return write_bytes_atomic(path.with_name(f"{stem}.{EXTENSION}"), _encoded(marks))


def quality_marks(
    segments: Segments,
    *,
    fs_hz: float,
    n_samples: int,
    channels: Sequence[int],
    n_signals: int,
    patient_first: Sequence[PatientFirst] = (),
) -> list[QualityMark]:
    """The annotations for a table of segments: the state at its start and at each change after it.

    Never more than MAX_MARKS for quality: where there would be, time is first taken in steps of 10 s, 20 s,
    40 s ..., each at the worst state within it.
    """
    if not len(segments):
        return _notes(patient_first, fs_hz, n_samples)
    clear = _untouchable(segments, patient_first, fs_hz, n_samples)
    fine = _states(segments, fs_hz=fs_hz, n_samples=n_samples)
    starts, states = _cleared(*fine, clear, n_samples)
    step = COARSE_S * fs_hz
    far = np.array([channel >= IN_SUBTYPE for channel in channels])
    while _at_most(states, far) > MAX_MARKS:
        starts, states = _cleared(*_in_steps(*fine, step, n_samples), clear, n_samples)
        step *= 2
    marks = _changes(segments.leads, starts, states, channels, n_signals)
    return sorted(marks + _notes(patient_first, fs_hz, n_samples), key=lambda m: (m.sample, m.channel))


def _at_most(states: States, far: NDArray[np.bool_]) -> int:
    """How many marks these states need at most; ``far`` (n_leads,): leads told one by one."""
    changed = states[1:] != states[:-1]
    return int(len(far) + 1 + changed.any(axis=1).sum() + changed[:, far].sum())


def _changes(
    leads: Sequence[str], starts: NDArray[np.int64], states: States, channels: Sequence[int], n_signals: int
) -> list[QualityMark]:
    """The marks for states that hold from each of ``starts`` on."""
    marks: list[QualityMark] = []
    before = np.full(len(leads), CLEAN, dtype=np.int8)
    said = None
    changed = np.ones(len(starts), dtype=bool)
    changed[1:] = (states[1:] != states[:-1]).any(axis=1)
    for k in np.flatnonzero(changed).tolist():
        sample, state = int(starts[k]), states[k]
        subtype = _subtype(state, channels, n_signals)
        if subtype != said:
            marks.append(QualityMark(sample, subtype))
        for lead in np.flatnonzero(state != before).tolist():
            if channels[lead] >= IN_SUBTYPE:
                text = f"{leads[lead]} {STATE_WORDS[state[lead]]}"
                marks.append(QualityMark(sample, subtype, channels[lead], _one_byte_text(text)))
        before, said = state, subtype
    return marks


def _notes(patient_first: Sequence[PatientFirst], fs_hz: float, n_samples: int) -> list[QualityMark]:
    """Comments at the beginning and the end of each patient-first stretch."""
    notes = []
    for alarm in join_to_at_most(patient_first, MAX_NOTES):
        first, last = round(alarm.start_s * fs_hz), round(alarm.end_s * fs_hz)
        text = _one_byte_text(f"PATIENT FIRST, {alarm.pattern} begins: {', '.join(alarm.leads)}")
        notes.append(QualityMark(min(first, max(n_samples - 1, 0)), 0, 0, text, NOTE))
        if last < n_samples:
            notes.append(QualityMark(last, 0, 0, f"PATIENT FIRST, {alarm.pattern} ends", NOTE))
    return notes


# ── the state of each lead over time ──


def _states(segments: Segments, *, fs_hz: float, n_samples: int) -> tuple[NDArray[np.int64], States]:
    """(n_times,) samples at which any lead may change, and (n_times, n_leads) states from there on."""
    lead, first_s, last_s, state = _spoilt(segments)
    first, last = _sample(first_s, fs_hz, n_samples), _sample(last_s, fs_hz, n_samples)
    bounds = [_sample(segments.start_s, fs_hz, n_samples), _sample(segments.end_s, fs_hz, n_samples)]
    times = np.unique(np.concatenate([first, last, bounds[0].min(keepdims=True), bounds[1]]))
    times = times[times < n_samples]
    states = np.full((len(times), len(segments.leads)), CLEAN, dtype=np.int8)
    for k in range(len(segments.leads)):
        mine = np.flatnonzero(lead == k)
        if len(mine):
            mine = mine[np.argsort(first[mine], kind="stable")]
            at = np.maximum(np.searchsorted(first[mine], times, side="right") - 1, 0)
            inside = (first[mine[at]] <= times) & (times < last[mine[at]])
            states[:, k] = np.where(inside, state[mine[at]], CLEAN)
    return times, states


def _spoilt(
    segments: Segments,
) -> tuple[NDArray[np.intp], NDArray[np.float64], NDArray[np.float64], NDArray[np.int8]]:
    """Lead, start_s, end_s and state of each stretch that is not clean; those of one lead do not overlap.

    Within a segment the windows count on which a fault lies that takes a measurement there; where none does,
    those of any fault; where no fault is called or its time is not known, the whole segment.
    """
    rows = np.flatnonzero(segments.grade != ALL)
    length_s = (segments.end_s - segments.start_s)[rows]
    if segments.details is None or not len(rows):
        row, count = np.arange(len(rows)), np.ones(len(rows))
        first, last = np.zeros(len(rows), dtype=np.intp), np.ones(len(rows), dtype=np.intp)
    else:
        details = segments.details
        count = details.n_windows[rows].astype(np.float64)
        called = segments.fault[rows] > 0
        takes = details.harms[rows].any(axis=2) & called
        counted = np.where(takes.any(axis=1, keepdims=True), takes, called)
        bits = np.bitwise_or.reduce(np.where(counted, details.windows[rows], np.uint64(0)), axis=1)
        place = np.arange(int(count.max()))
        within = place < count[:, None]
        on = ((bits[:, None] >> place.astype(np.uint64)) & np.uint64(1)).astype(bool) & within
        on[:, 1:-1] |= on[:, :-2] & on[:, 2:]  # a pause of one window only chops
        on |= ~on.any(axis=1, keepdims=True) & within
        edge = np.diff(np.pad(on, ((0, 0), (1, 1))).astype(np.int8), axis=1)
        (row, first), last = np.nonzero(edge > 0), np.nonzero(edge < 0)[1]
    width = (length_s / np.maximum(count, 1.0))[row]
    start_s = segments.start_s[rows][row]
    state = np.where(segments.grade[rows][row] == GRADES.index("none"), UNREADABLE, NOISY).astype(np.int8)
    lead = segments.lead_index[rows][row].astype(np.intp)
    return lead, start_s + first * width, start_s + last * width, state


def _sample(t_s: NDArray[np.float64], fs_hz: float, n_samples: int) -> NDArray[np.int64]:
    return np.clip(np.rint(t_s * fs_hz), 0, n_samples).astype(np.int64)


def _untouchable(
    segments: Segments, alarms: Sequence[PatientFirst], fs_hz: float, n_samples: int
) -> list[tuple[int, int]]:
    """(first, last) samples, apart and in order, that lie under a patient-first stretch or in a segment one touches."""
    if not alarms:
        return []
    rows = under_alarm(alarms, segments.start_s, segments.end_s)
    first_s = np.concatenate([segments.start_s[rows], [a.start_s for a in alarms]])
    last_s = np.concatenate([segments.end_s[rows], [a.end_s for a in alarms]])
    out: list[tuple[int, int]] = []
    pairs = zip(
        _sample(first_s, fs_hz, n_samples).tolist(), _sample(last_s, fs_hz, n_samples).tolist(), strict=True
    )
    for first, last in sorted(set(pairs)):
        if out and first <= out[-1][1]:
            out[-1] = (out[-1][0], max(out[-1][1], last))
        elif last > first:
            out.append((first, last))
    return out


def _cleared(
    times: NDArray[np.int64], states: States, clear: Sequence[tuple[int, int]], n_samples: int
) -> tuple[NDArray[np.int64], States]:
    """The states with nothing marked from first to last of each of ``clear``."""
    if not clear or not len(times):
        return times, states
    edges = np.array([edge for pair in clear for edge in pair], dtype=np.int64)
    every = np.union1d(times, edges[(edges > times[0]) & (edges < n_samples)])
    out = states[np.searchsorted(times, every, side="right") - 1]
    out[np.searchsorted(edges, every, side="right") % 2 == 1] = CLEAN
    return every, out


def _in_steps(
    times: NDArray[np.int64], states: States, step: float, n_samples: int
) -> tuple[NDArray[np.int64], States]:
    """The worst state of each lead within equal steps (in samples) from the first time on."""
    edges = np.unique(np.rint(np.arange(times[0], n_samples, step)).astype(np.int64))
    first = np.searchsorted(times, edges, side="right") - 1
    last = np.searchsorted(times, np.append(edges[1:], n_samples), side="left") - 1
    out = np.maximum.reduceat(states, first, axis=0)
    return edges, np.maximum(out, states[np.maximum(last, first)])


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
                    symbol=[m.symbol for m in marks],
                    subtype=np.array([m.subtype for m in marks]),
                    chan=np.array([m.channel for m in marks]),
                    aux_note=[m.text for m in marks],
                    write_dir=folder,
                )
            return Path(folder, f"r.{EXTENSION}").read_bytes()
        except (ValueError, TypeError, OSError) as err:
            raise WriteError(f"quality annotations could not be encoded ({err})") from err
