"""From the heart's dipole to electrodes and leads, and from electrodes to leads.

Axes of the dipole: x to the patient's left, y to the feet, z to the back (Frank).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sigguard.electrodes import ELECTRODES, LEAD_FROM_ELECTRODES
from sigguard.electrodes import LEADS_12 as LEADS

__all__ = ["DOWER", "ELECTRODES", "LEADS", "electrodes_from_independent", "to_leads"]

# Dower, Machado, Osborne 1980 (from memory): rows V1..V6, I, II; columns x, y, z.
DOWER = np.array(
    [
        [-0.515, 0.157, -0.917],
        [0.044, 0.164, -1.387],
        [0.882, 0.098, -1.277],
        [1.213, 0.127, -0.601],
        [1.125, 0.127, -0.086],
        [0.831, 0.076, 0.230],
        [0.632, -0.235, 0.059],
        [0.235, 1.066, -0.132],
    ]
)


def to_leads(electrode_mv: NDArray[np.floating]) -> NDArray[np.float64]:
    """Potentials or noise of RA, LA, LL, C1..C6, (9, n) → the 12 leads, (12, n), same unit.

    Einthoven, Goldberger and Wilson; what all electrodes share drops out.
    """
    return LEAD_FROM_ELECTRODES @ np.asarray(electrode_mv, dtype=np.float64)


def electrodes_from_independent(independent_mv: NDArray[np.floating]) -> NDArray[np.float64]:
    """Leads V1..V6, I, II, (8, n) → potentials of RA, LA, LL, C1..C6, (9, n), mV.

    The part common to all electrodes cannot be known from leads; it is set so that the central terminal is 0.
    """
    chest, lead_i, lead_ii = independent_mv[:6], independent_mv[6], independent_mv[7]
    ra = -(lead_i + lead_ii) / 3
    return np.vstack([ra, ra + lead_i, ra + lead_ii, chest])
