"""Measure the cages of many particles: grid, flood, wall, and growth of the reach."""

from functools import partial
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.cage_range import measure_range
from trajcage.kernel.codes import CLOSED, INVALID, OPEN, WRAPPED
from trajcage.kernel.grid import Grid
from trajcage.kernel.regions import measure_regions
from trajcage.kernel.rows import (
    PENDING,
    Output,
    Rows,
    Wall,
    Windows,
    gather_rows,
    make_output,
    make_rows,
)
from trajcage.kernel.scratch import make_scratch
from trajcage.kernel.sharing import in_threads
from trajcage.kernel.system import System

__all__ = ["Cages", "Wall", "Windows", "measure_cages"]

#: Strengths of the tie-breaking, relative to the power and (for ties of contacts
#: with far spheres) absolute; the next ones are tried if a flood came out
#: inconsistent, which takes input that is degenerate at exactly this level.
_SHIFTS = np.array([[1e-10, 0.0], [3e-9, 3e-12], [1e-7, 1e-10]])

#: How often the cubes of twice the reach about particles of one radius must fill the
#: box, so that it pays to find out together whether their regions wrap around it
#: instead of following each as far as the reach (measured).
_CROWD = 8.0


class Cages(NamedTuple):
    """What the kernel knows about each cage; NaN and -1 where it is not closed."""

    free_volume: NDArray[np.float64]  #: (n,) length^d
    free_surface: NDArray[np.float64]  #: (n,) length^(d-1)
    wall_sum: NDArray[np.float64]  #: (n,) length^d
    status: NDArray[np.uint8]  #: (n,)
    bounding_neighbors: NDArray[np.int32]  #: (n,)
    weakest_window: NDArray[np.float64]  #: (n,)
    weakest_window_neighbors: NDArray[np.int64]  #: (n, d) particle indices
    wall: Wall | None
    windows: Windows | None


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
        counts each sphere once, not each image. In a box with open edges a
        particle whose cage is not closed is BORDER if it is closer to one of
        them than the reach plus the sum of its and the largest radius, OPEN
        if it is not: then nothing from beyond can change that its cage
        extends further than the reach.
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
    system = System.embed(positions, vectors, origin, periodic, radii, scale)
    output = make_output(n, d)
    numbers, status, bounds, members = output
    wanted = np.zeros(n, bool)
    wanted[slice(None) if subset is None else subset] = True
    options = (overlap_tolerance * scale, windows, threads, output)
    # few closed cages extend further than this
    near = 6.0 * system.r_max
    far = 20.0 * system.r_max if reach is None else reach * scale
    endless = bool(np.all(periodic)) and n > 1
    if np.isinf(far) and not endless:
        far = 0.6 * float(np.linalg.norm(system.vectors[:d], axis=1).max())
    rows = _rounds(system, wanted, min(near, far) if endless else far, *options)
    if endless and far > near:
        rows += _further(system, wanted & (status == OPEN), far, *options)
    elif n == 1 and np.isinf(reach or 0.0) and np.all(periodic):
        # nothing but its own images, which move along
        numbers[0] = abs(np.linalg.det(system.vectors[:d, :d])), 0.0, 0.0, np.nan
        status[0], bounds[0] = WRAPPED, 0
    status[~wanted] = INVALID
    numbers[:, 0] /= scale**d
    numbers[:, 1] /= scale ** (d - 1)
    numbers[:, 2] /= scale**d
    wall, shut = gather_rows(rows, n, d, scale) if windows else (None, None)
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


def _further(
    system: System,
    waiting: NDArray[np.bool_],
    far: float,
    tolerance: float,
    keep: bool,
    threads: int,
    output: Output,
) -> list[Rows]:
    """Measure cages of a fully periodic box that extend further than most.

    A region that wraps around the box extends further than any reach, and that can
    be found out for many particles at once. Without a reach, it is measured.
    """
    endless = bool(np.isinf(far))
    crowd, found = waiting.copy(), output
    if endless:
        # a cage that does not wrap, but extends even further, counts as open
        far = 3.0 * float(np.linalg.norm(system.vectors, axis=1).sum())
    else:
        _, kind, count = np.unique(
            system.radii[waiting], return_inverse=True, return_counts=True
        )
        d = system.dimensions
        box = abs(float(np.linalg.det(system.vectors[:d, :d])))
        crowd[waiting] = count[kind] * (2.0 * far) ** d >= _CROWD * box
        found = make_output(len(waiting), system.dimensions)
    rows = measure_regions(system, crowd, tolerance, keep and endless, threads, found)
    waiting = waiting & ~(crowd & (found.status == WRAPPED))
    if endless:
        waiting = waiting & (found.status == CLOSED)
    output.status[waiting] = PENDING
    return rows + _rounds(system, waiting, far, tolerance, keep, threads, output)


def _rounds(
    system: System,
    wanted: NDArray[np.bool_],
    reach: float,
    tolerance: float,
    keep: bool,
    threads: int,
    output: Output,
) -> list[Rows]:
    """Measure the wanted particles, with a wider halo of images in each round."""
    mean = float(system.radii.mean())
    first = max(3.0 * mean, 1.3 * system.spacing)
    side = max(system.r_max, 0.75 * system.spacing)
    halo = 1.7 * first
    waiting = wanted.copy()
    rows: list[Rows] = []
    while waiting.any():
        grid = system.grid(halo, side)
        todo = grid.order[waiting[grid.order]]
        settings = (reach, first, system.r_max, tolerance)
        parts = np.array_split(todo, max(1, min(threads, len(todo))))
        work = partial(_measure_part, grid, system.radii, settings, keep, output)
        for share in in_threads(work, parts, threads):
            rows += share
        waiting &= output.status == PENDING
        halo *= 1.6
        first = min(1.3 * first, halo)
    return rows


def _measure_part(
    grid: Grid,
    radius: NDArray[np.float64],
    settings: tuple[float, float, float, float],
    keep: bool,
    output: Output,
    todo: NDArray[np.int64],
) -> list[Rows]:
    """Measure one share of the particles, with more room whenever asked for."""
    n_candidates, n_cells = 512, 256
    plane = 2 if output.members.shape[1] == 2 else None
    finished: list[Rows] = []
    begin = 0
    while begin < len(todo):
        scratch = make_scratch(n_candidates, n_cells)
        rows = make_rows(max(4 * n_cells, 64 * (len(todo) - begin)) if keep else 0)
        begin = measure_range(
            grid, scratch, todo, begin, radius, settings, _SHIFTS, keep, rows, output,
            plane,
        )  # fmt: skip
        finished.append(rows)
        n_candidates, n_cells = 2 * n_candidates, 2 * n_cells
    return finished
