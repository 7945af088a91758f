"""Working memory of the kernels, allocated once and reused for every particle.

Few arrays with many rows: every array that crosses a compiled function costs
compile time.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "AHEAD",
    "GAP",
    "POWER",
    "REACH",
    "SHIFTED",
    "TIE",
    "Scratch",
    "X",
    "Y",
    "Z",
    "make_scratch",
]

# rows of Scratch.near
X, Y, Z = 0, 1, 2  # coordinates relative to the particle
REACH = 3  # exclusion radius
POWER = 4  # power of the particle, |x|^2 - reach^2
SHIFTED = 5  # the same with ties broken
TIE = 6  # numbers in [0, 1) without pattern, to break ties
GAP = 7  # power above that of the current vertex
AHEAD = 8  # where along the current edge the candidate shares the vertex's power


class Scratch(NamedTuple):
    """Arrays for one particle at a time.

    A *candidate* is a point of the grid near the particle. A *cell* is a
    simplex of candidates (tetrahedron in 3D, triangle in 2D), dual to a vertex
    of the power diagram. A *corner* is a point of the cage wall where d
    exclusion spheres meet.
    """

    found: NDArray[np.int64]  #: (candidates,) grid slot
    near: NDArray[np.float64]
    """(9, candidates and more) rows as named above; a row does not fill whole
    pages, since a store delays the loads at the same place of other pages."""
    cell: NDArray[np.uint32]  #: (cells, 4) candidates of the simplex, ascending
    across: NDArray[np.int32]
    """(cells, 4): what lies across the face opposite to each candidate of the
    simplex: a cell, -1 unseen, -2 - c corner c."""
    join: NDArray[np.int32]
    """(cells, 4): the slots of a face's candidates in the cell across it, two
    bits for each slot of this cell."""
    vertex: NDArray[np.float64]  #: (cells, 4) power vertex and its power
    stack: NDArray[np.int32]
    slots: NDArray[np.int64]  #: (slots, 2) hash table of cells: clock, cell
    corner: NDArray[np.float64]  #: (corners, 3)
    mark: NDArray[np.int32]  #: (corners, 6) cell, face, arcs walked
    patch: NDArray[np.float64]  #: (candidates, 16) sums over the wall on a sphere
    seen: NDArray[np.uint32]  #: candidates with a piece of the wall
    clock: NDArray[np.int64]  #: (2,) number of the current flood; candidates seen


def make_scratch(n_candidates: int, n_cells: int) -> Scratch:
    """Allocate room for so many candidates and cells."""
    near = np.zeros((9, n_candidates + 24))
    near[TIE] = np.random.default_rng(20).random(near.shape[1])
    return Scratch(
        np.empty(n_candidates, np.int64),
        near,
        np.empty((n_cells, 4), np.uint32),
        np.empty((n_cells, 4), np.int32),
        np.empty((n_cells, 4), np.int32),
        np.empty((n_cells, 4)),
        np.empty(4 * n_cells, np.int32),
        np.zeros((1 << int(np.ceil(np.log2(4 * n_cells))), 2), np.int64),
        np.empty((4 * n_cells, 3)),
        np.empty((4 * n_cells, 6), np.int32),
        np.zeros((n_candidates, 16)),
        np.empty(n_candidates, np.uint32),
        np.zeros(2, np.int64),
    )
