"""From a recording to its report: the one place where the way from samples to verdict reads top to bottom."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from functools import reduce
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard import __version__
from sigguard.advice import advise
from sigguard.blocks import SegmentPlan, plan_segments
from sigguard.collecting import Collector
from sigguard.electrode_powers import join_powers
from sigguard.electrodes import whose_noise, worth_stating
from sigguard.errors import UsageError
from sigguard.findings import PatientFirst, Placement, Value, under_alarm
from sigguard.grading import best_strip, combine_values, grade_rows, judge, lead_summaries, spans
from sigguard.lead_laws import law_findings, scale_notes, usual_breaks
from sigguard.noise import MAINS_HZ
from sigguard.patient_first import MARGIN_S, cut_findings, find_patient_first, join_findings
from sigguard.placement import find_placement
from sigguard.profile import Profile, choose_profile, load_profile
from sigguard.readers import open_recording
from sigguard.recording import Recording, RecordingInfo
from sigguard.reliability import LEARNED_FAULTS
from sigguard.report.document import Report
from sigguard.rescoring import Setting, won_back
from sigguard.rhythm_gaps import Contact, contact
from sigguard.rhythm_shape import grid_samples
from sigguard.segment_pass import Part, Progress, Source, measure_all, shipped_model
from sigguard.segments import ABSENT, FAULTS, GRADES, MEASUREMENTS, UNITS, Segments
from sigguard.verdicts import silence_under
from sigguard.workers import Reopen, Workers

ALARM_BLOCK_S = 600.0
LEAST_ALARM_BLOCKS = 6
ALL_GRADE = GRADES.index("all")


@dataclass(frozen=True, slots=True, eq=False)
class _InMemory:
    recording: Recording

    @property
    def info(self) -> RecordingInfo:
        assert self.recording.info is not None
        return self.recording.info

    def read(self, start: int = 0, stop: int | None = None) -> NDArray[np.float64]:
        return np.asarray(self.recording.signal_mv[:, start:stop], dtype=np.float64)


def check(
    path_or_recording: str | Path | Recording,
    *,
    profile: str | Path | Profile | None = None,
    segment_s: float = 10.0,
    mains: str = "auto",
    fs_hz: float | None = None,
    units: str | None = None,
    fridericia: bool = False,
    with_identity: bool = False,
    progress: Progress | None = None,
) -> Report:
    """Check one recording: a path, or a Recording in memory.

    ``profile`` names a shipped profile or a TOML file (default: by lead count and duration);
    ``fs_hz`` and ``units`` help a CSV file that says neither. Raises ReadError for what cannot be
    read, UsageError and ProfileError for what makes no sense, ModelError without a sound model.
    """
    options = Options.of(profile=profile, segment_s=segment_s, mains=mains, fridericia=fridericia)
    if isinstance(path_or_recording, Recording):
        return screen(_InMemory(path_or_recording), options, progress=progress)
    with open_recording(path_or_recording, fs_hz=fs_hz, units=units, with_identity=with_identity) as source:
        return screen(source, options, progress=progress)


def screen_path(
    path: str | Path,
    *,
    out_dir: str | Path,
    name: str | None = None,
    profile: str | Path | None = None,
    segment_s: float = 10.0,
    mains: str = "auto",
    page: bool = True,
    annotate: bool = False,
    with_identity: bool = False,
    fs_hz: float | None = None,
    units: str | None = None,
    fridericia: bool = False,
    jobs: int = 1,
    progress: Progress | None = None,
) -> Report:
    """Check the recording at ``path`` and write its report into ``out_dir``/``name``.

    Writes report.json, segments.csv, with ``page`` report.html, with ``annotate`` NAME.sgq beside
    them; each whole or not at all. A long recording is shared out over ``jobs`` processes.
    """
    from sigguard.report.table import segments_csv
    from sigguard.writers.atomic import write_text_atomic

    options = Options.of(profile=profile, segment_s=segment_s, mains=mains, fridericia=fridericia)
    with open_recording(path, fs_hz=fs_hz, units=units, with_identity=with_identity) as source:
        workers = Workers(Reopen(Path(path), fs_hz, units), jobs) if jobs > 1 else None
        report = screen(source, options, workers=workers, progress=progress)
        folder = Path(out_dir) / (name or source.info.name)
        folder.mkdir(parents=True, exist_ok=True)
        segments_csv(report.segments, folder / "segments.csv")
        if annotate:
            from sigguard.writers.annotations import write_quality_annotation

            target = folder / (re.sub(r"[^A-Za-z0-9_-]", "_", source.info.name) or "recording")
            write_quality_annotation(
                target,
                report.segments,
                fs_hz=source.info.fs_hz,
                n_samples=source.info.n_samples,
                channels=source.channels,
                n_signals=source.n_signals,
                patient_first=report.patient_first,
                samples_per_frame=source.samples_per_frame,
            )
        if page:
            from sigguard.report.page import render_page
            from sigguard.report.strips import choose_strips

            text = render_page(report, choose_strips(report, source.read), with_identity=with_identity)
            write_text_atomic(folder / "report.html", text)
        write_text_atomic(folder / "report.json", report.to_json(with_identity=with_identity, indent=1))
    return report


@dataclass(frozen=True, slots=True)
class Options:
    """How to screen."""

    profile: Profile | None
    segment_s: float
    mains_among_hz: tuple[float, ...]
    fridericia: bool

    @classmethod
    def of(
        cls, *, profile: str | Path | Profile | None, segment_s: float, mains: str, fridericia: bool
    ) -> Options:
        known = {"auto": MAINS_HZ, "50": (50.0,), "60": (60.0,)}
        if mains not in known:
            raise UsageError(f"mains must be one of {', '.join(known)}, found {mains!r}")
        chosen = profile if isinstance(profile, Profile) or profile is None else load_profile(profile)
        return cls(chosen, segment_s, known[mains], fridericia)


def screen(
    source: Source, options: Options, *, workers: Workers | None = None, progress: Progress | None = None
) -> Report:
    """Samples to report. ``workers`` may share out a long recording; the report is the same."""
    info, model = source.info, shipped_model()
    profile = options.profile or load_profile(choose_profile(info.n_leads, info.duration_s))
    plan = plan_segments(info.n_samples, info.fs_hz, options.segment_s)
    collected = Collector(info, len(plan) * info.n_leads)
    for part in measure_all(
        source, plan, model, profile, options.mains_among_hz, workers=workers, progress=progress
    ):
        collected.add(part)
    beats = collected.lead_beats()
    alarms = _patient_first(source, beats, collected, workers)
    segments = _silenced(collected.segments(), alarms)
    handed = _global_measurements(collected.strips, info, plan)
    values, st_by_lead = combine_values(segments, handed, fridericia=options.fridericia)
    summaries = lead_summaries(segments)
    powers = join_powers(collected.powers)
    electrodes, common = whose_noise(powers)
    laws = usual_breaks(collected.laws)
    misplaced = _placement(collected.strips, segments, alarms)
    judgement = judge(profile, segments, values, st_by_lead, alarms, summaries=summaries)
    over_leads = collected.beats()
    acts = won_back(
        source,
        plan,
        segments,
        Setting(model, profile, options.mains_among_hz),
        lead_beats=beats,
        beats=over_leads,
        common=bool(collected.strips),
        alarms=alarms,
    )
    return Report(
        software_version=__version__,
        model_sha256=model.sha256 or None,
        profile_name=profile.name,
        profile_sha256=profile.sha256,
        info=info,
        judgement=judgement,
        values=values,
        st_by_lead=st_by_lead,
        lead_summaries=summaries,
        segments=segments,
        electrodes=worth_stating(electrodes, lost=bool((segments.grade < ALL_GRADE).any())),
        common_noise=common,
        electrode_powers=powers,
        placement=(*misplaced, *law_findings(laws)),
        patient_first=tuple(alarms),
        advice=tuple(advise(segments, acts, patient_first=alarms, placement=misplaced)),
        spans=spans(segments, info.duration_s),
        best_strip=best_strip(segments, info.leads, every=profile.name == "resting"),
        beats=over_leads,
        lead_beats=dict(zip(info.leads, beats, strict=True)),
        procedure_note=PROCEDURE_NOTE,
        notes=scale_notes(laws),
    )


PROCEDURE_NOTE = (
    "Apart from any disturbance, the measuring procedure itself differs from a careful hand. On open recordings marked "
    "by hand, none of which it was fitted to, the standard deviation of the difference is about 9 ms for PR, 12 ms for "
    "QRS and 20 to 30 ms for QT over all leads."
)


def _silenced(segments: Segments, alarms: Sequence[PatientFirst]) -> Segments:
    if not alarms:
        return segments
    stretches = [(a.start_s, a.end_s, a.pattern) for a in alarms]
    reliable = silence_under(segments.reliable, segments.start_s, segments.end_s, stretches)
    # A rhythm that may kill is not to be read as noise: what the classifiers call by name is not named here.
    fault = segments.fault.copy()
    under = under_alarm(alarms, segments.start_s, segments.end_s)
    for name in LEARNED_FAULTS:
        fault[under, FAULTS.index(name)] = 0.0
    return replace(segments, reliable=reliable, fault=fault, grade=grade_rows(reliable, segments.absent))


def _patient_first(
    source: Source, beats: Sequence[NDArray], collected: Collector, workers: Workers | None
) -> list[PatientFirst]:
    """Look for lethal rhythms block by block, with the margin that makes blocks see what the whole sees."""
    info = source.info
    grid = grid_samples(info.fs_hz)
    size = max(1, int(ALARM_BLOCK_S * info.fs_hz) // grid) * grid
    margin = int(np.ceil(MARGIN_S * info.fs_hz / grid)) * grid
    edges = [(start, min(start + size, info.n_samples)) for start in range(0, info.n_samples, size)]
    if workers is not None and len(edges) < LEAST_ALARM_BLOCKS:
        workers = None
    has_data: list[bool] | None = None
    rest_tells: NDArray[np.bool_] | None = None
    if len(edges) > 1:
        has_data, rest_tells = collected.has_data.tolist(), np.zeros(info.n_leads, dtype=bool)
        if collected.rests:  # how noisy the leads are matters only where one of them does not move
            noise = workers.run(_contact, edges) if workers else (_contact(source, *edge) for edge in edges)
            rest_tells = reduce(Contact.also, noise).rest_tells

    def tasks() -> Iterator[tuple]:
        for start, stop in edges:
            first, last = max(0, start - margin), min(info.n_samples, stop + margin)
            near = [at[np.searchsorted(at, first) : np.searchsorted(at, last)] for at in beats]
            yield start, stop, first, last, near, has_data, rest_tells

    found: Iterator[list[PatientFirst]]
    found = workers.run(_alarms, tasks()) if workers else (_alarms(source, *task) for task in tasks())
    return join_findings([alarm for part in found for alarm in part])


def _contact(source: Source, start: int, stop: int) -> Contact:
    return contact(source.read(start, stop), source.info.fs_hz)


def _alarms(
    source: Source,
    start: int,
    stop: int,
    first: int,
    last: int,
    beats: Sequence[NDArray],
    has_data: list[bool] | None,
    rest_tells: NDArray[np.bool_] | None,
) -> list[PatientFirst]:
    """What is found between two samples, seen with a margin; ``beats`` within it by lead."""
    info = source.info
    found = find_patient_first(
        source.read(first, last),
        info.fs_hz,
        info.leads,
        lead_beats_s=[(at - first) / info.fs_hz for at in beats],
        lead_has_data=has_data,
        rest_tells=rest_tells,
    )
    return cut_findings(
        found, offset_s=first / info.fs_hz, start_s=start / info.fs_hz, end_s=stop / info.fs_hz
    )


def _placement(
    parts: Sequence[Part], segments: Segments, alarms: Sequence[PatientFirst]
) -> tuple[Placement, ...]:
    """Misplaced electrodes, from the segment in which most leads have a reliable QRS; none under an alarm."""
    beats = [part.global_beat_mv for part in parts if part.global_beat_mv is not None]
    marks = [part.global_marks_ms for part in parts if part.global_marks_ms is not None]
    if not beats or alarms:
        return ()
    fit = segments.reliable[:, MEASUREMENTS.index("rate")].reshape(-1, len(segments.leads))
    best = int(fit.sum(axis=1).argmax())
    return find_placement(
        np.concatenate(beats)[best], np.concatenate(marks)[best], segments.leads, fit=fit[best]
    )


def _global_measurements(
    parts: Sequence[Part], info: RecordingInfo, plan: SegmentPlan
) -> dict[str, Value] | None:
    """Global PR, QRS and QT of a short recording with several leads, over its segments."""
    if not parts:
        return None
    value = np.concatenate([part.global_value for part in parts])  # type: ignore[misc]
    bound = np.concatenate([part.global_bound for part in parts])  # type: ignore[misc]
    reliable = np.concatenate([part.global_reliable for part in parts])  # type: ignore[misc]
    absent = np.concatenate([part.global_absent for part in parts])  # type: ignore[misc]
    weight = np.concatenate([part.lead_weight for part in parts])  # type: ignore[misc]
    length_s = (plan.stop - plan.start) / info.fs_hz
    leads = tuple(name for name, w in zip(info.leads, weight.max(axis=0), strict=True) if w >= 0.1)
    out = {}
    for k, name in enumerate(MEASUREMENTS[1:4]):
        use = reliable[:, k] if reliable[:, k].any() else np.isfinite(value[:, k])
        if not use.any():
            reason = (
                int(np.bincount(absent[:, k], minlength=len(ABSENT))[1:].argmax()) + 1
                if absent[:, k].any()
                else 0
            )
            out[name] = Value(UNITS[name], absent=ABSENT[reason] or None)
            continue
        x, b = value[use, k], bound[use, k]
        b = b[np.isfinite(b)]
        out[name] = Value(
            UNITS[name],
            float(np.median(x)),
            float(x.min()),
            float(x.max()),
            float(b.max()) if len(b) else None,
            bool(reliable[:, k].any()),
            None,
            leads,
            float(length_s[reliable[:, k]].sum()),
        )
    return out
