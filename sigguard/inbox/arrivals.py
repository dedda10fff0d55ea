"""What lies in the inbox, and which of it has arrived whole.

The folder is looked at again and again instead of waiting for notices of the system: those do not come
from network shares. Clocks of two machines differ, so a recording counts as settled by what was seen
here, unchanged for a while, and not by the time that the file carries.
"""

from __future__ import annotations

import os
import stat
import time
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path

from sigguard.errors import ReadError
from sigguard.readers import READERS, open_recording
from sigguard.readers.base import NO, YES, read_error, read_head
from sigguard.readers.wfdb_files import inside_folder
from sigguard.readers.wfdb_header import NULL_SEGMENT, Header, looks_like_header, read_header
from sigguard.report.words import clean

WAITS_FOR_HEADER = "of no known format: a header that names it may follow"
WAITS_FOR_CONTENT = "empty so far"
WAITS_FOR_LINES = "its header is not complete"
WAITS_FOR_SAMPLES = "its samples are not all there"


@dataclass(frozen=True, slots=True)
class Arrival:
    """One recording, or what may become one.

    ``name`` is the path within the inbox, with ``/``; ``parts`` the files it is made of, in the
    order in which the reader takes its checksum. ``waits_for`` says what is missing, empty where all
    is there. ``refused`` is the reason why it must not even be opened.
    """

    name: str
    path: Path
    parts: tuple[Path, ...]
    signature: str  # sizes and times of all parts: changes whenever their content does
    changed_at: float  # by the clock of the disk, seconds since 1970
    n_bytes: int
    waits_for: str = ""
    refused: str | None = None


@dataclass(frozen=True, slots=True)
class _File:
    path: Path
    size: int
    stamp: str
    changed_at: float
    leads_out: str | None  # where a link points, if that is outside or nowhere


@dataclass(frozen=True, slots=True)
class _Nature:
    """What a file's own content says: a header, a recording by itself, or neither (yet)."""

    header: Header | None = None
    waits_for: str = ""


@dataclass(slots=True)
class Inbox:
    """The folder, without the places named in ``leave_out`` (reports, routed copies, the ledger)."""

    folder: Path
    leave_out: tuple[Path, ...] = ()
    _natures: dict[Path, tuple[str, _Nature]] = field(default_factory=dict)

    def look(self) -> list[Arrival]:
        """All arrivals, by name; OSError if the folder itself cannot be read."""
        root = self.folder.resolve()
        left_out = {place.resolve() for place in self.leave_out}
        os.scandir(root).close()
        found: list[Arrival] = []
        seen: set[Path] = set()
        for place, folders, names in os.walk(root, followlinks=False):
            here = Path(place)
            links = [name for name in folders if os.path.islink(here / name)]
            folders[:] = sorted(n for n in folders if not n.startswith(".") and here / n not in left_out)
            files = {}
            for name in (*names, *links):
                path = here / name
                if not name.startswith(".") and path not in left_out and (file := _look_at(path, root)):
                    files[name] = file
            found += self._arrivals(files, root)
            seen |= {file.path for file in files.values()}
        self._natures = {path: known for path, known in self._natures.items() if path in seen}
        return sorted(found, key=lambda arrival: arrival.name)

    def _arrivals(self, files: dict[str, _File], root: Path) -> Iterator[Arrival]:
        """The arrivals of one folder: a file that a header names, or that lies beside it, is none of its own."""
        natures = {name: self._nature(file) for name, file in files.items() if file.leads_out is None}
        named: set[str] = set()
        headers = {name: nature.header for name, nature in natures.items() if nature.header is not None}
        for header in headers.values():
            named |= {s.file for s in header.signals} | {f"{segment}.hea" for segment, _ in header.segments}
        stems = {Path(name).stem for name in headers} | {
            Path(name).stem for name in files if name.casefold().endswith(".hea")
        }
        for name, file in files.items():
            nature = natures.get(name)
            beside = nature is not None and nature.waits_for == WAITS_FOR_HEADER and Path(name).stem in stems
            if name in named or beside:
                continue
            if nature is None:
                waits_for = "" if file.path.exists() else "a link to nothing"
                yield _arrival(file, [file], root, waits_for, _refusal(file))
            elif nature.header is None:
                yield _arrival(file, [file], root, nature.waits_for)
            else:
                parts, waits_for = _parts(file, nature.header, files, headers)
                yield _arrival(file, parts, root, waits_for)

    def _nature(self, file: _File) -> _Nature:
        known = self._natures.get(file.path)
        if known is None or known[0] != file.stamp:
            known = file.stamp, _nature_of(file)
            self._natures[file.path] = known
        return known[1]


def _look_at(path: Path, root: Path) -> _File | None:
    """Size and times of a regular file or of a link that leads out; None for all else and what has gone."""
    try:
        own = path.lstat()
        leads_out = None
        if stat.S_ISLNK(own.st_mode):
            target = path.resolve()
            if not target.is_relative_to(root) or not target.exists():
                leads_out = os.readlink(path)
            elif target.is_dir():
                return None  # its content is found where it lies
            else:
                own = path.stat()
        if leads_out is None and not stat.S_ISREG(own.st_mode):
            return None
    except (OSError, RuntimeError, ValueError):
        return None
    # The time of the last change of the entry moves with every change of content; a copier can set the other.
    stamp = f"{own.st_size}:{own.st_mtime_ns}:{own.st_ctime_ns}"
    return _File(path, own.st_size, stamp, max(own.st_mtime, own.st_ctime), leads_out)


def _nature_of(file: _File) -> _Nature:
    if file.size == 0:
        return _Nature(waits_for=WAITS_FOR_CONTENT)
    try:
        head = read_head(file.path)
        if looks_like_header(head) or file.path.suffix.casefold() == ".hea":
            try:
                return _Nature(header=read_header(file.path))
            except ReadError:
                return _Nature(waits_for=WAITS_FOR_LINES)
        level = max((reader.sniff(file.path, head) for reader in READERS), default=NO)
    except ReadError:
        return _Nature(waits_for="cannot be read")
    return _Nature(waits_for="" if level == YES else WAITS_FOR_HEADER)


def _parts(
    file: _File, header: Header, files: dict[str, _File], headers: dict[str, Header]
) -> tuple[list[_File], str]:
    """The files of a record in the reader's order, and what is still missing of them."""
    parts, missing = [file], ""

    def add(names: Iterable[str]) -> None:
        nonlocal missing
        for name in dict.fromkeys(names):
            if name not in files and _would_be_inside(file.path, name):
                missing = missing or f"the file {clean(name)} that its header names"
            elif name in files and files[name].leads_out is None:
                parts.append(files[name])

    add(s.file for s in header.signals)
    for segment in dict.fromkeys(name for name, _ in header.segments if name != NULL_SEGMENT):
        add([f"{segment}.hea"])
        if f"{segment}.hea" in headers:
            add(s.file for s in headers[f"{segment}.hea"].signals if s.fmt != 0)
    return parts, missing


def _would_be_inside(header_path: Path, name: str) -> bool:
    """Whether a file that is not there may still come; one that a header must not name never will."""
    try:
        inside_folder(header_path, name)
    except ReadError as err:
        return err.found == "no such file"
    return True


def _refusal(file: _File) -> str:
    return str(
        read_error(
            str(file.path),
            where="link",
            expected="a file inside the inbox",
            found=f"a link to {file.leads_out!r}",
            remedy="put the recording itself into the inbox",
        )
    )


def _arrival(
    file: _File, parts: list[_File], root: Path, waits_for: str, refused: str | None = None
) -> Arrival:
    name = clean(file.path.relative_to(root).as_posix())
    signature = "|".join(f"{clean(part.path.name)}:{part.stamp}" for part in parts)
    paths = tuple(part.path for part in parts)
    changed_at = max(part.changed_at for part in parts)
    n_bytes = sum(part.size for part in parts)
    return Arrival(name, file.path, paths, signature, changed_at, n_bytes, waits_for, refused)


def lacks_samples(arrival: Arrival) -> bool:
    """Whether a header promises more samples than its files hold; opens the header, reads no sample."""
    if len(arrival.parts) < 2:
        return False
    try:
        open_recording(arrival.path, with_sha256=False).close()
    except ReadError as err:
        return err.where == "end of file"
    return False


@dataclass(slots=True)
class Settling:
    """Since when each arrival has not changed; settled after ``settle_s``, given up as whole after ``patience_s``.

    What misses a part (a header its signal file, a signal file its header) is handed on only after
    ``patience_s``, so that checking it says what is missing.
    """

    settle_s: float
    patience_s: float
    clock: Callable[[], float] = time.monotonic
    disk_clock: Callable[[], float] = time.time
    _since: dict[str, tuple[str, float]] = field(default_factory=dict)
    _short: dict[str, tuple[str, bool]] = field(default_factory=dict)

    def split(self, arrivals: Iterable[Arrival]) -> tuple[list[Arrival], dict[str, str]]:
        """(those to be checked now, the names of the others with what they wait for)."""
        now = self.clock()
        ready: list[Arrival] = []
        waiting: dict[str, str] = {}
        since: dict[str, tuple[str, float]] = {}
        for arrival in arrivals:
            signature, first = self._since.get(arrival.name, ("", now))
            since[arrival.name] = arrival.signature, first if signature == arrival.signature else now
            unchanged_s = now - since[arrival.name][1]
            if unchanged_s < self.settle_s:
                waiting[arrival.name] = "still growing, or not watched for long enough"
                continue
            lacks = arrival.waits_for or (WAITS_FOR_SAMPLES if self._is_short(arrival) else "")
            patient_s = max(unchanged_s, self.disk_clock() - arrival.changed_at)
            if lacks and patient_s < self.patience_s:
                waiting[arrival.name] = lacks
            else:
                ready.append(arrival)
        self._since = since
        self._short = {name: known for name, known in self._short.items() if name in since}
        return ready, waiting

    def _is_short(self, arrival: Arrival) -> bool:
        known = self._short.get(arrival.name)
        if known is None or known[0] != arrival.signature:
            known = arrival.signature, lacks_samples(arrival)
            self._short[arrival.name] = known
        return known[1]
