"""Cell grid over the box and a halo of periodic images.

Images are explicit: a box of any size and tilt becomes an open cloud of
points, so that nothing later has to know about periodicity.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.jit import compiled

__all__ = ["Grid", "build_grid", "gather"]


class Grid(NamedTuple):
    """Points sorted by cell; z (the last axis) runs fastest.

    In 2D the third axis is one cell thick and all z are zero.
    """

    x: NDArray[np.float64]  #: (m,) coordinates of particles and images
    y: NDArray[np.float64]
    z: NDArray[np.float64]
    radius: NDArray[np.float64]  #: (m,)
    owner: NDArray[np.int64]  #: (m,) particle behind each point
    start: NDArray[np.int64]  #: (cells + 1,) first point of each cell
    shape: NDArray[np.int64]  #: (3,) cells along each axis
    lowest: NDArray[np.float64]  #: (3,) fractional coordinate where the grid starts
    cells_per_edge: NDArray[np.float64]  #: (3,) cells per unit of fractional coordinate
    inverse: NDArray[np.float64]  #: (3, 3) Cartesian to fractional
    inverse_heights: NDArray[np.float64]  #: (3,)
    corner: NDArray[np.float64]  #: (3,) origin of the fractional coordinates
    periodic: NDArray[np.bool_]  #: (3,)
    halo: float  #: images are complete up to this distance from the box
    home: NDArray[np.float64]  #: (n, 3) the particles inside the box
    order: NDArray[np.int64]  #: (n,) particles in the order of the grid


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
    home = np.where(turns != 0.0, positions - turns @ vectors, positions)
    fractions = fractions - turns
    width = np.where(periodic, halo / heights, 0.0)
    low = np.where(periodic, -width, np.minimum(fractions.min(axis=0), 0.0))
    high = np.where(periodic, 1.0 + width, np.maximum(fractions.max(axis=0), 1.0))
    # at most a few cells a particle, however empty the box is
    extent = (high - low) * heights
    side = max(cell_side, float(np.prod(extent) / (8.0 * len(home) + 64.0)) ** (1 / 3))
    shape = np.maximum(np.ceil(extent / side), 1.0).astype(np.int64)
    arrays = _fill(
        home, fractions, vectors, radii, periodic, width, low, shape / (high - low), shape
    )
    return Grid(
        *arrays[:6],
        shape,
        low,
        shape / (high - low),
        inverse,
        1.0 / heights,
        origin.astype(np.float64),
        periodic.astype(np.bool_),
        float(halo),
        home,
        arrays[6],
    )


@compiled
def _fill(home, fractions, vectors, radii, periodic, width, low, per_edge, shape):  # type: ignore[no-untyped-def]
    """Count, then place, every particle and image (counting sort by cell)."""
    n = len(home)
    n_cells = shape[0] * shape[1] * shape[2]
    start = np.zeros(n_cells + 1, np.int64)
    first = np.zeros(3, np.int64)
    last = np.zeros(3, np.int64)
    cell = np.zeros(3, np.int64)
    total = 0
    x = np.zeros(0)
    y = np.zeros(0)
    z = np.zeros(0)
    radius = np.zeros(0)
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
            x = np.empty(total)
            y = np.empty(total)
            z = np.empty(total)
            radius = np.empty(total)
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
                        x[slot] = home[i, 0] + (
                            u * vectors[0, 0] + v * vectors[1, 0] + w * vectors[2, 0]
                        )
                        y[slot] = home[i, 1] + (
                            u * vectors[0, 1] + v * vectors[1, 1] + w * vectors[2, 1]
                        )
                        z[slot] = home[i, 2] + (
                            u * vectors[0, 2] + v * vectors[1, 2] + w * vectors[2, 2]
                        )
                        radius[slot] = radii[i]
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
    return x, y, z, radius, owner, start, order


@compiled
def gather(grid, i, xi, yi, zi, inner, outer, found, n_found):  # type: ignore[no-untyped-def]
    """Append the points with ``inner < distance <= outer`` from particle i.

    Images of i itself are left out: they move along with it and never wall
    its cage. Returns the new number of points, or -1 if ``found`` is full.
    """
    low0 = grid.corner[0]
    low1 = grid.corner[1]
    low2 = grid.corner[2]
    f0 = (
        (xi - low0) * grid.inverse[0, 0]
        + (yi - low1) * grid.inverse[1, 0]
        + (zi - low2) * grid.inverse[2, 0]
    )
    f1 = (
        (xi - low0) * grid.inverse[0, 1]
        + (yi - low1) * grid.inverse[1, 1]
        + (zi - low2) * grid.inverse[2, 1]
    )
    f2 = (
        (xi - low0) * grid.inverse[0, 2]
        + (yi - low1) * grid.inverse[1, 2]
        + (zi - low2) * grid.inverse[2, 2]
    )
    reach = outer * (1.0 + 1e-12)
    w0 = reach * grid.inverse_heights[0]
    w1 = reach * grid.inverse_heights[1]
    w2 = reach * grid.inverse_heights[2]
    s0, s1, s2 = grid.shape[0], grid.shape[1], grid.shape[2]
    a0 = max(int((f0 - w0 - grid.lowest[0]) * grid.cells_per_edge[0]), 0)
    b0 = min(int((f0 + w0 - grid.lowest[0]) * grid.cells_per_edge[0]), s0 - 1)
    a1 = max(int((f1 - w1 - grid.lowest[1]) * grid.cells_per_edge[1]), 0)
    b1 = min(int((f1 + w1 - grid.lowest[1]) * grid.cells_per_edge[1]), s1 - 1)
    a2 = max(int((f2 - w2 - grid.lowest[2]) * grid.cells_per_edge[2]), 0)
    b2 = min(int((f2 + w2 - grid.lowest[2]) * grid.cells_per_edge[2]), s2 - 1)
    gx, gy, gz = grid.x, grid.y, grid.z
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
                dx = gx[k] - xi
                dy = gy[k] - yi
                dz = gz[k] - zi
                d2 = dx * dx + dy * dy + dz * dz
                # store always, keep if inside: no branch to mispredict
                found[n_found] = k
                if d2 > inner2 and d2 <= outer2 and owner[k] != i:
                    n_found += 1
    return n_found
