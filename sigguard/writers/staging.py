"""Several files that belong together: written aside, checked there, then moved into place in a given order."""

from __future__ import annotations

import contextlib
import errno
import os
import secrets
import shutil
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from sigguard.errors import WriteError


@dataclass(frozen=True, slots=True)
class Stage:
    """A hidden folder within ``out_dir``, on the same disk, so that moving out of it copies nothing."""

    folder: Path
    out_dir: Path

    def settle(self, files: Sequence[str], *, replaces: Sequence[str] = ()) -> None:
        """Move ``files`` to ``out_dir`` in their order, once all of them are safe on the disk.

        ``replaces`` are files of an earlier run to take away first, in their order: whoever reads
        while this goes on must not meet the old header beside new samples.
        """
        for file in files:
            _sync(self.folder / file)
        for file in replaces:
            (self.out_dir / file).unlink(missing_ok=True)
        for file in files:
            os.replace(self.folder / file, self.out_dir / file)
        with contextlib.suppress(OSError):  # not every system lets a folder be synced
            _sync(self.out_dir)


@contextlib.contextmanager
def staged(out_dir: Path, name: str) -> Iterator[Stage]:
    """A stage for the files of ``name``; whatever ends the block, the stage does not stay.

    Raises WriteError, one sentence, where the system refuses: a full disk, a folder that may not be written.
    """
    folder = out_dir / f".{name[:80]}.{secrets.token_hex(6)}.part"
    try:
        out_dir.mkdir(parents=True, exist_ok=True)
        folder.mkdir()
        yield Stage(folder, out_dir)
    except OSError as err:
        raise WriteError(_sentence(out_dir, name, err)) from err
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def _sentence(out_dir: Path, name: str, err: OSError) -> str:
    if err.errno in (errno.ENOSPC, errno.EDQUOT):
        what = "the disk is full; make room or choose another folder"
    else:
        what = err.strerror or str(err)
    return f"{out_dir}: {name} could not be written ({what}); nothing half-written was left"


def _sync(path: Path) -> None:
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
