"""The long version of tests/inbox/test_kills.py: 1,000 recordings in pieces, 20 kills.

    python -m tests.benchmarks.kills [N] [KILLS] [--real]

``--real`` checks with the real screening instead of the stand-in that only does the bookkeeping's share.
"""

from __future__ import annotations

import sys
import tempfile
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "inbox"))

from torture import assert_nothing_lost, torture  # noqa: E402


def main() -> None:
    numbers = [int(word) for word in sys.argv[1:] if word.isdigit()]
    n, kills = (*numbers, *(1000, 20)[len(numbers) :])
    real = "--real" in sys.argv
    with tempfile.TemporaryDirectory() as folder:
        found = torture(
            Path(folder),
            n=n,
            kills=kills,
            seed=11,
            pause_s=0.015,
            sleep_s=0.05,
            between_s=(0.5, 3.0),
            stand_in=not real,
        )
    repeated = found.in_hand
    print(f"{n} recordings, {kills} kills, {'real' if real else 'stand-in'} screening, {found.took_s:.0f} s")
    print(
        f"in the ledger: {len(found.entries)}, each once: {set(found.entries.values()) == {1}}, not done: {found.claimed}"
    )
    print(f"whole reports with equal copies: {found.reports_whole}; lines printed for {len(found.lines)}")
    print(
        f"integrity_check: {found.integrity}; foreign keys broken: {found.foreign}; stray files: {found.strays}"
    )
    print(
        f"killed with a recording in hand: {repeated}; checks begun: {sum(found.begun.values())}; stderr: {found.errors!r}"
    )
    assert_nothing_lost(found, n=n, kills=kills)


if __name__ == "__main__":
    main()
