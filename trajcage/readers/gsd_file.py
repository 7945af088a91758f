"""GSD files, read by gsd itself.

MDAnalysis turns tilt factors into angles one by one (wrong in any tilted
box), takes diameters from the first frame only, shows the schema's default
diameter as if it were stored, and drops the two-dimensional flag.
"""

from pathlib import Path

import gsd.hoomd
import numpy as np

from trajcage.errors import FrameError, InputError
from trajcage.readers.source import Particles, RawFrame, Source, float_spacing

__all__ = ["GsdSource"]


class GsdSource(Source):
    """A GSD file in the HOOMD schema.

    Parameters
    ----------
    path : Path
        The file with the frames.
    companion : Particles, optional
        Types and radii from a topology, used where this file has none.

    Raises
    ------
    InputError
        If the file is no readable GSD file or has no frames.
    """

    format = "GSD"
    radii_source = "the diameters in the GSD file"
    box_source = "the GSD file"
    box_anchor = "center"

    def __init__(self, path: Path, companion: Particles | None = None) -> None:
        self.files = (path,)
        self.notes = []
        self._companion = companion
        try:
            self._file = gsd.hoomd.open(str(path), "r")
        except (OSError, RuntimeError, UnicodeError) as error:
            raise InputError(
                f"expected a GSD file in the HOOMD schema, cannot open {path}: {error}"
            ) from error
        try:
            self._learn(path)
        except InputError:
            self.close()
            raise
        except Exception as error:  # a damaged file ends in any of a dozen errors
            self.close()
            raise FrameError(f"cannot read {path}: {error}", frame=0) from error

    def _learn(self, path: Path) -> None:
        """Find out what the file stores; absent means unknown.

        A chunk that equals the schema's default is not written, so nothing
        tells a true diameter of 1.0 from one that nobody has set.
        """
        self.n_frames = len(self._file)
        if self.n_frames == 0:
            raise InputError(f"expected a trajectory, {path} has no frames")
        first, companion = self._file[0], self._companion
        self._first_n = int(first.particles.N)
        names = self._file.file.find_matching_chunk_names("particles/image")
        self._has_images = "particles/image" in names
        self._has_box = self._stored(0, "configuration/box")
        if self._stored(0, "configuration/dimensions"):
            self.planar = int(first.configuration.dimensions) == 2
        elif self._has_box and first.configuration.box[2] == 0.0:
            self.planar = True
        self.type_names = tuple(first.particles.types)
        self._borrowed_types = None
        if companion is None:
            return
        if len(companion.types) != self._first_n:
            raise InputError(
                f"the topology has {len(companion.types)} particles, {path} has "
                f"{self._first_n}"
            )
        if not self._stored(0, "particles/diameter"):
            self.radii_source = companion.radii_source
        if not self._stored(0, "particles/types"):
            self.type_names = companion.type_names
            self._borrowed_types = companion.types

    def read(self, index: int) -> RawFrame:
        """Read one frame."""
        try:
            frame = self._file[index]
        except Exception as error:  # as above
            raise FrameError(
                f"cannot read {self.files[0]}: {error}; the file may be truncated",
                frame=index,
            ) from error
        particles, step = frame.particles, int(frame.configuration.step)
        n = int(particles.N)
        positions = np.array(particles.position, dtype=np.float64)
        if self._borrowed_types is not None:
            types = self._borrowed_types.copy()
        else:
            types = np.array(particles.typeid, dtype=np.int32)
            if n and not 0 <= types.min() <= types.max() < len(particles.types):
                raise FrameError(
                    f"expected type indices below {len(particles.types)}, found "
                    f"{types.min()} to {types.max()}",
                    frame=index,
                    step=step,
                )
            if tuple(particles.types) != self.type_names:
                names = np.array(particles.types, dtype=str)[types]
                types = self.index_types(list(names), index)
        vectors = origin = None
        if self._has_box or self._stored(index, "configuration/box"):
            vectors = _row_vectors(np.array(frame.configuration.box, np.float64))
            origin = -0.5 * vectors.sum(axis=0)
        self._dtype = np.asarray(particles.position).dtype.type
        return RawFrame(
            positions=positions,
            ids=np.arange(n, dtype=np.int64),
            types=types,
            vectors=vectors,
            origin=origin,
            step=step,
            radii=self._radii(index, n, particles.diameter),
            images=(
                np.array(particles.image, dtype=np.int32) if self._has_images else None
            ),
        )

    def spacing(self, raw: RawFrame) -> float:
        """Return the float spacing at the largest coordinate."""
        return float_spacing(raw.positions, self._dtype)

    def close(self) -> None:
        """Close the file."""
        self._file.close()

    def _stored(self, index: int, name: str) -> bool:
        return bool(self._file.file.chunk_exists(frame=index, name=name))

    def _radii(self, index: int, n: int, diameters: np.ndarray) -> np.ndarray | None:
        inherited = self._stored(0, "particles/diameter") and n == self._first_n
        if self._stored(index, "particles/diameter") or inherited:
            return np.array(diameters, dtype=np.float64) / 2.0
        if self._companion is not None and self._companion.radii is not None:
            return self._companion.radii.copy()
        return None


def _row_vectors(box: np.ndarray) -> np.ndarray:
    """Edge vectors as rows from lengths and tilt factors in HOOMD's convention."""
    lx, ly, lz, xy, xz, yz = box
    return np.array([[lx, 0.0, 0.0], [xy * ly, ly, 0.0], [xz * lz, yz * lz, lz]])
