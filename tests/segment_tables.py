"""Small tables of segments for tests."""

from __future__ import annotations

import numpy as np

from sigguard.grading import grade_rows
from sigguard.segments import ABSENT, FAULTS, MEASUREMENTS, Segments

LEADS_12 = ("I", "II", "III", "aVR", "aVL", "aVF", "V1", "V2", "V3", "V4", "V5", "V6")
TYPICAL = (70.0, 160.0, 90.0, 400.0, 0.01)
BOUNDS = (1.0, 10.0, 8.0, 15.0, 0.01)


def table(leads=("II",), times=((0.0, 10.0),)) -> Segments:
    """A table on which everything is reliable and without fault; change its arrays, then call ``regrade``."""
    n_leads, n = len(leads), len(leads) * len(times)
    start, end = np.repeat(np.array(times, float), n_leads, axis=0).T
    return Segments(
        leads=tuple(leads),
        feature_names=(),
        lead_index=np.tile(np.arange(n_leads, dtype=np.int32), len(times)),
        start_s=start.copy(),
        end_s=end.copy(),
        value=np.tile(TYPICAL, (n, 1)),
        score=np.full((n, 5), 0.9),
        bound=np.tile(BOUNDS, (n, 1)),
        reliable=np.ones((n, 5), bool),
        absent=np.zeros((n, 5), np.int8),
        grade=np.full(n, 3, np.int8),
        fault=np.zeros((n, 9), np.float32),
        features=np.zeros((n, 0), np.float32),
    )


def tens(n: int) -> tuple[tuple[float, float], ...]:
    return tuple((10.0 * k, 10.0 * k + 10.0) for k in range(n))


def regrade(segments: Segments) -> Segments:
    segments.grade[:] = grade_rows(segments.reliable, segments.absent)
    segments.value[~segments.reliable] = np.nan
    return segments


def spoil(segments, lead, measurements=MEASUREMENTS, *, fault=None, fraction=1.0, at=slice(None)) -> Segments:
    """Make measurements of one lead unreliable, at all its segments or some, with a fault or without."""
    rows = np.flatnonzero(segments.lead_index == segments.leads.index(lead))[at]
    for name in measurements:
        segments.reliable[rows, MEASUREMENTS.index(name)] = False
    if fault:
        segments.fault[rows, FAULTS.index(fault)] = fraction
    return regrade(segments)


def set_absent(segments, lead, measurement, reason, at=slice(None)) -> Segments:
    rows = np.flatnonzero(segments.lead_index == segments.leads.index(lead))[at]
    segments.reliable[rows, MEASUREMENTS.index(measurement)] = False
    segments.absent[rows, MEASUREMENTS.index(measurement)] = ABSENT.index(reason)
    return regrade(segments)


def random_table(n_leads: int, n_slots: int, seed: int) -> Segments:
    """Reliability that comes and goes together over the leads, and a fault here and there."""
    rng = np.random.default_rng(seed)
    segments = table(LEADS_12[:n_leads], tens(n_slots))
    n = len(segments)
    common = np.repeat(rng.random((n_slots, 1)) ** 0.3, n_leads, axis=0)
    segments.reliable[:] = rng.random((n, 5)) < common
    segments.value[:] += rng.normal(size=(n, 5)) * (3, 5, 5, 5, 0.01)
    segments.bound[:] *= rng.random((n, 5))
    segments.score[:] = rng.random((n, 5))
    segments.fault[:] = (rng.random((n, 9)) < 0.1) * rng.random((n, 9))
    return regrade(segments)
