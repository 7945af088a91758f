"""LAMMPS text dumps, read here instead of by MDAnalysis.

MDAnalysis shifts scaled coordinates by the lower box corner, drops the
boundary flags and the origin, miscounts frames when the particle number
changes and rounds to single precision.
"""

import mmap
from collections.abc import Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import FrameError, InputError
from trajcage.readers.lammps_text import (
    BLOCK_HEAD,
    DumpBlock,
    DumpError,
    find_blocks,
    parse_block,
)
from trajcage.readers.source import Particles, RawFrame, Source
from trajcage.readers.text import Table

__all__ = ["LammpsDumpSource"]

# Coordinate columns by preference: wrapped before unwrapped, plain before scaled.
_COORDINATES = {
    "x": ("x", "y", "z"),
    "xu": ("xu", "yu", "zu"),
    "xs": ("xs", "ys", "zs"),
    "xsu": ("xsu", "ysu", "zsu"),
}


class LammpsDumpSource(Source):
    """A LAMMPS dump in text form (styles atom and custom).

    Parameters
    ----------
    path : Path
        The dump file.
    companion : Particles, optional
        Types, radii and ids from a topology, used where the dump has none.

    Raises
    ------
    InputError
        If the file is no LAMMPS text dump or lacks coordinate columns.
    """

    format = "LAMMPS dump"
    box_source = "the BOX BOUNDS of the dump"
    box_anchor = "corner"

    def __init__(self, path: Path, companion: Particles | None = None) -> None:
        self.files = (path,)
        self.notes = []
        self._companion = companion
        with path.open("rb") as file:
            self._map = mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ)
        self._offsets = find_blocks(self._map)
        self.n_frames = len(self._offsets) - 1
        if self.n_frames == 0:
            self.close()
            raise InputError(
                f"expected a LAMMPS text dump with lines '{BLOCK_HEAD.decode()}', "
                f"found none in {path}"
            )
        try:
            self._open(path)
        except Exception:
            self.close()
            raise

    def _open(self, path: Path) -> None:
        block = self._block(0)
        self._coordinates = _choose_coordinates(block.table.columns, path)
        companion = self._companion
        if companion is not None and len(companion.types) != len(block.table):
            raise InputError(
                f"the topology has {len(companion.types)} particles, {path} has "
                f"{len(block.table)}"
            )
        self._type_column = next(
            (name for name in ("type", "element") if name in block.table.columns), None
        )
        if self._type_column is not None:
            names = set(block.table.names(self._type_column))
            if companion is not None:
                names |= set(companion.type_names)
            self.type_names = tuple(sorted(names, key=_natural_order))
        else:
            self.type_names = ("A",) if companion is None else companion.type_names
        self.radii_source = next(
            (
                f"the {name} column of the dump"
                for name in ("radius", "diameter")
                if name in block.table.columns
            ),
            "" if companion is None else companion.radii_source,
        )
        self.has_ids = "id" in block.table.columns
        if not self.has_ids and self.n_frames > 1:
            self.notes.append(
                "the dump has no id column: particles are told apart by their order "
                "in the file, which LAMMPS may change from frame to frame unless "
                "the dump is sorted"
            )
        if block.periodic is None:
            self.notes.append("the dump has no boundary flags: edges taken as periodic")
        if self._coordinates[0] in {"xs", "xsu"}:
            self.notes.append("scaled coordinates, turned into lengths with the box")
        self.planar = True if len(self._coordinates) == 2 else None
        self._unit = block.table.spacing(*self._coordinates)

    def read(self, index: int) -> RawFrame:
        """Read one frame, particles in the order of their ids."""
        block = self._block(index)
        try:
            return self._assemble(block, index)
        except ValueError as error:
            if isinstance(error, FrameError):
                raise
            raise FrameError(str(error), frame=index, step=block.step) from None

    def spacing(self, raw: RawFrame) -> float:
        """Return the unit of the last printed digit, times the box if scaled."""
        if self._coordinates[0] in {"xs", "xsu"} and raw.vectors is not None:
            unit = self._unit * float(np.linalg.norm(raw.vectors, axis=1).max())
        else:
            unit = self._unit
        finite = np.abs(raw.positions[np.isfinite(raw.positions)])
        return max(unit, float(np.spacing(finite.max()))) if finite.size else unit

    def close(self) -> None:
        """Close the file."""
        self._map.close()

    def _assemble(self, block: DumpBlock, index: int) -> RawFrame:
        table, companion = block.table, self._companion
        n = len(table)
        ids, order = np.arange(n, dtype=np.int64), np.arange(n)
        if "id" in table:
            ids = table.integers("id")[:, 0]
            order = np.argsort(ids, kind="stable")
            ids = ids[order]
        elif companion is not None:
            ids = companion.own_ids()
        rows = order if companion is None else companion.rows(ids)
        positions = np.zeros((n, 3))
        coordinates = table.floats(*self._coordinates)[order]
        positions[:, : coordinates.shape[1]] = coordinates
        if self._coordinates[0] in {"xs", "xsu"}:
            positions = block.origin + positions @ block.vectors
        radii = self._radii(table)
        if radii is not None:
            radii = radii[order]
        elif companion is not None and companion.radii is not None:
            radii = companion.radii[rows]
        if self._type_column is not None:
            types = self.index_types(table.names(self._type_column), index)[order]
        elif companion is not None:
            types = companion.types[rows]
        else:
            types = np.zeros(n, dtype=np.int32)
        images = self._images(table)
        return RawFrame(
            positions=positions,
            ids=ids,
            types=types,
            vectors=block.vectors,
            origin=block.origin,
            periodic=block.periodic,
            step=block.step,
            time=block.time,
            radii=radii,
            images=None if images is None else images[order],
        )

    @staticmethod
    def _radii(table: Table) -> NDArray[np.float64] | None:
        if "radius" in table:
            return table.floats("radius")[:, 0]
        if "diameter" in table:
            return table.floats("diameter")[:, 0] / 2.0
        return None

    def _images(self, table: Table) -> NDArray[np.int32] | None:
        images = np.zeros((len(table), 3), dtype=np.int32)
        if self._coordinates[0] in {"xu", "xsu"}:
            # Already unwrapped: applying ix iy iz once more would be wrong.
            return images
        names = ("ix", "iy", "iz")[: len(self._coordinates)]
        if not all(name in table for name in names):
            return None
        images[:, : len(names)] = table.integers(*names)
        return images

    def _block(self, index: int) -> DumpBlock:
        start, stop = self._offsets[index], self._offsets[index + 1]
        try:
            return parse_block(
                self._map[start:stop], before=self._map[max(0, start - 100) : start]
            )
        except DumpError as error:
            raise FrameError(
                f"cannot read {self.files[0]}: {error}", frame=index, step=error.step
            ) from None


def _choose_coordinates(columns: Mapping[str, int], path: Path) -> tuple[str, ...]:
    for names in _COORDINATES.values():
        if set(names) <= set(columns):
            return names
    for names in _COORDINATES.values():  # a plane without its third column
        if set(names[:2]) <= set(columns):
            return names[:2]
    raise InputError(
        "expected one of the coordinate columns x y z, xu yu zu, xs ys zs or "
        f"xsu ysu zsu, {path} has {' '.join(columns)}"
    )


def _natural_order(name: str) -> tuple[int, str]:
    """Sort 2 before 10."""
    return (int(name) if name.isdigit() else 1 << 62, name)
