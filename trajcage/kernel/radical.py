"""Radical (power, Laguerre) Voronoi cells of many particles, 3D and 2D."""

from functools import partial
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.codes import CLOSED, INVALID, NEED_CAPACITY, NEED_HALO
from trajcage.kernel.grid import CORNER, LOWEST, PER_EDGE, Grid
from trajcage.kernel.jit import compiled, helper
from trajcage.kernel.radical_planes import (
    BOUNDING,
    EMPTY,
    FACET,
    HEIGHT,
    LEVEL,
    PARTICLES,
    X,
    Y,
    Z,
    make_scratch,
)
from trajcage.kernel.radical_walk import walk_cell
from trajcage.kernel.sharing import in_threads
from trajcage.kernel.system import System

__all__ = ["RadicalCells", "radical_cells"]

#: Strengths of the tie-breaking; the next one is tried if a walk came out
#: inconsistent, which takes input that is degenerate at exactly this level.
_SHIFTS = np.array([1e-10, 3e-9, 1e-7])

_PENDING = 255

#: Rows of facets a particle gets room for at first; a dense fluid has 14.5.
_FACETS = 24


class RadicalCells(NamedTuple):
    """Cells and their facets; row i is ``offsets[i]:offsets[i + 1]``.

    An empty cell, that of a particle hidden below larger ones, is closed with
    volume 0. Cells that are not closed have volume NaN and no facets.
    """

    volumes: NDArray[np.float64]  #: (n,) length^d
    status: NDArray[np.uint8]  #: (n,) CLOSED, BORDER or INVALID
    offsets: NDArray[np.int64]  #: (n + 1,)
    neighbors: NDArray[np.int64]  #: (m,) particle across each facet
    areas: NDArray[np.float64]  #: (m,) length^(d-1)
    vectors: NDArray[np.float64]  #: (m, d) to that image of the neighbor, length


class _Rows(NamedTuple):
    """Facets found by one thread."""

    used: NDArray[np.int64]  #: (1,)
    owner: NDArray[np.int32]
    neighbor: NDArray[np.int32]
    numbers: NDArray[np.float64]  #: area and vector


def _make_rows(size: int) -> _Rows:
    return _Rows(
        np.zeros(1, np.int64),
        np.empty(size, np.int32),
        np.empty(size, np.int32),
        np.empty((size, 4)),
    )


@helper
def _local_spacing(grid, xi, yi, zi, cell_volume, d):
    """Spacing of the points in the grid cells about a particle.

    It adapts the first look to gels and droplets, and depends on nothing else.
    """
    geometry = grid.geometry
    dx = xi - geometry[CORNER, 0]
    dy = yi - geometry[CORNER, 1]
    dz = zi - geometry[CORNER, 2]
    begin0, begin1, begin2, end0, end1, end2 = 0, 0, 0, 0, 0, 0
    for axis in range(3):
        f = dx * geometry[0, axis] + dy * geometry[1, axis] + dz * geometry[2, axis]
        at = int((f - geometry[LOWEST, axis]) * geometry[PER_EDGE, axis])
        at = min(max(at, 0), grid.shape[0, axis] - 1)
        low = max(at - 1, 0)
        high = min(at + 2, grid.shape[0, axis])
        if axis == 0:
            begin0, end0 = low, high
        elif axis == 1:
            begin1, end1 = low, high
        else:
            begin2, end2 = low, high
    count = 0
    for c0 in range(begin0, end0):
        for c1 in range(begin1, end1):
            row = (c0 * grid.shape[0, 1] + c1) * grid.shape[0, 2]
            count += grid.start[row + end2] - grid.start[row + begin2]
    cells = (end0 - begin0) * (end1 - begin1) * (end2 - begin2)
    return (cells * cell_volume / max(count, 1)) ** (1.0 / d)


@helper
def _sum_up(grid, s, i, n, rows):
    """Volume from the facets, which are kept; returns (code, volume)."""
    near = s.near
    ox, oy, oz = s.origin[0], s.origin[1], s.origin[2]
    total = 0.0
    volume = 0.0
    tx, ty, tz = 0.0, 0.0, 0.0
    for k in range(s.begin[BOUNDING], n):
        if near[FACET, k] == 0.0:
            continue
        x, y, z = near[X, k], near[Y, k], near[Z, k]
        d2 = x * x + y * y + z * z
        scaled = near[FACET, k] / d2
        volume += scaled * (near[LEVEL, k] - 2.0 * (x * ox + y * oy + z * oz))
        tx += scaled * x
        ty += scaled * y
        tz += scaled * z
        near[FACET, k] = 0.5 * scaled * np.sqrt(d2)
        total += abs(near[FACET, k])
    # a facet that is not closed leaves a remainder
    if not np.sqrt(tx * tx + ty * ty + tz * tz) <= 1e-7 * total + 1e-280:
        return INVALID, 0.0
    is_plane = s.begin[BOUNDING] < s.begin[PARTICLES]
    thin = 1.0 / HEIGHT if is_plane else 1.0
    begin = rows.used[0]
    row = begin
    for k in range(s.begin[PARTICLES], n):
        # facets born from broken ties have no area; both sides judge alike
        area = near[FACET, k] * thin
        x, y, z = near[X, k], near[Y, k], near[Z, k]
        size = x * x + y * y + z * z
        if is_plane:
            size = np.sqrt(size)
        if area > 1e-10 * size:
            if row == len(rows.owner):
                return NEED_CAPACITY, 0.0
            rows.owner[row] = i
            rows.neighbor[row] = grid.owner[s.found[k]]
            rows.numbers[row, 0] = area
            rows.numbers[row, 1] = x
            rows.numbers[row, 2] = y
            rows.numbers[row, 3] = z
            row += 1
    rows.used[0] = row
    return CLOSED, volume * thin / 12.0


@compiled
def _measure_range(
    grid, s, todo, begin, radii, settings, shifts, rows, volumes, status, row_of
):
    """Measure particles ``todo[begin:]``; return where it stopped for more room."""
    cell_volume, d, r_max, limit, is_open = settings
    for at in range(begin, len(todo)):
        i = todo[at]
        ri = radii[i]
        xi, yi, zi = grid.home[i, 0], grid.home[i, 1], grid.home[i, 2]
        # holds most of what bounds the cell
        first = 1.75 * _local_spacing(grid, xi, yi, zi, cell_volume, d)
        limits = ((r_max - ri) * (r_max + ri), grid.halo, limit, is_open)
        code = INVALID
        volume = 0.0
        row_of[i] = rows.used[0]
        for attempt in range(len(shifts)):
            code, n = walk_cell(
                grid, s, i, xi, yi, zi, ri, first, limits, shifts[attempt]
            )
            if code == CLOSED:
                code, volume = _sum_up(grid, s, i, n, rows)
            if code != INVALID:
                break
        if code == NEED_CAPACITY:
            return at
        if code == NEED_HALO:
            continue
        if code == CLOSED:
            volumes[i] = volume
        elif code == EMPTY:
            volumes[i] = 0.0
            code = CLOSED
        status[i] = code
    return len(todo)


def radical_cells(
    positions: NDArray[np.float64],
    vectors: NDArray[np.float64],
    origin: NDArray[np.float64],
    periodic: NDArray[np.bool_],
    radii: NDArray[np.float64],
    *,
    threads: int = 1,
) -> RadicalCells:
    """Tessellate space by the power distance |x - x_i|^2 - r_i^2.

    Equal radii give the Voronoi cells of the centers.

    Parameters
    ----------
    positions : (n, d) float64, length
        Particle centers, all finite, d = 2 or 3.
    vectors : (d, d) float64, length
        Box edges as rows.
    origin : (d,) float64, length
        Corner of the box.
    periodic : (d,) bool
        Edges along which the box repeats. Beyond the others there may be
        particles with radii up to the largest one given; cells that these
        could change are BORDER.
    radii : (n,) float64, length
        Particle radii.
    threads : int
        Threads to share the particles among.

    Returns
    -------
    RadicalCells
        The same bits for any number of threads. Equal particles on the same
        point are INVALID; so may be cells next to centers that are closer than
        1e-7 of the spacing.

    Notes
    -----
    Power diagrams: F. Aurenhammer, SIAM J. Comput. 16, 78 (1987); for packings of
    unequal spheres: B. J. Gellatly & J. L. Finney, J. Non-Cryst. Solids 50, 313
    (1982).
    """
    n, d = positions.shape
    spacing = float((abs(np.linalg.det(vectors)) / n) ** (1.0 / d))
    # a power of two brings lengths to order one without rounding
    scale = float(2.0 ** -np.round(np.log2(spacing)))
    system = System.embed(positions, vectors, origin, periodic, radii, scale)
    spacing = system.spacing
    edges = np.linalg.norm(system.vectors[:d, :d], axis=1)
    limit = 2.0 * float(edges.sum() + system.r_max)
    halo = 3.0 * spacing if np.any(periodic) else limit
    volumes = np.full(n, np.nan)
    status = np.full(n, _PENDING, np.uint8)
    row_of = np.zeros(n, np.int64)
    all_rows: list[_Rows] = []
    waiting = np.ones(n, np.bool_)
    while waiting.any():
        grid = system.grid(halo, spacing)
        cells_per_box = float(np.prod(grid.geometry[PER_EDGE, :d]))
        cell_volume = spacing**d * n / cells_per_box
        settings = (cell_volume, d, system.r_max, limit, not np.all(periodic))
        parts = np.array_split(grid.order[waiting[grid.order]], threads)
        work = partial(
            _measure_part, grid, system.radii, settings, volumes, status, row_of
        )
        for share in in_threads(work, parts, threads):
            all_rows += share
        waiting = status == _PENDING
        halo *= 1.6
    offsets = np.zeros(n + 1, np.int64)
    for rows in all_rows:
        offsets[1:] += np.bincount(rows.owner[: rows.used[0]], minlength=n)
    np.cumsum(offsets, out=offsets)
    neighbors = np.empty(offsets[-1], np.int64)
    areas = np.empty(offsets[-1])
    to_neighbor = np.empty((offsets[-1], d))
    while all_rows:
        rows = all_rows.pop()
        m = rows.used[0]
        owner = rows.owner[:m]
        target = offsets[owner] + np.arange(m) - row_of[owner]
        neighbors[target] = rows.neighbor[:m]
        areas[target] = rows.numbers[:m, 0] / scale ** (d - 1)
        to_neighbor[target] = rows.numbers[:m, 1 : 1 + d] / scale
    return RadicalCells(
        volumes / scale**d, status, offsets, neighbors, areas, to_neighbor
    )


def _measure_part(
    grid: Grid,
    radius: NDArray[np.float64],
    settings: tuple[float, int, float, float, bool],
    volumes: NDArray[np.float64],
    status: NDArray[np.uint8],
    row_of: NDArray[np.int64],
    todo: NDArray[np.int64],
) -> list[_Rows]:
    """Measure one share of the particles, with more room whenever asked for."""
    n_candidates = 512
    finished: list[_Rows] = []
    begin = 0
    while begin < len(todo):
        scratch = make_scratch(n_candidates, settings[1], 4.0 * settings[3])
        rows = _make_rows(max(n_candidates, _FACETS * (len(todo) - begin)))
        begin = _measure_range(
            grid, scratch, todo, begin, radius, settings, _SHIFTS, rows,
            volumes, status, row_of,
        )  # fmt: skip
        finished.append(rows)
        n_candidates *= 2
    return finished
