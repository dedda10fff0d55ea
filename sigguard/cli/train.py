"""``sigguard train``: train the classifiers anew."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer


def train(
    noise: Annotated[
        Path | None,
        typer.Option(help="Folder of recorded noise (bw, ma, em). Without: simulated only.", metavar="DIR"),
    ] = None,
    carriers: Annotated[
        Path | None, typer.Option(help="Folder of clean recordings to spoil as well.", metavar="DIR")
    ] = None,
    seed: Annotated[
        int | None, typer.Option(help="Seed of all chance. Without: that of the recipe.", metavar="N", min=0)
    ] = None,
    out: Annotated[Path, typer.Option(help="Folder for the model and its card.", metavar="DIR")] = Path(
        "sigguard-model"
    ),
    jobs: Annotated[int, typer.Option(help="Processes at once.", metavar="N")] = 2,
) -> None:
    """Learn anew what can be trusted.

    Simulates recordings, spoils them, measures, learns, and writes the model and its card.
    """
    from sigguard.cli import options

    for option, folder in (("--noise", noise), ("--carriers", carriers)):
        options.check_folder(option, folder)

    from sigguard.training import train as train_model

    train_model(
        noise_dir=noise,
        carriers_dir=carriers,
        seed=seed,
        out_dir=options.check_out(out),
        progress=_say,
        jobs=options.check_jobs(jobs),
    )
    typer.echo(f"Model and card: {out}", err=True)


def _say(stage: str, done: int, total: int) -> None:
    typer.echo(f"{stage}: {done} of {total}", err=True)
