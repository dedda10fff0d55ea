"""Which placement of the electrodes makes the averaged beats look most like an ECG.

Every hypothesis (nothing swapped, these two swapped, this lead inverted) undoes itself by a matrix: the seen
electrode potentials become those that the heart made if the hypothesis holds. How usual the restored potentials
look is said in a few numbers: the Mahalanobis distance of the wave areas of all electrodes, the likelihood of their
spatial covariance within P, QRS and T, and for neighbouring chest leads a logistic score of their differences
(R and S progression, kinship with the other leads: neighbour correlation after Jekova et al. 2013, from memory).
A conditional logit (McFadden 1974) over these numbers gives each hypothesis its probability. All that is learned
comes from unswapped recordings and their own algebra, see ``sigguard.training.placement``.

Electrodes follow ``electrodes.ELECTRODES``, potentials are against Wilson's terminal.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from functools import cache, lru_cache

import numpy as np
from numpy.typing import NDArray

from sigguard.electrodes import ELECTRODES
from sigguard.errors import ModelError
from sigguard.resources import model_arrays
from sigguard.waves import FS, LENGTH, ZERO

Floats = NDArray[np.float64]

FILE = "placement.npz"
N = len(ELECTRODES)
RA, LA, LL = range(3)
LIMBS, CHEST = slice(0, 3), slice(3, N)

LIMB_HYPOTHESES = (
    "unswapped", "LA/RA swapped", "LA/LL swapped", "RA/LL swapped", "RA→LA→LL rotated", "RA→LL→LA rotated",
    "RA/RL swapped", "LA/RL swapped",
)  # fmt: skip
# Whose potential each of the wires RA, LA, LL then carries: a rotation RA→LA puts the RA wire on the left arm.
_CARRIES = ((RA, LA, LL), (LA, RA, LL), (RA, LL, LA), (LL, LA, RA), (LA, LL, RA), (LL, RA, LA))
RL_HYPOTHESES = {6: RA, 7: LA}  # hypothesis: the wire that sits on the right leg
CHEST_HYPOTHESES = (
    "unswapped",
    *(f"V{k}/V{k + 1} swapped" for k in range(1, 6)),
    *(f"inverted lead V{k}" for k in range(1, 7)),
)
N_PAIRS = 5

P_PARTS, QRS_PARTS, T_PARTS = 2, 5, 3
WAVES = (slice(0, 2), slice(2, 7), slice(7, 10))  # columns of the parts of P, QRS, T
N_PARTS = P_PARTS + QRS_PARTS + T_PARTS
FLOOR = 0.04  # of the QRS complex: a P or T wave smaller than this is not blown up to full size
PAIR_FLOOR = 0.02
SMALL_FLOOR = 0.02  # a remainder below this share of the limb leads says no more than this share
RIDGE = 0.05
PAIR_MOST = 8.0


@dataclass(frozen=True, slots=True, eq=False)
class Shapes:
    """What is read from averaged beats of n restored recordings; all linear in them but ``extremes``."""

    parts: Floats  # (n, 9, N_PARTS) mean level within each part of P, QRS, T, mV
    power: Floats  # (n, 3, 9, 9) second moments within P, QRS, T, mV²
    extremes: Floats  # (n, 9, 4) of the QRS: highest and lowest level (≥ 0, mV), their times over its length


def part_columns(marks_ms: Floats) -> list[tuple[int, int]]:
    """First and last + 1 column of each part of P, QRS and T.

    ``marks_ms`` (5,): P onset, P end, QRS onset, QRS end, T end from the beat; where P or T were not found, the
    usual places. Every part holds at least one column.
    """
    p_on, p_off, on, off, t_off = (float(m) for m in marks_ms)
    if not np.isfinite(p_on + p_off):
        p_on, p_off = on - 150.0, on - 30.0
    t_off = t_off if np.isfinite(t_off) else off + 280.0
    edges: list[tuple[float, float]] = []
    for start, stop, n in ((p_on, p_off, P_PARTS), (on, off, QRS_PARTS), (off, t_off, T_PARTS)):
        cuts = np.linspace(start, stop, n + 1)
        edges += list(zip(cuts[:-1], cuts[1:], strict=True))
    first = np.clip(np.rint(ZERO + np.array(edges) * FS / 1000), 0, LENGTH).astype(int)
    lo = np.minimum(first[:, 0], LENGTH - 1)
    return list(zip(lo.tolist(), np.maximum(first[:, 1], lo + 1).tolist(), strict=True))


def describe(potential_mv: Floats, columns: list[tuple[int, int]]) -> Shapes:
    """The Shapes of (n, 9, LENGTH) electrode potentials."""
    parts = np.stack([potential_mv[:, :, a:b].mean(axis=2) for a, b in columns], axis=2)
    spans = [potential_mv[:, :, columns[w.start][0] : columns[w.stop - 1][1]] for w in WAVES]
    power = np.stack([s @ s.transpose(0, 2, 1) / s.shape[2] for s in spans], axis=1)
    qrs = spans[1]
    length = max(qrs.shape[2] - 1, 1)
    highest, lowest = np.maximum(qrs.max(axis=2), 0), np.maximum(-qrs.min(axis=2), 0)
    when = qrs.argmax(axis=2) / length, qrs.argmin(axis=2) / length
    return Shapes(parts, power, np.stack([highest, lowest, *when], axis=2))


def restoring(hypothesis: int, rl_maps: Floats) -> Floats:
    """(9, 9): seen potentials → those of the right placement, for one of LIMB_HYPOTHESES.

    What a wire on the right leg should have picked up is lost; ``rl_maps`` (2, 9, 9) put in its stead what the
    other electrodes let expect.
    """
    if hypothesis in RL_HYPOTHESES:
        return rl_maps[hypothesis - 6]
    matrix = np.eye(N)
    matrix[LIMBS, LIMBS] = 0.0
    for wire, site in enumerate(_CARRIES[hypothesis]):
        matrix[site, wire] = 1.0
    return matrix


def _exchanges() -> tuple[NDArray[np.intp], Floats]:
    order, sign = np.tile(np.arange(N), (len(CHEST_HYPOTHESES), 1)), np.ones((len(CHEST_HYPOTHESES), N))
    for k in range(N_PAIRS):
        order[1 + k, [3 + k, 4 + k]] = 4 + k, 3 + k
    for k in range(6):
        sign[1 + N_PAIRS + k, 3 + k] = -1.0
    return order, sign


_ORDER, _SIGN = _exchanges()


def exchanged(shapes: Shapes) -> Shapes:
    """n shapes → n · 12, each with every one of CHEST_HYPOTHESES undone (each is its own inverse)."""
    parts = shapes.parts[:, _ORDER] * _SIGN[:, :, None]
    power = shapes.power[:, :, _ORDER[:, :, None], _ORDER[:, None, :]] * (
        _SIGN[:, :, None] * _SIGN[:, None, :]
    )
    extremes = shapes.extremes[:, _ORDER]
    extremes = np.where(_SIGN[:, :, None] < 0, extremes[..., [1, 0, 3, 2]], extremes)
    return Shapes(
        parts.reshape(-1, N, N_PARTS),
        power.transpose(0, 2, 1, 3, 4).reshape(-1, 3, N, N),
        extremes.reshape(-1, N, 4),
    )


def normalised(shapes: Shapes, use: NDArray[np.bool_]) -> tuple[Floats, Floats]:
    """(parts, power) free of gain: limb and chest each over their own rms, wave by wave."""
    own = np.einsum("nwii->nwi", shapes.power)
    scale = np.ones(own.shape)
    for group in (LIMBS, CHEST):
        rms = np.sqrt((own[:, :, group] * use[group]).sum(axis=2) / max(int(use[group].sum()), 1))
        rms = np.hypot(rms, np.array([FLOOR, 0.0, FLOOR]) * rms[:, 1:2])
        scale[:, :, group] = np.maximum(rms, 1e-12)[:, :, None]
    wave_of = np.repeat(np.arange(3), [w.stop - w.start for w in WAVES])
    parts = shapes.parts / scale[:, wave_of].transpose(0, 2, 1)
    return parts, shapes.power / (scale[:, :, :, None] * scale[:, :, None, :])


_A, _B = np.arange(3, 3 + N_PAIRS), np.arange(4, 4 + N_PAIRS)
_OTHERS = np.array([[i for i in range(N) if i not in (a, a + 1)] for a in _A])  # (5, 7)
PAIR_FEATURES = 3 * (N - 2) + 3 + 2 + 2 + 2


def pair_differences(shapes: Shapes, use: NDArray[np.bool_]) -> Floats:
    """(n, 5, PAIR_FEATURES) differences between neighbouring chest leads; exchanging the two changes every sign."""
    n = len(shapes.parts)
    own = np.einsum("nwii->nwi", shapes.power)
    qrs = np.sqrt(own[:, 1, _A] + own[:, 1, _B]) + 1e-12  # (n, 5)
    own = own + (PAIR_FLOOR**2) * own[:, 1:2].mean(axis=2, keepdims=True) + 1e-24
    root = np.sqrt(own)
    kin = shapes.power / (root[:, :, :, None] * root[:, :, None, :]) * use
    nearer = np.take_along_axis(kin[:, :, _A] - kin[:, :, _B], _OTHERS[None, None], axis=3)  # (n, 3, 5, 7)
    size = np.log(root[:, :, _A] / root[:, :, _B])
    height = shapes.extremes[:, :, :2]
    a, b = height[:, _A] / qrs[..., None], height[:, _B] / qrs[..., None]
    when = np.clip(shapes.extremes[:, _A, 2:] - shapes.extremes[:, _B, 2:], -0.3, 0.3)
    return np.concatenate(
        [
            nearer.transpose(0, 2, 1, 3).reshape(n, N_PAIRS, -1),
            size.transpose(0, 2, 1),
            a - b,
            np.log((a + 0.05) / (b + 0.05)),
            when,
        ],
        axis=2,
    )


USUAL_FEATURES = 8
LIMB_FEATURES = USUAL_FEATURES + 2 + 5  # two remainders; biases: swapped, LA/LL, rotated, RA/RL, LA/RL
CHEST_FREE = 2 + (N_PAIRS - 1)  # biases: swapped, inverted, and each pair but the first
CHEST_FEATURES = USUAL_FEATURES + N_PAIRS + CHEST_FREE + 2  # how odd even the best explanation is


@dataclass(frozen=True, slots=True, eq=False)
class Usual:
    """What unswapped recordings look like: the part of the model that scores a restored shape."""

    mean: Floats  # (9 · N_PARTS,)
    covariance: Floats  # (9 · N_PARTS, 9 · N_PARTS), shrunk
    power: Floats  # (3, 9, 9)
    pair_weight: Floats  # (5, PAIR_FEATURES)
    rl_maps: Floats  # (2, 9, 9)

    def judge(self, use: NDArray[np.bool_], has_p: bool) -> Judge:
        """The scores for these electrodes, and without P where there is none to see."""
        parts = np.repeat(use, N_PARTS).reshape(N, N_PARTS)
        parts[:, WAVES[0]] &= has_p
        keep = np.flatnonzero(parts.ravel())
        precision = np.asarray(np.linalg.inv(self.covariance[np.ix_(keep, keep)]), dtype=np.float64)
        at = np.flatnonzero(use)
        power = self.power[:, at][:, :, at]
        level = np.einsum("wii->w", power) / len(at)
        inverse: Floats = np.linalg.inv(power + RIDGE * level[:, None, None] * np.eye(len(at)))
        inverse[0] *= float(has_p)
        return Judge(self, use, keep, precision, at, inverse)


@dataclass(frozen=True, slots=True, eq=False)
class Judge:
    """Usual, made ready for the electrodes at hand."""

    usual: Usual
    use: NDArray[np.bool_]
    keep: NDArray[np.intp]
    precision: Floats
    at: NDArray[np.intp]
    inverse: Floats

    def unusual(self, shapes: Shapes) -> Floats:
        """(n, USUAL_FEATURES): how unusual each shape is; linear and logarithmic, the latter for the strange ECG."""
        parts, power = normalised(shapes, self.use)
        away = parts.reshape(len(parts), -1)[:, self.keep] - self.usual.mean[self.keep]
        distance = np.einsum("nd,nd->n", away @ self.precision, away) / len(self.keep)
        power = power[:, :, self.at][:, :, :, self.at].reshape(len(parts), 3, -1)
        spatial = (power * self.inverse.reshape(3, -1)).sum(axis=2) / len(self.at)
        columns = np.concatenate([distance[:, None], spatial], axis=1)
        return np.concatenate([columns, np.log(columns + 0.05)], axis=1)

    def pairs(self, shapes: Shapes) -> Floats:
        """(n, 5) logistic scores of the neighbouring chest leads, positive in the usual order; 0 where one is missing."""
        score = np.einsum("npf,pf->np", pair_differences(shapes, self.use), self.usual.pair_weight)
        return np.clip(np.where(self.use[_A] & self.use[_B], score, 0.0), -PAIR_MOST, PAIR_MOST)


@lru_cache(maxsize=8)
def _ready(usual: Usual, use: tuple[bool, ...], has_p: bool) -> Judge:
    return usual.judge(np.array(use), has_p)


def ready_judge(usual: Usual, use: NDArray[np.bool_], has_p: bool) -> Judge:
    """As ``usual.judge``, kept from one recording to the next: most have the same leads."""
    return _ready(usual, tuple(use.tolist()), has_p)


def limb_features(seen_mv: Floats, columns: list[tuple[int, int]], judge: Judge) -> Floats:
    """(8, LIMB_FEATURES) of (9, LENGTH) seen potentials: one row for each of LIMB_HYPOTHESES."""
    n = len(LIMB_HYPOTHESES)
    matrices = np.stack([restoring(h, judge.usual.rl_maps) for h in range(n)])
    special = np.zeros((n, 7))
    beat = seen_mv[:, columns[0][0] : columns[-1][1]]
    size = np.array([np.std(beat[LL] - beat[RA]), np.std(beat[LL] - beat[LA]), np.std(beat[LA] - beat[RA])])
    remainder = np.log(np.hypot(size[:2] / max(float(np.sqrt((size**2).mean())), 1e-12), SMALL_FLOOR))
    special[6, 0], special[7, 1] = remainder
    special[1:, 2] = 1.0
    for column, hypotheses in ((3, [2]), (4, [4, 5]), (5, [6]), (6, [7])):
        special[hypotheses, column] = 1.0
    return np.concatenate([-judge.unusual(describe(matrices @ seen_mv, columns)), special], axis=1)


def chest_features(shapes: Shapes, judge: Judge) -> Floats:
    """(n, 12, CHEST_FEATURES) of n shapes as seen: one row for each of CHEST_HYPOTHESES."""
    n, supposed = len(shapes.parts), exchanged(shapes)
    bias = np.zeros((len(CHEST_HYPOTHESES), CHEST_FREE))
    bias[1 : 1 + N_PAIRS, 0] = bias[1 + N_PAIRS :, 1] = 1.0
    bias[np.arange(2, 1 + N_PAIRS), np.arange(2, CHEST_FREE)] = 1.0
    unusual = judge.unusual(supposed)
    features = np.concatenate([-unusual, judge.pairs(supposed), np.tile(bias, (n, 1))], axis=1)
    # An ECG that stays strange whatever is undone speaks for itself, not for a swap.
    odd = np.zeros((n, len(CHEST_HYPOTHESES), 2))
    odd[:, 0] = unusual.reshape(n, len(CHEST_HYPOTHESES), -1)[..., [0, 4]].min(axis=1)
    return np.concatenate([features.reshape(n, len(CHEST_HYPOTHESES), -1), odd], axis=2)


def probabilities(features: Floats, weight: Floats) -> Floats:
    """Softmax over hypotheses, the last axis but one of the features."""
    score = features @ weight
    chance = np.exp(score - score.max(axis=-1, keepdims=True))
    return chance / chance.sum(axis=-1, keepdims=True)


@dataclass(frozen=True, slots=True, eq=False)
class PlacementModel:
    """Everything learned, as plain arrays."""

    usual: Usual
    limb_weight: Floats  # (LIMB_FEATURES,) with chest leads
    limb_alone_weight: Floats  # (LIMB_FEATURES,) without
    chest_weight: Floats  # (CHEST_FEATURES,)

    def arrays(self) -> dict[str, Floats]:
        own = {f.name: getattr(self, f.name) for f in fields(self) if f.name != "usual"}
        return own | {f"usual_{f.name}": getattr(self.usual, f.name) for f in fields(Usual)}

    @classmethod
    def from_arrays(cls, arrays: dict[str, Floats]) -> PlacementModel:
        """ModelError where an array is missing, not finite or of another shape than this program's."""
        d = N * N_PARTS
        shapes = {
            "usual_mean": (d,), "usual_covariance": (d, d), "usual_power": (3, N, N),
            "usual_pair_weight": (N_PAIRS, PAIR_FEATURES), "usual_rl_maps": (2, N, N),
            "limb_weight": (LIMB_FEATURES,), "limb_alone_weight": (LIMB_FEATURES,),
            "chest_weight": (CHEST_FEATURES,),
        }  # fmt: skip
        for name, shape in shapes.items():
            found = arrays.get(name)
            if found is None or found.shape != shape or not np.isfinite(found).all():
                raise ModelError(f"{FILE}: {name} is missing or not what this program uses; train it again")
        usual = Usual(
            **{f.name: np.asarray(arrays[f"usual_{f.name}"], dtype=np.float64) for f in fields(Usual)}
        )
        return cls(usual, arrays["limb_weight"], arrays["limb_alone_weight"], arrays["chest_weight"])


@cache
def shipped_placement_model() -> PlacementModel:
    """The model that ships. ModelError where it is missing or damaged."""
    arrays = model_arrays(FILE, "placement model")
    return PlacementModel.from_arrays(arrays)
