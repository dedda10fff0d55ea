"""How much a 4 s window looks like fibrillation or flutter of the ventricles.

A logistic regression on the nine shape indices and their products, each index first brought to mean 0 and
spread 1. The constants are what ``python -m sigguard.training.rhythms`` prints (seed 1, scikit-learn's L2 penalty with
C = 0.01, 1800 simulated strips of 24 s); it says what is simulated and how. No recording took part. On fresh
simulated strips, many of them beyond reading, 99.1 % of the lethal ones are raised within 10 s and 10 % of the
others (noise down to -6 dB) somewhere in 24 s.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.floating]

# below, a wavy line is taken as standstill and not as fibrillation
SMALLEST_RMS_MV = 0.025


@dataclass(frozen=True, slots=True, eq=False)
class Constants:
    """A logistic regression on indices z = (index - centre) / spread, their squares and products."""

    centre: Floats  # (9,), order of the entries: rhythm_shape.SHAPE_NAMES
    spread: Floats  # (9,)
    offset: float
    linear: Floats  # (9,)
    products: Floats  # (9, 9), upper triangle: weight of index i times index j


SHIPPED = Constants(
    centre=np.array([0.5859, 0.7263, 0.6674, 0.4122, 0.5216, 1.1562, 0.5786, 0.1590, 0.1695]),
    spread=np.array([0.2238, 0.1207, 0.1585, 0.2415, 0.3081, 0.5964, 0.2417, 0.1795, 0.1847]),
    offset=-1.9650,
    linear=np.array([-1.6200, 0.7200, 1.5142, 0.3266, 0.7714, 0.0696, 0.4854, -0.7999, -1.2807]),
    products=np.array(
        [
            [-0.3730, -0.1133, -0.2521, 0.1117, 0.4070, 0.5543, 0.2781, -0.0880, 0.5592],
            [0.0000, -0.3298, 0.4498, -0.2731, -0.0976, -0.0599, -0.1753, -0.1945, -0.4756],
            [0.0000, 0.0000, 0.4946, 0.2331, 0.1296, -0.1512, -0.1202, 0.2932, -0.4082],
            [0.0000, 0.0000, 0.0000, 0.2880, -0.2965, -0.0274, -0.2371, 0.0720, 0.2417],
            [0.0000, 0.0000, 0.0000, 0.0000, -0.3281, -0.0647, 0.0827, -0.2558, -0.2328],
            [0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0942, -0.0075, -0.2913, -0.0901],
            [0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.1643, -0.2301, 0.2743],
            [0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.1248, 0.1164],
            [0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0648],
        ]
    ),
)


def fibrillation_score(shape: Floats, constants: Constants = SHIPPED) -> Floats:
    """(..., 9) shape indices → (...) log odds; above 0 rather fibrillation or flutter than anything else."""
    z = (shape - constants.centre) / constants.spread
    return constants.offset + z @ constants.linear + np.sum((z @ constants.products) * z, axis=-1)
