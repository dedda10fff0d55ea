import numpy as np
import pytest

from sigguard.stored import StoredRows


@pytest.fixture
def both():
    table = np.random.default_rng(1).normal(size=(50, 4))
    stored = StoredRows((4,), np.float64)
    for first in range(0, 50, 20):
        stored.append(table[first : first + 20])
    return stored, table


@pytest.mark.parametrize(
    "index",
    [
        slice(None),
        slice(3, 17),
        slice(40, 2),
        slice(None, None, 3),
        slice(None, None, -1),
        7,
        -1,
        np.array([5, 2, 2, 49]),
        np.array([-1, -50]),
        np.arange(50) % 3 == 0,
        np.zeros(50, bool),
        np.zeros(0, int),
        (slice(None), 2),
        (np.array([1, 9]), 0),
        (np.arange(50) > 30, slice(1, 3)),
    ],
    ids=str,
)
def test_read_like_the_array_it_holds(both, index) -> None:
    stored, table = both
    np.testing.assert_array_equal(stored[index], table[index])


def test_whole_shape_and_kind(both) -> None:
    stored, table = both
    np.testing.assert_array_equal(np.asarray(stored), table)
    assert stored.shape == (50, 4) and stored.ndim == 2 and len(stored) == 50 and stored.dtype == np.float64
    assert np.nan_to_num(stored).shape == (50, 4)


def test_what_is_read_is_a_copy(both) -> None:
    stored, table = both
    stored[:][:] = 0
    np.testing.assert_array_equal(stored[:], table)


def test_a_wrong_width_or_row_is_an_error(both) -> None:
    stored, _ = both
    with pytest.raises(ValueError, match="shape"):
        stored.append(np.zeros((1, 3)))
    with pytest.raises(IndexError):
        stored[50]
    with pytest.raises(IndexError):
        stored[np.zeros(3, bool)]


def test_single_precision_is_kept_in_single() -> None:
    stored = StoredRows((2,), np.float32)
    stored.append(np.array([[1.5, np.nan]]))
    assert stored[:].dtype == np.float32 and np.isnan(stored[0, 1])


def test_rows_of_more_than_one_axis() -> None:
    table = np.arange(60).reshape(5, 3, 4) % 7 == 0
    stored = StoredRows((3, 4), bool)
    stored.append(table)
    assert stored.shape == (5, 3, 4) and stored.ndim == 3
    np.testing.assert_array_equal(stored[np.array([4, 1]), 2], table[np.array([4, 1]), 2])
    np.testing.assert_array_equal(stored[1:3, :, 0], table[1:3, :, 0])
