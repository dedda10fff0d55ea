"""``sigguard overrule``: a person's decision beside the program's."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer


def overrule(
    ledger: Annotated[Path, typer.Argument(help="The ledger of sigguard watch.", metavar="LEDGER")],
    name: Annotated[
        str,
        typer.Argument(help="The recording: its name in the inbox, or its report folder.", metavar="NAME"),
    ],
    verdict: Annotated[str, typer.Option(help="accept, accept-in-part or repeat.", metavar="V")],
    because: Annotated[str, typer.Option(help="The reason; no names of patients.", metavar="TEXT")],
) -> None:
    """Decide otherwise about a recording.

    The program's verdict, yours and your reason stay side by side in the ledger; no report changes.

    Exit code: 0; 1 where the ledger holds no such recording; 2 wrong usage.
    """
    from sigguard.inbox.ledger import Ledger
    from sigguard.inbox.overrule import overrule as enter
    from sigguard.report.words import plain

    with Ledger(ledger, must_exist=True) as opened:
        made = enter(opened, name, verdict=verdict, because=because)
    typer.echo(plain(f"{made.name}: {made.original} overruled: {made.verdict}, because {made.because}"))
    if made.patient_first:
        typer.echo("A patient-first stretch was found on it: that stands, whatever the verdict.", err=True)
