"""Tables that outgrow memory: rows kept in a file without a name and loaded when they are asked for.

The file is gone as soon as nobody holds it, also after a crash.
"""

from __future__ import annotations

import tempfile
import weakref
from typing import Any

import numpy as np
from numpy.typing import DTypeLike, NDArray


class StoredRows:
    """An (n, width) table on disk that can be read like an array: by slice, mask or index, or as a whole.

    Rows are added with ``append`` and never changed. What is read is a copy in memory.
    """

    def __init__(self, width: int, dtype: DTypeLike) -> None:
        self.width, self.dtype, self._n = width, np.dtype(dtype), 0
        # Held open for as long as the table lives: it has no name to be opened by again.
        self._file = tempfile.TemporaryFile(prefix="sigguard-")  # noqa: SIM115
        weakref.finalize(self, self._file.close)

    @property
    def shape(self) -> tuple[int, int]:
        return (self._n, self.width)

    @property
    def ndim(self) -> int:
        return 2

    def __len__(self) -> int:
        return self._n

    def append(self, rows: NDArray) -> None:
        """Add (k, width) rows. Raises OSError where the disk is full, ValueError for another width."""
        if rows.shape[1] != self.width:
            raise ValueError(f"rows of {self.width} columns expected, found {rows.shape[1]}")
        self._file.seek(0, 2)
        self._file.write(np.ascontiguousarray(rows, dtype=self.dtype).tobytes())
        self._n += len(rows)

    def __array__(self, dtype: DTypeLike | None = None, copy: bool | None = None) -> NDArray:
        whole = self._span(0, self._n)
        return whole if dtype is None else whole.astype(dtype)

    def __getitem__(self, index: Any) -> Any:
        columns: Any = slice(None)
        if isinstance(index, tuple):
            index, columns = index
        if isinstance(index, slice):
            first, stop, step = index.indices(self._n)
            rows = self._span(first, stop)[::step] if step > 0 else self._span(0, self._n)[index]
            return rows[:, columns]
        if isinstance(index, (int, np.integer)):
            at = int(index) + (self._n if index < 0 else 0)
            if not 0 <= at < self._n:
                raise IndexError(f"row {index} of {self._n}")
            return self._span(at, at + 1)[0, columns]
        wanted = np.asarray(index)
        if wanted.dtype == bool:
            if len(wanted) != self._n:
                raise IndexError(f"a mask of {len(wanted)} for {self._n} rows")
            wanted = np.flatnonzero(wanted)
        if not len(wanted):
            return np.zeros((0, self.width), self.dtype)[:, columns]
        wanted = np.where(wanted < 0, wanted + self._n, wanted)
        first = int(wanted.min())
        return self._span(first, int(wanted.max()) + 1)[wanted - first][:, columns]

    def _span(self, first: int, stop: int) -> NDArray:
        size = self.width * self.dtype.itemsize
        stop = max(stop, first)
        self._file.seek(first * size)
        raw = self._file.read((stop - first) * size)
        return np.frombuffer(bytearray(raw), dtype=self.dtype).reshape(stop - first, self.width)
