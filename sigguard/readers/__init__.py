"""Reading recordings: one file a format, one contract, told apart by content and never by extension.

Nothing here reaches the network, and no header can make a reader look outside its own folder.
"""

from __future__ import annotations

import os
from collections.abc import Iterable
from pathlib import Path

from sigguard.errors import ReadError
from sigguard.readers import aecg, base, csv_table, dicom, edf, ishne, scp, wfdb_record
from sigguard.readers.base import YES, DigitalScale, OpenRecording, Reader, ReadOptions, read_error
from sigguard.readers.find import locate, search
from sigguard.readers.signals import given_unit
from sigguard.recording import Recording, check_fs

__all__ = [
    "READERS",
    "DigitalScale",
    "OpenRecording",
    "Reader",
    "find_recordings",
    "open_recording",
    "read_recording",
]

# asked in this order; the first to be sure gets the file
READERS: tuple[Reader, ...] = (
    dicom.READER,
    edf.READER,
    ishne.READER,
    aecg.READER,
    scp.READER,
    wfdb_record.READER,
    csv_table.READER,
)


def open_recording(
    path: str | os.PathLike[str],
    *,
    fs_hz: float | None = None,
    units: str | None = None,
    with_identity: bool = False,
    with_sha256: bool = True,
) -> OpenRecording:
    """Open a recording to read it window by window.

    ``path`` is a file, or for WFDB also a signal file or the bare record name. ``fs_hz`` and
    ``units`` (``mV``, ``uV``) serve files that do not state them; what a file states goes first.
    Names and numbers of patients are kept only ``with_identity``. The checksum takes one pass
    over the files and can be switched off.

    Raises ReadError (one sentence) for whatever cannot be read, UsageError for an impossible
    ``fs_hz`` or ``units``.
    """
    options = ReadOptions(
        fs_hz=None if fs_hz is None else check_fs(fs_hz),
        units=given_unit(units),
        with_identity=with_identity,
        with_sha256=with_sha256,
    )
    file = locate(Path(path))
    head = base.read_head(file)
    if not head:
        raise read_error(
            str(file),
            where="file",
            expected="a recording",
            found="an empty file",
            remedy="copy or export it again",
        )
    answers = [(reader.sniff(file, head), reader) for reader in READERS]
    level, reader = max(answers, key=lambda answer: answer[0])
    if level == base.NO:
        known = ", ".join(reader.format for reader in READERS if reader is not scp.READER)
        raise read_error(
            str(file),
            where="start of file",
            expected=f"a recording ({known})",
            found="content of no known format",
            remedy="export the recording in one of these formats",
        )
    try:
        return reader.open(file, options)
    except (OSError, MemoryError, RecursionError) as err:
        raise read_error(
            str(file),
            where="file",
            expected=f"a readable {reader.format} recording",
            found=base.reason(err),
            remedy="check the file and the access rights",
        ) from err


def read_recording(
    path: str | os.PathLike[str],
    *,
    fs_hz: float | None = None,
    units: str | None = None,
    with_identity: bool = False,
) -> Recording:
    """Read a whole recording into memory; parameters and errors as for ``open_recording``."""
    with open_recording(path, fs_hz=fs_hz, units=units, with_identity=with_identity) as opened:
        info = opened.info
        return Recording(opened.read(), info.fs_hz, info.leads, name=info.name, info=info)


def find_recordings(paths: str | os.PathLike[str] | Iterable[str | os.PathLike[str]]) -> list[Path]:
    """Recordings among files and in folders (searched with all below them), each once.

    A WFDB record is its header file, whichever of its files is given. What no reader knows is
    passed over in folders; hidden files too. A named file, and a folder in which there is no
    recording, come back as they are: opening them says what is wrong, and the others still count.
    """
    several = [paths] if isinstance(paths, str | os.PathLike) else paths
    return list(search([Path(path) for path in several], is_recording))


def is_recording(path: Path) -> bool:
    """Whether a reader is sure that the file is a recording; False for what cannot be read."""
    try:
        head = base.read_head(path)
    except ReadError:
        return False
    return bool(head) and any(reader.sniff(path, head) == YES for reader in READERS)
