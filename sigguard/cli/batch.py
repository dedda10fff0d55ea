"""Checking many recordings: one after the other or several at once, results in their order."""

from __future__ import annotations

import json
import signal
import sys
import threading
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import typer

from sigguard.cli.naming import assign_folders, leave_out_reports
from sigguard.errors import SigguardError

if TYPE_CHECKING:
    from sigguard.report.worklist import WorklistRow


@dataclass(frozen=True, slots=True, kw_only=True)
class Settings:
    """What ``screen_path`` is told, the same for every recording of a run."""

    profile: str | None = None
    segment_s: float = 10.0
    mains: str = "auto"
    page: bool = True
    annotate: bool = False
    with_identity: bool = False
    fs_hz: float | None = None
    units: str | None = None
    fridericia: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What became of one recording: an error, or a verdict and what is to be printed."""

    path: Path
    name: str  # of its folder
    error: str | None = None
    verdict: str | None = None
    patient_first: bool = False
    line: str = ""
    row: WorklistRow | None = None


@dataclass(slots=True)
class Result:
    """What became of a run."""

    n_recordings: int
    outcomes: list[Outcome] = field(default_factory=list)
    interrupted: bool = False

    @property
    def n_failed(self) -> int:
        return sum(o.error is not None for o in self.outcomes)

    def exit_code(self, *, exit_zero: bool = False) -> int:
        if any(o.patient_first for o in self.outcomes):
            return 4
        if self.interrupted:
            return 130
        if self.n_failed:
            return 1
        if any(o.verdict == "repeat" for o in self.outcomes):
            return 0 if exit_zero else 3
        return 0


def run(paths: Sequence[Path], out_dir: Path, settings: Settings, *, jobs: int, as_json: bool) -> Result:
    """Check the recordings under these paths; print a line for each as it is done, then write the index."""
    from sigguard.readers import find_recordings

    recordings = leave_out_reports(find_recordings(paths), out_dir)
    work = list(zip(recordings, assign_folders(recordings, out_dir), strict=True))
    result = Result(len(work))
    outcomes = _in_turn if min(jobs, len(work)) < 2 else _at_once
    with progress(len(work)) as advance:
        try:
            if len(work) == 1:  # the processes then share out the one recording
                found = iter([check_one(*work[0], out_dir, settings, as_json, jobs=jobs, progress=advance)])
            else:
                found = outcomes(work, out_dir, settings, as_json, min(jobs, len(work)), result)
            for n_done, outcome in enumerate(found, 1):
                result.outcomes.append(outcome)
                _tell(outcome)
                advance(n_done / len(work))
        except KeyboardInterrupt:
            result.interrupted = True
    _close(result, out_dir)
    return result


def check_one(
    path: Path,
    name: str,
    out_dir: Path,
    settings: Settings,
    as_json: bool,
    *,
    jobs: int = 1,
    progress: Callable[[float], None] | None = None,
) -> Outcome:
    """Check one recording and write its report; whatever goes wrong with it becomes one sentence."""
    try:
        from sigguard.report.text import one_line
        from sigguard.report.worklist import row_of
        from sigguard.screening import screen_path

        report = screen_path(
            path, out_dir=out_dir, name=name, jobs=jobs, progress=progress, **asdict(settings)
        )
        line = (
            json.dumps(report.to_dict(), ensure_ascii=False, allow_nan=False) if as_json else one_line(report)
        )
        if not as_json and name != report.info.name:
            line = f"{line} [reports in {name}]"
        link = f"{name}/report.{'html' if settings.page else 'json'}"
        row = replace(row_of(report, link=link), name=name)
    except SigguardError as err:
        return Outcome(path=path, name=name, error=sentence(path, str(err)))
    except MemoryError:
        return Outcome(path=path, name=name, error=sentence(path, "not enough memory to check it"))
    except Exception as err:  # a mistake of ours on one recording must not keep the others from being checked
        fault = f"could not be checked, a fault of the program: {type(err).__name__}: {err}; please report it"
        return Outcome(path=path, name=name, error=sentence(path, fault))
    alarm = bool(report.patient_first)
    return Outcome(path=path, name=name, verdict=report.verdict, patient_first=alarm, line=line, row=row)


def sentence(path: Path, text: str) -> str:
    """One line that names the file, without control characters that a header may hold."""
    text = "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in " ".join(text.split()))
    return text if str(path) in text else f"{path}: {text}"


# ── one after the other, several at once ──

_Work = Sequence[tuple[Path, str]]


def _in_turn(
    work: _Work, out_dir: Path, settings: Settings, as_json: bool, jobs: int, result: Result
) -> Iterator[Outcome]:
    for path, name in work:
        yield check_one(path, name, out_dir, settings, as_json)


def _at_once(
    work: _Work, out_dir: Path, settings: Settings, as_json: bool, jobs: int, result: Result
) -> Iterator[Outcome]:
    """In ``jobs`` processes of one thread each. After Ctrl-C those begun are finished, no more are begun."""
    from concurrent.futures import BrokenExecutor

    from joblib import Parallel, delayed, parallel_config

    stop = threading.Event()

    def in_processes(part: _Work) -> Iterator[Outcome]:
        def tasks() -> Iterator[Any]:
            for path, name in part:
                if stop.is_set():
                    return
                yield delayed(_in_worker)(path, name, out_dir, settings, as_json)

        with parallel_config(backend="loky", inner_max_num_threads=1):
            pool = Parallel(n_jobs=jobs, return_as="generator", pre_dispatch=jobs, batch_size=1)
            with _held_back():  # or Ctrl-C would end a process that is still starting
                outcomes = pool(tasks())
            yield from outcomes

    n_done = 0
    with _on_interrupt(stop):
        while n_done < len(work) and not stop.is_set():
            try:
                for outcome in in_processes(work[n_done:]):
                    n_done += 1
                    yield outcome
            except BrokenExecutor:
                # A process was killed from outside and took its neighbours' work along: find out whose fault it is.
                for path, name in () if stop.is_set() else work[n_done : n_done + jobs]:
                    n_done += 1
                    try:
                        yield from in_processes([(path, name)])
                    except BrokenExecutor:
                        died = "could not be checked: its process was killed, as a rule for want of memory"
                        yield Outcome(path=path, name=name, error=sentence(path, died))
    result.interrupted = stop.is_set()


def _in_worker(path: Path, name: str, out_dir: Path, settings: Settings, as_json: bool) -> Outcome:
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C reaches every process; only the first one decides
    return check_one(path, name, out_dir, settings, as_json)


@contextmanager
def _held_back() -> Iterator[None]:
    """Threads and processes started within never get Ctrl-C; this one gets it afterwards."""
    if not hasattr(signal, "pthread_sigmask"):
        yield
        return
    before = signal.pthread_sigmask(signal.SIG_BLOCK, [signal.SIGINT])
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


@contextmanager
def _on_interrupt(stop: threading.Event) -> Iterator[None]:
    """The first Ctrl-C sets ``stop``, the second one breaks off."""

    def note(number: int, frame: object) -> None:
        if stop.is_set():
            raise KeyboardInterrupt
        stop.set()
        typer.echo("Stopping once those begun are done; press Ctrl-C again to break off.", err=True)

    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(signal.SIGINT, note)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)


# ── telling ──


def _tell(outcome: Outcome) -> None:
    if outcome.error is not None:
        tell_error(outcome.error)
    else:
        print(outcome.line, flush=True)


def tell_error(text: str) -> None:
    """A line on stderr; by that name, so that it passes above the bar."""
    print(text, file=sys.stderr, flush=True)


def _close(result: Result, out_dir: Path) -> None:
    """The index over all that were looked at, and where things are."""
    n_checked = len(result.outcomes) - result.n_failed
    if result.n_recordings > 1 and result.outcomes:
        from sigguard.report.worklist import unreadable_row, write_worklist

        write_worklist([o.row or unreadable_row(o.name, o.error or "") for o in result.outcomes], out_dir)
    if result.interrupted:
        done = f"{len(result.outcomes)} of {result.n_recordings} done"
        typer.echo(f"Stopped: {done}; what was written is whole.", err=True)
    if result.n_recordings > 1 and result.outcomes:
        typer.echo(f"Reports: {out_dir / 'index.html'}", err=True)
    elif n_checked:
        typer.echo(f"Report: {out_dir / result.outcomes[0].name}", err=True)


@contextmanager
def progress(n: int) -> Iterator[Callable[[float], None]]:
    """A bar on stderr if that is a terminal; it shows only once there is something to wait for.

    What it yields takes the share done, from 0 to 1.
    """
    if not sys.stderr.isatty():
        yield lambda share: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeRemainingColumn

    # Lines for stdout pass above the bar only where both are the terminal; a pipe is left alone.
    bar = Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        TaskProgressColumn(),
        TimeRemainingColumn(),
        console=Console(stderr=True),
        transient=True,
        redirect_stdout=sys.stdout.isatty(),
    )
    with bar:
        task = bar.add_task(f"0/{n}" if n > 1 else "checking", total=1.0, visible=n > 1)

        def advance(share: float) -> None:
            # One short recording is done at its first report: no bar flashes up for it.
            if n > 1:
                bar.update(task, completed=share, description=f"{round(share * n)}/{n}")
            else:
                bar.update(task, completed=share, visible=share < 1.0)

        yield advance
