"""How much a 4 s window looks like fibrillation or flutter of the ventricles.

A logistic regression on the nine shape indices and their products, each index first brought to mean 0 and
spread 1. Constants fitted (scikit-learn, L2 with C = 1, 36,000 windows) on two simulations in equal parts: this
package's own, and a plainer one of Gaussian beats and drifting sines. On the one side sinus rhythm, bundle branch
block, pacing, atrial fibrillation and flutter, ectopy, with recorded noise (its training part) and simulated
disturbances down to -6 dB; on the other fibrillation, flutter, torsades and sine waves with noise from 8 dB up. No
recorded rhythm took part. Fresh simulated windows: 99.5 and 99.9 % of the lethal ones and 0.6 and 1.6 % of the others
lie above -0.5 (plainer and own simulation).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.floating]

# order of the entries: rhythm_shape.SHAPE_NAMES
CENTRE = np.array([0.5147, 0.7434, 0.6829, 0.4150, 0.5437, 1.2340, 0.5868, 0.1182, 0.1711])
SPREAD = np.array([0.2638, 0.1218, 0.1562, 0.2346, 0.3327, 0.5977, 0.2744, 0.1706, 0.1988])
OFFSET = -2.2256
LINEAR = np.array([-5.743, 0.174, 3.803, -0.487, -1.035, 0.466, 1.615, -1.589, -1.597])
PRODUCTS = np.array(
    [
        [-0.236, 0.115, -0.982, 0.322, 0.496, -0.798, 0.568, 0.446, 0.304],
        [0.000, -1.030, 1.244, -0.103, -1.276, -0.273, -0.941, 0.783, 0.515],
        [0.000, 0.000, 1.167, 0.533, -0.295, 0.608, 0.142, -0.358, -0.323],
        [0.000, 0.000, 0.000, -0.653, 0.098, -1.792, 0.105, -0.692, -0.571],
        [0.000, 0.000, 0.000, 0.000, -1.085, -0.433, 1.426, -0.008, 0.139],
        [0.000, 0.000, 0.000, 0.000, 0.000, -0.025, 0.060, 0.900, 1.165],
        [0.000, 0.000, 0.000, 0.000, 0.000, 0.000, 0.958, -0.177, 0.074],
        [0.000, 0.000, 0.000, 0.000, 0.000, 0.000, 0.000, 0.782, 0.350],
        [0.000, 0.000, 0.000, 0.000, 0.000, 0.000, 0.000, 0.000, -0.324],
    ]
)  # upper triangle: weight of index i times index j


def fibrillation_score(shape: Floats) -> Floats:
    """(..., 9) shape indices → (...) log odds; above 0 rather fibrillation or flutter than anything else."""
    z = (shape - CENTRE) / SPREAD
    return OFFSET + z @ LINEAR + np.einsum("...i,ij,...j->...", z, PRODUCTS, z)
