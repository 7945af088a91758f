"""Take one particle out of the space between all spheres: what becomes of the parts.

Cells that do not hold the particle stay as they are. In place of those that do there
are others, found from the cells around them, which join the parts that the particle
kept apart.
"""

import numpy as np

from trajcage.kernel.codes import CLOSED, NEED_CAPACITY
from trajcage.kernel.jit import helper
from trajcage.kernel.region_cells import (
    ACROSS,
    KEY,
    LEAST,
    NEXT,
    OFFSET,
    OWNER_BITS,
    PART,
    SHUT,
    VOLUME,
    find,
    has,
    insert,
    load,
)
from trajcage.kernel.region_climb import climb
from trajcage.kernel.region_parts import (
    BASE,
    CHANGED,
    CLOCK,
    HEAD,
    LISTED,
    TAKEN,
    TASKS,
    TOUCHED,
    WRAPS,
    note_corner,
    row_of,
)
from trajcage.kernel.region_sums import sum_cell
from trajcage.kernel.region_walk import cross

__all__ = ["UNKNOWN", "add_up_region", "change_wall"]

#: The cell in the look belongs to a part that is not measured yet.
UNKNOWN = 20


@helper
def change_wall(space, owner, area):
    """Note that a particle's wall changes by an area."""
    if space.particle[owner, CHANGED] != space.used[CLOCK]:
        space.particle[owner, CHANGED] = space.used[CLOCK]
        space.extra[owner] = 0.0
        space.listed[space.used[LISTED]] = owner
        space.used[LISTED] += 1
    space.extra[owner] += area


@helper
def _leave_out(spheres, cells, space, part, i, sums, m):
    """Take the cells of particle i out of the sums over a part.

    Their neighbors become tasks: to look across the faces that led to them.
    """
    row = row_of(space, i, part)
    if row < 0:
        return
    number = cells.number
    at = space.row[row, HEAD]
    while at >= 0:
        t, slot = at >> 2, at & 3
        at = number[t, NEXT + slot]
        if at >> 2 == t:
            # two images of i in one cell: it is listed twice
            continue
        sums[0] -= cells.value[t, VOLUME]
        for k in range(m):
            owner = number[t, KEY + k] >> OWNER_BITS
            area = cells.value[t, VOLUME + 1 + k]
            sums[1] -= area
            sums[2] -= spheres.reaches[owner] * area
            change_wall(space, owner, -area)
            across = number[t, ACROSS + k]
            if across != SHUT and not has(cells, across >> 2, i, m):
                space.task[space.used[TASKS]] = across
                space.used[TASKS] += 1


@helper
def _take_in(spheres, cells, space, part, i, base, sums, m):
    """Add a part to the region of particle i; ``base`` is its place there.

    Returns whether that shows that the region wraps around the box.
    """
    if space.part[part, TAKEN] == space.used[CLOCK]:
        for axis in range(3):
            if space.part[part, BASE + axis] != base[axis]:
                return True
        return False
    space.part[part, TAKEN] = space.used[CLOCK]
    for axis in range(3):
        space.part[part, BASE + axis] = base[axis]
    space.touched[space.used[TOUCHED]] = part
    space.used[TOUCHED] += 1
    for k in range(3):
        sums[k] += space.total[part, k]
    _leave_out(spheres, cells, space, part, i, sums, m)
    return space.part[part, WRAPS] == 1


@helper
def _arrive(spheres, store, i, conflict, start, sums, state, m):
    """Take in the cell in the look, which lies at ``state[:3]`` from the start.

    ``state[3]`` becomes 1 if the region wraps.
    """
    cells, look, space = store
    other, slot = find(cells, look)
    if other < 0:
        if not conflict:
            return UNKNOWN
        if cells.used[0] + 1 >= len(cells.number):
            return NEED_CAPACITY
        other = insert(cells, look, slot)
        for axis in range(3):
            cells.number[other, OFFSET + axis] = state[axis]
        space.task[space.used[TASKS]] = 4 * other
        space.used[TASKS] += 1
        return CLOSED
    for axis in range(3):
        state[axis] -= cells.number[other, OFFSET + axis]
    if other >= start:
        if state[0] != 0 or state[1] != 0 or state[2] != 0:
            state[3] = 1
        return CLOSED
    part = cells.number[other, PART]
    if _take_in(spheres, cells, space, part, i, state, sums, m):
        state[3] = 1
    return CLOSED


@helper
def _add_cell(spheres, cells, look, space, t, sums, plane):
    """Add a cell in place of those of the particle to the sums."""
    sum_cell(cells, look, t, plane)
    sums[0] += cells.value[t, VOLUME]
    for k in range(4 if plane is None else 3):
        owner = cells.number[t, KEY + k] >> OWNER_BITS
        area = cells.value[t, VOLUME + 1 + k]
        sums[1] += area
        sums[2] += spheres.reaches[owner] * area
        change_wall(space, owner, area)


@helper
def add_up_region(spheres, store, i, first, start, sums, state, plane):
    """Measure the region of particle i, whose own cells begin at ``start``.

    ``sums`` become volume, surface and wall sum; ``state[3]`` 1 if it wraps around
    the box. Returns CLOSED, what is missing, or UNKNOWN.
    """
    m = 4 if plane is None else 3
    cells, look, space = store
    number = cells.number
    space.used[CLOCK] += 1
    space.used[LISTED] = 0
    space.used[TOUCHED] = 0
    space.used[TASKS] = 0
    for k in range(3):
        sums[k] = 0.0
    for k in range(4):
        state[k] = 0
    code, conflict = climb(spheres, look, i, first, plane)
    if code == CLOSED:
        code = _arrive(spheres, store, i, conflict, start, sums, state, m)
    done = 0
    while code == CLOSED and done < space.used[TASKS]:
        # across one face of a part's cell, or all faces of a cell of this region's own
        t, begin = space.task[done] >> 2, space.task[done] & 3
        end = begin + 1
        done += 1
        load(spheres, cells, look, t, m)
        if t >= start:
            _add_cell(spheres, cells, look, space, t, sums, plane)
            end = m
        n, known = np.int64(LEAST), -1.0
        for f in range(begin, end):
            code, n, known, shut, _, conflict = cross(
                spheres, cells, look, t, f, i, n, known, plane
            )
            if code != CLOSED:
                break
            if shut:
                note_corner(look, space, t, f, plane)
                continue
            for axis in range(3):
                state[axis] = number[t, OFFSET + axis] + look.move[axis]
                if t < start:
                    state[axis] += space.part[number[t, PART], BASE + axis]
            code = _arrive(spheres, store, i, conflict, start, sums, state, m)
            if code != CLOSED:
                break
    return code
