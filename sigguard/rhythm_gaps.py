"""Is nothing there, or do beats go on beneath? What can be told about a gap between beats before it is called standstill.

Two kinds of evidence that the heart goes on, both local in time. Beats beneath: complexes of the shape that stood
before or after the gap (normalised correlation over QRS and T together, so that a P wave alone does not pass),
however small they have become, in the number that the rhythm beside the gap leads one to expect. Lost contact: a
line that moves by no more than one step of the converter, in a lead that otherwise never rests like that. A heart
that stops takes the beats away, but neither the noise of the amplifier nor the drift of the electrodes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from sigguard.rhythm_shape import Work

Floats = NDArray[np.floating]
Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]

BEFORE_S, AFTER_S = 0.16, 0.40  # of a complex: QRS and T
SAME_SHAPE = 0.8  # correlation of the slopes
LEAST_SCALE = 0.15  # a complex may have shrunk to this share of those beside the gap
REACH_S = 10.0  # how far into a gap the shapes beside it are followed
WITNESS_S = 8.0  # complexes within so much of the gap's edge are the shapes
WITNESSES = 8  # at most, on either side
LEAST_WITNESSES = 3
P_FROM_S, P_TO_S, HALF_S = 0.36, 0.09, 0.1
TALLER = 1.2  # than what stands before the complexes beside the gap
EDGE_S = 0.3  # nearer to the gap's edges than this no further beat is looked for
APART_S = 0.3
EARLIER_S = 12.0
AS_BEFORE = (0.67, 1.5)  # of the size of a complex before the gap
SLOWEST_RR_S = 1.6
EXPECTED_SHARE = 0.5  # of the beats that the rhythm beside the gap leads one to expect


def beats_beneath(work: Work, lead: int, start: int, end: int, at: Ints) -> Ints:
    """Samples of the beats found between ``start`` and ``end`` of one lead; empty where they are too few to believe.

    ``at``: the sure beats of the lead, in order, none of which lies within the gap.
    """
    fs_hz = work.fs_hz
    before, after = round(BEFORE_S * fs_hz), round(AFTER_S * fs_hz)
    y = np.diff(
        work.y_mv[lead], prepend=work.y_mv[lead, :1]
    )  # a P wave alone may look like a QRS, but is not as steep
    sides = (
        (at[(at <= start) & (at > start - WITNESS_S * fs_hz)][-WITNESSES:], start, start + REACH_S * fs_hz),
        (at[(at >= end) & (at < end + WITNESS_S * fs_hz)][:WITNESSES], end - REACH_S * fs_hz, end),
    )
    edge = round(EDGE_S * fs_hz)
    found, rhythm, tallest_p = [np.empty((2, 0))], [], 0.0
    for witness, low, high in sides:
        witness = witness[(witness >= before) & (witness + after < len(y))]
        first = max(int(low), start + edge, before)
        last = min(int(high), end - edge, len(y) - after - 1)
        if len(witness) < LEAST_WITNESSES or last <= first:
            continue
        rhythm.append(np.median(np.diff(witness)))
        tallest_p = max(tallest_p, _before_the_beats(work, lead, witness))
        likeness = _likeness(y, witness, first, last, before, after)
        found.append(np.stack([first + np.arange(len(likeness)), likeness]))
    where, likeness = np.concatenate(found, axis=1)
    beats = _peaks(where.astype(np.int64), likeness, round(APART_S * fs_hz))
    if not rhythm or not len(beats):
        return beats[:0]
    half = round(HALF_S * fs_hz)
    height = np.ptp(work.y_mv[lead, beats[:, None] + np.arange(-half, half + 1)], axis=1)
    beats = beats[height >= TALLER * tallest_p]  # those no taller may be P waves that go on alone
    expected = (min(end - start, 2 * REACH_S * fs_hz)) / max(rhythm) - 1
    return beats if len(beats) >= max(2.0, EXPECTED_SHARE * expected) else beats[:0]


def beats_as_before(work: Work, lead: int, start: int, end: int, alike: Ints) -> Ints:
    """Samples of complexes in the gap as they were before it in shape and size; empty where they are too few.

    ``alike``: complexes of the lead, also small ones, that resemble several of those near to them. Noise bursts may
    have been taken for the usual beats. P waves that go on alone are not seen here: with a QRS beside them
    they were not complexes of their own.
    """
    fs_hz = work.fs_hz
    before, after, edge = round(BEFORE_S * fs_hz), round(AFTER_S * fs_hz), round(EDGE_S * fs_hz)
    y = np.diff(work.y_mv[lead], prepend=work.y_mv[lead, :1])
    witness = alike[(alike <= start) & (alike > start - EARLIER_S * fs_hz) & (alike >= before)]
    witness = witness[witness + after < len(y)][-2 * WITNESSES :]
    first = max(start + edge, before)
    last = min(int(start + REACH_S * fs_hz), end - edge, len(y) - after - 1)
    if len(witness) < LEAST_WITNESSES or last <= first:
        return witness[:0]
    likeness = _likeness(y, witness, first, last, before, after, scale=AS_BEFORE, rank=2)
    beats = _peaks(first + np.arange(len(likeness)), likeness, round(APART_S * fs_hz))
    return beats if len(beats) >= max(2.0, (last - first) / (SLOWEST_RR_S * fs_hz)) else beats[:0]


def _before_the_beats(work: Work, lead: int, witness: Ints) -> float:
    """Peak to peak of what stands before the complexes, as a rule the P wave, mV: upper quartile."""
    reach = np.arange(-round(P_FROM_S * work.fs_hz), -round(P_TO_S * work.fs_hz) + 1)
    cuts = work.y_mv[lead, np.maximum(witness[:, None] + reach, 0)]
    return float(np.quantile(np.ptp(cuts, axis=1), 0.75))


def _likeness(
    y: Floats,
    witness: Ints,
    first: int,
    last: int,
    before: int,
    after: int,
    *,
    scale: tuple[float, float] = (LEAST_SCALE, np.inf),
    rank: int = 1,
) -> Floats:
    """Correlation of the complex at each sample from first to last with its rank-best witness; 0 out of scale."""
    length = before + after + 1
    shapes = y[witness[:, None] + np.arange(-before, after + 1)]
    shapes = shapes - shapes.mean(axis=1, keepdims=True)
    norm = np.sqrt((shapes**2).sum(axis=1))
    pieces = sliding_window_view(y[first - before : last + after + 1], length)
    pieces = pieces - pieces.mean(axis=1, keepdims=True)
    size = np.sqrt((pieces**2).sum(axis=1))
    product = pieces @ (shapes / (norm[:, None] + 1e-12)).T  # the part of each piece along each shape
    fits = (product >= scale[0] * norm) & (product <= scale[1] * norm)
    all_of_them = np.where(fits, product / (size[:, None] + 1e-12), 0.0)
    best: Floats = np.sort(all_of_them, axis=1)[:, -rank]
    return best


def _peaks(at: Ints, likeness: Floats, apart: int) -> Ints:
    """The most alike first, others only where no better one is near."""
    use = likeness >= SAME_SHAPE
    at, likeness = at[use], likeness[use]
    kept: list[int] = []
    for k in np.argsort(-likeness, kind="stable"):
        if all(abs(int(at[k]) - other) >= apart for other in kept):
            kept.append(int(at[k]))
    return np.array(sorted(kept), dtype=np.int64)


# ── lost contact ──

REST_S = 1.0  # a line at rest does not change at all over so long
COARSE_MV = 0.010  # a converter step above which a line may well stay on one value
LIVELY_STEPS = 1.5  # rms of the second difference of a lead in contact, even where it is quietest,
LIVELY_MV = 0.004  # and at least this: noise of 1.6 µV rms
PIECE_S, PIECES = 0.16, 30  # short pieces, and how many of them make a chapter of 5 s
LEAST_CHAPTERS = 2


@dataclass(frozen=True, slots=True, eq=False)
class Contact:
    """What a stretch tells of the noise of each lead."""

    step_mv: Floats  # (n_leads,): smallest change between two samples; inf where none changes
    quietest_mv: (
        Floats  # (n_leads,): second difference, rms, of the quietest quarter of pieces, least of all chapters
    )
    chapters: Ints  # (n_leads,): chapters without rest and without a gap, which alone count

    def also(self, other: Contact) -> Contact:
        """Of both stretches together."""
        return Contact(
            np.minimum(self.step_mv, other.step_mv),
            np.minimum(self.quietest_mv, other.quietest_mv),
            self.chapters + other.chapters,
        )

    @property
    def rest_tells(self) -> Bools:
        """(n_leads,): whether a lead at rest has lost its contact.

        It has where the lead is noisy even in its quietest chapter and the converter fine: such a lead in contact
        does not come to rest of itself, whatever the heart does. Elsewhere that cannot be told.
        """
        noisy = self.quietest_mv >= np.maximum(LIVELY_STEPS * self.step_mv, LIVELY_MV)
        return noisy & (self.step_mv <= COARSE_MV) & (self.chapters >= LEAST_CHAPTERS)


def contact(x_mv: Floats, fs_hz: float) -> Contact:
    """(n_leads, n_samples) mV, NaN where missing → its noise; what is left over after whole chapters counts for none."""
    change = np.diff(x_mv, axis=1)
    size = np.abs(change)
    step_mv = np.min(np.where(size > 1e-9, size, np.inf), axis=1, initial=np.inf)
    piece = max(2, round(PIECE_S * fs_hz))
    n_chapters = max(change.shape[1] - 1, 0) // (piece * PIECES)
    n = n_chapters * PIECES * piece
    bend = np.diff(change[:, : n + 1], axis=1)
    energy = (bend * bend).reshape(len(x_mv), n_chapters, PIECES, piece).mean(axis=3)
    quarter = PIECES // 4
    quiet = np.sqrt(np.partition(energy, quarter, axis=2)[..., : quarter + 1].mean(axis=2))
    stopped = at_rest(x_mv[:, :n], fs_hz).reshape(len(x_mv), n_chapters, PIECES * piece).any(axis=2)
    counts = np.isfinite(energy).all(axis=2) & ~stopped
    quietest = np.min(np.where(counts, quiet, np.inf), axis=1, initial=np.inf)
    return Contact(step_mv, quietest, counts.sum(axis=1))


def at_rest(x_mv: Floats, fs_hz: float) -> Bools:
    """(n_leads, n_samples) → samples within REST_S or more of one and the same value; NaN is no value."""
    size = max(2, round(REST_S * fs_hz))
    out = np.zeros(x_mv.shape, bool)
    for lead in range(len(x_mv)):
        same = np.concatenate([[False], np.diff(x_mv[lead]) == 0, [False]])
        edge = np.flatnonzero(same[1:] != same[:-1]).reshape(-1, 2)
        for first, last in edge[edge[:, 1] - edge[:, 0] + 1 >= size]:
            out[lead, first : last + 1] = True
    return out
