"""Trimmed copies: what is fit for the asked measurements, bit for bit; the source is never touched."""

from __future__ import annotations

import filecmp
import json
import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from sigguard import __version__
from sigguard.cutting import Wanted, between_beats, to_rest
from sigguard.errors import UsageError
from sigguard.findings import CAUTION, PatientFirst
from sigguard.profile import Profile, choose_profile, load_profile
from sigguard.readers import open_recording
from sigguard.readers.base import OpenRecording
from sigguard.recording import RecordingInfo
from sigguard.report.document import Report
from sigguard.screening import Options, screen
from sigguard.segment_pass import Progress
from sigguard.segments import GRADES
from sigguard.trim_plan import CutSpan, Remeasure, holds, least_span_s, plan_trim, remeasure_of, wanted_of
from sigguard.writers.copies import CopySource, Written, copy_source, write_blank, write_copy
from sigguard.writers.staging import Stage, staged

__all__ = ["CutSpan", "Trimmed", "plan_trim", "trim"]

MANIFEST = "sigguard.cuts/1"
GAPS = ("split", "blank")
MOST_NAMES = 1000


@dataclass(frozen=True, slots=True, kw_only=True)
class Trimmed:
    """What was made of one recording; ``spans`` are in samples of its leads and add up to the whole."""

    name: str
    info: RecordingInfo
    keep: str
    spans: tuple[CutSpan, ...]
    best: CutSpan | None
    manifest: Path
    files: tuple[Path, ...]  # all that was written, the manifest last
    patient_first: tuple[PatientFirst, ...]
    notes: tuple[str, ...]

    @property
    def kept_s(self) -> float:
        return sum(s.stop - s.start for s in self.spans if s.kept) / self.info.fs_hz


def trim(
    path: str | Path,
    *,
    keep: str = "intervals",
    best: bool = False,
    out: str | Path = "sigguard-trimmed",
    gaps: str = "split",
    leads: str | Sequence[str] | None = None,
    min_span_s: float | None = None,
    profile: str | Path | Profile | None = None,
    segment_s: float = 10.0,
    mains: str = "auto",
    fs_hz: float | None = None,
    units: str | None = None,
    with_identity: bool = False,
    progress: Progress | None = None,
) -> Trimmed:
    """Write what of the recording at ``path`` is of grade ``keep`` or better, and a manifest, into ``out``.

    ``gaps`` ``split`` makes each kept stretch a record of its own (``NAME_1`` …), ``blank`` one record
    ``NAME`` of the original length with gaps. ``leads`` ``any``, ``all`` or names: which must be fit (by
    default ``all`` for a resting ECG, else ``any``). Stretches under ``min_span_s`` are let go. ``best``
    adds the best strip as ``NAME_best``, if there is one of that grade. Patient-first stretches are always kept.
    Another recording's files in ``out`` are never overwritten: the name becomes ``NAME-2`` and so on.

    Raises ReadError, UsageError, ProfileError and ModelError as ``check`` does, WriteError where the copies
    could not be written whole; then nothing of them is there.
    """
    if gaps not in GAPS:
        raise UsageError(f"gaps must be one of {', '.join(GAPS)}, found {gaps!r}")
    options = Options.of(profile=profile, segment_s=segment_s, mains=mains, fridericia=False)
    with open_recording(path, fs_hz=fs_hz, units=units, with_identity=with_identity) as opened:
        report = screen(opened, options, progress=_first_half(progress))
        wanted = wanted_of(report, keep, leads)
        least_s = least_span_s(report, min_span_s)
        used = options.profile or load_profile(choose_profile(opened.info.n_leads, opened.info.duration_s))
        remeasure = remeasure_of(opened, used, options.mains_among_hz, segment_s)
        with copy_source(opened, with_identity=with_identity) as source:
            spans = plan_trim(
                report, wanted=wanted, min_span_s=least_s, remeasure=remeasure, frame=source.per_frame
            )
            strip = _best(report, wanted, remeasure, source.per_frame) if best else None
            job = _Job(opened, report, wanted, least_s, gaps, source, spans, strip)
            done = job.write(Path(out))
    if progress is not None:
        progress(1.0)
    return done


def _first_half(progress: Progress | None) -> Progress | None:
    """Measuring the pieces again and copying them takes about as long as the check does."""
    return None if progress is None else lambda share: progress(share / 2)


def _best(report: Report, wanted: Wanted, remeasure: Remeasure, frame: int) -> CutSpan | None:
    """The best strip if it is of the grade: with edges between beats where it holds so, else as it was found."""
    strip, info = report.best_strip, report.info
    if strip is None or GRADES.index(strip.grade) < wanted.level:
        return None
    import numpy as np

    as_found = np.array([[strip.start_s, strip.end_s]])
    moved = to_rest(as_found, between_beats(np.asarray(report.beats) / info.fs_hz), info.duration_s)
    edges = moved if len(moved) and holds(remeasure(*moved[0].tolist()), wanted) else as_found
    start, stop = (np.rint(edges[0] * info.fs_hz / frame).astype(int) * frame).tolist()
    return CutSpan(start, min(stop, info.n_samples), True, f"best strip, grade {strip.grade}")


@dataclass(frozen=True, slots=True, eq=False)
class _Job:
    """All that is decided about one recording; writing it is left."""

    opened: OpenRecording
    report: Report
    wanted: Wanted
    min_span_s: float
    gaps: str
    source: CopySource
    spans: tuple[CutSpan, ...]
    strip: CutSpan | None

    def write(self, out_dir: Path) -> Trimmed:
        plain = re.sub(r"[^A-Za-z0-9_-]", "_", self.opened.info.name) or "recording"
        for n in range(1, MOST_NAMES):
            name = plain if n == 1 else f"{plain}-{n}"
            if _foreign_manifest(out_dir / _manifest_name(name), self.opened.info):
                continue
            with staged(out_dir, name) as stage:
                done = self._stage(stage, name)
                owned = _owned(out_dir, name, self.opened.info)
                if _collides(stage, done.files, owned, self.source):
                    continue
                stage.settle(done.files, replaces=owned)
            return self._told(out_dir, name, done)
        raise UsageError(f"{out_dir}: {MOST_NAMES} recordings of the name {plain}; choose another folder")

    def _stage(self, stage: Stage, name: str) -> _Staged:
        """Everything in the stage, checked; files in the order in which they may appear."""
        frames = [(s.start // self.source.per_frame, self._frame_stop(s)) for s in self.spans if s.kept]
        written: list[Written] = []
        if self.gaps == "blank" and frames:
            whole, written = write_blank(stage.folder, name, self.source, frames)
            records = [*written, whole]
            names = [f"{name}.hea"] * len(frames)
        else:
            written = [
                write_copy(stage.folder, f"{name}_{k}", self.source, *span)
                for k, span in enumerate(frames, start=1)
            ]
            records = list(written)
            names = [f"{one.name}.hea" for one in written]
        strip = self.strip
        if strip is not None:
            start, stop = strip.start // self.source.per_frame, self._frame_stop(strip)
            records.append(write_copy(stage.folder, f"{name}_best", self.source, start, stop))
            strip = replace(strip, file=f"{name}_best.hea")
        headers = iter(names)
        spans = tuple(replace(s, file=next(headers)) if s.kept else s for s in self.spans)
        files = [file for record in records for file in record.files if not file.endswith(".hea")]
        files += [file for record in records for file in record.files if file.endswith(".hea")]
        manifest = _manifest_name(name)
        document = self._manifest(name, spans, strip, [*files, manifest])
        text = json.dumps(document, ensure_ascii=False, allow_nan=False, indent=1)
        (stage.folder / manifest).write_text(text + "\n", encoding="utf-8", newline="\n")
        return _Staged((*files, manifest), spans, strip)

    def _frame_stop(self, span: CutSpan) -> int:
        return span.stop // self.source.per_frame

    def _manifest(
        self, name: str, spans: tuple[CutSpan, ...], strip: CutSpan | None, files: list[str]
    ) -> dict[str, Any]:
        info, wanted = self.opened.info, self.wanted
        return {
            "schema": MANIFEST,
            "software": {"version": __version__, "model_sha256": self.report.model_sha256},
            "source": {
                "name": Path(info.path).name if info.path else info.name,
                "format": info.format,
                "sha256": info.sha256,
                "fs_hz": info.fs_hz,
                "n_samples": info.n_samples,
                "duration_s": round(info.duration_s, 3),
            },
            "keep": wanted.grade,
            "leads": {"must": "all" if wanted.every else "any", "of": [info.leads[k] for k in wanted.leads]},
            "gaps": self.gaps,
            "min_span_s": self.min_span_s,
            "record": f"{name}.hea" if self.gaps == "blank" and any(s.kept for s in spans) else None,
            "spans": [_span_entry(s, info) for s in spans],
            "best": None if strip is None else _span_entry(strip, info),
            "patient_first": [
                {"leads": list(a.leads), "start_s": round(a.start_s, 3), "end_s": round(a.end_s, 3)}
                | {"pattern": a.pattern}
                for a in self.report.patient_first
            ],
            "notes": list(self.source.notes),
            "files": files,
            "caution": CAUTION,
        }

    def _told(self, out_dir: Path, name: str, done: _Staged) -> Trimmed:
        return Trimmed(
            name=name,
            info=self.opened.info,
            keep=self.wanted.grade,
            spans=done.spans,
            best=done.strip,
            manifest=out_dir / _manifest_name(name),
            files=tuple(out_dir / file for file in done.files),
            patient_first=self.report.patient_first,
            notes=self.source.notes,
        )


@dataclass(frozen=True, slots=True)
class _Staged:
    files: tuple[str, ...]
    spans: tuple[CutSpan, ...]
    strip: CutSpan | None


def _span_entry(span: CutSpan, info: RecordingInfo) -> dict[str, Any]:
    return {
        "start_sample": span.start,
        "end_sample": span.stop,
        "start_s": round(span.start / info.fs_hz, 3),
        "end_s": round(span.stop / info.fs_hz, 3),
        "kept": span.kept,
        "reason": span.reason,
        "file": span.file,
    }


# ── whose files are there ──


def _manifest_name(name: str) -> str:
    return f"{name}.cuts.json"


def _earlier(path: Path) -> dict[str, Any] | None:
    """A manifest of an earlier run; None if there is none that can be read."""
    try:
        found = json.loads(path.read_bytes())
        return found if isinstance(found, dict) and found.get("schema") == MANIFEST else None
    except (OSError, ValueError, RecursionError):
        return None


def _foreign_manifest(path: Path, info: RecordingInfo) -> bool:
    """Whether there is a manifest, and it is not known to be of this very source."""
    if not path.exists():
        return False
    found = _earlier(path)
    source = None if found is None else found.get("source")
    return not isinstance(source, dict) or source.get("sha256") != info.sha256


def _owned(out_dir: Path, name: str, info: RecordingInfo) -> list[str]:
    """Files of an earlier run on the same source: what says most goes first (manifest, headers, samples)."""
    found = _earlier(out_dir / _manifest_name(name))
    if found is None or not isinstance(found.get("files"), list):
        return []
    pattern = re.compile(rf"{re.escape(name)}[A-Za-z0-9_-]*\.[A-Za-z0-9]+(\.json)?")
    files = [f for f in found["files"] if isinstance(f, str) and pattern.fullmatch(f)]
    return sorted(files, key=lambda f: (not f.endswith(".json"), not f.endswith(".hea")))


def _collides(stage: Stage, files: Sequence[str], owned: list[str], source: CopySource) -> bool:
    """Whether a file of this name is there that is neither ours nor the very same; upper and lower case count as one."""
    there = {path.name.casefold(): path for path in stage.out_dir.iterdir()}
    sources = {path.resolve() for path in (*source.files, *(path for path, _ in source.marks))}
    owned[:] = [f for f in owned if (stage.out_dir / f).resolve() not in sources]
    for file in files:
        path = there.get(file.casefold())
        if path is None or path.name in owned:
            continue
        same = path.name == file and path.is_file() and path.resolve() not in sources
        if not (same and filecmp.cmp(path, stage.folder / file, shallow=False)):
            return True
    return False
