"""``sigguard watch``: check each recording of an inbox once it has arrived whole."""

from __future__ import annotations

import os
import signal
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from sigguard.cli import options
from sigguard.cli.options import Mains, Units
from sigguard.errors import WriteError

if TYPE_CHECKING:
    from sigguard.inbox.watch import StopRequest


def watch(
    folder: Annotated[Path, typer.Argument(help="The inbox; a network share will do.", metavar="FOLDER")],
    out: Annotated[Path, typer.Option(help="Folder for the reports.", metavar="DIR")] = Path(
        "sigguard-reports"
    ),
    ledger: Annotated[
        Path | None,
        typer.Option(
            help="The ledger, on a local disk. By itself: DIR/ledger.sqlite.",
            metavar="FILE",
            show_default=False,
        ),
    ] = None,
    once: Annotated[
        bool, typer.Option("--once", help="Check what is there and whole, then leave; for cron.")
    ] = False,
    on_alert: Annotated[
        str | None,
        typer.Option(
            help="Run this for patient first, repeat and unreadable; it gets the JSON line on stdin. No shell.",
            metavar="COMMAND",
        ),
    ] = None,
    alert_timeout: Annotated[
        float, typer.Option(help="Time limit of that command.", metavar="SECONDS")
    ] = 30.0,
    route: Annotated[
        Path | None,
        typer.Option(
            help="Copy each recording to accept, accept-in-part, repeat, patient-first or unreadable in there.",
            metavar="DIR",
        ),
    ] = None,
    settle: Annotated[
        float, typer.Option(help="A recording is whole when unchanged for this long.", metavar="SECONDS")
    ] = 3.0,
    patience: Annotated[
        float, typer.Option(help="Wait this long for missing parts of a recording.", metavar="SECONDS")
    ] = 60.0,
    every: Annotated[float, typer.Option(help="Look into the inbox this often.", metavar="SECONDS")] = 1.0,
    profile: Annotated[
        str | None, typer.Option(help="As for check.", metavar="NAME|FILE", show_default=False)
    ] = None,
    segment: Annotated[float, typer.Option(help="Length of a segment, 5 to 30.", metavar="SECONDS")] = 10.0,
    mains: Annotated[Mains, typer.Option(help="Mains frequency; auto finds out.")] = Mains.AUTO,
    no_page: Annotated[bool, typer.Option("--no-page", help="Write no report.html.")] = False,
    fs: Annotated[
        float | None, typer.Option(help="Sampling rate of files that do not say.", metavar="HZ")
    ] = None,
    units: Annotated[Units | None, typer.Option(help="Unit of files that do not say.")] = None,
    exit_zero: Annotated[
        bool, typer.Option("--exit-zero", help="With --once: leave with 0 where recordings must be repeated.")
    ] = False,
) -> None:
    """Check each recording once it has arrived whole, and keep a ledger.

    Prints one JSON line for each. Those there already come first; changed content is checked again.
    SIGTERM or Ctrl-C finishes the recording in hand and leaves; a kill loses nothing.

    Exit code: 0 when stopped; with --once as for check, over what this run checked.
    """
    for name, seconds in (("--settle", settle), ("--patience", patience)):
        options.check_seconds(name, seconds, least_s=0.0)
    for name, seconds in (("--every", every), ("--alert-timeout", alert_timeout)):
        options.check_seconds(name, seconds, least_s=0.05)
    options.check_inbox(folder, out, route)
    from sigguard.inbox.alerts import split_command
    from sigguard.inbox.watch import StopRequest, Watcher, WatchSettings

    settings = WatchSettings(
        folder=folder,
        out_dir=options.check_out(out),
        ledger=ledger or out / "ledger.sqlite",
        route_dir=None if route is None else options.check_out(route, "--route"),
        alert_words=split_command(on_alert) if on_alert is not None else (),
        alert_limit_s=alert_timeout,
        settle_s=settle,
        patience_s=patience,
        every_s=every,
        screening={
            "profile": options.check_profile(profile),
            "segment_s": options.check_segment(segment),
            "mains": mains.value,
            "page": not no_page,
            "fs_hz": options.check_rate(fs),
            "units": units.value if units else None,
        },
    )
    watcher = Watcher(settings, tell=_tell, complain=_complain)
    stop = StopRequest()
    with _on_signal(stop):
        tally = watcher.run(stop, once=once)
    for name, reason in tally.left.items() if once else ():
        _complain(f"{name}: left for the next run ({reason})")
    if not once:
        raise typer.Exit(0)
    if tally.n_patient_first:
        raise typer.Exit(4)
    if stop.is_set():
        raise typer.Exit(130)
    if tally.n_unreadable:
        raise typer.Exit(1)
    raise typer.Exit(3 if tally.n_repeat and not exit_zero else 0)


def _tell(line: str) -> None:
    try:
        print(line, flush=True)
    except OSError as err:  # nobody listens any more; the ledger has the line and the next run prints it
        with open(os.devnull, "w") as nowhere:
            os.dup2(nowhere.fileno(), sys.stdout.fileno())
        raise WriteError(f"stdout: the line cannot be written ({err.strerror or err})") from err


def _complain(text: str) -> None:
    from sigguard.report.words import plain

    typer.echo(plain(text), err=True)


@contextmanager
def _on_signal(stop: StopRequest) -> Iterator[None]:
    """SIGTERM and Ctrl-C ask to stop after the recording in hand; a second Ctrl-C breaks off."""
    numbers = (signal.SIGTERM, signal.SIGINT)

    def note(number: int, frame: object) -> None:
        if stop.is_set() and number == signal.SIGINT:
            raise KeyboardInterrupt
        stop.set()

    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = [signal.signal(number, note) for number in numbers]
    try:
        yield
    finally:
        for number, handler in zip(numbers, before, strict=True):
            signal.signal(number, handler)
