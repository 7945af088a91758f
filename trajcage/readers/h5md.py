"""H5MD files, opened through MDAnalysis but read by the rules of H5MD 1.1.

MDAnalysis' own reader stops at units that it does not know, at fixed steps,
at constant edges and at two dimensions, drops the boundary and rounds to
single precision. Only its picklable HDF5 file is used here.
"""

from pathlib import Path
from typing import Any

import numpy as np
from MDAnalysis.coordinates.H5MD import H5PYPicklable
from numpy.typing import NDArray

from trajcage.errors import FrameError, InputError
from trajcage.readers.source import Particles, RawFrame, Source, float_spacing

__all__ = ["H5mdSource"]


class H5mdSource(Source):
    """The particles of an H5MD file.

    Of several groups in ``/particles`` the first with positions is taken.

    Parameters
    ----------
    path : Path
        The file.
    companion : Particles, optional
        Types and radii from a topology, used where the file has none.

    Raises
    ------
    InputError
        If the file is no H5MD file with positions.
    """

    format = "H5MD"
    box_source = "the edges in the H5MD file"

    def __init__(self, path: Path, companion: Particles | None = None) -> None:
        self.files = (path,)
        self.notes = []
        self._companion = companion
        try:
            self._file = H5PYPicklable(name=str(path), mode="r")
        except OSError as error:
            raise InputError(
                f"expected an H5MD file, cannot open {path}: {error}; a file that is "
                "still being written cannot be read"
            ) from error
        try:
            self._learn(path)
        except InputError:
            self.close()
            raise
        except Exception as error:  # a damaged file ends in any of a dozen errors
            self.close()
            raise InputError(f"cannot read {path} as H5MD: {error}") from error

    def _learn(self, path: Path) -> None:
        groups = self._file.get("particles", {})
        names = [name for name in groups if "position" in groups[name]]
        if not names:
            hint = ""
            if "trajcage" in self._file:
                hint = (
                    ": it is a result file without positions; give the trajectory it "
                    "was measured from, or measure that with --store-positions"
                )
            raise InputError(
                "expected an H5MD file with /particles/NAME/position, "
                f"{path} has none{hint}"
            )
        if len(names) > 1:
            self.notes.append(
                f"particles group {names[0]} is read, not {', '.join(names[1:])}"
            )
        self._group = groups[names[0]]
        position = self._group["position"]
        shape = _values(position).shape
        self.n_frames = int(shape[0]) if _moving(position) else 1
        if self.n_frames == 0:
            raise InputError(f"expected a trajectory, {path} has no frames")
        self.planar = shape[-1] == 2 or None
        self.has_ids = "id" in self._group
        self.type_names = self._type_names()
        companion = self._companion
        if companion is not None and len(companion.types) != shape[-2]:
            raise InputError(
                f"the topology has {len(companion.types)} particles, {path} has "
                f"{shape[-2]}"
            )
        if "radius" in self._group:
            self.radii_source = "the radius element of the H5MD file"
        elif companion is not None:
            self.radii_source = companion.radii_source

    def read(self, index: int) -> RawFrame:
        """Read one frame, particles in the order of their ids."""
        try:
            return self._assemble(index)
        except FrameError:
            raise
        except Exception as error:  # as above
            raise FrameError(
                f"cannot read {self.files[0]}: {error}", frame=index
            ) from error

    def spacing(self, raw: RawFrame) -> float:
        """Return the float spacing at the largest coordinate."""
        dtype = _values(self._group["position"]).dtype.type
        return float_spacing(raw.positions, dtype)

    def close(self) -> None:
        """Close the file."""
        self._file.close()

    def _assemble(self, index: int) -> RawFrame:
        stored = self._element("position", index)
        n, d = stored.shape
        positions = np.zeros((n, 3))
        positions[:, :d] = stored
        ids = order = np.arange(n, dtype=np.int64)
        if self.has_ids:
            ids = self._element("id", index).astype(np.int64)
            order = np.argsort(ids, kind="stable")
            fill = int(_values(self._group["id"]).fillvalue)
            if fill < 0:  # H5MD pads a changing number of particles with it
                order = order[ids[order] != fill]
        elif self._companion is not None:
            ids = self._companion.own_ids()
        ids = ids[order]
        images = None
        if "image" in self._group:
            images = np.zeros((n, 3), dtype=np.int32)
            images[:, :d] = self._element("image", index)
            images = images[order]
        radii = None
        if "radius" in self._group:
            radii = self._element("radius", index).astype(np.float64)[order]
        elif self._companion is not None and self._companion.radii is not None:
            radii = self._companion.radii[self._companion.rows(ids)]
        vectors, periodic = self._box(index)
        return RawFrame(
            positions=positions[order],
            ids=ids,
            types=self._types(ids, order, index),
            vectors=vectors,
            periodic=periodic,
            step=self._clock("step", index),
            time=self._clock("time", index),
            radii=radii,
            images=images,
        )

    def _element(self, name: str, index: int) -> NDArray[Any]:
        element = self._group[name]
        values = _values(element)
        return np.asarray(values[index] if _moving(element) else values[()])

    def _box(
        self, index: int
    ) -> tuple[NDArray[np.float64] | None, tuple[bool, ...] | None]:
        """Edges as rows and boundaries, both with a third dimension."""
        if "box" not in self._group:
            return None, None
        box = self._group["box"]
        words = [
            word.decode() if isinstance(word, bytes) else str(word)
            for word in box.attrs.get("boundary", ())
        ]
        periodic = tuple(word == "periodic" for word in words) or None
        if "edges" not in box:
            return None, periodic
        edges = _values(box["edges"])
        edges = np.array(edges[index] if _moving(box["edges"]) else edges[()], float)
        if edges.ndim == 1:
            edges = np.diag(edges)
        vectors = np.zeros((3, 3))
        vectors[: len(edges), : len(edges)] = edges
        return vectors, periodic

    def _clock(self, name: str, index: int) -> Any:
        """Step or time, listed frame by frame or as a fixed increment."""
        position = self._group["position"]
        if not _moving(position) or name not in position:
            return None
        values = position[name]
        if values.shape:
            return values[index].item()
        return (values.attrs.get("offset", 0) + index * values[()]).item()

    def _type_names(self) -> tuple[str, ...]:
        if "species" not in self._group:
            companion = self._companion
            return ("A",) if companion is None else companion.type_names
        values = _values(self._group["species"])
        self._labels = {
            code: name
            for name, code in ((values.dtype.metadata or {}).get("enum", {})).items()
        }
        codes = np.unique(self._element("species", 0)).tolist()
        return tuple(str(self._labels.get(code, code)) for code in codes)

    def _types(
        self, ids: NDArray[np.int64], order: NDArray[np.intp], index: int
    ) -> NDArray[np.int32]:
        if "species" in self._group:
            codes = self._element("species", index)[order].tolist()
            names = [str(self._labels.get(code, code)) for code in codes]
            return self.index_types(names, index)
        if self._companion is not None:
            return self._companion.types[self._companion.rows(ids)]
        return np.zeros(len(ids), dtype=np.int32)


def _moving(element: Any) -> bool:
    """Tell an element with frames (a group) from a constant one (a dataset)."""
    return hasattr(element, "keys")


def _values(element: Any) -> Any:
    return element["value"] if _moving(element) else element
