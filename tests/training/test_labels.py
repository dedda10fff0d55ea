"""Labels by hand-made cases."""

from __future__ import annotations

import numpy as np
import pytest

from sigguard.training.labels import beats_agree, label_rows, label_values
from training.fake import FakeAnalysis


def run(
    values: list[list[float]], beats: list[list[float]], absent: list[list[int]] | None = None
) -> FakeAnalysis:
    value = np.array(values, dtype=float)
    codes = np.zeros(value.shape, dtype=np.int8) if absent is None else np.array(absent, dtype=np.int8)
    row = np.repeat(np.arange(len(beats)), [len(b) for b in beats]).astype(np.int32)
    return FakeAnalysis(
        value, codes, row, np.concatenate([np.array(b) for b in beats]), np.zeros((len(beats), 1))
    )


BEATS = [1.0, 2.0, 3.0, 4.0]
CLEAN = [60.0, 160.0, 90.0, 400.0, 0.05]


@pytest.mark.parametrize(
    ("found", "agree"),
    [
        (BEATS, True),
        ([1.149, 1.851, 3.0, 4.0], True),
        ([1.151, 2.0, 3.0, 4.0], False),
        ([2.0, 3.0, 4.0], False),  # missed
        ([1.0, 2.0, 2.5, 3.0, 4.0], False),  # invented
        ([0.149, *BEATS], True),  # near the edge either is right
        ([0.151, *BEATS], False),
        ([*BEATS, 4.86], True),
        ([*BEATS, 4.84], False),
        ([], False),
    ],
)
def test_beats_pair_within_150_ms_edges_aside(found: list[float], agree: bool) -> None:
    assert beats_agree(np.array(BEATS), np.array(found), 5.0) is agree


def test_a_beat_at_the_edge_may_be_missing() -> None:
    assert beats_agree(np.array([0.1, 1.0, 4.9]), np.array([1.0]), 5.0)
    assert not beats_agree(np.array([0.2, 1.0, 4.9]), np.array([1.0]), 5.0)


def test_tolerances_of_each_measurement() -> None:
    inside = [61.0, 180.0, 70.0, 430.0, 0.075]
    outside = [61.0, 180.1, 69.9, 430.1, 0.0751]
    labels = label_rows(run([CLEAN, CLEAN], [BEATS, BEATS]), run([inside, outside], [BEATS, BEATS]), 5.0)
    assert labels.judged.all() and labels.valued.all()
    np.testing.assert_array_equal(labels.right, [[True] * 5, [True, False, False, False, False]])
    np.testing.assert_allclose(labels.error[0], [1, 20, 20, 30, 0.025])


def test_lost_and_invented_values_are_beyond_any_bound() -> None:
    nan = np.nan
    clean = run([CLEAN, [60, nan, 90, nan, 0]], [BEATS, BEATS])
    spoilt = run([[nan, nan, 90, 400, 0.05], [60, 150, 90, nan, 0]], [BEATS, BEATS])
    labels = label_rows(clean, spoilt, 5.0)
    np.testing.assert_array_equal(
        labels.right, [[False, False, True, True, True], [True, False, True, False, True]]
    )
    np.testing.assert_array_equal(labels.judged, [[True] * 5, [True, True, True, False, True]])
    np.testing.assert_array_equal(labels.valued[:, 1], [False, True])
    assert (
        np.isinf(labels.error[0, :2]).all() and np.isinf(labels.error[1, 1]) and np.isnan(labels.error[1, 3])
    )


def test_a_reason_of_absence_stands_or_falls() -> None:
    nan = np.nan
    value = [[60, nan, 90, 400, 0]]
    clean = run(value, [BEATS], [[0, 1, 0, 0, 0]])
    same = label_rows(clean, run(value, [BEATS], [[0, 1, 0, 0, 0]]), 5.0)
    other = label_rows(clean, run(value, [BEATS], [[0, 2, 0, 0, 0]]), 5.0)
    mute = label_rows(clean, run(value, [BEATS]), 5.0)
    assert [lab.judged[0, 1] for lab in (same, other, mute)] == [True, True, True]
    assert [lab.right[0, 1] for lab in (same, other, mute)] == [True, False, False]
    assert not same.valued[0, 1]


def test_rate_asks_for_the_beats_and_not_for_the_number() -> None:
    shifted = [1.0, 2.0, 2.5, 3.5, 4.0]
    labels = label_rows(run([CLEAN], [BEATS]), run([CLEAN], [shifted]), 5.0)
    assert not labels.right[0, 0] and labels.error[0, 0] == 0.0


def test_one_clean_row_under_several_spoilt_ones() -> None:
    clean = run([CLEAN, [80.0, *CLEAN[1:]]], [BEATS, [1.0, 1.75, 2.5]])
    spoilt = run([[80.0, *CLEAN[1:]], CLEAN], [[1.0, 1.75, 2.5], BEATS])
    labels = label_rows(clean, spoilt, 5.0, of=np.array([1, 0]))
    assert labels.right.all()
    with pytest.raises(ValueError, match="paired"):
        label_rows(clean, spoilt, 5.0, of=np.array([0]))


def test_nothing_to_compare_is_not_judged() -> None:
    labels = label_values(np.full((2, 3), np.nan), np.full((2, 3), np.nan), tolerance=(1.0, 1.0, 1.0))
    assert not labels.judged.any() and not labels.right.any()
