"""A configuration as the kernels see it."""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.grid import Grid, build_grid

__all__ = ["System"]


class System(NamedTuple):
    """A configuration in three dimensions with lengths of order one."""

    positions: NDArray[np.float64]  #: (n, 3)
    vectors: NDArray[np.float64]  #: (3, 3)
    origin: NDArray[np.float64]  #: (3,)
    periodic: NDArray[np.bool_]  #: (3,)
    radii: NDArray[np.float64]  #: (n,)
    r_max: float
    spacing: float  #: edge of the cube (square) that holds one particle
    dimensions: int

    @classmethod
    def embed(
        cls,
        positions: NDArray[np.float64],
        vectors: NDArray[np.float64],
        origin: NDArray[np.float64],
        periodic: NDArray[np.bool_],
        radii: NDArray[np.float64],
        scale: float,
    ) -> "System":
        """Scale all lengths and put a plane at z = 0."""
        n, d = positions.shape
        xyz, edges, corner = np.zeros((n, 3)), np.eye(3), np.zeros(3)
        xyz[:, :d] = positions * scale
        edges[:d, :d] = vectors * scale
        corner[:d] = origin * scale
        flags = np.zeros(3, bool)
        flags[:d] = periodic
        radius = np.ascontiguousarray(radii * scale, dtype=np.float64)
        volume = abs(float(np.linalg.det(edges[:d, :d])))
        spacing = float((volume / n) ** (1.0 / d))
        return cls(xyz, edges, corner, flags, radius, float(radius.max()), spacing, d)

    def without_symmetry(self, strength: float) -> "System":
        """Shear space and change radii a little, which breaks all periodic ties."""
        d = self.dimensions
        random = np.random.default_rng(21)
        shear = np.eye(3)
        shear[:d, :d] += strength * random.uniform(-1.0, 1.0, (d, d))
        radii = self.radii * (
            1.0 + strength * random.uniform(-1.0, 1.0, len(self.radii))
        )
        return self._replace(
            positions=self.positions @ shear,
            vectors=self.vectors @ shear,
            origin=self.origin @ shear,
            radii=radii,
        )

    def edges(self, side: float) -> NDArray[np.float64]:
        """Box edges, with one of length ``side`` across a plane, (3, 3)."""
        vectors = self.vectors.copy()
        if self.dimensions == 2:
            vectors[2, 2] = side
        return vectors

    def grid(self, halo: float, side: float) -> Grid:
        """Sort particles and images within ``halo`` of the box into cells."""
        grid = build_grid(
            self.positions, self.edges(side), self.origin, self.periodic, self.radii,
            halo, side,
        )  # fmt: skip
        if self.dimensions == 2:
            grid.shape[1, 2] = 1  # nothing lies beyond the plane
        return grid
