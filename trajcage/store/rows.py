"""Fast writing of rows through the low-level interface of h5py."""

import zlib
from collections.abc import Sequence
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

__all__ = ["ParticleWriter", "RowWriter"]


class RowWriter:
    """Writes blocks of rows to one growing dataset, extending it as needed."""

    def __init__(self, dataset: Any) -> None:
        self.id = dataset.id
        self.dtype: np.dtype[np.generic] = dataset.dtype
        self.shape: tuple[int, ...] = dataset.shape[1:]
        self._extent: int = dataset.shape[0]

    def extend(self, n_rows: int) -> None:
        """Make room for a number of rows; never shrinks."""
        if n_rows > self._extent:
            self.id.set_extent((n_rows, *self.shape))
            self._extent = n_rows

    def write(self, start: int, block: NDArray[np.generic]) -> None:
        """Write rows from ``start`` on."""
        if len(block) == 0:
            return
        self.extend(start + len(block))
        values = np.ascontiguousarray(block, dtype=self.dtype)
        place = self.id.get_space()
        place.select_hyperslab((start, *(0,) * len(self.shape)), values.shape)
        self.id.write(h5py.h5s.create_simple(values.shape), place, values)

    def replace(self, block: NDArray[np.generic], blank: object) -> None:
        """Replace the whole contents; rows left over from before become blank."""
        self.write(0, block)
        rest = (self._extent - len(block), *self.shape)
        self.write(len(block), np.full(rest, blank, self.dtype))

    def write_all(self, start: int, rows: Sequence[NDArray[np.generic]]) -> None:
        """Write single rows, one after the other, from ``start`` on."""
        self.write(start, np.stack(rows))


class ParticleWriter(RowWriter):
    """Writes one frame of a per-particle dataset as whole, ready-made chunks."""

    def __init__(self, dataset: Any) -> None:
        super().__init__(dataset)
        self._width: int = dataset.chunks[1]
        self._packed = dataset.compression is not None
        self._fill = dataset.fillvalue

    def write_all(self, start: int, rows: Sequence[NDArray[np.generic]]) -> None:
        """Write frames from ``start`` on."""
        self.extend(start + len(rows))
        for row, values in enumerate(rows, start):
            for first in range(0, len(values), self._width):
                self._write_chunk(row, first, values[first : first + self._width])

    def _write_chunk(self, row: int, first: int, values: NDArray[np.generic]) -> None:
        values = np.ascontiguousarray(values, dtype=self.dtype)
        if len(values) < self._width:  # the last chunk reaches over the edge
            padded = np.full((self._width, *values.shape[1:]), self._fill, self.dtype)
            padded[: len(values)] = values
            values = padded
        data: Any = values
        if self._packed:  # shuffle, then deflate, as the filters would
            size = self.dtype.itemsize
            plain = values.reshape(-1).view(np.uint8).reshape(-1, size)
            data = zlib.compress(plain.T.tobytes(), 1)
        offset = (row, first, *(0,) * (values.ndim - 1))
        self.id.write_direct_chunk(offset, data)
