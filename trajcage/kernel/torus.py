"""Cages that wrap around the periodic box.

Such a region is infinite in space but finite in the box, so its cells are
counted up to translations by box edges: every cell is moved to a fixed
representative, and a link between two cells carries the move. The region
wraps around the box if the moves along some closed path do not cancel.

A periodic structure cannot be made generic by changing powers image by image;
the driver breaks ties by a tiny shear of space and a tiny change of the radii.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.grid import Grid
from trajcage.kernel.jit import helper

__all__ = ["Torus", "begin", "canonical", "home_of", "make_torus", "register"]


class Torus(NamedTuple):
    """Working memory for periodic identification."""

    side: NDArray[np.int64]  #: (2,) images along one axis in the table, half of it
    where: NDArray[np.int32]  #: (n side^3,) candidate with a key, -1 if none
    key: NDArray[np.int64]  #: (candidates,) owner and image in one number
    used: NDArray[np.int64]  #: (1,) candidates registered
    base: NDArray[np.int64]  #: (n, 3) image of each particle closest to the center
    offset: NDArray[np.int64]  #: (cells, 3) moves from the first cell
    trial: NDArray[np.int64]  #: (2, 4) keys of a representative
    image: NDArray[np.int64]  #: (4,) candidates that the moved cell consists of
    move: NDArray[np.int64]  #: (3,) move from cell to representative
    walked: NDArray[np.int32]  #: (cells,) edges integrated, by bits
    sums: NDArray[np.float64]  #: (2,) volume sum; 1 if the region wraps around


def make_torus(grid: Grid, n_candidates: int, n_cells: int) -> Torus:
    """Allocate for all images that the grid can hold."""
    half = int(np.ceil(grid.halo * grid.geometry[5].max())) + 2
    side = 2 * half + 1
    n = len(grid.home)
    return Torus(
        np.array([side, half]),
        np.full(n * side**3, -1, np.int32),
        np.empty(n_candidates, np.int64),
        np.zeros(1, np.int64),
        np.empty((n, 3), np.int64),
        np.empty((n_cells, 3), np.int64),
        np.empty((2, 4), np.int64),
        np.empty(4, np.int64),
        np.zeros(3, np.int64),
        np.empty(n_cells, np.int32),
        np.zeros(2),
    )


@helper
def begin(torus, grid, i):
    """Forget the last particle and note which images lie closest to this one."""
    for k in range(torus.used[0]):
        torus.where[torus.key[k]] = -1
    torus.used[0] = 0
    torus.sums[0] = 0.0
    torus.sums[1] = 0.0
    geometry = grid.geometry
    for j in range(len(grid.home)):
        for axis in range(3):
            f = 0.0
            for row in range(3):
                f += (grid.home[j, row] - grid.home[i, row]) * geometry[row, axis]
            torus.base[j, axis] = -int(np.round(f)) if grid.shape[1, axis] == 1 else 0


@helper
def _pack(torus, owner, u, v, w):
    """One number for particle and image, -1 if the image is not in the table."""
    side, half = torus.side[0], torus.side[1]
    if abs(u) > half or abs(v) > half or abs(w) > half:
        return -1
    return ((owner * side + u + half) * side + v + half) * side + w + half


@helper
def register(torus, grid, s, n):
    """Enter new candidates into the table."""
    geometry = grid.geometry
    for k in range(torus.used[0], n):
        slot = s.found[k]
        owner = grid.owner[slot]
        u, v, w = 0, 0, 0
        for axis in range(3):
            f = 0.0
            for row in range(3):
                f += (grid.points[row, slot] - grid.home[owner, row]) * geometry[
                    row, axis
                ]
            turn = int(np.round(f))
            if axis == 0:
                u = turn
            elif axis == 1:
                v = turn
            else:
                w = turn
        torus.key[k] = _pack(torus, owner, u, v, w)
        torus.where[torus.key[k]] = k
    torus.used[0] = n


@helper
def home_of(torus, grid, s, a):
    """Candidate that stands for all images of a's particle, -1 if not collected."""
    owner = grid.owner[s.found[a]]
    base = torus.base
    key = _pack(torus, owner, base[owner, 0], base[owner, 1], base[owner, 2])
    return torus.where[key] if key >= 0 else -1


@helper
def canonical(torus, grid, a, b, c, d, n_corners):
    """Move a cell to its representative; False if that needs unknown candidates.

    The cell is moved so that one of its particles of lowest index lies in its
    image closest to the center; if several images of it are in the cell, the
    move with the lowest sorted keys is taken. Writes the moved candidates to
    ``torus.image`` and the move to ``torus.move``.
    """
    side, half = torus.side[0], torus.side[1]
    cube = side * side * side
    lowest = cube * len(grid.home)
    for m in range(n_corners):
        k = a if m == 0 else (b if m == 1 else (c if m == 2 else d))
        lowest = min(lowest, torus.key[k] // cube)
    have = False
    for m in range(n_corners):
        k = a if m == 0 else (b if m == 1 else (c if m == 2 else d))
        key = torus.key[k]
        if key // cube != lowest:
            continue
        du = torus.base[lowest, 0] - ((key // (side * side)) % side - half)
        dv = torus.base[lowest, 1] - ((key // side) % side - half)
        dw = torus.base[lowest, 2] - (key % side - half)
        complete = True
        for p in range(n_corners):
            j = a if p == 0 else (b if p == 1 else (c if p == 2 else d))
            old = torus.key[j]
            torus.trial[0, p] = _pack(
                torus,
                old // cube,
                (old // (side * side)) % side - half + du,
                (old // side) % side - half + dv,
                old % side - half + dw,
            )
            complete = complete and torus.trial[0, p] >= 0
        if not complete:
            return False
        better = not have
        if have:
            better = _lower(torus, n_corners)
        if better:
            have = True
            torus.move[0] = du
            torus.move[1] = dv
            torus.move[2] = dw
            for p in range(n_corners):
                torus.trial[1, p] = torus.trial[0, p]
    for p in range(n_corners):
        torus.image[p] = torus.where[torus.trial[1, p]]
        if torus.image[p] < 0:
            return False
    return True


@helper
def _lower(torus, n_corners):
    """Compare the sorted keys of the trial with those of the best so far."""
    last_new, last_old = -1, -1
    for _ in range(n_corners):
        new, old = np.iinfo(np.int64).max, np.iinfo(np.int64).max
        for p in range(n_corners):
            if last_new < torus.trial[0, p] < new:
                new = torus.trial[0, p]
            if last_old < torus.trial[1, p] < old:
                old = torus.trial[1, p]
        if new != old:
            return new < old
        last_new, last_old = new, old
    return False
