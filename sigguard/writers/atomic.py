"""Writing so that a crash leaves a whole file or none: beside the final name, then moved there."""

from __future__ import annotations

import contextlib
import os
import secrets
from collections.abc import Iterator
from pathlib import Path
from typing import IO, Any

from sigguard.errors import WriteError


@contextlib.contextmanager
def atomic_path(path: str | os.PathLike[str]) -> Iterator[Path]:
    """A temporary path beside ``path`` to write to; moved onto ``path`` if the block ends well.

    For libraries that open files themselves. The folder is made if missing. Raises WriteError if
    the system refuses; whatever ends the block, no temporary file stays behind.
    """
    final = Path(path)
    temporary: Path | None = None
    try:
        try:
            final.parent.mkdir(parents=True, exist_ok=True)
            temporary = final.parent / f".{final.name[:100]}.{secrets.token_hex(6)}.part"
            os.close(os.open(temporary, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o666))
            yield temporary
            _settle(temporary, final)
        except OSError as err:
            raise WriteError(f"{final}: could not be written ({err.strerror or err})") from err
    finally:
        if temporary is not None:
            temporary.unlink(missing_ok=True)


@contextlib.contextmanager
def atomic_file(path: str | os.PathLike[str], mode: str = "wb", **options: Any) -> Iterator[IO[Any]]:
    """An open file that becomes ``path`` once the block has ended well.

    ``mode`` is ``"wb"`` or ``"w"``; options go to ``open``, text is UTF-8 with ``\\n`` unless they
    say otherwise.
    """
    if "b" not in mode:
        options = {"encoding": "utf-8", "newline": "\n"} | options
    with atomic_path(path) as temporary, temporary.open(mode, **options) as file:
        yield file


def write_bytes_atomic(path: str | os.PathLike[str], data: bytes) -> Path:
    """Write bytes whole or not at all; the final path."""
    with atomic_file(path) as file:
        file.write(data)
    return Path(path)


def write_text_atomic(path: str | os.PathLike[str], text: str) -> Path:
    """Write text as UTF-8, whole or not at all; the final path."""
    return write_bytes_atomic(path, text.encode("utf-8"))


def _settle(temporary: Path, final: Path) -> None:
    """Bring the file to disk, move it, sync the folder."""
    _sync(temporary)
    os.replace(temporary, final)
    with contextlib.suppress(OSError):  # not every system lets a folder be synced
        _sync(final.parent)


def _sync(path: Path) -> None:
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
