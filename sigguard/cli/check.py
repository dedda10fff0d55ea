"""``sigguard check``: check recordings and write their reports."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from sigguard.cli import options
from sigguard.cli.options import Mains, Units


def check(
    paths: Annotated[
        list[Path], typer.Argument(help="Recordings, or folders to search for them.", metavar="PATH")
    ],
    out: Annotated[Path, typer.Option(help="Folder for the reports.", metavar="DIR")] = Path(
        "sigguard-reports"
    ),
    profile: Annotated[
        str | None,
        typer.Option(
            help="resting, strip, ambulatory, or a TOML file of your own. By itself: chosen by leads and duration.",
            metavar="NAME|FILE",
        ),
    ] = None,
    segment: Annotated[float, typer.Option(help="Length of a segment, 5 to 30.", metavar="SECONDS")] = 10.0,
    mains: Annotated[Mains, typer.Option(help="Mains frequency; auto finds out.")] = Mains.AUTO,
    jobs: Annotated[
        int,
        typer.Option(
            help="Processes: recordings checked at once, or parts of a single long one.", metavar="N"
        ),
    ] = 1,
    json: Annotated[bool, typer.Option("--json", help="Print one report per line as JSON.")] = False,
    no_page: Annotated[bool, typer.Option("--no-page", help="Write no report.html.")] = False,
    annotate: Annotated[
        bool, typer.Option("--annotate", help="Add a WFDB annotation file (.sgq) of signal quality.")
    ] = False,
    fs: Annotated[
        float | None, typer.Option(help="Sampling rate of files that do not say.", metavar="HZ")
    ] = None,
    units: Annotated[Units | None, typer.Option(help="Unit of files that do not say.")] = None,
    fridericia: Annotated[
        bool, typer.Option("--fridericia", help="QTc by Fridericia, not by Bazett.")
    ] = False,
    with_identity: Annotated[
        bool, typer.Option("--with-identity", help="Let names and numbers of patients into the reports.")
    ] = False,
    exit_zero: Annotated[
        bool,
        typer.Option("--exit-zero", help="Leave with 0 where recordings must be repeated (instead of 3)."),
    ] = False,
) -> None:
    """Check recordings and write their reports.

    Says what can be measured on each, and what to do about the rest.

    Prints one line per recording and writes DIR/NAME/report.json, segments.csv and report.html;
    for more than one recording also DIR/index.html and index.csv.

    Exit code: 0 all accepted, wholly or in part; 4 look at a patient first; 1 a file could not be
    checked; 3 a recording must be repeated; 2 wrong usage; 130 stopped.
    """
    from sigguard.cli.batch import Settings, run

    settings = Settings(
        profile=options.check_profile(profile),
        segment_s=options.check_segment(segment),
        mains=mains.value,
        page=not no_page,
        annotate=annotate,
        with_identity=with_identity,
        fs_hz=options.check_rate(fs),
        units=units.value if units else None,
        fridericia=fridericia,
    )
    options.check_jobs(jobs)
    result = run(options.check_paths(paths), options.check_out(out), settings, jobs=jobs, as_json=json)
    raise typer.Exit(result.exit_code(exit_zero=exit_zero))
