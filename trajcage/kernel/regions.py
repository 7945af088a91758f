"""Regions that wrap around a periodic box, shared by all particles in them.

A particle moves between the exclusion spheres of the others, while its own images
move along. So the regions of two particles of one radius differ by their own spheres
only: the space that *all* spheres leave free is measured once, and each particle is
then taken out of it.

A periodic structure cannot be made generic by changing powers image by image;
ties are broken by a tiny shear of space and a tiny change of the radii.
"""

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.codes import CLOSED, INVALID, NEED_CAPACITY, NEED_HALO, WRAPPED
from trajcage.kernel.grid import Grid, gather
from trajcage.kernel.jit import compiled, helper
from trajcage.kernel.region_answer import (
    count_bounding,
    keep_rows,
    weakest_corner,
    write_members,
)
from trajcage.kernel.region_cells import Spheres, forget
from trajcage.kernel.region_parts import CORNERS, flood_part, make_store
from trajcage.kernel.region_removal import UNKNOWN, add_up_region
from trajcage.kernel.rows import Output, Rows, make_rows
from trajcage.kernel.sharing import in_threads
from trajcage.kernel.system import System

__all__ = ["measure_regions"]

#: Strengths of the shear; the next one is tried if a region came out inconsistent.
_SHEARS = (1e-11, 1e-9, 1e-7)

#: Cells that a particle of a periodic structure can have, at the very most.
_MOST_CELLS = 512

#: Status of a particle with contacts that are spheres of its own making.
_ALONE = 254

#: Particles of one radius, and whether exclusion spheres may shrink for them.
_Group = tuple[NDArray[np.int64], bool]


@helper
def _count_overlaps(spheres, look, i, shrink):
    """Count exclusion spheres that hold particle i, -1 without room, and shrink them.

    An overlap within the tolerance counts as a contact.
    """
    grid = spheres.grid
    xi, yi, zi = grid.home[i, 0], grid.home[i, 1], grid.home[i, 2]
    none = np.int64(0)
    total = gather(grid, i, xi, yi, zi, -1.0, spheres.largest, look.found, none)
    count = 0
    for k in range(total):
        slot = look.found[k]
        dx, dy, dz = (
            grid.points[0, slot] - xi,
            grid.points[1, slot] - yi,
            grid.points[2, slot] - zi,
        )
        distance = np.sqrt(dx * dx + dy * dy + dz * dz)
        owner = grid.owner[slot]
        if distance < spheres.reaches[owner]:
            count += 1
            if shrink:
                spheres.reaches[owner] = distance
    return count if total >= 0 else -1


@compiled
def _measure_space(spheres, store, todo, begin, settings, keep, rows, output, plane):
    """Measure the regions of particles ``todo[begin:]``, all of one radius.

    ``store`` keeps what was measured. ``settings`` are the distance up to which to
    look at first, whether overlaps are tolerated and, if so, whether exclusion
    spheres may shrink for the one particle in ``todo``; otherwise a particle with an
    overlap is left with the status ALONE. Returns CLOSED or what to give more of
    before going on at ``todo[at]``, and ``at``.
    """
    cells, look, space = store
    first, tolerant, alone = settings
    numbers, status, bounds, members = output
    m = 4 if plane is None else 3
    sums = np.zeros(3)
    state = np.zeros(4, np.int64)
    keys = np.zeros(4, np.int64)
    point = np.zeros(4)
    for at in range(begin, len(todo)):
        i = todo[at]
        if tolerant:
            overlaps = _count_overlaps(spheres, look, i, alone)
            if overlaps < 0:
                return NEED_CAPACITY, at
            if overlaps > 0 and not alone:
                status[i] = _ALONE
                continue
        start, corner_0 = cells.used[0], space.used[CORNERS]
        while True:
            code = add_up_region(spheres, store, i, first, start, sums, state, plane)
            if code != UNKNOWN:
                break
            # make room for the part met, and start again
            for k in range(4):
                keys[k], point[k] = look.trial[2, k], look.point[k]
            space.used[CORNERS] = corner_0
            forget(cells, look, start)
            for k in range(4):
                look.trial[2, k], look.point[k] = keys[k], point[k]
            code = flood_part(spheres, store, plane)
            if code != CLOSED:
                break
            start, corner_0 = cells.used[0], space.used[CORNERS]
        if code != CLOSED:
            return code, at
        status[i] = CLOSED
        if state[3] == 1:
            largest, bounding = count_bounding(space, sums[1])
            if keep and not keep_rows(
                spheres, cells, space, i, largest, sums[1], corner_0, rows, m
            ):
                return NEED_CAPACITY, at
            status[i] = WRAPPED
            numbers[i, 0] = max(sums[0], 0.0)
            numbers[i, 1] = sums[1]
            numbers[i, 2] = sums[2]
            bounds[i] = bounding
            q = weakest_corner(cells, space, i, corner_0, m)
            if q >= 0:
                numbers[i, 3] = space.place[q, 0]
                write_members(cells, space, q, members, i, m)
        space.used[CORNERS] = corner_0
        forget(cells, look, start)
    return CLOSED, len(todo)


def measure_regions(
    system: System,
    wanted: NDArray[np.bool_],
    tolerance: float,
    keep: bool,
    threads: int,
    output: Output,
) -> list[Rows]:
    """Measure the regions of the wanted particles in a fully periodic box.

    Only those that wrap around the box are: WRAPPED. The others are CLOSED, without
    numbers.
    """
    rows: list[Rows] = []
    waiting = np.nonzero(wanted)[0]
    for strength in _SHEARS:
        sheared = system.without_symmetry(strength)
        radii = system.radii[waiting]
        groups = [(waiting[radii == radius], False) for radius in np.unique(radii)]
        rows += _rounds(
            system.radii, sheared, groups, tolerance > 0.0, keep, threads, output
        )
        alone = waiting[output.status[waiting] == _ALONE]
        rows += _rounds(
            system.radii, sheared, [(alone[k : k + 1], True) for k in range(len(alone))],
            True, keep, threads, output,
        )  # fmt: skip
        waiting = waiting[output.status[waiting] == INVALID]
    return rows


def _rounds(
    radii: NDArray[np.float64],
    sheared: System,
    groups: list[_Group],
    tolerant: bool,
    keep: bool,
    threads: int,
    output: Output,
) -> list[Rows]:
    """Measure groups of particles, with a wider halo of images in each round."""
    first = max(3.0 * float(radii.mean()), 1.3 * sheared.spacing)
    side = max(sheared.r_max, 0.75 * sheared.spacing)
    edges = sheared.edges(side)
    extent = float(np.linalg.norm(edges, axis=1).sum())
    # no ball of a periodic box that is free of centers is wider than its edges together
    widest = extent + 4.0 * first
    halo = min(4.0 * first, widest)
    rows: list[Rows] = []
    while groups:
        grid = sheared.grid(halo, side)

        def work(
            group: _Group, grid: Grid = grid
        ) -> tuple[list[Rows], NDArray[np.int64]]:
            reaches = sheared.radii + radii[group[0][0]]
            spheres = Spheres(grid, edges, reaches, float(reaches.max()), extent)
            return _measure_group(
                spheres,
                group,
                (first, tolerant, group[1]),
                keep,
                grid.halo < widest,
                output,
            )

        parts = in_threads(work, groups, threads)
        rows += [row for part in parts for row in part[0]]
        groups = [
            (rest, alone)
            for (_, rest), (_, alone) in zip(parts, groups, strict=True)
            if len(rest) > 0
        ]
        halo = min(1.6 * halo, widest)
    return rows


def _measure_group(
    spheres: Spheres,
    group: _Group,
    settings: tuple[float, bool, bool],
    keep: bool,
    widen: bool,
    output: Output,
) -> tuple[list[Rows], NDArray[np.int64]]:
    """Measure particles of one radius; return those that need a wider halo, too.

    INVALID are those that need a wider one than is possible (not ``widen``) or more
    cells: they have met a vertex that broken ties have put anywhere.
    """
    todo = group[0]
    n = len(spheres.reaches)
    plane = 2 if output.members.shape[1] == 2 else None
    n_cells = 256 + (9 * n if plane is None else 3 * n)
    most = max(_MOST_CELLS * n, 1 << 16)
    room = 4 * n_cells
    begin = 0
    finished: list[Rows] = []
    while begin < len(todo):
        rows = make_rows(room if keep else 0)
        at = begin
        code, begin = _measure_space(
            spheres, make_store(n, n_cells), todo, begin, settings, keep, rows, output,
            plane,
        )  # fmt: skip
        finished.append(rows)
        if code == NEED_HALO and widen:
            break
        if code == NEED_CAPACITY and n_cells < most:
            room *= 2
            n_cells *= 2 if begin == at else 1  # else the rows were full
        elif code != CLOSED:
            output.status[todo[begin]] = INVALID
            begin += 1
    return finished, todo[begin:]
