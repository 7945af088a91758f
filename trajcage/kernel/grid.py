"""Cell grid over the box and a halo of periodic images.

Images are explicit: a box of any size and tilt becomes an open cloud of
points, so that nothing later has to know about periodicity.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.jit import compiled, helper

__all__ = [
    "CORNER",
    "INVERSE_HEIGHT",
    "LOWEST",
    "PER_EDGE",
    "Grid",
    "build_grid",
    "gather",
]

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
    # turns about the box that lead a particle's images into the halo
    first = np.where(periodic, np.ceil(-width - fractions), 0.0).astype(np.int64)
    last = np.where(periodic, np.floor(1.0 + width - fractions), 0.0).astype(np.int64)
    beyond = last + 1
    scaled = (fractions - low) * per_edge
    place = (home, scaled, first, beyond, vectors, radii, per_edge, shape)
    start = np.zeros(int(shape.prod()) + 1, np.int64)
    points, owner, inside = np.empty((4, 0)), np.empty(0, np.int64), np.empty(0, bool)
    _fill(place, start[1:], False, points, owner, inside)
    np.cumsum(start, out=start)
    n_points = int(start[-1])
    points, owner, inside = (
        np.empty((4, n_points)),
        np.empty(n_points, np.int64),
        np.empty(n_points, bool),
    )
    _fill(place, start[:-1].copy(), True, points, owner, inside)
    order = owner[inside]
    geometry = np.vstack([inverse, low, per_edge, 1.0 / heights, origin])
    grid_shape = np.vstack([shape, periodic]).astype(np.int64)
    return Grid(points, owner, start, geometry, grid_shape, home, order, float(halo))


@compiled
def _fill(place, following, placing, points, owner, inside):
    """Count the particles and images of each cell, or place them (counting sort).

    ``following`` holds the counts, or the slot of each cell to fill next.
    """
    home, scaled, first, beyond, vectors, radii, per_edge, shape = place
    for i in range(len(home)):
        for u in range(first[i, 0], beyond[i, 0]):
            c0 = min(max(int(scaled[i, 0] + u * per_edge[0]), 0), shape[0] - 1)
            for v in range(first[i, 1], beyond[i, 1]):
                c1 = min(max(int(scaled[i, 1] + v * per_edge[1]), 0), shape[1] - 1)
                for w in range(first[i, 2], beyond[i, 2]):
                    c2 = int(scaled[i, 2] + w * per_edge[2])
                    c2 = min(max(c2, 0), shape[2] - 1)
                    c = (c0 * shape[1] + c1) * shape[2] + c2
                    slot = following[c]
                    following[c] += 1
                    if placing:
                        for axis in range(3):
                            points[axis, slot] = home[i, axis] + (
                                u * vectors[0, axis]
                                + v * vectors[1, axis]
                                + w * vectors[2, axis]
                            )
                        points[3, slot] = radii[i]
                        owner[slot] = i
                        inside[slot] = u == 0 and v == 0 and w == 0


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
