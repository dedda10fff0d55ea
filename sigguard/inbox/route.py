"""Copies of checked recordings into the folder of their verdict, each verified by its checksum.

Every recording gets a folder of its own, so that files keep the names by which its header knows them
and no copy meets another. The source is never touched.
"""

from __future__ import annotations

import hashlib
import os
import shutil
from collections.abc import Sequence
from pathlib import Path

from sigguard.errors import WriteError
from sigguard.inbox.entry import PLACES
from sigguard.writers.atomic import atomic_path, write_text_atomic

REASON_FILE = "reason.txt"
_CHUNK = 1 << 20


def make_places(route_dir: Path) -> None:
    """The five folders; OSError where they cannot be made."""
    for place in PLACES:
        (route_dir / place).mkdir(parents=True, exist_ok=True)


def copy_to_place(
    parts: Sequence[Path], target: Path, *, sha256: str | None, reason: str | None = None
) -> None:
    """Copy the files into ``target``, with the reason where the recording could not be checked.

    ``sha256`` is the checksum over all files in this order, None where they must not be read. Raises
    WriteError where a copy cannot be written or is not the content that was checked.
    """
    remove_unfinished(target)
    digest = hashlib.sha256()
    for part in parts if sha256 is not None else ():
        _copy(part, target / part.name, digest)
    if sha256 is not None and digest.hexdigest() != sha256:
        for part in parts:
            (target / part.name).unlink(missing_ok=True)
        raise WriteError(f"{target}: the copy differs from what was checked; it will be tried again")
    if reason is not None:
        write_text_atomic(target / REASON_FILE, reason + "\n")


def _copy(source: Path, final: Path, digest: hashlib._Hash) -> None:
    """One file by way of a temporary name; what is hashed is what lies on the disk, read back."""
    with atomic_path(final) as temporary:
        with source.open("rb") as read, temporary.open("wb") as write:
            shutil.copyfileobj(read, write, _CHUNK)
            write.flush()
            os.fsync(write.fileno())
        with temporary.open("rb") as written:
            while chunk := written.read(_CHUNK):
                digest.update(chunk)


def remove_unfinished(folder: Path) -> None:
    """Take away what a writer that was killed left under temporary names in this folder."""
    for path in folder.glob(".*.part") if folder.is_dir() else ():
        path.unlink(missing_ok=True)
