"""EDF, EDF+ and BDF: leads of the highest ECG rate, read block by block; gaps of discontinuous files are missing.

Only what the header says about calibration is believed, and only where it can be: a lead whose
limits are no numbers is an error, a signal that is no ECG is left out and named.
"""

from __future__ import annotations

import bisect
import math
import re
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import NoECGLead, ReadError
from sigguard.leads import LEAD_OF_CODE, clean_name, normalise_lead, normalise_leads
from sigguard.readers import base
from sigguard.readers.base import MAYBE, NO, YES, DigitalScale, OpenRecording, Reader, ReadOptions, read_error
from sigguard.readers.edf_annotations import Annotation, annotations_in, record_start
from sigguard.readers.edf_header import BDF_MAGIC, EDF_MAGIC, EdfHeader, EdfSignal, read_header, trouble
from sigguard.readers.signals import given_unit, is_ecg, is_scalp_beside, mv_per_unit
from sigguard.recording import MAX_LEADS, RecordingInfo

_BLOCK_BYTES = 4 << 20
# the format wants the kind of a signal before its name: where ECG is marked so, other voltages are something else
_MARKED = re.compile(r"(ecg|ekg)", re.IGNORECASE)
_KNOWN = {*LEAD_OF_CODE.values(), "MLI", "MLII", "MLIII"}
_OVERLAP = 0.01  # of a record, by which rounded times may make it begin before the last one ended


def sniff(path: Path, head: bytes) -> int:
    """The mark at the start, and a header length of 256 bytes a signal and 256 more."""
    if head[:8] not in (EDF_MAGIC, BDF_MAGIC):
        return NO
    length = head[184:192].strip()
    return YES if length.isdigit() and int(length) >= 512 and int(length) % 256 == 0 else MAYBE


@dataclass(frozen=True, slots=True)
class _Run:
    """Data records that follow each other without a gap: the first one's number and sample, how many."""

    record: int
    sample: int
    n_records: int


def open_edf(path: Path, options: ReadOptions) -> OpenRecording:
    """Open an EDF or BDF file. Raises ReadError for all that cannot be read."""
    header = read_header(path)
    unit = given_unit(options.units)
    names = [clean_name(s.label) or f"signal {k + 1}" for k, s in enumerate(header.signals)]
    chosen, left_out = _choose(header, names, unit)
    signals = [header.signals[k] for k in chosen]
    if not header.record_s > 0:
        raise trouble(path, "duration of a data record", "more than 0 s", f"{header.record_s:g} s")
    per_record = signals[0].per_record
    fs_hz = base.check_rate(_rate(header, signals[0]), str(path), "samples per data record")
    assumed = base.stated_rate_wins(fs_hz, options.fs_hz)
    leads = normalise_leads([names[k] for k in chosen])
    if which := [lead for lead, s in zip(leads, signals, strict=True) if not s.unit]:
        assumed.append(f"No unit is stated for {', '.join(which)}; {unit} was taken, as given.")
    if not header.length_stated:
        assumed.append("The header does not say how long the recording is; taken from the size of the file.")
    elif header.surplus:
        assumed.append(
            f"The file holds {header.surplus} more bytes than the header says; they were not read."
        )
    scales = tuple(_scale(header, s, name, unit) for s, name in zip(signals, leads, strict=True))
    zero_s, runs = _runs(header, per_record, fs_hz, assumed)
    n_samples = runs[-1].sample + runs[-1].n_records * per_record if runs else 0
    band = np.array([s.band_hz for s in signals])
    info = RecordingInfo(
        name=path.stem,
        leads=leads,
        fs_hz=fs_hz,
        n_samples=base.check_length(n_samples, str(path), "number of data records"),
        path=str(path),
        format=header.format,
        sha256=base.sha256_of([path]) if options.with_sha256 else None,
        start_time=_later(header, zero_s),
        rails_mv=base.rails_mv(scales),
        step_mv=np.array([abs(s.step_mv) for s in scales]),
        band_hz=band if np.isfinite(band).any() else None,
        assumed=tuple(assumed),
        left_out=tuple(left_out),
        identity=_identity(header) if options.with_identity else (),
    )
    return OpenEdf(info, header, runs, zero_s, scales=scales, channels=tuple(chosen))


def _rate(header: EdfHeader, signal: EdfSignal) -> float:
    """Samples per second, freed of the last bits of the division (50 samples in 0.1 s are 500 Hz)."""
    return float(f"{signal.per_record / header.record_s:.12g}") if header.record_s > 0 else math.nan


def _choose(header: EdfHeader, names: list[str], unit: str | None) -> tuple[list[int], list[str]]:
    """Numbers of the ECG leads of the highest rate, and in words what is left out."""
    signals = header.signals
    why: dict[int, str] = {}
    marked = any(_MARKED.match(name) for name in names)
    for k, signal in enumerate(signals):
        if signal.is_annotation:
            why[k] = ""
        elif not is_ecg(names[k], signal.unit or None) or is_scalp_beside(names[k], names):
            why[k] = names[k]
        elif marked and not _MARKED.match(names[k]) and normalise_lead(names[k]) not in _KNOWN:
            why[k] = f"{names[k]} (not marked as ECG)"
        elif not signal.unit and unit is None:
            why[k] = f"{names[k]} (no unit stated)"
        elif not signal.per_record:
            why[k] = f"{names[k]} (no samples)"
    ecg = [k for k in range(len(signals)) if k not in why]
    if not ecg:
        said = (f"{names[k]} ({signals[k].unit or 'no unit'})" for k in why if why[k])
        raise read_error(
            kind=NoECGLead,
            file=str(header.path),
            where="signals",
            expected="at least one ECG lead in V, mV or uV",
            found=", ".join(said) or "annotations only",
            remedy="send a recording that holds an ECG; where no unit is stated, state it",
        )
    top = max(signals[k].per_record for k in ecg)
    for k in ecg:
        if signals[k].per_record < top:
            rate, best = _rate(header, signals[k]), top / header.record_s if header.record_s else math.nan
            why[k] = f"{names[k]} ({rate:g} Hz beside {best:g} Hz)"
    chosen = [k for k in ecg if k not in why]
    if len(chosen) > MAX_LEADS:
        raise trouble(header.path, "signals", f"at most {MAX_LEADS} ECG leads", str(len(chosen)))
    return chosen, [base.printable(why[k]) for k in sorted(why) if why[k]]


def _scale(header: EdfHeader, signal: EdfSignal, name: str, unit: str | None) -> DigitalScale:
    """Steps to mV by the two pairs of limits; a lead that falls as its steps rise is allowed."""
    half = 1 << (8 * header.width - 1)
    (d_low, d_high), (p_low, p_high) = signal.digital, signal.physical
    where = f"digital limits of {name}"
    if not (-half <= d_low < d_high < half and d_low.is_integer() and d_high.is_integer()):
        expected = f"two whole numbers from {-half} to {half - 1}, the lower first"
        raise trouble(header.path, where, expected, f"{d_low:g} and {d_high:g}")
    per_step = (p_high - p_low) / (d_high - d_low)
    if not 1e-12 < abs(per_step) < 1e12:  # also where a limit is no number
        where = f"physical limits of {name}"
        raise trouble(header.path, where, "two differing numbers", f"{p_low:g} and {p_high:g}")
    factor = mv_per_unit(signal.unit or unit or "") or 1.0
    return DigitalScale(
        per_step * factor, d_low - p_low / per_step, int(d_low), int(d_high), missing=-half - 1
    )


def _runs(
    header: EdfHeader, per_record: int, fs_hz: float, assumed: list[str]
) -> tuple[float, tuple[_Run, ...]]:
    """When the first record began, s after the header's start time, and the records without gaps between."""
    keeper = next((s for s in header.signals if s.is_annotation and header.plus), None)
    if not header.n_records or keeper is None:
        if header.discontinuous:
            raise trouble(header.path, "signals", "an annotation signal that keeps the time", "none")
        return 0.0, (_Run(0, 0, header.n_records),) if header.n_records else ()
    if not header.discontinuous:
        with_first = next(_stored(header, 0, 1))[1]
        start = record_start(with_first[0, keeper.offset : keeper.offset + keeper.n_bytes].tobytes())
        return (start if start is not None and 0 <= start < 1 else 0.0), (_Run(0, 0, header.n_records),)
    starts_s = np.empty(header.n_records)
    for first, block in _stored(header, 0, header.n_records):
        for k, row in enumerate(block[:, keeper.offset : keeper.offset + keeper.n_bytes], start=first):
            start = record_start(row.tobytes())
            if start is None:
                raise trouble(header.path, f"data record {k + 1}", "the time at which it begins", "none")
            starts_s[k] = start
    zero_s = float(starts_s[0])
    runs = _joined(header, np.rint((starts_s - zero_s) * fs_hz), per_record, fs_hz)
    if len(runs) > 1:
        assumed.append(f"The recording has {len(runs) - 1} gaps; they count as missing.")
    return zero_s, runs


def _joined(
    header: EdfHeader, starts: NDArray[np.float64], per_record: int, fs_hz: float
) -> tuple[_Run, ...]:
    """Records whose stated first samples (n_records,) follow each other within a sample as one run."""
    factor, spare_s = base.GAP_LIMIT
    longest = (factor + 1) * len(starts) * per_record + spare_s * fs_hz
    if starts.max() > longest:
        raise trouble(
            header.path,
            "times of the data records",
            f"gaps of at most {factor} times the recorded part and {spare_s:g} s",
            f"a recording of {starts.max() / fs_hz:g} s of which {len(starts) * per_record / fs_hz:g} s are held",
            "split the recording",
        )
    runs: list[_Run] = []
    first, sample = 0, 0
    for k in range(1, len(starts)):
        expected = sample + (k - first) * per_record
        late = starts[k] - expected
        if late < -max(1.0, _OVERLAP * per_record):
            found = "one that begins before the last has ended"
            raise trouble(header.path, f"data record {k + 1}", "records in the order of their times", found)
        if late > 1.0:
            runs.append(_Run(first, sample, k - first))
            first, sample = k, int(starts[k])
    return (*runs, _Run(first, sample, len(starts) - first))


def _stored(header: EdfHeader, first: int, last: int) -> Iterator[tuple[int, NDArray[np.uint8]]]:
    """(first record, its bytes and those of the next as (n, record_bytes)) of records first to last, in blocks."""
    per_block = max(1, _BLOCK_BYTES // header.record_bytes)
    with header.path.open("rb") as file:
        for k in range(first, last, per_block):
            n = min(per_block, last - k)
            file.seek(header.n_bytes + k * header.record_bytes)
            stored = file.read(n * header.record_bytes)
            if len(stored) < n * header.record_bytes:
                raise _changed(header)
            yield k, np.frombuffer(stored, dtype=np.uint8).reshape(n, header.record_bytes)


def _part(header: EdfHeader, record: int, signal: EdfSignal, a: int, b: int) -> NDArray[np.int64]:
    """Steps a to b of one signal in one data record."""
    with header.path.open("rb") as file:
        file.seek(header.n_bytes + record * header.record_bytes + signal.offset + a * header.width)
        stored = file.read((b - a) * header.width)
    if len(stored) < (b - a) * header.width:
        raise _changed(header)
    return _numbers(np.frombuffer(stored, dtype=np.uint8), header.width)


def _changed(header: EdfHeader) -> ReadError:
    found = "fewer: the file changed while it was read"
    return trouble(header.path, "data records", f"{header.n_records}", found)


def _numbers(stored: NDArray[np.uint8], width: int) -> NDArray[np.int64]:
    """Bytes (n_records, n_bytes), low byte first, as signed numbers (samples,)."""
    flat = np.ascontiguousarray(stored).reshape(-1)
    if width == 2:
        return flat.view("<i2").astype(np.int64)
    wide = np.zeros((len(flat) // 3, 4), dtype=np.uint8)
    wide[:, 1:] = flat.reshape(-1, 3)
    return (wide.view("<i4")[:, 0] >> 8).astype(np.int64)  # the shift brings the sign with it


def _later(header: EdfHeader, zero_s: float) -> datetime | None:
    try:
        return None if header.start_time is None else header.start_time + timedelta(seconds=zero_s)
    except OverflowError:
        return None


def _identity(header: EdfHeader) -> tuple[tuple[str, str], ...]:
    pairs = (("patient", header.patient), ("recording", header.recording))
    return tuple((key, base.printable(text)) for key, text in pairs if text)


class OpenEdf(OpenRecording):
    """An open EDF, EDF+ or BDF file; see OpenRecording."""

    def __init__(
        self,
        info: RecordingInfo,
        header: EdfHeader,
        runs: tuple[_Run, ...],
        zero_s: float,
        *,
        scales: tuple[DigitalScale, ...],
        channels: tuple[int, ...],
    ) -> None:
        super().__init__(info, scales=scales, channels=channels, n_signals=len(header.signals))
        self._header, self._runs, self._zero_s = header, runs, zero_s
        self._signals = [header.signals[k] for k in channels]
        self._ends = [run.sample + run.n_records * self._signals[0].per_record for run in runs]

    def annotations(self) -> list[Annotation]:
        """All annotations of an EDF+ or BDF+ file in the order stored; empty for the plain formats."""
        signals = [s for s in self._header.signals if s.is_annotation and s.n_bytes and self._header.plus]
        out: list[Annotation] = []
        for _, block in _stored(self._header, 0, self._header.n_records if signals else 0):
            for row in block:
                for k, s in enumerate(signals):
                    stored = row[s.offset : s.offset + s.n_bytes].tobytes()
                    out += annotations_in(stored, zero_s=self._zero_s, keeps_time=k == 0)
        return out

    def _read_digits(self, start: int, stop: int) -> NDArray[np.int64]:
        missing = np.array([s.missing for s in self.scales or ()], dtype=np.int64)
        out = np.repeat(missing[:, np.newaxis], stop - start, axis=1)
        for first in range(bisect.bisect_right(self._ends, start), len(self._runs)):
            run = self._runs[first]
            begin, end = max(start, run.sample), min(stop, self._ends[first])
            if begin >= end:
                break
            for at, steps in self._pieces(run, begin, end):
                out[:, at - start : at - start + steps.shape[1]] = steps
        return out

    def _pieces(self, run: _Run, begin: int, end: int) -> Iterator[tuple[int, NDArray[np.int64]]]:
        """(sample at which it begins, steps (n_leads, n)) of all that a run holds between two samples."""
        header, per_record = self._header, self._signals[0].per_record
        first = run.record + (begin - run.sample) // per_record
        last = run.record - (run.sample - end) // per_record
        if header.record_bytes > _BLOCK_BYTES:  # more than the format advises: only what is asked for
            for record in range(first, last):
                at = run.sample + (record - run.record) * per_record
                a, b = max(begin, at), min(end, at + per_record)
                yield a, np.stack([_part(header, record, s, a - at, b - at) for s in self._signals])
            return
        for record, block in _stored(header, first, last):
            at = run.sample + (record - run.record) * per_record
            a, b = max(begin, at), min(end, at + len(block) * per_record)
            rows = [
                _numbers(block[:, s.offset : s.offset + s.n_bytes], header.width)[a - at : b - at]
                for s in self._signals
            ]
            yield a, np.stack(rows)


READER = Reader("EDF", sniff, open_edf)
