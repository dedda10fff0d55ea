"""``sigguard trim``: copies of what is fit, without the rest."""

from __future__ import annotations

from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from sigguard.cli import options
from sigguard.cli.options import Mains, Units
from sigguard.errors import SigguardError, UsageError

if TYPE_CHECKING:
    from sigguard.trimming import Trimmed


class Keep(StrEnum):
    RHYTHM = "rhythm"
    INTERVALS = "intervals"
    ALL = "all"


class Gaps(StrEnum):
    SPLIT = "split"
    BLANK = "blank"


def trim(
    paths: Annotated[
        list[Path], typer.Argument(help="Recordings, or folders to search for them.", metavar="PATH")
    ],
    keep: Annotated[Keep, typer.Option(help="The grade that what is kept must have, or a better one.")],
    best: Annotated[bool, typer.Option("--best", help="Also write the best strip, as NAME_best.")] = False,
    out: Annotated[Path, typer.Option(help="Folder for the copies.", metavar="DIR")] = Path(
        "sigguard-trimmed"
    ),
    gaps: Annotated[
        Gaps,
        typer.Option(
            help="split: each kept span a record of its own. blank: one record with gaps, same times."
        ),
    ] = Gaps.SPLIT,
    leads: Annotated[
        str | None,
        typer.Option(
            help="Leads that must be fit: any, all, or names such as I,II. By itself: all for a resting ECG, else any.",
            metavar="any|all|NAMES",
        ),
    ] = None,
    min_span: Annotated[
        float | None,
        typer.Option(
            help="Shortest span to keep. By itself 8 (strip 6, resting ECG 5).",
            metavar="SECONDS",
        ),
    ] = None,
    profile: Annotated[
        str | None,
        typer.Option(
            help="resting, strip, ambulatory, or a TOML file of your own. By itself: chosen by leads and duration.",
            metavar="NAME|FILE",
        ),
    ] = None,
    mains: Annotated[Mains, typer.Option(help="Mains frequency; auto finds out.")] = Mains.AUTO,
    fs: Annotated[
        float | None, typer.Option(help="Sampling rate of files that do not say.", metavar="HZ")
    ] = None,
    units: Annotated[Units | None, typer.Option(help="Unit of files that do not say.")] = None,
    with_identity: Annotated[
        bool, typer.Option("--with-identity", help="Let the remarks of the header into the copies.")
    ] = False,
) -> None:
    """Write copies of what is fit, without the rest; the source is never touched.

    Kept samples equal the source's. Cuts fall between beats. What looks like a lethal rhythm is
    always kept. DIR/NAME.cuts.json says what was kept, what was cut, and why.

    Exit code: 0 done; 4 look at a patient first; 1 a file could not be read or written; 2 wrong usage;
    130 stopped.
    """
    from sigguard.cli import batch
    from sigguard.readers import find_recordings
    from sigguard.trimming import trim as trim_one

    _check_min_span(min_span)
    profile = options.check_profile(profile)
    fs_hz = options.check_rate(fs)
    recordings = [p for p in find_recordings(options.check_paths(paths)) if not _is_ours(p, out)]
    options.check_out(out)
    alarm = failed = False
    with batch.progress(len(recordings)) as advance:
        for k, path in enumerate(recordings):

            def part_done(share: float, before: int = k) -> None:
                advance((before + share) / len(recordings))

            try:
                done = trim_one(
                    path,
                    keep=keep.value,
                    best=best,
                    out=out,
                    gaps=gaps.value,
                    leads=leads,
                    min_span_s=min_span,
                    profile=profile,
                    mains=mains.value,
                    fs_hz=fs_hz,
                    units=units.value if units else None,
                    with_identity=with_identity,
                    progress=part_done,
                )
                print(line_of(done), flush=True)
                alarm = alarm or bool(done.patient_first)
            except UsageError:
                raise
            except SigguardError as err:
                batch.tell_error(batch.sentence(path, str(err)))
                failed = True
            except MemoryError:
                batch.tell_error(batch.sentence(path, "not enough memory to trim it"))
                failed = True
            part_done(1.0)
    raise typer.Exit(4 if alarm else 1 if failed else 0)


def line_of(done: Trimmed) -> str:
    """One plain line: what is kept, of how much, and where it stands."""
    kept = [s for s in done.spans if s.kept]
    total = f"{done.info.duration_s:.1f} s"
    start = f"{done.info.name}: "
    if done.patient_first:
        start += "LOOK AT THE PATIENT FIRST (stretches kept, see the manifest). "
    grade = "everything" if done.keep == "all" else done.keep
    if not kept:
        text = f"nothing of its {total} is fit for {grade}; no record written, see {done.manifest}"
    elif len(kept) == len(done.spans):
        text = f"all of its {total} kept ({kept[0].file})"
    else:
        where = f"{len(kept)} span{'s' if len(kept) > 1 else ''}"
        text = f"{done.kept_s:.1f} s of {total} kept for {grade}, in {where}; see {done.manifest}"
    if done.best is not None:
        text += f"; best strip in {done.best.file}"
    return start + text


def _check_min_span(seconds: float | None) -> None:
    if seconds is not None and not 0 <= seconds < 1e9:
        raise UsageError(f"--min-span takes seconds from 0, found {seconds:g}")


def _is_ours(path: Path, out: Path) -> bool:
    """Whether a recording found in a searched folder is a copy of an earlier run."""
    import json

    if path.resolve().parent != out.resolve():
        return False
    for manifest in path.parent.glob("*.cuts.json"):
        try:
            if path.name in json.loads(manifest.read_bytes())["files"]:
                return True
        except (OSError, ValueError, KeyError, TypeError):
            continue
    return False
