"""Tables that outgrow memory: rows kept in a file without a name and loaded when they are asked for.

The file is gone as soon as nobody holds it, also after a crash.
"""

from __future__ import annotations

import math
import tempfile
import weakref
from typing import Any

import numpy as np
from numpy.typing import DTypeLike, NDArray


class StoredRows:
    """An (n, …) table on disk that can be read like an array: by slice, mask or index of rows, or as a whole.

    Rows are added with ``append`` and never changed. What is read is a copy in memory.
    """

    def __init__(self, row_shape: tuple[int, ...], dtype: DTypeLike) -> None:
        self.row_shape, self.dtype, self._n = row_shape, np.dtype(dtype), 0
        # Held open for as long as the table lives: it has no name to be opened by again.
        self._file = tempfile.TemporaryFile(prefix="sigguard-")  # noqa: SIM115
        weakref.finalize(self, self._file.close)

    @property
    def shape(self) -> tuple[int, ...]:
        return (self._n, *self.row_shape)

    @property
    def ndim(self) -> int:
        return 1 + len(self.row_shape)

    def __len__(self) -> int:
        return self._n

    def append(self, rows: NDArray) -> None:
        """Add (k, …) rows. Raises OSError where the disk is full, ValueError for rows of another shape."""
        if rows.shape[1:] != self.row_shape:
            raise ValueError(f"rows of shape {self.row_shape} expected, found {rows.shape[1:]}")
        self._file.seek(0, 2)
        self._file.write(np.ascontiguousarray(rows, dtype=self.dtype).tobytes())
        self._n += len(rows)

    def __array__(self, dtype: DTypeLike | None = None, copy: bool | None = None) -> NDArray:
        whole = self._span(0, self._n)
        return whole if dtype is None else whole.astype(dtype)

    def __getitem__(self, index: Any) -> Any:
        columns: tuple[Any, ...] = ()
        if isinstance(index, tuple):
            index, *rest = index
            columns = tuple(rest)
        if isinstance(index, slice):
            first, stop, step = index.indices(self._n)
            rows = self._span(first, stop)[::step] if step > 0 else self._span(0, self._n)[index]
            return rows[(slice(None), *columns)]
        if isinstance(index, (int, np.integer)):
            at = int(index) + (self._n if index < 0 else 0)
            if not 0 <= at < self._n:
                raise IndexError(f"row {index} of {self._n}")
            return self._span(at, at + 1)[(0, *columns)]
        wanted = np.asarray(index)
        if wanted.dtype == bool:
            if len(wanted) != self._n:
                raise IndexError(f"a mask of {len(wanted)} for {self._n} rows")
            wanted = np.flatnonzero(wanted)
        if not len(wanted):
            return np.zeros((0, *self.row_shape), self.dtype)[(slice(None), *columns)]
        wanted = np.where(wanted < 0, wanted + self._n, wanted)
        first = int(wanted.min())
        return self._span(first, int(wanted.max()) + 1)[wanted - first][(slice(None), *columns)]

    def _span(self, first: int, stop: int) -> NDArray:
        size = math.prod(self.row_shape) * self.dtype.itemsize
        stop = max(stop, first)
        self._file.seek(first * size)
        raw = self._file.read((stop - first) * size)
        return np.frombuffer(bytearray(raw), dtype=self.dtype).reshape(-1, *self.row_shape)
