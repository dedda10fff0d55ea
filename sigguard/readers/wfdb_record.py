"""WFDB records: one segment or many, fixed or variable layout, read window by window.

Signals that are no ECG are left out and named. Where signals differ in rate, the highest rate of
an ECG lead counts and leads of a lower rate are left out and named: to repeat their samples would
put steps into them that look like noise.
"""

from __future__ import annotations

import bisect
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import NoECGLead, ReadError
from sigguard.leads import clean_name, normalise_leads
from sigguard.readers import base
from sigguard.readers.base import MAYBE, NO, YES, DigitalScale, OpenRecording, Reader, ReadOptions, read_error
from sigguard.readers.signals import device_stated, given_unit, is_ecg, mv_per_unit
from sigguard.readers.wfdb_files import SegmentFiles, inside_folder, without_samples
from sigguard.readers.wfdb_header import (
    DEFAULT_FS_HZ,
    DEFAULT_GAIN,
    NULL_SEGMENT,
    Header,
    SignalLine,
    looks_like_header,
    read_header,
)
from sigguard.recording import MAX_LEADS, RecordingInfo


def sniff(path: Path, head: bytes) -> int:
    """A header by its first lines; whatever is merely called one may be explained here."""
    if looks_like_header(head):
        return YES
    return MAYBE if path.suffix.casefold() == ".hea" else NO


@dataclass(frozen=True, slots=True)
class Piece:
    """Frames first to last come from ``files`` (None: a gap), lead k from signal ``source[k]`` (-1: none)."""

    first: int
    last: int
    files: SegmentFiles | None
    source: tuple[int, ...]


def open_wfdb(path: Path, options: ReadOptions) -> OpenRecording:
    """Open a record by its header file. Raises ReadError for all that cannot be read."""
    header = read_header(path)
    if header.n_signals == 0:
        raise read_error(
            kind=NoECGLead,
            file=str(path),
            where="record line",
            expected="at least one signal",
            found="a record of none (annotations only)",
            remedy="send the recording itself",
        )
    return _assemble(header, *pieces_of(header), options)


def pieces_of(header: Header) -> tuple[tuple[SignalLine, ...], list[Piece], list[Path]]:
    """Signals, pieces in order of time, and files of a record, of one segment or of many."""
    if header.is_multi:
        return _segments(header)
    files = SegmentFiles(header)
    everything = Piece(0, files.n_frames, files, tuple(range(len(header.signals))))
    return header.signals, [everything], [header.path, *files.paths.values()]


def _segments(header: Header) -> tuple[tuple[SignalLine, ...], list[Piece], list[Path]]:
    """Signals, pieces and files of a record of many segments.

    The first segment of length 0 is the layout of a record whose signals may come and go; else
    all segments must have the same signals in the same order.
    """
    layout: tuple[SignalLine, ...] | None = None
    opened: dict[str, SegmentFiles] = {}
    pieces: list[Piece] = []
    used: list[Path] = [header.path]
    at = 0
    for number, (name, length) in enumerate(header.segments):
        if name == NULL_SEGMENT:
            pieces.append(Piece(at, at + length, None, ()))
            at += length
            continue
        if name not in opened:
            path = inside_folder(header.path, f"{name}.hea")
            segment = _segment_header(header, path)
            used.append(path)
            if number == 0 and length == 0:
                layout = tuple(without_samples(s) for s in segment.signals)
                continue
            if segment.signals and all(s.fmt == 0 for s in segment.signals):  # another way to write a gap
                pieces.append(Piece(at, at + length, None, ()))
                at += length
                continue
            opened[name] = SegmentFiles(segment, min_frames=length)
            used += opened[name].paths.values()
        if length > opened[name].n_frames:
            raise _trouble(header, f"segment {name}", f"{length} samples", f"{opened[name].n_frames}")
        pieces.append(Piece(at, at + length, opened[name], ()))
        at += length
    signals = layout if layout is not None else next((p.files.signals for p in pieces if p.files), ())
    if not signals or header.n_signals != len(signals):
        raise _trouble(header, "segments", f"{header.n_signals} signals in the segments", str(len(signals)))
    if header.n_frames not in (None, at):
        raise _trouble(header, "segment lines", f"lengths that add up to {header.n_frames}", str(at))
    _check_gaps(header, pieces)
    return signals, [_matched(header, p, signals, variable=layout is not None) for p in pieces], used


def _segment_header(master: Header, path: Path) -> Header:
    segment = read_header(path)
    if segment.is_multi:
        raise _trouble(
            master, f"segment {path.stem}", "a segment of one piece", "a record of several segments"
        )
    if segment.fs_hz is not None and master.fs_hz is not None and segment.fs_hz != master.fs_hz:
        raise _trouble(master, f"segment {path.stem}", f"{master.fs_hz:g} Hz", f"{segment.fs_hz:g} Hz")
    return segment


def _matched(header: Header, piece: Piece, signals: tuple[SignalLine, ...], *, variable: bool) -> Piece:
    """The piece with its signals put to those of the whole: by name where the layout is variable."""
    if piece.files is None:
        return piece
    own = piece.files.signals
    if variable:
        names = [s.name for s in own]
        source = tuple(names.index(s.name) if s.name in names else -1 for s in signals)
    else:
        source = tuple(range(len(own)))
        if [s.name for s in own] != [s.name for s in signals]:
            raise _trouble(
                header,
                f"segment {piece.files.header.path.stem}",
                "the signals of the first segment",
                "other signals",
            )
    volts = [
        (mv_per_unit(own[k].unit or "mV") is None, mv_per_unit(s.unit or "mV") is None)
        for k, s in zip(source, signals, strict=True)
        if k >= 0
    ]
    if any(here != whole for here, whole in volts):
        raise _trouble(
            header,
            f"segment {piece.files.header.path.stem}",
            "units as in the whole record",
            "units of another kind",
        )
    if any(k >= 0 and own[k].per_frame != s.per_frame for k, s in zip(source, signals, strict=True)):
        raise _trouble(
            header, f"segment {piece.files.header.path.stem}", "one rate for each signal", "another rate"
        )
    return Piece(piece.first, piece.last, piece.files, source)


def _check_gaps(header: Header, pieces: list[Piece]) -> None:
    """A few lines of text can claim any length: it must be in proportion to what is stored."""
    total = pieces[-1].last if pieces else 0
    stored = sum(files.n_frames for files in {id(p.files): p.files for p in pieces if p.files}.values())
    factor, spare_s = base.GAP_LIMIT
    if total - stored > factor * stored + spare_s * (header.fs_hz or DEFAULT_FS_HZ):
        raise _trouble(
            header,
            "segment lines",
            f"gaps of at most {factor} times the recorded part",
            f"{total} samples where {stored} are stored",
        )


def _assemble(
    header: Header,
    signals: tuple[SignalLine, ...],
    pieces: list[Piece],
    files_used: list[Path],
    options: ReadOptions,
) -> OpenRecording:
    file = str(header.path)
    assumed: list[str] = []
    unit = given_unit(options.units)
    names = [clean_name(s.name or "") or f"signal {k + 1}" for k, s in enumerate(signals)]
    frame_hz = _frame_rate(header, options, assumed)
    chosen, left_out = _choose(header, signals, names, frame_hz)
    per_frame = signals[chosen[0]].per_frame
    fs_hz = base.check_rate(frame_hz * per_frame, file, "record line")
    n_samples = base.check_length(
        (pieces[-1].last if pieces else 0) * per_frame, file, "length of the signals"
    )
    leads = normalise_leads([names[k] for k in chosen])
    picked = [
        Piece(p.first, p.last, p.files, tuple(p.source[k] for k in chosen) if p.files else ()) for p in pieces
    ]
    scales = _scales(picked, len(chosen), unit)
    assumed += _assumptions([signals[k] for k in chosen], leads, pieces, unit)
    steps = scales if scales is not None else _widest(picked, len(chosen), unit)
    info = RecordingInfo(
        name=header.path.stem,
        leads=leads,
        fs_hz=fs_hz,
        n_samples=n_samples,
        path=file,
        format="WFDB",
        sha256=base.sha256_of(files_used) if options.with_sha256 else None,
        start_time=header.start_time,
        rails_mv=base.rails_mv(steps),
        step_mv=np.array([abs(s.step_mv) for s in steps]),
        assumed=tuple(assumed),
        left_out=tuple(left_out),
        device=device_stated((key, text) for key, _, text in (n.partition(":") for n in header.notes)),
        identity=tuple(("note", base.printable(note)) for note in header.notes)
        if options.with_identity
        else (),
    )
    return OpenWfdb(info, picked, per_frame, unit, scales, channels=tuple(chosen), n_signals=len(signals))


def _frame_rate(header: Header, options: ReadOptions, assumed: list[str]) -> float:
    if header.fs_hz is not None:
        if not header.fs_hz > 0:
            raise _trouble(header, "record line", "a sampling rate above 0 Hz", f"{header.fs_hz:g} Hz")
        assumed += base.stated_rate_wins(header.fs_hz, options.fs_hz)
        return header.fs_hz
    if options.fs_hz is not None:
        return base.check_rate(options.fs_hz, str(header.path), "rate given")
    assumed.append(
        f"The header states no sampling rate; {DEFAULT_FS_HZ:g} Hz was taken, the default of the format."
    )
    return DEFAULT_FS_HZ


def _choose(
    header: Header, signals: tuple[SignalLine, ...], names: list[str], frame_hz: float
) -> tuple[list[int], list[str]]:
    """Numbers of the ECG leads of the highest rate, and the names of all that is left out."""
    ecg = [k for k, s in enumerate(signals) if is_ecg(names[k], s.unit)]
    if not ecg:
        found = ", ".join(
            f"{n} ({base.printable(s.unit or 'no unit')})" for n, s in zip(names, signals, strict=True)
        )
        raise read_error(
            kind=NoECGLead,
            file=str(header.path),
            where="signal lines",
            expected="at least one ECG lead in V, mV or uV",
            found=found[:200],
            remedy="send a recording that holds an ECG, or correct names and units in the header",
        )
    top = max(signals[k].per_frame for k in ecg)
    chosen = [k for k in ecg if signals[k].per_frame == top]
    slower = {
        k: f"{names[k]} ({frame_hz * signals[k].per_frame:g} Hz beside {frame_hz * top:g} Hz)" for k in ecg
    }
    left_out = [slower.get(k, names[k]) for k in range(len(signals)) if k not in chosen]
    if len(chosen) > MAX_LEADS:
        raise _trouble(header, "signal lines", f"at most {MAX_LEADS} ECG leads", str(len(chosen)))
    return chosen, left_out


def _all_scales(pieces: list[Piece], lead: int, unit: str | None) -> list[DigitalScale]:
    held = [(p.files, p.source[lead]) for p in pieces if p.files is not None and p.source[lead] >= 0]
    return [files.scale(channel, unit) for files, channel in dict.fromkeys(held)]


def _scales(pieces: list[Piece], n_leads: int, unit: str | None) -> tuple[DigitalScale, ...] | None:
    """One scale for each lead where it holds over all pieces, else None."""
    scales = [set(_all_scales(pieces, lead, unit)) for lead in range(n_leads)]
    return tuple(one.pop() for one in scales) if all(len(one) == 1 for one in scales) else None


def _widest(pieces: list[Piece], n_leads: int, unit: str | None) -> tuple[DigitalScale, ...]:
    """For each lead the scale of the coarsest step met; a lead met nowhere gets the default one."""
    default = DigitalScale(1.0 / DEFAULT_GAIN, 0.0, -(1 << 15) + 1, (1 << 15) - 1, -(1 << 15))
    return tuple(
        max(_all_scales(pieces, lead, unit), key=lambda s: abs(s.step_mv), default=default)
        for lead in range(n_leads)
    )


def _assumptions(
    signals: list[SignalLine], leads: tuple[str, ...], pieces: list[Piece], unit: str | None
) -> list[str]:
    """Plain sentences on gain, unit, name and length that the header does not state."""
    out = []
    if which := [n for n, s in zip(leads, signals, strict=True) if s.gain is None]:
        out.append(f"No gain is stated for {', '.join(which)}; {DEFAULT_GAIN:g} steps per mV were taken.")
    if which := [n for n, s in zip(leads, signals, strict=True) if s.unit is None]:
        out.append(f"No unit is stated for {', '.join(which)}; {unit or 'mV'} was taken.")
    if which := [n for n, s in zip(leads, signals, strict=True) if not clean_name(s.name or "")]:
        out.append(f"No name is stated for {', '.join(which)}; taken for an ECG lead.")
    plain = [p.files for p in pieces if p.files is not None]
    if any(not files.length_stated for files in plain):
        out.append("The header states no length; it was taken from the size of the signal file.")
    if len(pieces) == 1 and plain and plain[0].surplus > 2:
        out.append(
            f"The signal file holds {plain[0].surplus} more samples than the header says; they were not read."
        )
    return out


class OpenWfdb(OpenRecording):
    """An open WFDB record; see OpenRecording."""

    def __init__(
        self,
        info: RecordingInfo,
        pieces: list[Piece],
        per_frame: int,
        unit: str | None,
        scales: tuple[DigitalScale, ...] | None,
        *,
        channels: tuple[int, ...],
        n_signals: int,
    ) -> None:
        super().__init__(info, scales=scales, channels=channels, n_signals=n_signals)
        self._pieces, self._per_frame, self._unit = pieces, per_frame, unit
        self.samples_per_frame = per_frame
        self._lasts = [piece.last for piece in pieces]

    def _read_mv(self, start: int, stop: int) -> NDArray[np.float64]:
        out = np.full((self.info.n_leads, stop - start), np.nan)
        for lead, into, steps, scale in self._windows(start, stop):
            out[lead, into] = base.to_mv(steps[np.newaxis], (scale,))[0]
        return out

    def _read_digits(self, start: int, stop: int) -> NDArray[np.int64]:
        assert self.scales is not None
        missing = np.array([s.missing for s in self.scales], dtype=np.int64)
        out = np.repeat(missing[:, np.newaxis], stop - start, axis=1)
        for lead, into, steps, _ in self._windows(start, stop):
            out[lead, into] = steps
        return out

    def _windows(self, start: int, stop: int) -> Iterator[tuple[int, slice, NDArray[np.int64], DigitalScale]]:
        """(lead, slice of the window, steps, scale) for all that is stored between start and stop."""
        p = self._per_frame
        for k in range(bisect.bisect_right(self._lasts, start // p), len(self._pieces)):
            piece = self._pieces[k]
            if piece.first * p >= stop:
                break
            begin, end = max(start, piece.first * p), min(stop, piece.last * p)
            if begin >= end or piece.files is None:
                continue
            first, last = begin // p - piece.first, -(-end // p) - piece.first
            leads = [k for k, channel in enumerate(piece.source) if channel >= 0]
            channels = tuple(piece.source[k] for k in leads)
            if not channels:
                continue
            crop = begin - (piece.first + first) * p
            for lead, channel, steps in zip(
                leads, channels, piece.files.read(channels, first, last), strict=True
            ):
                into = slice(begin - start, end - start)
                yield lead, into, steps[crop : crop + end - begin], piece.files.scale(channel, self._unit)

    def close(self) -> None:
        for piece in self._pieces:
            if piece.files is not None:
                piece.files.close()


def _trouble(header: Header, where: str, expected: str, found: str) -> ReadError:
    return read_error(
        str(header.path), where=where, expected=expected, found=found, remedy="correct the header"
    )


READER = Reader("WFDB", sniff, open_wfdb)
