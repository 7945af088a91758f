"""Read off a region what is not a sum over its parts: counts, windows and rows."""

import numpy as np

from trajcage.kernel.jit import helper
from trajcage.kernel.region_cells import KEY, OWNER_BITS, has
from trajcage.kernel.region_parts import (
    BOUNDING,
    CHANGED,
    CLOCK,
    CORNER_0,
    CORNER_1,
    CORNERS,
    LISTED,
    OWNER,
    ROW_0,
    ROW_1,
    TOUCHED,
    WEAKEST,
    row_of,
)
from trajcage.kernel.region_removal import change_wall

__all__ = ["count_bounding", "keep_rows", "weakest_corner", "write_members"]


@helper
def count_bounding(space, surface):
    """Count the particles that carry a piece of the region's wall."""
    largest = -1
    for k in range(space.used[TOUCHED]):
        part = space.touched[k]
        rows = space.part[part, ROW_1] - space.part[part, ROW_0]
        if largest < 0 or rows > (
            space.part[largest, ROW_1] - space.part[largest, ROW_0]
        ):
            largest = part
    for k in range(space.used[TOUCHED]):
        part = space.touched[k]
        if part != largest:
            for row in range(space.part[part, ROW_0], space.part[part, ROW_1]):
                change_wall(space, space.row[row, OWNER], space.area[row])
    count = space.part[largest, BOUNDING] if largest >= 0 else 0
    for k in range(space.used[LISTED]):
        owner = space.listed[k]
        before = 0.0
        if largest >= 0:
            row = row_of(space, owner, largest)
            if row >= 0:
                before = space.area[row]
            count -= before > 1e-10 * space.total[largest, 1]
        count += before + space.extra[owner] > 1e-10 * surface
    return largest, count


@helper
def weakest_corner(cells, space, i, corner0, m):
    """Corner behind the weakest window of the region, -1 if it has none."""
    best, where = -1.0, -1
    for k in range(space.used[TOUCHED] + 1):
        own = k == space.used[TOUCHED]
        begin, end = corner0, space.used[CORNERS]
        if not own:
            part = space.touched[k]
            begin, end = space.part[part, CORNER_0], space.part[part, CORNER_1]
            q = space.part[part, WEAKEST]
            if q < 0:
                continue
            if not has(cells, space.corner[q, 0], i, m):
                begin, end = q, q + 1
        for q in range(begin, end):
            if space.place[q, 0] > best and (
                own or not has(cells, space.corner[q, 0], i, m)
            ):
                best, where = space.place[q, 0], q
    return where


@helper
def write_members(cells, space, q, members, row, m):
    """Write the particles of the window at a corner."""
    t, f = space.corner[q, 0], space.corner[q, 1]
    at = 0
    for k in range(m):
        if k != f:
            members[row, at] = cells.number[t, KEY + k] >> OWNER_BITS
            at += 1


@helper
def _to_closest(spheres, i, j, axis):
    """Component of the vector to the image of j that is closest along each edge."""
    grid = spheres.grid
    apart = grid.home[j, axis] - grid.home[i, axis]
    for edge in range(3):
        if grid.shape[1, edge] == 1:
            f = 0.0
            for row in range(3):
                f += (grid.home[j, row] - grid.home[i, row]) * grid.geometry[row, edge]
            apart -= np.floor(f + 0.5) * spheres.edges[edge, axis]
    return apart


@helper
def keep_rows(spheres, cells, space, i, largest, surface, corner0, rows, m):
    """Copy patches and windows of a region; False if the rows are full."""
    patches, windows = space.used[LISTED], space.used[CORNERS] - corner0
    for k in range(space.used[TOUCHED]):
        part = space.touched[k]
        patches += space.part[part, ROW_1] - space.part[part, ROW_0]
        windows += space.part[part, CORNER_1] - space.part[part, CORNER_0]
    if rows.used[0] + patches > len(rows.patch_owner):
        return False
    if rows.used[1] + windows > len(rows.window_owner):
        return False
    begin, end = 0, 0
    if largest >= 0:
        begin, end = space.part[largest, ROW_0], space.part[largest, ROW_1]
    for k in range(begin, end + space.used[LISTED]):
        if k < end:
            j, area = space.row[k, OWNER], space.area[k]
            if space.particle[j, CHANGED] == space.used[CLOCK]:
                continue
        else:
            j = space.listed[k - end]
            area = space.extra[j]
            own = np.int64(-1)
            if largest >= 0:
                own = row_of(space, j, largest)
            if own >= 0:
                area += space.area[own]
        if not area > 1e-10 * surface:
            continue
        row = rows.used[0]
        rows.patch_owner[row] = i
        rows.patch_neighbor[row] = j
        rows.patch_numbers[row, 0] = area
        for axis in range(3):
            rows.patch_numbers[row, 1 + axis] = _to_closest(spheres, i, j, axis)
        rows.used[0] += 1
    for k in range(space.used[TOUCHED] + 1):
        own_corners = k == space.used[TOUCHED]
        begin, end = corner0, space.used[CORNERS]
        if not own_corners:
            part = space.touched[k]
            begin, end = space.part[part, CORNER_0], space.part[part, CORNER_1]
        for q in range(begin, end):
            t = space.corner[q, 0]
            if has(cells, t, i, m):
                continue
            row = rows.used[1]
            rows.window_owner[row] = i
            write_members(cells, space, q, rows.window_neighbors, row, m)
            rows.window_numbers[row, 0] = space.place[q, 0]
            first = cells.number[t, KEY] >> OWNER_BITS
            for axis in range(3):
                rows.window_numbers[row, 1 + axis] = space.place[q, 1 + axis] + (
                    _to_closest(spheres, i, first, axis)
                )
            rows.used[1] += 1
    return True
