"""Several processes on the stretches of one recording: each opens it for itself, results come in order."""

from __future__ import annotations

import signal
import threading
from collections.abc import Callable, Iterable, Iterator
from contextlib import AbstractContextManager
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

from sigguard.readers import open_recording

AHEAD = 2  # tasks per process that are begun or wait: enough to keep all busy, few enough to keep memory flat


@dataclass(frozen=True, slots=True)
class Reopen:
    """How another process gets at a recording that this one has open."""

    path: Path
    fs_hz: float | None = None
    units: str | None = None

    def __call__(self) -> AbstractContextManager[Any]:
        return open_recording(self.path, fs_hz=self.fs_hz, units=self.units, with_sha256=False)


@dataclass(frozen=True, slots=True)
class Workers:
    """``jobs`` processes of one thread each on the recording that ``reopen`` gives."""

    reopen: Callable[[], AbstractContextManager[Any]]
    jobs: int

    def run(self, function: Callable[..., Any], tasks: Iterable[tuple[Any, ...]]) -> Iterator[Any]:
        """``function(source, *task)`` for each task, in their order; only a few are held at a time.

        Raises what the function raises, and MemoryError where a process was killed from outside, which as
        a rule is for want of memory.
        """
        from concurrent.futures import BrokenExecutor

        from joblib import Parallel, delayed, parallel_config

        try:
            with parallel_config(backend="loky", inner_max_num_threads=1):
                pool = Parallel(
                    n_jobs=self.jobs, return_as="generator", pre_dispatch=AHEAD * self.jobs, batch_size=1
                )
                yield from pool(delayed(_there)(self.reopen, function, task) for task in tasks)
        except BrokenExecutor as err:
            raise MemoryError("a measuring process was killed") from err


def _there(
    reopen: Callable[[], AbstractContextManager[Any]], function: Callable[..., Any], task: tuple[Any, ...]
) -> Any:
    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C reaches all processes; only the first decides
    return function(_opened(reopen), *task)


@lru_cache(maxsize=1)
def _opened(reopen: Callable[[], AbstractContextManager[Any]]) -> Any:
    """The recording, opened once in each process and kept until another one is asked for."""
    return reopen().__enter__()
