"""From paths as a user types them to recordings: folders searched, records counted once."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Iterator
from pathlib import Path

from sigguard.errors import ReadError
from sigguard.readers.base import HEAD_BYTES, read_head
from sigguard.readers.wfdb_header import looks_like_header, read_header

MAX_HEADERS_TRIED = 10_000
_SUSPECT = (
    ".hea",
    ".dcm",
    ".edf",
    ".bdf",
)  # called a recording but not one: reported in a folder, not passed over


def locate(path: Path) -> Path:
    """The file to open for a path: for a WFDB signal file or a bare record name, its header."""
    try:
        if path.is_file():
            return _header_naming(path) or path
        bare = path.with_name(path.name + ".hea") if path.name else path
        return bare if not path.exists() and bare.is_file() else path
    except (OSError, ValueError):
        return path  # opening it will say what is wrong


def search(paths: Iterable[Path], is_recording: Callable[[Path], bool]) -> Iterator[Path]:
    """Recordings under these paths, each once, in the order given and by name within a folder."""
    seen: set[Path] = set()
    for path in paths:
        found = _in_folder(path, is_recording) if _is_folder(path) else [locate(path)]
        for file in found or [path]:  # a folder without any: handed on, so that opening it says so
            real = _real(file)
            if real not in seen:
                seen.add(real)
                yield file


def _in_folder(folder: Path, is_recording: Callable[[Path], bool]) -> list[Path]:
    out: list[Path] = []
    for place, folders, files in os.walk(folder, followlinks=False):
        folders[:] = sorted(name for name in folders if not name.startswith("."))
        here = [Path(place, name) for name in sorted(files) if not name.startswith(".")]
        found = [file for file in here if _wanted(file, is_recording)]
        segments = _segment_files(found)
        out += [file for file in found if file.name not in segments]
    return out


def _wanted(file: Path, is_recording: Callable[[Path], bool]) -> bool:
    return _is_file(file) and (
        is_recording(file) or (file.suffix.casefold() in _SUSPECT and _not_foreign(file))
    )


def _not_foreign(file: Path) -> bool:
    """Not a sound DICOM object of another kind (an image), which is none of our business."""
    try:
        return read_head(file, 132)[128:] != b"DICM"
    except ReadError:
        return True


def _segment_files(headers: list[Path]) -> set[str]:
    """Names of header files that are segments of a record of several segments in the same folder."""
    out: set[str] = set()
    for path in headers:
        if not path.name.casefold().endswith(".hea"):
            continue
        try:
            header = read_header(path)
        except ReadError:
            continue
        out.update(f"{name}.hea" for name, _ in header.segments)
    return out


def _header_naming(path: Path) -> Path | None:
    """The header beside a file that names it as its signal file, if there is one."""
    head = read_head(path, HEAD_BYTES)
    if looks_like_header(head) or head[128:132] == b"DICM":
        return None
    same_stem = path.with_suffix(".hea")
    others = (p for p in sorted(path.parent.glob("*.hea"))[:MAX_HEADERS_TRIED] if p != same_stem)
    for header_path in (same_stem, *others):
        try:
            if header_path.is_file() and any(s.file == path.name for s in read_header(header_path).signals):
                return header_path
        except ReadError:
            continue
    return None


def _is_folder(path: Path) -> bool:
    try:
        return path.is_dir()
    except (OSError, ValueError):
        return False


def _is_file(path: Path) -> bool:
    try:
        return path.is_file()
    except (OSError, ValueError):
        return False


def _real(path: Path) -> Path:
    try:
        return path.resolve()
    except (OSError, ValueError, RuntimeError):
        return path
