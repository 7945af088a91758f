"""Measure the cages of many particles: grid, flood, wall, and growth of the reach."""

from concurrent.futures import ThreadPoolExecutor
from functools import partial
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel import patch3d, wall2d, wall3d
from trajcage.kernel.codes import (
    CLOSED,
    INVALID,
    NEED_CAPACITY,
    NEED_HALO,
    OPEN,
    WRAPPED,
)
from trajcage.kernel.flood2d import flood as flood2d
from trajcage.kernel.flood3d import flood as flood3d
from trajcage.kernel.grid import Grid, build_grid
from trajcage.kernel.jit import compiled, helper
from trajcage.kernel.patch3d import AREA
from trajcage.kernel.scratch import X, Y, Z, make_scratch
from trajcage.kernel.torus import make_torus

__all__ = ["Cages", "measure_cages"]

#: Strengths of the tie-breaking, relative to the power and (for ties of contacts
#: with far spheres) absolute; the next ones are tried if a flood came out
#: inconsistent, which takes input that is degenerate at exactly this level.
_SHIFTS = np.array([[1e-10, 0.0], [3e-9, 3e-12], [1e-7, 1e-10]])

#: The same for regions that wrap around a box, see `trajcage.kernel.torus`.
_SHEARS = (1e-11, 1e-9, 1e-7)

#: Status of a particle that waits for a wider halo.
PENDING = 255


class Cages(NamedTuple):
    """What the kernel knows about each cage; NaN and -1 where it is not closed."""

    free_volume: NDArray[np.float64]  #: (n,) length^d
    free_surface: NDArray[np.float64]  #: (n,) length^(d-1)
    wall_sum: NDArray[np.float64]  #: (n,) length^d
    status: NDArray[np.uint8]  #: (n,)
    bounding_neighbors: NDArray[np.int32]  #: (n,)
    weakest_window: NDArray[np.float64]  #: (n,)
    weakest_window_neighbors: NDArray[np.int64]  #: (n, d) particle indices
    wall: "Wall | None"
    windows: "Windows | None"


class Wall(NamedTuple):
    """Patches of the cage walls, one row for each bounding neighbor (image)."""

    offsets: NDArray[np.int64]  #: (n + 1,)
    neighbors: NDArray[np.int64]  #: (m,)
    areas: NDArray[np.float64]  #: (m,) length^(d-1)
    vectors: NDArray[np.float64]  #: (m, d) to the neighbor, length


class Windows(NamedTuple):
    """Shut windows of the cages, one row for each corner of the wall."""

    offsets: NDArray[np.int64]  #: (n + 1,)
    neighbors: NDArray[np.int64]  #: (m, d) the particles that form the window
    ratios: NDArray[np.float64]  #: (m,) opening ratio
    corners: NDArray[np.float64]  #: (m, d) corner of the wall behind it, length


#: numbers (n, 4), status (n,), bounding neighbors (n,), window members (n, d)
_Output = tuple[
    NDArray[np.float64], NDArray[np.uint8], NDArray[np.int32], NDArray[np.int64]
]


class _Rows(NamedTuple):
    """Growing output of one thread."""

    used: NDArray[np.int64]  #: (2,) rows used of patches and windows
    patch_owner: NDArray[np.int64]
    patch_neighbor: NDArray[np.int64]
    patch_numbers: NDArray[np.float64]  #: area and vector
    window_owner: NDArray[np.int64]
    window_neighbors: NDArray[np.int64]
    window_numbers: NDArray[np.float64]  #: ratio and corner


def _make_rows(size: int) -> _Rows:
    return _Rows(
        np.zeros(2, np.int64),
        np.empty(size, np.int64),
        np.empty(size, np.int64),
        np.empty((size, 4)),
        np.empty(size, np.int64),
        np.empty((size, 3), np.int64),
        np.empty((size, 4)),
    )


# `plane` is None in 3D and a number in 2D: numba compiles only the branch that
# the type of the argument selects.


@helper
def _cage(grid, s, i, radius, first, limits, shift, plane, torus):
    """Flood and integrate one cage."""
    xi, yi, zi = grid.home[i, 0], grid.home[i, 1], grid.home[i, 2]
    if plane is None:
        code, n, n_cells, n_corners = flood3d(
            grid, s, i, xi, yi, zi, radius, first, limits, shift, torus
        )
        if code != CLOSED:
            return n_corners, (code, 0.0, 0.0, 0.0, 0, 0.0, -1)
        return n_corners, wall3d.integrate_wall(grid, s, n, n_cells, n_corners, torus)
    code, n, n_cells, n_corners = flood2d(
        grid, s, i, xi, yi, zi, radius, first, limits, shift, torus
    )
    if code != CLOSED:
        return n_corners, (code, 0.0, 0.0, 0.0, 0, 0.0, -1)
    return n_corners, wall2d.integrate_wall(grid, s, n, n_cells, n_corners, torus)


@helper
def _window(grid, s, q, row, members, plane):
    """Write the particles of the window at corner q; return its opening ratio."""
    if plane is None:
        a, b, c = patch3d.window(s, q)
        members[row, 2] = grid.owner[s.found[c]]
        ratio = patch3d.opening_ratio(s, a, b, c)
    else:
        a, b = wall2d.window(s, q)
        ratio = wall2d.opening_ratio(s, a, b)
    members[row, 0] = grid.owner[s.found[a]]
    members[row, 1] = grid.owner[s.found[b]]
    return ratio


@helper
def _keep_rows(grid, s, i, bounding, n_corners, rows, plane):
    """Copy patches and windows of one cage; False if the rows are full."""
    if rows.used[0] + bounding > len(rows.patch_owner) or rows.used[
        1
    ] + n_corners > len(rows.window_owner):
        return False
    for m in range(bounding):
        a = s.seen[m]
        row = rows.used[0]
        rows.patch_owner[row] = i
        rows.patch_neighbor[row] = grid.owner[s.found[a]]
        rows.patch_numbers[row, 0] = s.patch[a, AREA]
        rows.patch_numbers[row, 1] = s.near[X, a]
        rows.patch_numbers[row, 2] = s.near[Y, a]
        rows.patch_numbers[row, 3] = s.near[Z, a]
        rows.used[0] += 1
    for q in range(n_corners):
        row = rows.used[1]
        rows.window_owner[row] = i
        rows.window_numbers[row, 0] = _window(
            grid, s, q, row, rows.window_neighbors, plane
        )
        for axis in range(3):
            rows.window_numbers[row, 1 + axis] = s.corner[q, axis]
        rows.used[1] += 1
    return True


@compiled
def _measure_range(
    grid,
    s,
    todo,
    begin,
    radii,
    settings,
    shifts,
    keep,
    rows,
    output,
    plane,
    torus,
):
    """Measure particles ``todo[begin:]``; return where it stopped for more room."""
    reach, first, r_max, tolerance = settings
    numbers, status, bounds, members = output
    for at in range(begin, len(todo)):
        i = todo[at]
        limits = (reach, radii[i] + r_max, tolerance, grid.halo)
        n_corners, cage = 0, (INVALID, 0.0, 0.0, 0.0, 0, 0.0, -1)
        for attempt in range(len(shifts)):
            n_corners, cage = _cage(
                grid, s, i, radii[i], first, limits, shifts[attempt], plane, torus
            )
            if cage[0] != INVALID:
                break
        code, volume, surface, wall_sum, bounding, weakest, where = cage
        if code == NEED_CAPACITY:
            return at
        if code == NEED_HALO:
            status[i] = PENDING
            continue
        if code == CLOSED:
            if torus is not None and torus.sums[1] > 0.0:
                status[i] = WRAPPED
            else:
                status[i] = CLOSED
            if keep and not _keep_rows(grid, s, i, bounding, n_corners, rows, plane):
                return at
            numbers[i, 0] = volume
            numbers[i, 1] = surface
            numbers[i, 2] = wall_sum
            bounds[i] = bounding
            if where >= 0:
                numbers[i, 3] = weakest
                _window(grid, s, where, i, members, plane)
        else:
            status[i] = code
    return len(todo)


def measure_cages(
    positions: NDArray[np.float64],
    vectors: NDArray[np.float64],
    origin: NDArray[np.float64],
    periodic: NDArray[np.bool_],
    radii: NDArray[np.float64],
    *,
    subset: NDArray[np.int64] | None = None,
    reach: float | None = None,
    overlap_tolerance: float = 0.0,
    windows: bool = False,
    threads: int = 1,
) -> Cages:
    """Measure cages exactly.

    Parameters
    ----------
    positions : (n, d) float64, length
        Particle centers, all finite.
    vectors : (d, d) float64, length
        Box edges as rows.
    origin : (d,) float64, length
        Corner of the box.
    periodic : (d,) bool
        Edges along which the box repeats; along the others nothing is known
        beyond the box.
    radii : (n,) float64, length
        Particle radii.
    subset : (m,) int64, optional
        Particles to measure, all unless given.
    reach : float, length, optional
        A cage that extends further than this from its particle is open. Ten
        of the largest diameters unless given. With ``inf`` the volume of a
        region that wraps around a fully periodic box is measured, too; it
        counts each sphere once, not each image.
    overlap_tolerance : float, length
        Overlaps up to this depth count as contacts.
    windows : bool
        Also return every patch of the wall and every shut window.
    threads : int
        Threads to share the particles among.

    Returns
    -------
    Cages
        The same bits for any number of threads.
    """
    n, d = positions.shape
    # a power of two brings lengths to order one without rounding
    scale = float(2.0 ** -np.round(np.log2(2.0 * radii.max())))
    system = _System.embed(positions, vectors, origin, periodic, radii, scale)
    numbers = np.full((n, 4), np.nan)
    status = np.full(n, PENDING, np.uint8)
    bounds = np.full(n, -1, np.int32)
    members = np.full((n, d), -1, np.int64)
    output = (numbers, status, bounds, members)
    wanted = np.zeros(n, bool)
    wanted[slice(None) if subset is None else subset] = True
    tolerance = overlap_tolerance * scale
    far = 20.0 * system.r_max if reach is None else reach * scale
    whole_box = bool(np.isinf(far))
    if whole_box:
        # further than this a region that does not wrap around is rare
        far = 0.6 * float(np.linalg.norm(system.vectors[:d], axis=1).max())
    rows = _rounds(system, wanted, far, tolerance, windows, threads, output, False)
    if whole_box and np.all(periodic):
        wanted = wanted & (status == OPEN) & (n > 1)
        status[wanted] = PENDING
        for strength in _SHEARS:
            sheared = system.without_symmetry(strength)
            rows += _rounds(
                sheared, wanted, np.inf, tolerance, windows, threads, output, True
            )
            wanted = wanted & (status == INVALID)
            if not wanted.any():
                break
            status[wanted] = PENDING
        status[status == PENDING] = INVALID
        if n == 1:
            # nothing but its own images, which move along
            numbers[0] = abs(np.linalg.det(system.vectors[:d, :d])), 0.0, 0.0, np.nan
            status[0], bounds[0] = WRAPPED, 0
    if subset is not None:
        rest = np.ones(n, bool)
        rest[subset] = False
        status[rest] = INVALID
    numbers[:, 0] /= scale**d
    numbers[:, 1] /= scale ** (d - 1)
    numbers[:, 2] /= scale**d
    wall, shut = _gather_rows(rows, n, d, scale) if windows else (None, None)
    return Cages(
        numbers[:, 0].copy(),
        numbers[:, 1].copy(),
        numbers[:, 2].copy(),
        status,
        bounds,
        numbers[:, 3].copy(),
        members,
        wall,
        shut,
    )


class _System(NamedTuple):
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
    ) -> "_System":
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

    def without_symmetry(self, strength: float) -> "_System":
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


def _rounds(
    system: _System,
    wanted: NDArray[np.bool_],
    reach: float,
    tolerance: float,
    keep: bool,
    threads: int,
    output: _Output,
    wrapped: bool,
) -> list[_Rows]:
    """Measure the wanted particles, with a wider halo of images in each round."""
    mean = float(system.radii.mean())
    first = max(3.0 * mean, 1.3 * system.spacing)
    side = max(system.r_max, 0.75 * system.spacing)
    vectors = system.vectors.copy()
    halo = 1.7 * first
    if system.dimensions == 2:
        vectors[2, 2] = side
    elif wrapped:
        halo = max(halo, float(np.linalg.norm(system.vectors, axis=1).max()))
    waiting = wanted.copy()
    rows: list[_Rows] = []
    while waiting.any():
        grid = build_grid(
            system.positions,
            vectors,
            system.origin,
            system.periodic,
            system.radii,
            halo,
            side,
        )
        if system.dimensions == 2:
            grid.shape[1, 2] = 1  # nothing lies beyond the plane
        todo = grid.order[waiting[grid.order]]
        settings = (reach, first, system.r_max, tolerance)
        parts = np.array_split(todo, max(1, min(threads, len(todo))))
        work = partial(
            _measure_part, grid, system.radii, settings, keep, output, wrapped
        )
        if len(parts) == 1:
            rows += work(parts[0])
        else:
            with ThreadPoolExecutor(len(parts)) as pool:
                for share in pool.map(work, parts):
                    rows += share
        waiting &= output[1] == PENDING
        halo *= 1.6
        first = min(1.3 * first, halo)
    return rows


def _measure_part(
    grid: Grid,
    radius: NDArray[np.float64],
    settings: tuple[float, float, float, float],
    keep: bool,
    output: _Output,
    wrapped: bool,
    todo: NDArray[np.int64],
) -> list[_Rows]:
    """Measure one share of the particles, with more room whenever asked for."""
    n_candidates, n_cells = 512, 256
    plane = 2 if output[-1].shape[1] == 2 else None
    finished: list[_Rows] = []
    begin = 0
    while begin < len(todo):
        scratch = make_scratch(n_candidates, n_cells)
        torus = make_torus(grid, n_candidates, n_cells) if wrapped else None
        rows = _make_rows(max(4 * n_cells, 64 * (len(todo) - begin)) if keep else 0)
        begin = _measure_range(
            grid,
            scratch,
            todo,
            begin,
            radius,
            settings,
            np.zeros((1, 2)) if wrapped else _SHIFTS,
            keep,
            rows,
            output,
            plane,
            torus,
        )
        finished.append(rows)
        n_candidates, n_cells = 2 * n_candidates, 2 * n_cells
    return finished


def _gather_rows(
    rows: list[_Rows], n: int, d: int, scale: float
) -> tuple[Wall, Windows]:
    """Join the rows of all threads and sort them by particle."""
    owner = np.concatenate([r.patch_owner[: r.used[0]] for r in rows])
    order = np.argsort(owner, kind="stable")
    numbers = np.concatenate([r.patch_numbers[: r.used[0]] for r in rows])[order]
    neighbors = np.concatenate([r.patch_neighbor[: r.used[0]] for r in rows])[order]
    wall = Wall(
        _offsets(owner, n),
        neighbors,
        numbers[:, 0] / scale ** (d - 1),
        numbers[:, 1 : 1 + d] / scale,
    )
    owner = np.concatenate([r.window_owner[: r.used[1]] for r in rows])
    order = np.argsort(owner, kind="stable")
    numbers = np.concatenate([r.window_numbers[: r.used[1]] for r in rows])[order]
    members = np.concatenate([r.window_neighbors[: r.used[1]] for r in rows])[order]
    shut = Windows(
        _offsets(owner, n), members[:, :d], numbers[:, 0], numbers[:, 1 : 1 + d] / scale
    )
    return wall, shut


def _offsets(owner: NDArray[np.int64], n: int) -> NDArray[np.int64]:
    offsets = np.zeros(n + 1, np.int64)
    np.cumsum(np.bincount(owner, minlength=n), out=offsets[1:])
    return offsets
