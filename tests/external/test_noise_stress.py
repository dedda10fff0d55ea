"""The noise-stress records: what has electrode-motion noise at 0 dB on it may not pass as fit for intervals.

Noise from 5 to 7, 9 to 11, 13 to 15 and 17 to 19 min (Moody, Muldrow, Mark 1984); only 17 to 19 min is noise the
model has not learned from. Script: python -m tests.external.test_noise_stress DATA_FOLDER
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

from sigguard import check
from sigguard.segments import GRADES

NOISY_MIN = ((5, 7), (9, 11), (13, 15), (17, 19))


def shares_below_intervals(path: Path) -> tuple[float, float]:
    """(noisy 17 to 19 min, clean minutes): share of lead segments that grade below ``intervals``."""
    table = check(path).segments
    below = table.grade < GRADES.index("intervals")
    unseen = (table.start_s >= 17 * 60) & (table.end_s <= 19 * 60)
    noisy = np.any([(table.end_s > a * 60) & (table.start_s < b * 60) for a, b in NOISY_MIN], axis=0)
    return float(below[unseen].mean()), float(below[~noisy].mean())


@pytest.mark.usefixtures("no_advice")
def test_noise_stress_records(open_data: Path) -> None:
    folder = open_data / "nstdb"
    if not (folder / "118e00.hea").is_file():
        pytest.skip("no noise-stress records in the open data")
    heavy, clean = shares_below_intervals(folder / "118e00.hea")
    light, _ = shares_below_intervals(folder / "118e12.hea")
    assert heavy >= 0.95
    assert clean <= light <= heavy


if __name__ == "__main__":
    for name in ("118e00", "118e12"):
        noisy, clean = shares_below_intervals(Path(sys.argv[1]) / "nstdb" / f"{name}.hea")
        sys.stdout.write(
            f"{name}: below intervals {100 * noisy:.1f} % of 17 to 19 min, {100 * clean:.1f} % of the clean\n"
        )
