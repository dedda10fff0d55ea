"""How much a 4 s window looks like fibrillation or flutter of the ventricles.

A logistic regression on the nine shape indices and their products, each index first brought to mean 0 and
spread 1. The constants are what ``python -m sigguard.training.rhythms`` prints (seed 1, scikit-learn's L2 penalty with
C = 0.01, 1800 simulated strips of 24 s); it says what is simulated and how. No recording took part. On fresh
simulated strips, many of them beyond reading, the score alone raises 97.3 % of the lethal ones (wide tachycardias,
which have a rule of their own, among them) within 10 s and 9.3 % of the others (noise down to -6 dB) somewhere
in 24 s.
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
    centre=np.array([0.5787, 0.7344, 0.6776, 0.4267, 0.5268, 1.1726, 0.5870, 0.1590, 0.1693]),
    spread=np.array([0.2246, 0.1159, 0.1533, 0.2383, 0.3056, 0.6154, 0.2405, 0.1851, 0.1880]),
    offset=-1.1862,
    linear=np.array([-1.6838, 0.7155, 1.5028, 0.3041, 0.6385, 0.1903, 0.3889, -0.9123, -1.1294]),
    products=np.array(
        [
            [-0.4123, 0.1464, -0.1069, 0.0000, 0.5116, 0.7400, 0.2320, -0.1987, 0.7193],
            [0.0000, -0.4291, 0.5033, -0.0294, -0.2260, -0.2113, -0.0188, -0.2928, -0.2368],
            [0.0000, 0.0000, 0.3604, 0.1389, 0.3985, -0.2242, -0.1574, 0.1246, -0.3656],
            [0.0000, 0.0000, 0.0000, 0.0232, -0.3643, 0.1434, -0.2780, 0.3489, -0.0184],
            [0.0000, 0.0000, 0.0000, 0.0000, -0.4986, -0.0710, 0.0961, -0.1521, -0.1573],
            [0.0000, 0.0000, 0.0000, 0.0000, 0.0000, -0.0098, 0.2320, -0.3894, -0.1437],
            [0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.1166, -0.1981, 0.2727],
            [0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.2006, 0.0434],
            [0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0000, 0.0066],
        ]
    ),
)


def fibrillation_score(shape: Floats, constants: Constants = SHIPPED) -> Floats:
    """(..., 9) shape indices → (...) log odds; above 0 rather fibrillation or flutter than anything else."""
    z = (shape - constants.centre) / constants.spread
    return constants.offset + z @ constants.linear + np.sum((z @ constants.products) * z, axis=-1)
