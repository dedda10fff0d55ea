"""``sigguard history``: repeat rates and their causes, from the ledger of a watch."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from sigguard.errors import UsageError


def history(
    ledger: Annotated[Path, typer.Argument(help="The ledger of sigguard watch.", metavar="LEDGER")],
    as_csv: Annotated[bool, typer.Option("--csv", help="Print the lines as CSV.")] = False,
    as_json: Annotated[bool, typer.Option("--json", help="Print all as one JSON object.")] = False,
) -> None:
    """Tell how often recordings must be repeated, and why.

    By source folder, device, lead, electrode, fault and day, and how often people decided otherwise.

    Exit code: 0; 1 where the ledger cannot be read; 2 wrong usage.
    """
    if as_csv and as_json:
        raise UsageError("--csv and --json: one of them")
    import json

    from sigguard.inbox import history as told
    from sigguard.inbox.ledger import Ledger

    with Ledger(ledger, must_exist=True) as opened:
        if as_json:
            text = json.dumps(told.as_dict(opened), ensure_ascii=False, allow_nan=False) + "\n"
        else:
            text = told.as_csv(opened) if as_csv else told.as_text(opened)
    typer.echo(text, nl=False)
