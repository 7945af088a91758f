"""LAMMPS text dumps, read here instead of by MDAnalysis.

MDAnalysis shifts scaled coordinates by the lower box corner, drops the
boundary flags and the origin, miscounts frames when the particle number
changes and rounds to single precision.
"""

import mmap
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
from trajcage.readers.text import decimal_spacing, to_floats, to_integers, to_names

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
        self._coordinates = _choose_coordinates(block.columns, path)
        self._first_n = len(block.words)
        companion = self._companion
        if companion is not None and len(companion.types) != self._first_n:
            raise InputError(
                f"the topology has {len(companion.types)} particles, {path} has "
                f"{self._first_n}"
            )
        self._type_column = next(
            (name for name in ("type", "element") if name in block.columns), None
        )
        if self._type_column is not None:
            column = block.words[:, block.columns.index(self._type_column)]
            names = set(to_names(np.unique(column)))
            if companion is not None:
                names |= set(companion.type_names)
            self.type_names = tuple(sorted(names, key=_natural_order))
        else:
            self.type_names = ("A",) if companion is None else companion.type_names
        self.radii_source = next(
            (
                f"the {name} column of the dump"
                for name in ("radius", "diameter")
                if name in block.columns
            ),
            "" if companion is None else companion.radii_source,
        )
        self.has_ids = "id" in block.columns
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
        picked = [block.columns.index(name) for name in self._coordinates]
        self._unit = decimal_spacing(block.words[:200_000, picked].ravel().tolist())

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
        words, columns = block.words, block.columns
        missing = [name for name in self._coordinates if name not in columns]
        if missing:
            raise ValueError(
                f"expected the columns {' '.join(self._coordinates)} of the first "
                f"frame, found {' '.join(columns)}"
            )
        if "id" in columns:
            ids = to_integers(words[:, columns.index("id")])
            order = np.argsort(ids, kind="stable")
            ids, words = ids[order], words[order]
        elif self._companion is not None and self._companion.ids is not None:
            ids = self._companion.ids.copy()
        else:
            ids = np.arange(len(words), dtype=np.int64)
        if len(words) != self._first_n and self._companion is not None:
            raise ValueError(
                f"expected the {self._first_n} particles of the first frame, found "
                f"{len(words)}"
            )
        positions = np.zeros((len(words), 3))
        for axis, name in enumerate(self._coordinates):
            positions[:, axis] = to_floats(words[:, columns.index(name)])
        if self._coordinates[0] in {"xs", "xsu"}:
            positions = block.origin + positions @ block.vectors
        return RawFrame(
            positions=positions,
            ids=ids,
            types=self._types(words, columns, ids, index),
            vectors=block.vectors,
            origin=block.origin,
            periodic=block.periodic,
            step=block.step,
            time=block.time,
            radii=self._radii(words, columns, ids),
            images=self._images(words, columns),
        )

    def _types(
        self,
        words: NDArray[np.bytes_],
        columns: list[str],
        ids: NDArray[np.int64],
        index: int,
    ) -> NDArray[np.int32]:
        if self._type_column is not None:
            if self._type_column not in columns:
                raise ValueError(f"expected the column {self._type_column}")
            column = words[:, columns.index(self._type_column)]
            return self.index_types(to_names(column), index)
        if self._companion is None:
            return np.zeros(len(words), dtype=np.int32)
        return self._companion.types[_rows(self._companion, ids)]

    def _radii(
        self, words: NDArray[np.bytes_], columns: list[str], ids: NDArray[np.int64]
    ) -> NDArray[np.float64] | None:
        if "radius" in columns:
            return to_floats(words[:, columns.index("radius")])
        if "diameter" in columns:
            return to_floats(words[:, columns.index("diameter")]) / 2.0
        if self._companion is None or self._companion.radii is None:
            return None
        return self._companion.radii[_rows(self._companion, ids)]

    def _images(
        self, words: NDArray[np.bytes_], columns: list[str]
    ) -> NDArray[np.int32] | None:
        if self._coordinates[0] in {"xu", "xsu"}:
            # Already unwrapped: applying ix iy iz once more would be wrong.
            return np.zeros((len(words), 3), dtype=np.int32)
        names = [name for name in ("ix", "iy", "iz") if name in columns]
        if len(names) < len(self._coordinates):
            return None
        images = np.zeros((len(words), 3), dtype=np.int32)
        for axis, name in enumerate(names):
            images[:, axis] = to_integers(words[:, columns.index(name)])
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


def _choose_coordinates(columns: list[str], path: Path) -> tuple[str, ...]:
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


def _rows(companion: Particles, ids: NDArray[np.int64]) -> NDArray[np.intp]:
    """Rows of the companion that hold these ids."""
    if companion.ids is None:
        return np.arange(len(ids))
    order = np.argsort(companion.ids)
    rows = order[np.searchsorted(companion.ids[order], ids).clip(max=len(order) - 1)]
    if not np.array_equal(companion.ids[rows], ids):
        raise ValueError("the particle ids of the dump are not those of the topology")
    return np.asarray(rows)


def _natural_order(name: str) -> tuple[int, str]:
    """Sort 2 before 10."""
    return (int(name) if name.isdigit() else 1 << 62, name)
