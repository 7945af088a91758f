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
from trajcage.readers.text import decimal_spacing, to_floats, to_integers, to_names

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
            n, keys, columns, words = self._parse(0)
        except FrameError:
            self.close()
            raise
        if companion is not None and len(companion.types) != n:
            self.close()
            raise InputError(
                f"the topology has {len(companion.types)} particles, {path} has {n}"
            )
        if companion is not None:
            self.type_names = companion.type_names
            self.radii_source = companion.radii_source
        elif "species" in columns:
            names = to_names(words[:, columns["species"].start])
            self.type_names = tuple(sorted(set(names)))
        else:
            self.type_names = ("A",)
        for name in _RADII:
            if name in columns:
                self.radii_source = f"the {name} column of the XYZ file"
        self.has_ids = "id" in columns
        self.planar = columns["pos"].stop - columns["pos"].start == 2 or None
        if "lattice" in keys:
            self.format = "extended XYZ"
        picked = words[:200_000, columns["pos"]]
        self._unit = decimal_spacing(picked.ravel().tolist())

    def read(self, index: int) -> RawFrame:
        """Read one frame."""
        n, keys, columns, words = self._parse(index)
        try:
            return self._assemble(n, keys, columns, words, index)
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

    def _assemble(
        self,
        n: int,
        keys: dict[str, str],
        columns: dict[str, slice],
        words: NDArray[np.bytes_],
        index: int,
    ) -> RawFrame:
        order = np.arange(n)
        ids = np.arange(n, dtype=np.int64)
        if self.has_ids:
            ids = to_integers(words[:, columns["id"].start])
            order = np.argsort(ids, kind="stable")
        words, ids = words[order], ids[order]
        positions = np.zeros((n, 3))
        coordinates = to_floats(words[:, columns["pos"]])
        positions[:, : coordinates.shape[1]] = coordinates
        radii = None
        if self._companion is not None:
            if n != len(self._companion.types):
                raise ValueError(
                    f"expected {len(self._companion.types)} particles as in the "
                    f"topology, found {n}"
                )
            types, radii = self._companion.types.copy(), self._companion.radii
        elif "species" in columns:
            names = to_names(words[:, columns["species"].start])
            types = self.index_types(names, index)
        else:
            types = np.zeros(n, dtype=np.int32)
        for name, factor in _RADII.items():
            if name in columns:
                radii = factor * to_floats(words[:, columns[name].start])
        return RawFrame(
            positions=positions,
            ids=ids,
            types=types,
            vectors=_numbers(keys, "lattice", 9),
            origin=_numbers(keys, "origin", 3),
            periodic=_periodic(keys),
            step=_integer(keys, "step", "timestep"),
            time=_float(keys, "time"),
            radii=None if radii is None else radii.copy(),
        )

    def _parse(
        self, index: int
    ) -> tuple[int, dict[str, str], dict[str, slice], NDArray[np.bytes_]]:
        """Particle number, comment keys, columns and words of one frame."""
        start, stop = self._offsets[index], self._offsets[index + 1]
        self._file.seek(start)
        lines = self._file.read(stop - start).splitlines()
        try:
            return _parse(lines)
        except ValueError as error:
            raise FrameError(
                f"cannot read {self.files[0]}: {error}", frame=index
            ) from None


def _parse(
    lines: list[bytes],
) -> tuple[int, dict[str, str], dict[str, slice], NDArray[np.bytes_]]:
    n = _count(lines[0])
    if n == 0:
        raise ValueError("expected particles, found none")
    rows = [line.split() for line in lines[2 : 2 + n]]
    if len(rows) != n:
        raise ValueError(f"expected {n} particles, found {len(rows)} (truncated?)")
    keys = _keys(lines[1].decode(errors="replace"))
    columns = _columns(keys.get("properties"))
    width = max(column.stop for column in columns.values())
    for i, row in enumerate(rows):
        if len(row) < width:
            raise ValueError(
                f"expected {width} columns, found {len(row)} on the line of particle "
                f"{i} (truncated?)"
            )
    return n, keys, columns, np.array([row[:width] for row in rows])


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


def _columns(properties: str | None) -> dict[str, slice]:
    """Columns by lower-case name from name:type:count triples."""
    if properties is None:
        return {"species": slice(0, 1), "pos": slice(1, 4)}
    columns: dict[str, slice] = {}
    fields = properties.split(":")
    at = 0
    for name, count in zip(fields[::3], fields[2::3], strict=False):
        columns[name.lower()] = slice(at, at + int(count))
        at += int(count)
    if len(fields) % 3 or "pos" not in columns:
        raise ValueError(
            f"expected Properties with pos:R:3 in the comment line, found {properties}"
        )
    if columns["pos"].stop - columns["pos"].start not in {2, 3}:
        raise ValueError(f"expected two or three coordinates, found {properties}")
    return columns


def _numbers(keys: dict[str, str], key: str, count: int) -> NDArray[np.float64] | None:
    if key not in keys:
        return None
    numbers = np.array(keys[key].replace(",", " ").split())
    if len(numbers) != count:
        raise ValueError(f"expected {count} numbers in {key}, found {keys[key]!r}")
    values = to_floats(numbers.astype(bytes))
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
