"""``sigguard compare``: several takes of one patient, and which of them to keep."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from sigguard.cli import options
from sigguard.cli.options import Mains, Units
from sigguard.errors import SigguardError, UsageError

if TYPE_CHECKING:
    from sigguard.cli.batch import Settings
    from sigguard.report.comparison import Comparison
    from sigguard.report.document import Report


def compare(
    takes: Annotated[
        list[Path],
        typer.Argument(help="Two or more takes of one patient, or a folder of them.", metavar="TAKE"),
    ],
    out: Annotated[Path, typer.Option(help="Folder for comparison and reports.", metavar="DIR")] = Path(
        "sigguard-compared"
    ),
    profile: Annotated[
        str | None,
        typer.Option(
            help="resting, strip, ambulatory, or a TOML file of your own, for all takes.", metavar="NAME|FILE"
        ),
    ] = None,
    segment: Annotated[float, typer.Option(help="Length of a segment, 5 to 30.", metavar="SECONDS")] = 10.0,
    mains: Annotated[Mains, typer.Option(help="Mains frequency; auto finds out.")] = Mains.AUTO,
    json: Annotated[bool, typer.Option("--json", help="Print the comparison as JSON, on one line.")] = False,
    fs: Annotated[
        float | None, typer.Option(help="Sampling rate of files that do not say.", metavar="HZ")
    ] = None,
    units: Annotated[Units | None, typer.Option(help="Unit of files that do not say.")] = None,
    exit_zero: Annotated[
        bool, typer.Option("--exit-zero", help="Leave with 0 where a take must be repeated (instead of 3).")
    ] = False,
) -> None:
    """Compare takes of one patient: which to keep for each measurement and over all, and why.

    Prints one line and writes DIR/compare.json, DIR/compare.html and the report of each take below DIR.

    Exit code: 0 all takes accepted; 4 look at a patient first; 1 a take could not be checked (the others
    are still compared); 3 a take must be repeated; 2 wrong usage.
    """
    from sigguard.cli.batch import Settings

    settings = Settings(
        profile=options.check_profile(profile),
        segment_s=options.check_segment(segment),
        mains=mains.value,
        fs_hz=options.check_rate(fs),
        units=units.value if units else None,
    )
    found, code = _compared(options.check_paths(takes), out, settings)
    if found is not None:
        from sigguard.report.comparison import one_line

        print(found.to_json(indent=None) if json else one_line(found), flush=True)
        typer.echo(f"Comparison: {out / 'compare.html'}", err=True)
    raise typer.Exit(0 if code == 3 and exit_zero else code)


def _compared(paths: list[Path], out_dir: Path, settings: Settings) -> tuple[Comparison | None, int]:
    """Check the takes one after the other, hold them against each other, write; what was found and the exit code."""
    from sigguard.cli.naming import assign_folders, leave_out_reports
    from sigguard.compare import compare as hold_together
    from sigguard.readers import find_recordings
    from sigguard.report.compare_page import write_comparison

    recordings = leave_out_reports(find_recordings(paths), out_dir)
    if len(recordings) < 2:
        raise UsageError(f"compare takes two or more different takes, found {len(recordings)}")
    options.check_out(out_dir)
    checked: list[tuple[str, Report]] = []
    unreadable: list[tuple[str, str]] = []
    for path, name in zip(recordings, assign_folders(recordings, out_dir), strict=True):
        report = _check(path, name, out_dir, settings)
        if isinstance(report, str):
            typer.echo(report, err=True)
            unreadable.append((name, report))
        else:
            checked.append((name, report))
    if not checked:
        return None, 1
    links = {name: f"{name}/report.html" for name, _ in checked}
    found = hold_together(checked, links=links, unreadable=unreadable)
    write_comparison(found, out_dir)
    if found.must_not_discard:
        return found, 4
    if unreadable:
        return found, 1
    return found, 3 if any(take.verdict == "repeat" for take in found.takes) else 0


def _check(path: Path, name: str, out_dir: Path, settings: Settings) -> Report | str:
    """The report of one take, or the sentence that says why there is none."""
    from dataclasses import asdict

    from sigguard.cli.batch import sentence
    from sigguard.screening import screen_path

    try:
        return screen_path(path, out_dir=out_dir, name=name, **asdict(settings))
    except SigguardError as err:
        return sentence(path, str(err))
    except MemoryError:
        return sentence(path, "not enough memory to check it")
    except Exception as err:  # a mistake of ours on one take must not keep the others from being compared
        fault = f"could not be checked, a fault of the program: {type(err).__name__}: {err}; please report it"
        return sentence(path, fault)
