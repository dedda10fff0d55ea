"""Recordings with electrodes in the wrong place, made by lead algebra from recordings with them in the right one."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sigguard.electrodes import LEAD_FROM_ELECTRODES
from sigguard.placement_model import (
    CHEST_HYPOTHESES,
    LIMB_HYPOTHESES,
    LL,
    N_PAIRS,
    RL_HYPOTHESES,
    N,
    restoring,
)

Floats = NDArray[np.float64]

REMAINDER = (0.03, 0.08)  # how far the right leg differs from the left, of the lead that the swap flattens
_CENTRING = np.eye(N) - np.concatenate([np.ones((N, 3)) / 3, np.zeros((N, N - 3))], axis=1)
_FROM_LEADS = _CENTRING @ np.linalg.pinv(LEAD_FROM_ELECTRODES)


def electrode_potentials(x_mv: Floats) -> Floats:
    """(12, N) leads in the order of LEADS_12 → (9, N) potentials against Wilson's terminal, limb leads reconciled."""
    return _FROM_LEADS @ np.asarray(x_mv, dtype=np.float64)


def misplaced_potentials(potential_mv: Floats, limb_hypothesis: int, *, remainder: float = 0.05) -> Floats:
    """(9, N) potentials as one of LIMB_HYPOTHESES (by position) would show them.

    A wire on the right leg sees the left leg's potential but for ``remainder`` of what the lead between the
    two had before, and Wilson's terminal moves with it.
    """
    if limb_hypothesis in RL_HYPOTHESES:
        seen = potential_mv.copy()
        wire = RL_HYPOTHESES[limb_hypothesis]
        seen[wire] = potential_mv[LL] - remainder * (potential_mv[LL] - potential_mv[wire])
        return _CENTRING @ seen
    return restoring(limb_hypothesis, np.zeros((2, N, N))).T @ potential_mv


def misplaced(x_mv: Floats, finding: str, *, remainder: float = 0.05) -> Floats:
    """(12, N) leads in the order of LEADS_12 as the misplacement ``finding`` would show them.

    ``finding`` is one of LIMB_HYPOTHESES, CHEST_HYPOTHESES, or ``inverted lead X`` for any lead. Limb leads come
    out of the electrodes' potentials and so obey Einthoven and Goldberger, whatever the source did. Raises
    ValueError for an unknown finding.
    """
    x = np.asarray(x_mv, dtype=np.float64)
    potential = electrode_potentials(x)
    if finding in LIMB_HYPOTHESES:
        k = LIMB_HYPOTHESES.index(finding)
        return LEAD_FROM_ELECTRODES @ misplaced_potentials(potential, k, remainder=remainder)
    if finding not in CHEST_HYPOTHESES:
        raise ValueError(f"expected one of {LIMB_HYPOTHESES + CHEST_HYPOTHESES}, found {finding!r}")
    k = CHEST_HYPOTHESES.index(finding)
    y = LEAD_FROM_ELECTRODES @ potential
    if k <= N_PAIRS:
        y[[5 + k, 6 + k]] = y[[6 + k, 5 + k]]
    else:
        y[k] *= -1.0
    return y
