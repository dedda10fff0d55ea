"""One pass over the samples: batches of segments measured and judged, part by part."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from sigguard.blocks import Batch, SegmentPlan, batches, rows_of
from sigguard.features import FEATURE_NAMES
from sigguard.global_values import analyse_global
from sigguard.grading import grade_rows
from sigguard.measure import Analysis, analyse
from sigguard.profile import Profile
from sigguard.recording import RecordingInfo
from sigguard.reliability import ReliabilityModel
from sigguard.segments import Segments
from sigguard.verdicts import (
    NO_WAVE,
    agreeing_leads,
    fault_rows,
    hardly_there,
    judge_rows,
    limit_by_recording,
    small_here,
)

GLOBAL_MOST_S = 60.0  # longer recordings have too much change in them for one global value
MIN_BEAT_GAP_S = 0.2
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
    residual_mv: NDArray[np.float32] | None  # (n_segments, n_leads, n)


def measure_all(
    source: Source,
    plan: SegmentPlan,
    model: ReliabilityModel,
    profile: Profile,
    mains_among_hz: tuple[float, ...],
    progress: Progress | None = None,
) -> list[Part]:
    parts = []
    for batch in batches(plan, source.info.n_leads):
        block = source.read(batch.read_start, batch.read_stop)
        parts.append(_measure_batch(source.info, plan, batch, block, model, profile, mains_among_hz))
        if progress is not None:
            progress((batch.first + batch.count) / len(plan))
    return parts


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
    segments = _table(info, plan, batch, lead_index, analysis, model, profile, common.get("agree"))
    residual = analysis.residual_mv.reshape(batch.count, n_leads, -1) if strips else None
    return Part(
        segments,
        lead_beats,
        common.get("beats"),
        common.get("value"),
        common.get("bound"),
        common.get("reliable"),
        common.get("absent"),
        common.get("weight"),
        residual,
    )


def _table(
    info: RecordingInfo,
    plan: SegmentPlan,
    batch: Batch,
    lead_index: NDArray[np.intp],
    analysis: Analysis,
    model: ReliabilityModel,
    profile: Profile,
    agree: NDArray[np.bool_] | None,
) -> Segments:
    found = decide(info, lead_index, analysis, model, profile, agree)
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
        fault=fault_rows(model, analysis.features, found.fault_p, found.limited, batch.size / info.fs_hz),
        features=analysis.features,
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
        "agree": agreeing_leads(analysis, found.beat_strip, found.beat_s, n_leads, batch.size / fs_hz),
    }


def joined_tables(parts: Sequence[Segments]) -> Segments:
    if len(parts) == 1:
        return parts[0]
    columns = [name for name in Segments.__dataclass_fields__ if name not in ("leads", "feature_names")]
    joined: dict[str, Any] = {
        name: np.concatenate([getattr(part, name) for part in parts]) for name in columns
    }
    return replace(parts[0], **joined)


def merge_beats(parts: Sequence[NDArray[np.int64]], fs_hz: float) -> NDArray[np.int64]:
    """Beats of neighbouring segments put together; one found on both sides of a seam counts once."""
    at = np.sort(np.concatenate([np.asarray(part, dtype=np.int64) for part in parts]))
    if len(at) < 2:
        return at
    return at[np.diff(at, prepend=at[0] - int(fs_hz)) > MIN_BEAT_GAP_S * fs_hz]
