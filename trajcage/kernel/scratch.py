"""Working memory of the kernels, allocated once and reused for every particle."""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

__all__ = ["Scratch", "make_scratch"]


class Scratch(NamedTuple):
    """Arrays for one particle at a time.

    A *candidate* is a point of the grid near the particle, with coordinates
    relative to it. A *cell* is a simplex of candidates (tetrahedron in 3D,
    triangle in 2D), dual to a vertex of the power diagram. A *corner* is a
    point of the cage wall where d exclusion spheres meet.
    """

    found: NDArray[np.int64]  #: grid slot of each candidate
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    z: NDArray[np.float64]
    reach: NDArray[np.float64]  #: exclusion radius of each candidate
    power: NDArray[np.float64]  #: power of the particle, |x|^2 - reach^2
    shifted: NDArray[np.float64]  #: the same with ties broken
    tie: NDArray[np.float64]  #: numbers in [0, 1) without pattern, to break ties
    gap: NDArray[np.float64]  #: power above that of the current vertex
    cell: NDArray[np.int32]  #: (cells, 4) candidates of a simplex, ascending
    across: NDArray[np.int32]  #: (cells, 4) cell across a face; -1 unseen; -2-c corner c
    vertex: NDArray[np.float64]  #: (cells, 4) power vertex and its power
    stack: NDArray[np.int32]
    table: NDArray[np.int32]  #: hash table of cells
    stamp: NDArray[np.int64]  #: which particle wrote a slot of the table
    corner: NDArray[np.float64]  #: (corners, 3)
    corner_cell: NDArray[np.int32]
    corner_face: NDArray[np.int32]
    walked: NDArray[np.int32]  #: (corners, 4) arcs already integrated, by bits
    patch: NDArray[np.float64]  #: (candidates, 12) sums over the wall on a sphere
    clock: NDArray[np.int64]  #: (1,) stamp of the current particle


def make_scratch(n_candidates: int, n_cells: int) -> Scratch:
    """Allocate room for so many candidates and cells."""
    slots = 1 << int(np.ceil(np.log2(4 * n_cells)))
    f8 = [np.empty(n_candidates) for _ in range(6)]
    return Scratch(
        np.empty(n_candidates, np.int64),
        *f8,
        np.random.default_rng(20).random(n_candidates),
        np.empty(n_candidates),
        np.empty((n_cells, 4), np.int32),
        np.empty((n_cells, 4), np.int32),
        np.empty((n_cells, 4)),
        np.empty(4 * n_cells, np.int32),
        np.empty(slots, np.int32),
        np.zeros(slots, np.int64),
        np.empty((4 * n_cells, 3)),
        np.empty(4 * n_cells, np.int32),
        np.empty(4 * n_cells, np.int32),
        np.empty((4 * n_cells, 4), np.int32),
        np.zeros((n_candidates, 12)),
        np.zeros(1, np.int64),
    )
