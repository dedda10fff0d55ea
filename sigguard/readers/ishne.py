"""ISHNE Holter files (Badilini 1998): a fixed header, a block of free text, 16-bit samples lead by lead.

The missing code and the marks of lead quality are from memory. Numbers of samples are met both
for each lead and for all together: the size of the file decides, and a difference is said.
"""

from __future__ import annotations

import binascii
import struct
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import NoECGLead, ReadError
from sigguard.leads import normalise_leads
from sigguard.readers import base
from sigguard.readers.base import MAYBE, NO, YES, DigitalScale, OpenRecording, Reader, ReadOptions, read_error
from sigguard.recording import RecordingInfo

MAGIC, ANNOTATION_MAGIC = b"ISHNE1.0", b"ANN  1.0"
_FIXED_FROM, _VARIABLE_FROM = 10, 522
MAX_STORED_LEADS = 12
MISSING = -32768
_TOLD_BY_S = 60  # so much of a recording tells whether its limb leads are augmented
NV_PER_MV = 1e6
_AUGMENTED = {8: "aVR", 9: "aVL", 10: "aVF"}
_LEADS = {
    **{2: "X", 3: "Y", 4: "Z", 5: "I", 6: "II", 7: "III"},
    **_AUGMENTED,
    **{10 + k: f"V{k}" for k in range(1, 7)},
    **{17: "ES", 18: "AS", 19: "AI"},
}
_QUALITY = {3: "often noisy", 4: "disconnected at times", 5: "often disconnected"}
_SEXES = {1: "male", 2: "female"}


def sniff(path: Path, head: bytes) -> int:
    """The mark at the start; an annotation file of the same family is explained here."""
    return YES if head[:8] == MAGIC else MAYBE if head[:8] == ANNOTATION_MAGIC else NO


@dataclass(frozen=True, slots=True)
class _Header:
    """The fixed header (offsets in the file), unsigned where a sign would make no sense."""

    variable_bytes: int
    n_stated: int
    samples_from: int
    n_leads: int
    codes: tuple[int, ...]
    quality: tuple[int, ...]
    nv_per_step: tuple[int, ...]
    fs_hz: int
    start_time: datetime | None
    identity: tuple[tuple[str, str], ...]
    crc_agrees: bool


def open_ishne(path: Path, options: ReadOptions) -> OpenRecording:
    """Open an ISHNE Holter file. Raises ReadError for all that cannot be read."""
    header = _read_header(path)
    assumed: list[str] = []
    if not header.crc_agrees:
        assumed.append("The checksum of the header does not agree with it; the header was believed.")
    n_samples = _length(path, header, assumed)
    fs_hz = base.check_rate(header.fs_hz, str(path), "sampling rate")
    assumed += base.stated_rate_wins(fs_hz, options.fs_hz)
    augmented = _augmented(path, header, n_samples)
    plain = {code: name[1:] for code, name in _AUGMENTED.items()} if augmented is False else {}
    names = [plain.get(code) or _LEADS.get(code, f"lead {k + 1}") for k, code in enumerate(header.codes)]
    chosen = [k for k in range(header.n_leads) if header.nv_per_step[k]]
    left_out = tuple(f"{names[k]} (no resolution stated)" for k in range(header.n_leads) if k not in chosen)
    if not chosen:
        raise read_error(
            kind=NoECGLead,
            file=str(path),
            where="resolutions",
            expected="at least one lead with its resolution",
            found="0 nV for all",
            remedy="export the recording again",
        )
    leads = normalise_leads([names[k] for k in chosen])
    assumed += _assumptions(header, chosen, leads, augmented)
    half = 1 << 15
    scales = tuple(
        DigitalScale(header.nv_per_step[k] / NV_PER_MV, 0.0, -half + 1, half - 1, MISSING) for k in chosen
    )
    info = RecordingInfo(
        name=path.stem,
        leads=leads,
        fs_hz=fs_hz,
        n_samples=base.check_length(n_samples, str(path), "samples"),
        path=str(path),
        format="ISHNE",
        sha256=base.sha256_of([path]) if options.with_sha256 else None,
        start_time=header.start_time,
        rails_mv=base.rails_mv(scales),
        step_mv=np.array([s.step_mv for s in scales]),
        assumed=tuple(assumed),
        left_out=left_out,
        identity=header.identity if options.with_identity else (),
    )
    return OpenIshne(info, path, header, scales, tuple(chosen))


def _read_header(path: Path) -> _Header:
    with path.open("rb") as file:
        head = file.read(_VARIABLE_FROM)
        if head[:8] != MAGIC:
            found = "a file of beat annotations"
            raise _error(path, "start of file", "a Holter recording", found, "send the recording beside it")
        if len(head) < _VARIABLE_FROM:
            raise _error(path, "header", f"{_VARIABLE_FROM} bytes", f"{len(head)}", _CUT)
        variable, n_stated, _, samples_from = struct.unpack_from("<4i", head, 10)
        size = path.stat().st_size
        if not 0 <= variable <= size - _VARIABLE_FROM:
            raise _error(path, "variable block", f"0 to {size - _VARIABLE_FROM} bytes", f"{variable}", _CUT)
        text = file.read(variable)
    if samples_from == 0:
        samples_from = _VARIABLE_FROM + variable
    if not _VARIABLE_FROM <= samples_from <= size:
        raise _error(path, "offset of the samples", f"{_VARIABLE_FROM} to {size}", f"{samples_from}", _CUT)
    (n_leads,) = struct.unpack_from("<h", head, 156)
    if not 1 <= n_leads <= MAX_STORED_LEADS:
        raise _error(path, "number of leads", f"1 to {MAX_STORED_LEADS}", f"{n_leads}")
    return _Header(
        variable_bytes=variable,
        n_stated=n_stated,
        samples_from=samples_from,
        n_leads=n_leads,
        codes=struct.unpack_from(f"<{n_leads}h", head, 158),
        quality=struct.unpack_from(f"<{n_leads}h", head, 182),
        nv_per_step=struct.unpack_from(f"<{n_leads}H", head, 206),  # above 32767 is met
        fs_hz=struct.unpack_from("<H", head, 272)[0],
        start_time=_start(*struct.unpack_from("<3h", head, 138), *struct.unpack_from("<3h", head, 150)),
        identity=_identity(head, text),
        crc_agrees=binascii.crc_hqx(head[_FIXED_FROM:] + text, 0xFFFF)
        == struct.unpack_from("<H", head, 8)[0],
    )


def _length(path: Path, header: _Header, assumed: list[str]) -> int:
    """Samples of each lead: what the file holds, unless the header says less."""
    held = (path.stat().st_size - header.samples_from) // (2 * header.n_leads)
    stated = header.n_stated
    if stated == held:
        return held
    if stated == held * header.n_leads:
        assumed.append("The number of samples in the header was taken as that of all leads together.")
        return held
    if 0 < stated < held:
        assumed.append(
            f"The file holds {held - stated} more samples of each lead than the header says; not read."
        )
        return stated
    if stated <= 0:
        assumed.append("The header does not say how long the recording is; taken from the size of the file.")
        return held
    raise _error(path, "samples", f"{stated} of each lead, as the header says", f"{held}", _CUT)


def _augmented(path: Path, header: _Header, n_samples: int) -> bool | None:
    """Whether the lead coded VR is aVR = -(I + II) / 2 (True) or VR, two thirds of it (False), by its samples.

    None where the leads are not there to tell, or agree with neither.
    """
    if not {5, 6, 8} <= {*header.codes}:
        return None
    n = min(n_samples, _TOLD_BY_S * header.fs_hz)
    frames = _frames(path, header, 0, n)[:, [header.codes.index(code) for code in (5, 6, 8)]]
    steps = np.array([header.nv_per_step[header.codes.index(code)] for code in (5, 6, 8)])
    one, two, right = (frames[(frames != MISSING).all(axis=1)] * (steps / NV_PER_MV)).T
    both = one + two
    power = float(both @ both)
    if not power:
        return None
    share = -float(both @ right) / power
    rest = right + share * both
    if float(rest @ rest) > 0.05 * float(right @ right):  # no multiple of it at all
        return None
    return True if abs(share - 1 / 2) < 0.05 else False if abs(share - 1 / 3) < 0.05 else None


def _frames(path: Path, header: _Header, start: int, stop: int) -> NDArray[np.int16]:
    """Samples start to stop of all leads as (n, n_leads)."""
    size = 2 * header.n_leads
    with path.open("rb") as file:
        file.seek(header.samples_from + size * start)
        stored = file.read(size * (stop - start))
    if len(stored) < size * (stop - start):
        found = "fewer: the file changed while it was read"
        raise _error(path, "samples", f"those up to {stop}", found)
    return np.frombuffer(stored, dtype="<i2").reshape(-1, header.n_leads)


def _assumptions(
    header: _Header, chosen: list[int], leads: tuple[str, ...], augmented: bool | None
) -> list[str]:
    out = []
    pairs = list(zip(chosen, leads, strict=True))
    which = [lead for k, lead in pairs if header.codes[k] in _AUGMENTED]
    if which and augmented is None:
        out.append(f"{', '.join(which)} taken as augmented leads; the format does not say so.")
    if which := [lead for k, lead in pairs if header.codes[k] not in _LEADS]:
        out.append(f"The file does not say which lead {', '.join(which)} is; taken for an ECG lead.")
    out += [
        f"The recorder marks {lead} as {_QUALITY[header.quality[k]]}; its samples were checked all the same."
        for k, lead in pairs
        if header.quality[k] in _QUALITY
    ]
    return out


def _start(day: int, month: int, year: int, hour: int, minute: int, second: int) -> datetime | None:
    """None for dates that are not known (0 or -9) or of two digits of unknown century."""
    try:
        return datetime(year, month, day, hour, minute, second) if year > 1900 else None
    except ValueError:
        return None


def _identity(head: bytes, variable: bytes) -> tuple[tuple[str, str], ...]:
    day, month, year = struct.unpack_from("<3h", head, 132)
    (sex,) = struct.unpack_from("<h", head, 128)
    pairs = (
        ("first name", _text(head[28:68])),
        ("last name", _text(head[68:108])),
        ("subject", _text(head[108:128])),
        ("birth date", f"{year:04d}-{month:02d}-{day:02d}" if year > 0 and month > 0 and day > 0 else ""),
        ("sex", _SEXES.get(sex, "")),
        ("note", _text(variable)),
    )
    return tuple((key, text) for key, text in pairs if text)


def _text(field: bytes) -> str:
    """Up to the first zero byte, in an unknown code page taken as Latin-1."""
    return base.printable(field.split(b"\0")[0].decode("latin-1")).strip()


class OpenIshne(OpenRecording):
    """An open ISHNE Holter file; see OpenRecording."""

    def __init__(
        self,
        info: RecordingInfo,
        path: Path,
        header: _Header,
        scales: tuple[DigitalScale, ...],
        channels: tuple[int, ...],
    ) -> None:
        super().__init__(info, scales=scales, channels=channels, n_signals=header.n_leads)
        self._path, self._header = path, header

    def _read_digits(self, start: int, stop: int) -> NDArray[np.int64]:
        frames = _frames(self._path, self._header, start, stop)
        return frames.T[list(self.channels)].astype(np.int64)


_CUT = "the file is cut short: send it again"


def _error(
    path: Path, where: str, expected: str, found: str, remedy: str = "export the recording again"
) -> ReadError:
    return read_error(str(path), where=where, expected=expected, found=found, remedy=remedy)


READER = Reader("ISHNE", sniff, open_ishne)
