"""``sigguard demo``: write the demonstration recordings and check them."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer


def demo(
    folder: Annotated[
        Path, typer.Argument(help="Where to write.", metavar="[DIR]", show_default=True)
    ] = Path("sigguard-demo"),
) -> None:
    """Write demonstration recordings and check them.

    All of them are simulated; reports go to DIR/reports.

    Exit code: 0 if all could be checked, whatever was found on them; 1 if not.
    """
    from sigguard.cli import options
    from sigguard.cli.batch import Settings, run
    from sigguard.simulate.demo import write_demo

    recordings = write_demo(options.check_out(folder))
    result = run(recordings, options.check_out(folder / "reports"), Settings(), jobs=1, as_json=False)
    typer.echo(f"Recordings: {folder}", err=True)
    raise typer.Exit(130 if result.interrupted else 1 if result.n_failed else 0)
