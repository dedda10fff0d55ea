"""Which candidates are beats: a small tree ensemble that looks at each one beside its neighbours.

Rules alone hold as long as it is quiet. In noise a candidate is told from a beat by many small
signs at once: height, steepness, likeness to the row's typical complex and to its next of kin, what stands
close before and after it, and where it falls in the rhythm. The ensemble learned these signs on simulated
ECG with known beats (``sigguard.training.beats``); no real annotation went into it.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import ModelError
from sigguard.resources import model_arrays
from sigguard.trees import TreeArrays, TreeEnsemble

FILE = "beats.npz"
CANDIDATE_FEATURES: tuple[str, ...] = (
    "log_height", "log_sharpness", "log_length", "likeness", "like_height", "kin_likeness", "log_between",
    "log_height_over_between", "stronger_before_280", "stronger_before_480", "stronger_after_280",
    "stronger_after_480", "kept_by_rule", "rr_before_ratio", "rr_after_ratio", "rr_sum_ratio", "log_strength",
    "sharpness_over_height", "at_edge",
)  # fmt: skip
NEAR_S, FAR_S = 0.28, 0.48
NEIGHBOURS = 4


@dataclass(frozen=True, slots=True, eq=False)
class Seen:
    """What the detectors know of (C,) candidates, sorted by row and time, of n_rows rows."""

    row: NDArray[np.intp]
    at: NDArray[np.intp]
    height: NDArray[np.floating]  # over the row's typical height
    sharp: NDArray[np.float64]
    length: NDArray[np.float64]
    likeness: NDArray[np.float64]
    strength: NDArray[np.float64]
    kept: NDArray[np.bool_]  # by rule
    cuts_mv: NDArray[np.float64]  # (C, L) QRS band
    between: NDArray[np.float64]  # (n_rows,)
    n_work: int  # samples of a row
    fs_hz: float


def candidate_features(seen: Seen) -> NDArray[np.float64]:
    """(C, F) in the order of CANDIDATE_FEATURES."""
    n_rows = len(seen.between)
    log_height = np.log(np.maximum(seen.height, 1e-3))
    sharp = seen.sharp / np.maximum(_usual(seen.sharp, seen.row, seen.kept, n_rows), 1e-9)[seen.row]
    length = seen.length / np.maximum(_usual(seen.length, seen.row, seen.kept, n_rows), 1e-9)[seen.row]
    log_sharp, log_length = np.log(np.maximum(sharp, 1e-2)), np.log(np.maximum(length, 1e-2))
    log_between = np.log(np.maximum(seen.between, 0.01))[seen.row]
    log_strength = np.log(np.maximum(seen.strength, 1e-3))
    before_near, before_far = _neighbours(seen, log_strength, -1)
    after_near, after_far = _neighbours(seen, log_strength, 1)
    rr_before, rr_after = _rhythm(seen, n_rows)
    edge = (seen.at < 0.2 * seen.fs_hz) | (seen.at > seen.n_work - 0.2 * seen.fs_hz)
    return np.stack(
        [
            log_height,
            log_sharp,
            log_length,
            seen.likeness,
            np.minimum(seen.likeness, 1) * np.minimum(seen.height, 3),
            _kin(seen, n_rows),
            log_between,
            log_height - log_between,
            before_near,
            before_far,
            after_near,
            after_far,
            seen.kept.astype(float),
            rr_before,
            rr_after,
            np.clip(rr_before + rr_after, 0, 5),
            log_strength,
            log_sharp - log_height,
            edge.astype(float),
        ],
        axis=1,
    )


def _usual(values: NDArray, row: NDArray, mask: NDArray[np.bool_], n_rows: int) -> NDArray[np.float64]:
    """(n_rows,): lower median of the values under the mask; 1 where there is none."""
    r, v = row[mask], values[mask]
    order = np.lexsort((v, r))
    count = np.bincount(r, minlength=n_rows)
    start = np.concatenate([[0], np.cumsum(count)[:-1]])
    out = np.ones(n_rows)
    some = count > 0
    out[some] = v[order][start[some] + (count[some] - 1) // 2]
    return out


def _neighbours(
    seen: Seen, log_strength: NDArray, side: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Log ratio of the strongest candidate within NEAR_S, and from there to FAR_S, to this one; -3 for none."""
    n = len(seen.row)
    near, far = np.full(n, -3.0), np.full(n, -3.0)
    here = np.arange(n)
    for step in range(1, NEIGHBOURS + 1):
        other = here + side * step
        inside = (other >= 0) & (other < n)
        other = np.clip(other, 0, max(n - 1, 0))
        inside &= seen.row[other] == seen.row
        gap = np.abs(seen.at[other] - seen.at) / seen.fs_hz
        ratio = np.clip(log_strength[other] - log_strength, -3, 3)
        near = np.where(inside & (gap < NEAR_S), np.maximum(near, ratio), near)
        far = np.where(inside & (gap >= NEAR_S) & (gap < FAR_S), np.maximum(far, ratio), far)
    return near, far


def _kin(seen: Seen, n_rows: int) -> NDArray[np.float64]:
    """Correlation with the second most similar of the row's other candidates of some height."""
    n = len(seen.row)
    if not n:
        return np.zeros(0)
    count = np.bincount(seen.row, minlength=n_rows)
    slot = np.arange(n) - np.concatenate([[0], np.cumsum(count)[:-1]])[seen.row]
    k = int(count.max())
    unit = seen.cuts_mv / np.maximum(np.sqrt((seen.cuts_mv**2).sum(axis=1, keepdims=True)), 1e-12)
    stacked = np.zeros((n_rows, k, unit.shape[1]), dtype=np.float32)
    stacked[seen.row, slot] = unit * (seen.height >= 0.28)[:, None]
    alike = stacked @ stacked.transpose(0, 2, 1)
    alike[:, np.arange(k), np.arange(k)] = 0.0
    if k < 3:
        return np.zeros(n)
    second = np.partition(alike, k - 2, axis=2)[:, :, k - 2]
    return second[seen.row, slot].astype(np.float64)


def _rhythm(seen: Seen, n_rows: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Time to the rule's beat before and after each candidate, over the row's usual interval; at most 4."""
    kept = np.flatnonzero(seen.kept)
    stride = float(seen.n_work + 100 * seen.fs_hz)  # rows laid end to end, far apart
    key = seen.row * stride + seen.at
    line = key[kept]
    step = np.diff(line)
    within = np.diff(seen.row[kept]) == 0
    mask = np.zeros(len(seen.row), dtype=bool)
    interval = np.zeros(len(seen.row))
    mask[kept[1:][within]] = True
    interval[kept[1:][within]] = step[within] / seen.fs_hz
    usual = np.where(
        np.bincount(seen.row[mask], minlength=n_rows) > 0, _usual(interval, seen.row, mask, n_rows), 0.8
    )
    padded = np.concatenate([[-np.inf], line, [np.inf]])
    place = np.searchsorted(line, key, side="left")
    before = (key - padded[place]) / seen.fs_hz
    own = padded[place + 1] == key
    after = (padded[np.minimum(place + 1 + own, len(padded) - 1)] - key) / seen.fs_hz
    per = usual[seen.row]
    return np.clip(before / per, 0, 4), np.clip(after / per, 0, 4)


@cache
def shipped_judge() -> TreeEnsemble:
    """The ensemble that ships. ModelError where it is missing, damaged or of another feature table."""
    arrays = model_arrays(FILE, "beat model")
    names = tuple(str(n) for n in arrays.get("feature_names", ()))
    if names != CANDIDATE_FEATURES:
        raise ModelError(f"{FILE}: trained on another table of candidates; train it again")
    ensemble = TreeEnsemble.build(TreeArrays.from_dict(arrays, "tree_"), len(names))
    if not np.allclose(
        ensemble.predict_proba(arrays["probe"])[:, 0], arrays["answer"], rtol=1e-9, atol=1e-12
    ):
        raise ModelError(f"{FILE}: the beat model does not give its stored answers; train it again")
    return ensemble
