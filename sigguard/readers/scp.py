"""SCP-ECG (EN 1064, ISO 11073-91064) is recognised and refused.

Its samples are packed by tables of which no published copy could be checked; a reader that is
nearly right would be worse than none.
"""

from __future__ import annotations

from pathlib import Path
from typing import NoReturn

from sigguard.readers.base import MAYBE, NO, YES, Reader, ReadOptions, read_error

_MARK = b"SCPECG"  # in the header of section 0, from memory
_SECTION_0 = slice(8, 10)  # number of the first section: always 0


def sniff(path: Path, head: bytes) -> int:
    """The mark in the first section; without it, the length of the file in its header and section 0 first."""
    if head[16:22] == _MARK:
        return YES
    try:
        whole = len(head) >= 22 and int.from_bytes(head[2:6], "little") == path.stat().st_size
    except OSError:
        return NO
    return MAYBE if whole and head[_SECTION_0] == b"\0\0" else NO


def refuse(path: Path, options: ReadOptions) -> NoReturn:
    """Say that the format is known and not read."""
    raise read_error(
        str(path),
        where="start of file",
        expected="a format whose samples are plain numbers",
        found="an SCP-ECG file, which is not read",
        remedy="export the recording as DICOM, aECG, EDF or WFDB",
    )


READER = Reader("SCP-ECG", sniff, refuse)
