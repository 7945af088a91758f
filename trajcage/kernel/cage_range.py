"""The cages of one share of the particles: flood and wall of one after the other."""

from trajcage.kernel import patch3d, wall2d, wall3d
from trajcage.kernel.codes import (
    BORDER,
    CLOSED,
    INVALID,
    NEED_CAPACITY,
    NEED_HALO,
    OPEN,
)
from trajcage.kernel.flood2d import flood as flood2d
from trajcage.kernel.flood3d import flood as flood3d
from trajcage.kernel.flood3d import outside
from trajcage.kernel.jit import compiled, helper
from trajcage.kernel.patch3d import AREA
from trajcage.kernel.rows import PENDING
from trajcage.kernel.scratch import X, Y, Z

__all__ = ["measure_range"]

# `plane` is None in 3D and a number in 2D: numba compiles only the branch that
# the type of the argument selects.


@helper
def _cage(grid, s, i, radius, first, limits, shift, plane):
    """Flood and integrate one cage."""
    xi, yi, zi = grid.home[i, 0], grid.home[i, 1], grid.home[i, 2]
    if plane is None:
        code, n, n_cells, n_corners = flood3d(
            grid, s, i, xi, yi, zi, radius, first, limits, shift
        )
        if code != CLOSED:
            return n_corners, (code, 0.0, 0.0, 0.0, 0, 0.0, -1)
        return n_corners, wall3d.integrate_wall(s, n, n_cells, n_corners)
    code, n, n_cells, n_corners = flood2d(
        grid, s, i, xi, yi, zi, radius, first, limits, shift
    )
    if code != CLOSED:
        return n_corners, (code, 0.0, 0.0, 0.0, 0, 0.0, -1)
    return n_corners, wall2d.integrate_wall(s, n, n_cells, n_corners)


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
def measure_range(
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
                grid, s, i, radii[i], first, limits, shifts[attempt], plane
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
            continue
        if code == OPEN or code == BORDER:
            # Not by what the flood met first: if all is known that can take part
            # within the reach, the cage is open. (A vertex whose ball of candidates
            # is not known has free space around it then, up to the reach.)
            x, y, z = grid.home[i, 0], grid.home[i, 1], grid.home[i, 2]
            far = reach + radii[i] + r_max
            known = not outside(grid, x, y, z, 0.0, 0.0, 0.0, far)
            code = OPEN if known else BORDER
        status[i] = code
    return len(todo)
