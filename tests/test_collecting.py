"""A long table on disk and a short one in memory are one table."""

import numpy as np
import pytest

from sigguard import Recording, check, collecting, segment_pass
from sigguard.stored import StoredRows
from tests.simulated import leads_of, strip

FS = 500.0


@pytest.fixture(scope="module")
def recording():
    x = leads_of([strip(5, duration_s=70.0)], "I", "II", "III")
    return Recording(signal_mv=x, fs_hz=FS, leads=("I", "II", "III"))


def test_columns_on_disk_change_nothing(recording, monkeypatch, tmp_path) -> None:
    plain = check(recording)
    monkeypatch.setattr(collecting, "LONG_ROWS", 1)
    stored = check(recording)
    assert isinstance(stored.segments.features, StoredRows)
    assert plain.to_json() == stored.to_json()
    plain.segments.to_csv(tmp_path / "a.csv")
    stored.segments.to_csv(tmp_path / "b.csv")
    assert (tmp_path / "a.csv").read_text() == (tmp_path / "b.csv").read_text()
    np.testing.assert_array_equal(plain.beats, stored.beats)


def test_beats_over_leads_follow_the_lead_whose_rate_scores_best(recording) -> None:
    report = check(recording)
    assert len(report.beats) > 50 and np.all(np.diff(report.beats) > 0.2 * FS)


def test_progress_rises_to_the_whole(recording, monkeypatch) -> None:
    seen: list[float] = []
    monkeypatch.setattr(segment_pass, "batches", lambda plan, n: _small(plan, n))
    check(recording, progress=seen.append)
    assert seen == sorted(seen) and seen[-1] == pytest.approx(1.0) and len(seen) > 2


def _small(plan, n_leads):
    from sigguard.blocks import batches

    return batches(plan, n_leads, block_rows=6)
