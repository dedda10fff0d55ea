"""One pass over the samples: batches of segments measured and judged, part by part."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from functools import cache
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from sigguard.blocks import Batch, SegmentPlan, batches, rows_of
from sigguard.electrode_powers import ElectrodePowers, electrode_powers
from sigguard.faults import judge_faults
from sigguard.features import FEATURE_NAMES
from sigguard.global_values import GLOBAL_FEATURE_NAMES, analyse_global
from sigguard.grading import grade_rows
from sigguard.lead_laws import LawBreak, law_breaks
from sigguard.measure import Analysis, analyse
from sigguard.profile import Profile
from sigguard.recording import RecordingInfo
from sigguard.reliability import ReliabilityModel
from sigguard.rhythm_gaps import at_rest
from sigguard.segments import GRADES, Segments
from sigguard.verdicts import (
    NO_WAVE,
    agreeing_leads,
    hardly_there,
    judge_rows,
    limit_by_recording,
    small_here,
)
from sigguard.workers import Workers

GLOBAL_MOST_S = 60.0  # longer recordings have too much change in them for one global value
POWERS_ALL_S = 600.0  # of longer recordings some of the spoilt segments tell whose noise it is
POWERS_OF = 16  # one segment in so many is asked, wherever blocks begin
LEAST_BATCHES = 6  # below that, starting other processes takes longer than they save
Progress = Callable[[float], None]


class Source(Protocol):
    """Anything whose samples can be read in stretches: an opened file, or a Recording in memory."""

    @property
    def info(self) -> RecordingInfo: ...

    def read(self, start: int = 0, stop: int | None = None) -> NDArray[np.float64]: ...


@dataclass(frozen=True, slots=True, eq=False)
class Part:
    """What one batch of segments gave."""

    segments: Segments
    lead_beats: list[NDArray[np.int64]]  # per lead, sample indices in the recording
    common_beats: NDArray[np.int64] | None
    global_value: NDArray[np.float64] | None  # (n_segments, 3)
    global_bound: NDArray[np.float64] | None
    global_reliable: NDArray[np.bool_] | None
    global_absent: NDArray[np.int8] | None
    lead_weight: NDArray[np.float64] | None  # (n_segments, n_leads)
    electrode_powers: ElectrodePowers | None
    law_breaks: tuple[LawBreak, ...]
    has_data: NDArray[np.bool_]  # (n_leads,): at least one sample here
    rests: bool  # a lead does not move for a while; seams lie within the margin, so none is missed
    global_beat_mv: NDArray[np.float32] | None  # (n_segments, n_leads, LENGTH), about the common beat
    global_marks_ms: NDArray[np.float64] | None  # (n_segments, 5)


def measure_all(
    source: Source,
    plan: SegmentPlan,
    model: ReliabilityModel,
    profile: Profile,
    mains_among_hz: tuple[float, ...],
    *,
    workers: Workers | None = None,
    progress: Progress | None = None,
) -> Iterator[Part]:
    """The parts of a recording in order of time, each measured and judged by itself.

    With ``workers`` the batches of a long recording are measured in other processes; what comes out is the same.
    """
    todo = list(batches(plan, source.info.n_leads))
    found: Iterator[Part]
    if workers is None or len(todo) < LEAST_BATCHES:
        found = (
            _measure_batch(
                source.info,
                plan,
                batch,
                source.read(batch.read_start, batch.read_stop),
                model,
                profile,
                mains_among_hz,
            )
            for batch in todo
        )
    else:
        found = workers.run(
            _measure_there,
            ((*_alone(batch, plan), profile, mains_among_hz) for batch in todo),
        )
    for batch, part in zip(todo, found, strict=True):
        yield part
        if progress is not None:
            progress((batch.first + batch.count) / len(plan))


def _alone(batch: Batch, plan: SegmentPlan) -> tuple[Batch, SegmentPlan]:
    """A batch and a plan of only its segments: less to send than the plan of two weeks."""
    own = slice(batch.first, batch.first + batch.count)
    return replace(batch, first=0), replace(plan, start=plan.start[own], stop=plan.stop[own])


def _measure_there(
    source: Source, batch: Batch, plan: SegmentPlan, profile: Profile, mains_among_hz: tuple[float, ...]
) -> Part:
    """One batch in a process of its own."""
    block = source.read(batch.read_start, batch.read_stop)
    return _measure_batch(source.info, plan, batch, block, shipped_model(), profile, mains_among_hz)


@cache
def shipped_model() -> ReliabilityModel:
    """The model that ships, loaded and proved once per process."""
    return ReliabilityModel.load(feature_names=FEATURE_NAMES, global_feature_names=GLOBAL_FEATURE_NAMES)


def _measure_batch(
    info: RecordingInfo,
    plan: SegmentPlan,
    batch: Batch,
    block_mv: NDArray[np.float64],
    model: ReliabilityModel,
    profile: Profile,
    mains_among_hz: tuple[float, ...],
) -> Part:
    n_leads, fs_hz = info.n_leads, info.fs_hz
    rows = rows_of(batch, block_mv)
    lead_index = np.tile(np.arange(n_leads), batch.count)
    analysis = analyse(
        rows,
        fs_hz,
        rails_mv=None if info.rails_mv is None else info.rails_mv[lead_index],
        step_mv=None if info.step_mv is None else info.step_mv[lead_index],
        margin=batch.margin,
        mains_among_hz=mains_among_hz,
    )
    at = (
        np.rint(analysis.beat_s * fs_hz).astype(np.int64)
        + plan.start[batch.first + analysis.beat_row // n_leads]
    )
    lead_beats = [at[analysis.beat_row % n_leads == k] for k in range(n_leads)]
    strips = n_leads > 1 and info.duration_s <= GLOBAL_MOST_S
    common = _global_part(rows, batch, analysis, model, profile, plan, fs_hz, n_leads) if strips else {}
    core_rows = rows[:, batch.margin[0] : rows.shape[1] - batch.margin[1]]
    core = core_rows.reshape(batch.count, n_leads, -1)
    segments = _table(info, plan, batch, lead_index, core_rows, analysis, model, profile, common.get("agree"))
    hum = analysis.features[:, [FEATURE_NAMES.index("mains_hz"), FEATURE_NAMES.index("mains_uv")]]
    powers = electrode_powers(
        core,
        fs_hz,
        info.leads,
        analysis,
        start_s=segments.start_s[::n_leads],
        end_s=segments.end_s[::n_leads],
        mains_hz=hum[:, 0].reshape(batch.count, n_leads),
        mains_uv=hum[:, 1].reshape(batch.count, n_leads),
        wanted=None
        if info.duration_s <= POWERS_ALL_S
        else _some_spoilt(
            segments.grade, n_leads, plan.start[batch.first : batch.first + batch.count], batch.size
        ),
    )
    return Part(
        segments,
        lead_beats,
        common.get("beats"),
        common.get("value"),
        common.get("bound"),
        common.get("reliable"),
        common.get("absent"),
        common.get("weight"),
        powers,
        law_breaks(core.transpose(1, 0, 2).reshape(n_leads, -1), fs_hz, info.leads),
        np.asarray(np.isfinite(block_mv).any(axis=1)),
        bool(at_rest(block_mv, fs_hz).any()),
        common.get("beat_mv"),
        common.get("marks_ms"),
    )


def _some_spoilt(
    grade: NDArray[np.int8], n_leads: int, start: NDArray[np.int64], size: int
) -> NDArray[np.bool_]:
    """(S,): every POWERS_OF-th segment of the recording, if a lead there is below the highest grade."""
    spoilt = (grade.reshape(-1, n_leads) < GRADES.index("all")).any(axis=1)
    return np.asarray(spoilt & (start // size % POWERS_OF == 0))


def _table(
    info: RecordingInfo,
    plan: SegmentPlan,
    batch: Batch,
    lead_index: NDArray[np.intp],
    core_mv: NDArray[np.float64],
    analysis: Analysis,
    model: ReliabilityModel,
    profile: Profile,
    agree: NDArray[np.bool_] | None,
) -> Segments:
    found = decide(info, lead_index, analysis, model, profile, agree)
    fault, details = judge_faults(
        model,
        analysis,
        core_mv,
        info.fs_hz,
        fault_p=found.fault_p,
        lost=~found.reliable & (found.absent == 0),
        limited=found.limited,
        n_leads=info.n_leads,
    )
    which = batch.first + np.repeat(np.arange(batch.count), info.n_leads)
    return Segments(
        leads=info.leads,
        feature_names=FEATURE_NAMES,
        lead_index=lead_index.astype(np.int32),
        start_s=plan.start[which] / info.fs_hz,
        end_s=plan.stop[which] / info.fs_hz,
        value=found.value,
        score=found.score,
        bound=found.bound,
        reliable=found.reliable,
        absent=found.absent,
        grade=grade_rows(found.reliable, found.absent),
        fault=fault,
        features=analysis.features,
        details=details,
    )


@dataclass(frozen=True, slots=True, eq=False)
class Decision:
    """What is decided of (R,) rows, before any alarm is looked for."""

    value: NDArray[np.float64]
    score: NDArray[np.float64]
    bound: NDArray[np.float64]
    reliable: NDArray[np.bool_]
    absent: NDArray[np.int8]
    fault_p: NDArray[np.float64]
    limited: NDArray[np.bool_]


def decide(
    info: RecordingInfo,
    lead_index: NDArray[np.intp],
    analysis: Analysis,
    model: ReliabilityModel,
    profile: Profile,
    agree: NDArray[np.bool_] | None,
) -> Decision:
    """What of each row's measurements can be trusted or is absent; rows run by time and then lead."""
    score, bound, reliable, absent, fault_p = judge_rows(model, analysis, tolerances(profile), agree)
    reliable, limited = limit_by_recording(reliable, lead_index, info.fs_hz, info.band_hz)
    hidden = hardly_there(analysis.features, reliable)
    named = absent
    absent = small_here(np.where(hidden, NO_WAVE, named), reliable, analysis.value, info.n_leads)
    # What is small here without being seen elsewhere is not called absent: it was merely not trusted.
    absent = np.where(hidden & (absent == NO_WAVE), named, absent).astype(np.int8)
    value = np.where(absent > 0, np.nan, analysis.value)
    bound = np.where(absent > 0, np.nan, bound)
    return Decision(value, score, bound, reliable, absent, fault_p, limited)


def tolerances(profile: Profile) -> NDArray[np.float64]:
    """(5,) tolerances in the order of MEASUREMENTS; the first is unused, rate is judged by beats."""
    t = profile.tolerance
    return np.array([np.nan, t.pr_ms, t.qrs_ms, t.qt_ms, t.st_mv])


def _global_part(
    rows: NDArray[np.float64],
    batch: Batch,
    analysis: Analysis,
    model: ReliabilityModel,
    profile: Profile,
    plan: SegmentPlan,
    fs_hz: float,
    n_leads: int,
) -> dict[str, NDArray]:
    plain = batch.margin == (0, 0)
    core = rows[:, batch.margin[0] : rows.shape[1] - batch.margin[1]]
    found = analyse_global(
        core.reshape(batch.count, n_leads, -1), fs_hz, prepared=analysis.prepared if plain else None
    )
    scores = model.score_global(found.features)
    has = np.isfinite(found.value)
    bound = model.bound_global(scores)
    return {
        "beats": np.sort(
            np.rint(found.beat_s * fs_hz).astype(np.int64) + plan.start[batch.first + found.beat_strip]
        ),
        "value": found.value,
        "bound": np.where(np.isfinite(bound) & has, bound, np.nan),
        "reliable": model.reliable_global(scores, tolerances(profile)[1:4].tolist()) & has,
        "absent": found.absent,
        "weight": found.weight,
        "beat_mv": found.beat_mv,
        "marks_ms": found.marks_ms,
        "agree": agreeing_leads(analysis, found.beat_strip, found.beat_s, n_leads, batch.size / fs_hz),
    }
