"""Fast writing of rows and frames through the low-level interface of h5py."""

import zlib
from collections.abc import Mapping, Sequence
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from trajcage.errors import UsageError
from trajcage.model import Field, FrameRecord
from trajcage.store.specs import to_dtype

__all__ = ["FrameRows", "ParticleWriter", "RowWriter"]


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


class FrameRows:
    """Checks frame records and writes them to all per-frame datasets."""

    def __init__(
        self, file: Any, fields: Sequence[Field], *, with_tables: bool
    ) -> None:
        self._fields = tuple(fields)
        particles, observables = file["particles/all"], file["observables"]
        edges, frames = particles["box/edges"], file["trajcage/frames"]
        self._n_particles: int = len(particles["id"])
        self._datasets = {
            "/edges": edges["value"],
            "/step": edges["step"],
            "/time": edges["time"],
            "/source": frames["source_frame"],
            "/origin": frames["box_origin"],
        }
        if with_tables:
            self._datasets["/tables"] = frames["table_rows"]
        self._writers = {name: RowWriter(d) for name, d in self._datasets.items()}
        for field in self._fields:
            self._writers[field.name] = (
                ParticleWriter(particles[field.name]["value"])
                if field.per_particle
                else RowWriter(observables[field.name]["value"])
            )

    def last(self, n_frames: int) -> tuple[int | None, int | None, list[int]]:
        """Return step, source frame and table rows of the last frame, if any."""
        if n_frames == 0:
            return None, None, []
        row = n_frames - 1
        tables = self._datasets.get("/tables")
        return (
            int(self._datasets["/step"][row]),
            int(self._datasets["/source"][row]),
            [] if tables is None else [int(n) for n in tables[row]],
        )

    def check(self, record: FrameRecord) -> dict[str, NDArray[np.generic]]:
        """Copy a record to arrays of the declared types.

        Raises
        ------
        UsageError
            If a value is missing, undeclared or does not fit its declaration.
        """
        unknown = set(record.values) - {f.name for f in self._fields}
        if unknown:
            raise UsageError(f"values of undeclared fields: {sorted(unknown)}")
        frame: dict[str, NDArray[np.generic]] = {
            "/edges": record.box.vectors,
            "/origin": record.box.origin,
            "/step": np.array(record.step, np.int64),
            "/time": np.array(record.time, np.float64),
            "/source": np.array(record.index, np.int64),
        }
        for field in self._fields:
            if field.name not in record.values:
                raise UsageError(f"frame {record.index} lacks field {field.name!r}")
            shape = field.shape
            if field.per_particle:
                shape = (self._n_particles, *shape)
            values = to_dtype(record.values[field.name], field)
            if values.shape != shape:
                raise UsageError(
                    f"field {field.name!r}: expected shape {shape}, got {values.shape}"
                )
            frame[field.name] = values
        return frame

    def write(
        self, start: int, frames: Sequence[Mapping[str, NDArray[np.generic]]]
    ) -> None:
        """Write checked frames from row ``start`` on."""
        if frames:
            for name, writer in self._writers.items():
                writer.write_all(start, [frame[name] for frame in frames])
