"""The command ``sigguard``: one file a command, and nothing heavy imported before a command runs.

Exit codes: 0 all accepted, wholly or in part; 2 wrong usage; 4 at least one patient-first stretch
(outranks the rest); 1 at least one file could not be checked; 3 at least one must be repeated;
130 stopped with Ctrl-C.
"""

from __future__ import annotations

import sys
from typing import Annotated

import typer

from sigguard.cli.check import check
from sigguard.cli.compare import compare
from sigguard.cli.demo import demo
from sigguard.cli.history import history
from sigguard.cli.overrule import overrule
from sigguard.cli.train import train
from sigguard.cli.trim import trim
from sigguard.cli.watch import watch
from sigguard.errors import ProfileError, SigguardError, UsageError

__all__ = ["app", "main"]

app = typer.Typer(
    name="sigguard",
    help="Says which measurements on an ECG recording can be trusted, and which electrode to see to. "
    "A screening aid, no diagnosis.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)


def _print_version(wanted: bool) -> None:
    if not wanted:
        return
    from importlib.metadata import PackageNotFoundError, version

    try:
        found = version("sigguard")
    except PackageNotFoundError:
        found = "(not installed, run from its source)"
    typer.echo(f"sigguard {found}")
    raise typer.Exit


@app.callback()
def _top(
    version: Annotated[
        bool,
        typer.Option("--version", help="Print the version and stop.", callback=_print_version, is_eager=True),
    ] = False,
) -> None:
    pass


app.command()(check)
app.command()(trim)
app.command()(compare)
app.command()(demo)
app.command()(watch)
app.command()(history)
app.command()(overrule)
app.command()(train)


def main() -> None:
    """Run the command line; leaves through SystemExit with the exit code."""
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):  # odd file names must not stop a run on a narrow terminal
            stream.reconfigure(errors="backslashreplace")
    try:
        app(prog_name="sigguard")
    except SigguardError as err:
        typer.echo(f"sigguard: {err}", err=True)
        sys.exit(2 if isinstance(err, UsageError | ProfileError) else 1)
    except KeyboardInterrupt:
        typer.echo("sigguard: stopped", err=True)
        sys.exit(130)
