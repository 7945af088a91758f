"""XYZ and extended XYZ files, read here instead of by MDAnalysis.

MDAnalysis ignores the lattice, boundaries and column names of the extended
form, so a file with other columns first is read wrong without a word.
"""

import re
from itertools import islice
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import FrameError, InputError
from trajcage.readers.source import Particles, RawFrame, Source
from trajcage.readers.text import Table, check_last_line, to_floats

__all__ = ["XyzSource"]

_PAIR = re.compile(r"([A-Za-z_]\w*)\s*=\s*(\"[^\"]*\"|\S+)")
_RADII = {"radius": 1.0, "radii": 1.0, "diameter": 0.5, "diameters": 0.5}


class XyzSource(Source):
    """An XYZ file, plain or extended.

    Parameters
    ----------
    path : Path
        The file.
    companion : Particles, optional
        Types and radii from a topology; its types go before those of the file.

    Raises
    ------
    InputError
        If the file is not XYZ.
    """

    format = "XYZ"
    box_source = "the Lattice in the comment line"

    def __init__(self, path: Path, companion: Particles | None = None) -> None:
        self.files = (path,)
        self.notes = []
        self._companion = companion
        self._offsets = _find_frames(path)
        self.n_frames = len(self._offsets) - 1
        self._file = path.open("rb")
        try:
            keys, table = self._parse(0)
        except FrameError:
            self.close()
            raise
        if companion is not None and len(companion.types) != len(table):
            self.close()
            raise InputError(
                f"the topology has {len(companion.types)} particles, {path} has "
                f"{len(table)}"
            )
        if companion is not None:
            self.type_names = companion.type_names
            self.radii_source = companion.radii_source
        elif "species" in table:
            self.type_names = tuple(sorted(set(table.names("species"))))
        else:
            self.type_names = ("A",)
        for name in _RADII:
            if name in table:
                self.radii_source = f"the {name} column of the XYZ file"
        self.has_ids = "id" in table
        self.planar = None if "z" in table else True
        if "lattice" in keys:
            self.format = "extended XYZ"
        self._unit = table.spacing(*_axes(table))

    def read(self, index: int) -> RawFrame:
        """Read one frame."""
        keys, table = self._parse(index)
        try:
            return self._assemble(keys, table, index)
        except ValueError as error:
            if isinstance(error, FrameError):
                raise
            raise FrameError(str(error), frame=index) from None

    def spacing(self, raw: RawFrame) -> float:
        """Return the unit of the last printed digit."""
        finite = np.abs(raw.positions[np.isfinite(raw.positions)])
        grain = float(np.spacing(finite.max())) if finite.size else 0.0
        return max(self._unit, grain)

    def close(self) -> None:
        """Close the file."""
        self._file.close()

    def _assemble(self, keys: dict[str, str], table: Table, index: int) -> RawFrame:
        n, companion = len(table), self._companion
        ids, order = np.arange(n, dtype=np.int64), np.arange(n)
        if self.has_ids:
            ids = table.integers("id")[:, 0]
            order = np.argsort(ids, kind="stable")
            ids = ids[order]
        elif companion is not None:
            ids = companion.own_ids()
        rows = order if companion is None else companion.rows(ids)
        positions = np.zeros((n, 3))
        coordinates = table.floats(*_axes(table))[order]
        positions[:, : coordinates.shape[1]] = coordinates
        radii = None
        if companion is not None:
            types = companion.types[rows]
            radii = None if companion.radii is None else companion.radii[rows]
        elif "species" in table:
            types = self.index_types(table.names("species"), index)[order]
        else:
            types = np.zeros(n, dtype=np.int32)
        for name, factor in _RADII.items():
            if name in table:
                radii = factor * table.floats(name)[order, 0]
        return RawFrame(
            positions=positions,
            ids=ids,
            types=types,
            vectors=_numbers(keys, "lattice", 9),
            origin=_numbers(keys, "origin", 3),
            periodic=_periodic(keys),
            step=_integer(keys, "step", "timestep"),
            time=_float(keys, "time"),
            radii=radii,
        )

    def _parse(self, index: int) -> tuple[dict[str, str], Table]:
        """Comment keys and particle lines of one frame."""
        start, stop = self._offsets[index], self._offsets[index + 1]
        self._file.seek(start)
        text = self._file.read(stop - start)
        lines = text.splitlines()
        try:
            n = _count(lines[0])
            _check_count(n, len(lines) - 2)
            check_last_line(text)
            keys = _keys(lines[1].decode(errors="replace"))
            columns, width = _columns(keys.get("properties"))
            return keys, Table(lines[2 : 2 + n], columns, width)
        except ValueError as error:
            raise FrameError(
                f"cannot read {self.files[0]}: {error}", frame=index
            ) from None


def _check_count(expected: int, found: int) -> None:
    if expected == 0:
        raise ValueError("expected particles, found none")
    if found < expected:
        raise ValueError(f"expected {expected} particles, found {found} (truncated?)")


def _axes(table: Table) -> tuple[str, ...]:
    return ("x", "y", "z") if "z" in table else ("x", "y")


def _find_frames(path: Path) -> list[int]:
    """Byte offsets of the frames and of the end of the file."""
    offsets: list[int] = []
    at = 0
    with path.open("rb") as file:
        for head in file:
            if not head.strip():  # blank lines at the end
                at += len(head)
                continue
            try:
                n = _count(head)
            except ValueError as error:
                raise InputError(
                    f"cannot read {path} as XYZ: {error} (frame {len(offsets)})"
                ) from None
            offsets.append(at)
            at += len(head) + sum(map(len, islice(file, n + 1)))
    if not offsets:
        raise InputError(f"expected XYZ frames, found none in {path}")
    return [*offsets, at]


def _count(line: bytes) -> int:
    try:
        n = int(line)
    except ValueError:
        n = -1
    if n < 0:
        raise ValueError(f"expected a particle number, found {line.strip()[:40]!r}")
    return n


def _keys(comment: str) -> dict[str, str]:
    return {key.lower(): value.strip('"') for key, value in _PAIR.findall(comment)}


def _columns(properties: str | None) -> tuple[dict[str, int], int]:
    """Columns by lower-case name, coordinates as x y z, and the width of a line."""
    if properties is None:
        return {"species": 0, "x": 1, "y": 2, "z": 3}, 4
    columns: dict[str, int] = {}
    fields = properties.split(":")
    width = n_coordinates = 0
    for name, count in zip(fields[::3], fields[2::3], strict=False):
        if name.lower() == "pos":
            n_coordinates = int(count)
            columns |= {axis: width + k for k, axis in enumerate("xyz"[: int(count)])}
        else:
            columns[name.lower()] = width
        width += int(count)
    if len(fields) % 3 or n_coordinates not in {2, 3}:
        raise ValueError(
            "expected Properties with pos:R:3 or pos:R:2 in the comment line, found "
            f"{properties}"
        )
    return columns, width


def _numbers(keys: dict[str, str], key: str, count: int) -> NDArray[np.float64] | None:
    if key not in keys:
        return None
    numbers = keys[key].encode().replace(b",", b" ").split()
    if len(numbers) != count:
        raise ValueError(f"expected {count} numbers in {key}, found {keys[key]!r}")
    values = to_floats(numbers)
    return values.reshape(3, 3) if count == 9 else values


def _periodic(keys: dict[str, str]) -> tuple[bool, ...] | None:
    if "pbc" not in keys:
        return None
    flags = keys["pbc"].replace(",", " ").split()
    if len(flags) != 3 or {flag[0].upper() for flag in flags} - set("TF10"):
        raise ValueError(f'expected pbc="T T F" or the like, found {keys["pbc"]!r}')
    return tuple(flag[0].upper() in "T1" for flag in flags)


def _integer(keys: dict[str, str], *names: str) -> int | None:
    return next((int(keys[name]) for name in names if name in keys), None)


def _float(keys: dict[str, str], name: str) -> float | None:
    return float(keys[name]) if name in keys else None
