"""The one contract of all readers: what an open recording offers, and how a format joins in.

A format is one module that exports a ``Reader``; ``sigguard.readers.READERS`` lists them.
"""

from __future__ import annotations

import hashlib
from abc import ABC, abstractmethod
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import ReadError, UsageError
from sigguard.recording import MAX_FS_HZ, MIN_FS_HZ, RecordingInfo

HEAD_BYTES = 16_384
MAX_PART = 200  # characters of one part of an error message
# gaps, and pieces used again, may last this many times what is stored, and this many seconds beside
GAP_LIMIT = 20, 3600.0
NO, MAYBE, YES = 0, 1, 2  # what a sniffer says: not mine, mine to explain if nobody else claims it, mine


@dataclass(frozen=True, slots=True)
class DigitalScale:
    """How the stored steps of one lead become millivolts: ``(digit - zero) * step_mv``.

    ``low`` to ``high`` are the steps the converter can give; ``missing`` is what ``read_digital``
    holds where there is no sample (it may need more bits than the samples do).
    """

    step_mv: float
    zero: float
    low: int
    high: int
    missing: int


@dataclass(frozen=True, slots=True)
class ReadOptions:
    """What the caller states about a file that does not say so itself."""

    fs_hz: float | None = None
    units: str | None = None
    with_identity: bool = False
    with_sha256: bool = True


class OpenRecording(ABC):
    """A recording whose samples can be read window by window; a context manager.

    ``scales`` holds one scale for each lead, or is None where the format has no digital values
    (text) or they change their meaning on the way (segments of different gain). ``channels``
    are the numbers of the leads among all signals of the file, from 0; ``n_signals`` counts these.
    ``samples_per_frame``: samples of a lead in one frame, the unit in which WFDB annotations count time.
    """

    samples_per_frame: int = 1

    def __init__(
        self,
        info: RecordingInfo,
        *,
        scales: tuple[DigitalScale, ...] | None,
        channels: tuple[int, ...],
        n_signals: int,
    ) -> None:
        self.info, self.scales, self.channels, self.n_signals = info, scales, channels, n_signals

    def read(self, start: int = 0, stop: int | None = None) -> NDArray[np.float64]:
        """Samples start to stop as (n_leads, stop - start), mV, NaN where missing.

        Raises UsageError for a window outside the recording, ReadError if the file gives way.
        """
        return self._read_mv(*self._window(start, stop))

    def read_digital(self, start: int = 0, stop: int | None = None) -> NDArray[np.int64]:
        """Stored steps start to stop as (n_leads, stop - start); see ``scales`` for their meaning.

        Raises UsageError where ``scales`` is None.
        """
        if self.scales is None:
            raise UsageError(f"{self.info.name}: this recording has no digital values of one scale")
        return self._read_digits(*self._window(start, stop))

    def _window(self, start: int, stop: int | None) -> tuple[int, int]:
        stop = self.info.n_samples if stop is None else stop
        if not 0 <= start <= stop <= self.info.n_samples:
            raise UsageError(
                f"window {start} to {stop} lies outside 0 to {self.info.n_samples} of {self.info.name}"
            )
        return int(start), int(stop)

    def _read_mv(self, start: int, stop: int) -> NDArray[np.float64]:
        assert self.scales is not None
        return to_mv(self._read_digits(start, stop), self.scales)

    @abstractmethod
    def _read_digits(self, start: int, stop: int) -> NDArray[np.int64]: ...

    def close(self) -> None:  # noqa: B027 - most formats hold nothing open
        """Let go of files; safe to call twice."""

    def __enter__(self) -> OpenRecording:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


@dataclass(frozen=True, slots=True)
class Reader:
    """One format: its name, how to tell it by content, how to open it.

    ``sniff(path, head)`` gets the first bytes of a regular file and answers NO, MAYBE or YES.
    """

    format: str
    sniff: Callable[[Path, bytes], int]
    open: Callable[[Path, ReadOptions], OpenRecording]


def to_mv(digits: NDArray[np.int64], scales: tuple[DigitalScale, ...]) -> NDArray[np.float64]:
    """(n_leads, n) steps as mV; NaN where the step says missing."""
    zero = np.array([s.zero for s in scales])[:, np.newaxis]
    step = np.array([s.step_mv for s in scales])[:, np.newaxis]
    missing = np.array([s.missing for s in scales])[:, np.newaxis]
    mv = digits - zero
    mv *= step
    mv[digits == missing] = np.nan
    return mv


def rails_mv(scales: tuple[DigitalScale, ...]) -> NDArray[np.float64]:
    """(n_leads, 2): the lowest and highest value each converter can give, mV."""
    ends = np.array([[(s.low - s.zero) * s.step_mv, (s.high - s.zero) * s.step_mv] for s in scales])
    return np.sort(ends, axis=1)


def read_head(path: Path, n_bytes: int = HEAD_BYTES) -> bytes:
    """The first bytes of a regular file; ReadError if there is none or it cannot be read."""
    try:
        if not path.is_file():
            kind = (
                "a folder in which no recording was found"
                if path.is_dir()
                else "something that is no regular file"
                if path.exists()
                else "nothing"
            )
            raise read_error(
                str(path),
                where="path",
                expected="a recording",
                found=kind,
                remedy="check the name and the place",
            )
        with path.open("rb") as file:
            return file.read(n_bytes)
    except (OSError, ValueError) as err:
        raise read_error(
            printable(str(path)),
            where="path",
            expected="a readable local file",
            found=reason(err),
            remedy="check the name and the access rights",
        ) from err


def sha256_of(paths: Iterable[Path]) -> str:
    """SHA-256 over the content of the files in this order, read in chunks of 1 MiB."""
    digest = hashlib.sha256()
    for path in paths:
        with path.open("rb") as file:
            while chunk := file.read(1 << 20):
                digest.update(chunk)
    return digest.hexdigest()


def read_error(
    file: str, *, where: str, expected: str, found: str, remedy: str, kind: type[ReadError] = ReadError
) -> ReadError:
    """A ReadError whose parts are printable, on one line and short, whatever the file put into them."""
    parts = {"where": where, "expected": expected, "found": found, "remedy": remedy}
    return kind(printable(file), **{key: _shortened(printable(text)) for key, text in parts.items()})


def _shortened(text: str) -> str:
    return text if len(text) <= MAX_PART else text[: MAX_PART - 1] + "…"


def reason(err: BaseException) -> str:
    """An exception as a few words on one line."""
    text = getattr(err, "strerror", None) or str(err) or type(err).__name__
    return printable(" ".join(str(text).split()))[:160]


def printable(text: str) -> str:
    """Text from outside made safe to print: control characters become question marks."""
    return "".join(c if c.isprintable() else "?" for c in text)


def check_rate(fs_hz: float, file: str, where: str) -> float:
    """The rate if an ECG can have it, else ReadError."""
    if MIN_FS_HZ <= fs_hz <= MAX_FS_HZ:
        return float(fs_hz)
    raise read_error(
        file,
        where=where,
        expected=f"a sampling rate from {MIN_FS_HZ:g} to {MAX_FS_HZ:g} Hz",
        found=f"{fs_hz:g} Hz",
        remedy="correct the rate or export the recording again",
    )


def check_length(n_samples: int, file: str, where: str) -> int:
    """The number of samples if it is two or more, else ReadError."""
    if n_samples >= 2:
        return n_samples
    raise read_error(
        file,
        where=where,
        expected="at least two samples",
        found="one" if n_samples == 1 else "none",
        remedy="export the recording again",
    )


def stated_rate_wins(stated_hz: float, given_hz: float | None) -> list[str]:
    """A sentence for ``assumed`` where the caller's rate differs from the one the file states."""
    if given_hz is None or abs(given_hz - stated_hz) <= 1e-6 * stated_hz:
        return []
    return [f"The file states {stated_hz:g} Hz; the {given_hz:g} Hz given was not used."]
