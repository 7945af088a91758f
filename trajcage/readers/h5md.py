"""H5MD through MDAnalysis, with what its reader leaves out."""

from typing import Any

import numpy as np
from MDAnalysis.coordinates.H5MD import H5MDReader
from numpy.typing import NDArray

from trajcage.readers.source import Particles

__all__ = ["PlainH5MDReader"]


class PlainH5MDReader(H5MDReader):  # type: ignore[misc] # MDAnalysis ships no types
    """MDAnalysis' H5MD reader without units, and with what it leaves out."""

    def close(self) -> None:
        """Close the file, if it could be opened."""
        if hasattr(self, "_file"):
            self._file.close()

    def _set_translated_units(self) -> None:
        """Leave units alone: unknown ones must not be an error, none is used."""
        self.units = dict.fromkeys(("time", "length", "velocity", "force"))

    def positions(self, index: int) -> NDArray[np.floating[Any]]:
        """Return positions in the precision of the file."""
        return np.asarray(self._particle_group["position/value"][index])

    def edges(self, index: int) -> NDArray[np.float64] | None:
        """Return the box edges as rows, unrotated."""
        if "edges" not in self._particle_group["box"]:
            return None
        edges = np.array(self._particle_group["box/edges/value"][index], np.float64)
        return np.diag(edges) if edges.ndim == 1 else edges

    def boundary(self) -> tuple[bool, ...]:
        """Return which edges are periodic."""
        flags = self._particle_group["box"].attrs["boundary"]
        words = [f.decode() if isinstance(f, bytes) else str(f) for f in flags]
        return tuple(word == "periodic" for word in words)

    def particles(self) -> Particles:
        """Return types and radii, if the file has them."""
        n = int(self.n_atoms)
        species, radii = self._static("species"), self._static("radius")
        if species is None or species.shape != (n,):
            species = np.full(n, "A")
        names, types = np.unique(species.astype(str), return_inverse=True)
        if radii is not None and radii.shape != (n,):
            radii = None
        return Particles(
            tuple(names.tolist()),
            types.ravel().astype(np.int32),
            None if radii is None else radii.astype(np.float64),
            "the radius element of the H5MD file",
        )

    def _static(self, name: str) -> NDArray[Any] | None:
        """Return the first value of a particle element, if it is there."""
        if name not in self._particle_group:
            return None
        element = self._particle_group[name]
        values = element["value"][0] if hasattr(element, "keys") else element[()]
        return np.asarray(values)
