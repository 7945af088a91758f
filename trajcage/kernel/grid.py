"""Cell grid over the box and a halo of periodic images.

Images are explicit: a box of any size and tilt becomes an open cloud of
points, so that nothing later has to know about periodicity.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.jit import compiled, helper

__all__ = ["CORNER", "INVERSE_HEIGHT", "Grid", "build_grid", "gather"]


# rows of Grid.geometry; rows 0 to 2 turn Cartesian into fractional coordinates
LOWEST = 3  # fractional coordinate where the grid starts
PER_EDGE = 4  # cells per unit of fractional coordinate
INVERSE_HEIGHT = 5
CORNER = 6  # origin of the fractional coordinates


class Grid(NamedTuple):
    """Points sorted by cell; the last axis runs fastest.

    In 2D the third axis is one cell thick and all z are zero.
    """

    points: NDArray[np.float64]  #: (4, m) x, y, z, radius of particles and images
    owner: NDArray[np.int64]  #: (m,) particle behind each point
    start: NDArray[np.int64]  #: (cells + 1,) first point of each cell
    geometry: NDArray[np.float64]  #: (7, 3) rows as named above
    shape: NDArray[np.int64]  #: (2, 3) cells along each axis; 1 where periodic
    home: NDArray[np.float64]  #: (n, 3) the particles inside the box
    order: NDArray[np.int64]  #: (n,) particles in the order of the grid
    halo: float  #: images are complete up to this distance from the box


def build_grid(
    positions: NDArray[np.float64],
    vectors: NDArray[np.float64],
    origin: NDArray[np.float64],
    periodic: NDArray[np.bool_],
    radii: NDArray[np.float64],
    halo: float,
    cell_side: float,
) -> Grid:
    """Sort particles and their images within ``halo`` of the box into cells.

    Parameters
    ----------
    positions : (n, 3) float64, length
        Particle centers (z = 0 in 2D), wrapped or not.
    vectors : (3, 3) float64, length
        Box edges as rows (a unit vector along z in 2D).
    origin : (3,) float64, length
        Corner of the box.
    periodic : (3,) bool
        Edges along which the box repeats.
    radii : (n,) float64, length
        Particle radii.
    halo : float, length
        Distance from the box up to which images are made.
    cell_side : float, length
        Wanted distance between opposite faces of a cell.
    """
    inverse = np.linalg.inv(vectors)
    heights = 1.0 / np.linalg.norm(inverse, axis=0)
    fractions = (positions - origin) @ inverse
    turns = np.where(periodic, np.floor(fractions), 0.0)
    moved = np.any(turns != 0.0, axis=1, keepdims=True)
    home = np.where(moved, positions - turns @ vectors, positions)
    fractions = fractions - turns
    width = np.where(periodic, halo / heights, 0.0)
    low = np.where(periodic, -width, np.minimum(fractions.min(axis=0), 0.0))
    high = np.where(periodic, 1.0 + width, np.maximum(fractions.max(axis=0), 1.0))
    # at most a few cells a particle, however empty the box is
    extent = (high - low) * heights
    side = max(cell_side, float(np.prod(extent) / (8.0 * len(home) + 64.0)) ** (1 / 3))
    shape = np.maximum(np.ceil(extent / side), 1.0).astype(np.int64)
    per_edge = shape / (high - low)
    points, owner, start, order = _fill(
        home, fractions, vectors, radii, periodic, width, low, per_edge, shape
    )
    geometry = np.vstack([inverse, low, per_edge, 1.0 / heights, origin])
    grid_shape = np.vstack([shape, periodic]).astype(np.int64)
    return Grid(points, owner, start, geometry, grid_shape, home, order, float(halo))


@compiled
def _fill(home, fractions, vectors, radii, periodic, width, low, per_edge, shape):
    """Count, then place, every particle and image (counting sort by cell)."""
    n = len(home)
    n_cells = shape[0] * shape[1] * shape[2]
    start = np.zeros(n_cells + 1, np.int64)
    first = np.zeros(3, np.int64)
    last = np.zeros(3, np.int64)
    cell = np.zeros(3, np.int64)
    total = 0
    points = np.zeros((4, 0))
    owner = np.zeros(0, np.int64)
    order = np.zeros(n, np.int64)
    home_slot = np.zeros(0, np.int64)
    for placing in range(2):
        if placing == 1:
            running = 0
            for c in range(n_cells):
                count = start[c]
                start[c] = running
                running += count
            start[n_cells] = running
            points = np.empty((4, total))
            owner = np.empty(total, np.int64)
            home_slot = np.zeros(total, np.int64)
        for i in range(n):
            for axis in range(3):
                first[axis] = 0
                last[axis] = 0
                if periodic[axis]:
                    f = fractions[i, axis]
                    first[axis] = int(np.ceil(-width[axis] - f))
                    last[axis] = int(np.floor(1.0 + width[axis] - f))
            for u in range(first[0], last[0] + 1):
                for v in range(first[1], last[1] + 1):
                    for w in range(first[2], last[2] + 1):
                        for axis in range(3):
                            turn = u if axis == 0 else (v if axis == 1 else w)
                            f = fractions[i, axis] + turn - low[axis]
                            at = int(f * per_edge[axis])
                            cell[axis] = min(max(at, 0), shape[axis] - 1)
                        c = (cell[0] * shape[1] + cell[1]) * shape[2] + cell[2]
                        if placing == 0:
                            start[c] += 1
                            total += 1
                            continue
                        slot = start[c]
                        start[c] += 1
                        for axis in range(3):
                            points[axis, slot] = home[i, axis] + (
                                u * vectors[0, axis]
                                + v * vectors[1, axis]
                                + w * vectors[2, axis]
                            )
                        points[3, slot] = radii[i]
                        owner[slot] = i
                        if u == 0 and v == 0 and w == 0:
                            home_slot[slot] = 1
    # placing moved every start to the next cell's start
    for c in range(n_cells, 0, -1):
        start[c] = start[c - 1]
    start[0] = 0
    count = 0
    for slot in range(total):
        if home_slot[slot] == 1:
            order[count] = owner[slot]
            count += 1
    return points, owner, start, order


@helper
def gather(grid, i, xi, yi, zi, inner, outer, found, n_found):
    """Append the points with ``inner < distance <= outer`` from particle i.

    Images of i itself are left out: they move along with it and never wall
    its cage. Returns the new number of points, or -1 if ``found`` is full.
    """
    geometry = grid.geometry
    dx = xi - geometry[CORNER, 0]
    dy = yi - geometry[CORNER, 1]
    dz = zi - geometry[CORNER, 2]
    s1 = grid.shape[0, 1]
    s2 = grid.shape[0, 2]
    a0, a1, a2, b0, b1, b2 = 0, 0, 0, 0, 0, 0
    for axis in range(3):
        f = dx * geometry[0, axis] + dy * geometry[1, axis] + dz * geometry[2, axis]
        f -= geometry[LOWEST, axis]
        w = outer * (1.0 + 1e-12) * geometry[INVERSE_HEIGHT, axis]
        low = max(int((f - w) * geometry[PER_EDGE, axis]), 0)
        high = min(int((f + w) * geometry[PER_EDGE, axis]), grid.shape[0, axis] - 1)
        if axis == 0:
            a0, b0 = low, high
        elif axis == 1:
            a1, b1 = low, high
        else:
            a2, b2 = low, high
    points = grid.points
    start = grid.start
    owner = grid.owner
    inner2 = inner * inner
    if inner < 0.0:
        inner2 = -1.0
    outer2 = outer * outer
    room = len(found)
    for c0 in range(a0, b0 + 1):
        for c1 in range(a1, b1 + 1):
            row = (c0 * s1 + c1) * s2
            begin = start[row + a2]
            end = start[row + b2 + 1]
            if n_found + (end - begin) > room:
                return -1
            for k in range(begin, end):
                dx = points[0, k] - xi
                dy = points[1, k] - yi
                dz = points[2, k] - zi
                d2 = dx * dx + dy * dy + dz * dz
                # store always, keep if inside: no branch to mispredict
                found[n_found] = k
                if d2 > inner2 and d2 <= outer2 and owner[k] != i:
                    n_found += 1
    return n_found
