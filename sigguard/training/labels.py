"""The truth the classifiers learn: did the disturbance move what the procedure reads off this ECG?

Each spoilt row is compared with the same carrier, measured by the same procedure, before the
disturbance was laid on it. No opinion enters: the label is an error within its tolerance.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from sigguard.reliability import TOLERANCE

BEAT_WINDOW_S = 0.15  # beat-match window of ANSI/AAMI EC57


class Measured(Protocol):
    """What a measuring procedure hands back for R rows."""

    @property
    def value(self) -> NDArray[np.float64]: ...  # (R, 5)
    @property
    def absent(self) -> NDArray[np.int8]: ...  # (R, 5)
    @property
    def beat_row(self) -> NDArray[np.integer]: ...  # (n_beats,)
    @property
    def beat_s(self) -> NDArray[np.float64]: ...  # (n_beats,): from the row's start, by row and then time
    @property
    def features(self) -> NDArray[np.float32]: ...  # (R, F)


@dataclass(frozen=True, slots=True, eq=False)
class Labels:
    """Columns over measurements. ``error`` is in the measurement's unit, infinite where a value was
    lost or invented, NaN where there is nothing to compare."""

    judged: NDArray[np.bool_]
    right: NDArray[np.bool_]  # the answer stands: value within tolerance, or absent as on the carrier
    valued: NDArray[np.bool_]  # the spoilt row gives a value, so that a bound could be stated for it
    error: NDArray[np.float64]


def label_values(
    clean: NDArray[np.float64],
    spoilt: NDArray[np.float64],
    *,
    clean_absent: NDArray[np.integer] | None = None,
    spoilt_absent: NDArray[np.integer] | None = None,
    tolerance: NDArray[np.float64] | tuple[float, ...],
) -> Labels:
    """Labels of (R, M) values from the values of the clean run.

    A value lost or invented counts as beyond any tolerance. Where neither run gives a value, the
    answer is right if both give the same reason for the absence; without a reason on the clean
    run there is nothing to judge, and the cell is left out.
    """
    has_clean, has_spoilt = np.isfinite(clean), np.isfinite(spoilt)
    error = np.full(clean.shape, np.nan)
    both = has_clean & has_spoilt
    error[both] = np.abs(spoilt - clean)[both]
    error[has_clean ^ has_spoilt] = np.inf
    judged = has_clean | has_spoilt
    # Readings are in steps of a sample, so that "exactly the tolerance" happens: the small number
    # keeps rounding in the subtraction from deciding it.
    right = judged & np.isfinite(error) & (error <= np.asarray(tolerance) * (1 + 1e-9))
    if clean_absent is not None and spoilt_absent is not None:
        absent = ~judged & (clean_absent > 0)
        judged = judged | absent
        right = right | (absent & (spoilt_absent == clean_absent))
    return Labels(judged=judged, right=right, valued=has_spoilt, error=error)


def label_rows(
    clean: Measured, spoilt: Measured, duration_s: float, *, of: NDArray[np.integer] | None = None
) -> Labels:
    """Labels of R rows over the five measurements.

    ``of`` (R,) names the clean row each spoilt row came from; without it, rows pair in order. For
    ``rate`` the label asks for every beat: none missed, none invented, each within ±150 ms; its
    error is that of the rate. Raises ValueError when rows do not pair.
    """
    n_rows = spoilt.value.shape[0]
    of = np.arange(n_rows) if of is None else np.asarray(of)
    if len(of) != n_rows or (n_rows and of.max() >= clean.value.shape[0]):
        raise ValueError(f"{clean.value.shape[0]} clean rows cannot be paired with {n_rows} spoilt rows")
    labels = label_values(
        clean.value[of],
        spoilt.value,
        clean_absent=clean.absent[of],
        spoilt_absent=spoilt.absent,
        tolerance=(np.inf, *TOLERANCE[1:]),
    )
    truth, found = _by_row(clean), _by_row(spoilt)
    flawless = [beats_agree(truth[c], found[r], duration_s) for r, c in enumerate(of)]
    right = labels.right.copy()
    right[:, 0] &= np.array(flawless, dtype=bool)
    return Labels(judged=labels.judged, right=right, valued=labels.valued, error=labels.error)


def beats_agree(truth_s: NDArray[np.float64], found_s: NDArray[np.float64], duration_s: float) -> bool:
    """Whether two sorted beat lists pair one to one within ±150 ms, edges aside (EC57 window)."""
    i = j = 0
    while i < len(truth_s) or j < len(found_s):
        if i < len(truth_s) and j < len(found_s) and abs(truth_s[i] - found_s[j]) <= BEAT_WINDOW_S:
            i, j = i + 1, j + 1
            continue
        if j >= len(found_s) or (i < len(truth_s) and truth_s[i] < found_s[j]):
            alone, i = truth_s[i], i + 1
        else:
            alone, j = found_s[j], j + 1
        if BEAT_WINDOW_S < alone < duration_s - BEAT_WINDOW_S:
            return False
    return True


def _by_row(run: Measured) -> list[NDArray[np.float64]]:
    edges = np.searchsorted(run.beat_row, np.arange(run.value.shape[0] + 1))
    return [run.beat_s[a:b] for a, b in zip(edges[:-1], edges[1:], strict=True)]
