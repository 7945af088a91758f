"""Parts of the space that all spheres leave free, each measured once.

Cells count up to translations by box edges, and a link between two of them carries
its translation: a part wraps around the box if the translations along some closed
path do not cancel.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel import patch3d, wall2d
from trajcage.kernel.codes import CLOSED, INVALID, NEED_CAPACITY
from trajcage.kernel.jit import helper
from trajcage.kernel.region_cells import (
    ACROSS,
    KEY,
    LEAST,
    NEXT,
    OFFSET,
    OWNER_BITS,
    PART,
    ROW,
    SHUT,
    UNSEEN,
    VOLUME,
    Cells,
    Look,
    find,
    insert,
    load,
    make_cells,
    make_look,
    opposite,
)
from trajcage.kernel.region_sums import sum_cell
from trajcage.kernel.region_walk import cross
from trajcage.kernel.scratch import REACH

__all__ = [
    "BASE",
    "BOUNDING",
    "CHANGED",
    "CLOCK",
    "CORNERS",
    "CORNER_0",
    "CORNER_1",
    "HEAD",
    "LISTED",
    "OWNER",
    "ROW_0",
    "ROW_1",
    "TAKEN",
    "TASKS",
    "TOUCHED",
    "WEAKEST",
    "WRAPS",
    "Space",
    "Store",
    "flood_part",
    "make_store",
    "note_corner",
    "row_of",
]

# places of Space.used
PARTS, ROWS, CORNERS, LISTED, TOUCHED, TASKS, CLOCK = range(7)

# columns of Space.part: its rows, its corners, particles on its wall, corner behind
# its weakest window, whether it wraps; then, for the region in work, the clock when
# it was taken in and the box edges to its first cell
ROW_0, ROW_1, CORNER_0, CORNER_1, BOUNDING, WEAKEST, WRAPS, TAKEN, BASE = range(9)

# columns of Space.row; the head is 4 x the last of its cells + slot there
OWNER, ROW_PART, HEAD, NEXT_ROW = range(4)

# columns of Space.particle: its first row, clock of the last change of its wall
FIRST_ROW, CHANGED = range(2)


class Space(NamedTuple):
    """Parts of the space that all spheres leave free, as far as anyone asked."""

    part: NDArray[np.int64]  #: (parts, 11) columns as named above
    total: NDArray[np.float64]  #: (parts, 3) volume, surface, wall sum
    row: NDArray[np.int64]  #: (rows, 4) one for each part and particle on it
    area: NDArray[np.float64]  #: (rows,) wall of the part on that particle
    particle: NDArray[np.int64]  #: (n, 2) columns as named above
    corner: NDArray[np.int64]  #: (corners, 2) cell and shut face
    place: NDArray[np.float64]
    """(corners, 4): opening ratio; corner from the place of the first particle."""
    extra: NDArray[np.float64]  #: (n,) change of area by the particle taken out
    listed: NDArray[np.int64]  #: (n,) particles with a change
    touched: NDArray[np.int64]  #: (parts,) parts of the region
    task: NDArray[np.int64]  #: (cells,) 4 x cell + face to look across
    used: NDArray[np.int64]  #: (7,) counters


#: What is known of the space between some spheres.
Store = tuple[Cells, Look, Space]


def make_store(n: int, n_cells: int) -> Store:
    """Allocate room for so many cells among n particles."""
    return (
        make_cells(n_cells),
        make_look(max(512, n_cells // 4)),
        Space(
            np.zeros((n_cells, 11), np.int64),
            np.zeros((n_cells, 3)),
            np.zeros((4 * n_cells, 4), np.int64),
            np.zeros(4 * n_cells),
            np.array([[-1, 0]] * n, np.int64),
            np.zeros((2 * n_cells, 2), np.int64),
            np.zeros((2 * n_cells, 4)),
            np.zeros(n),
            np.zeros(n, np.int64),
            np.zeros(n_cells, np.int64),
            np.zeros(4 * n_cells, np.int64),
            np.zeros(7, np.int64),
        ),
    )


@helper
def row_of(space, owner, part):
    """Row of a particle in a part, -1 if it has none."""
    row = space.particle[owner, FIRST_ROW]
    while row >= 0 and space.row[row, ROW_PART] != part:
        row = space.row[row, NEXT_ROW]
    return row


@helper
def _enter(cells, space, t, part, m):
    """List a new cell of a part with each of its particles."""
    cells.number[t, PART] = part
    for k in range(m):
        owner = cells.number[t, KEY + k] >> OWNER_BITS
        row = row_of(space, owner, part)
        if row < 0:
            row = space.used[ROWS]
            space.used[ROWS] += 1
            space.row[row, OWNER] = owner
            space.row[row, ROW_PART] = part
            space.row[row, HEAD] = -1
            space.row[row, NEXT_ROW] = space.particle[owner, FIRST_ROW]
            space.particle[owner, FIRST_ROW] = row
            space.area[row] = 0.0
        cells.number[t, ROW + k] = row
        cells.number[t, NEXT + k] = space.row[row, HEAD]
        space.row[row, HEAD] = 4 * t + k


@helper
def note_corner(look, space, t, f, plane):
    """Append the corner in the look, behind face f of the loaded cell t."""
    q = space.used[CORNERS]
    space.used[CORNERS] += 1
    space.corner[q, 0] = t
    space.corner[q, 1] = f
    a, b, c = opposite(f)
    if plane is None:
        space.place[q, 0] = patch3d.opening_ratio(look, a, b, c)
    else:
        space.place[q, 0] = wall2d.opening_ratio(look, a, b)
    for axis in range(3):
        space.place[q, 1 + axis] = look.point[axis]
    return q


@helper
def flood_part(spheres, store, plane):
    """Measure the part to which the cell in the look belongs."""
    m = 4 if plane is None else 3
    cells, look, space = store
    nobody = np.int64(-1)
    part = space.used[PARTS]
    number = cells.number
    begin = cells.used[0]
    row0, corner0 = space.used[ROWS], space.used[CORNERS]
    wraps = 0
    weakest, where = -1.0, -1
    other, slot = find(cells, look)
    if begin + 1 >= len(number):
        return NEED_CAPACITY
    insert(cells, look, slot)
    number[begin, OFFSET] = 0
    number[begin, OFFSET + 1] = 0
    number[begin, OFFSET + 2] = 0
    _enter(cells, space, begin, part, m)
    t = begin
    volume, surface, wall_sum = 0.0, 0.0, 0.0
    while t < cells.used[0]:
        load(spheres, cells, look, t, m)
        sum_cell(cells, look, t, plane)
        volume += cells.value[t, VOLUME]
        for k in range(m):
            area = cells.value[t, VOLUME + 1 + k]
            surface += area
            wall_sum += look.near[REACH, k] * area
            space.area[number[t, ROW + k]] += area
        n, known = np.int64(LEAST), -1.0
        for f in range(m):
            if number[t, ACROSS + f] != UNSEEN:
                continue
            code, n, known, shut, back, _ = cross(
                spheres, cells, look, t, f, nobody, n, known, plane
            )
            if code != CLOSED:
                return code
            if shut:
                number[t, ACROSS + f] = SHUT
                q = note_corner(look, space, t, f, plane)
                if space.place[q, 0] > weakest:
                    weakest, where = space.place[q, 0], q
                continue
            other, slot = find(cells, look)
            if other < 0:
                if cells.used[0] + 1 >= len(number):
                    return NEED_CAPACITY
                other = insert(cells, look, slot)
                for axis in range(3):
                    number[other, OFFSET + axis] = (
                        number[t, OFFSET + axis] + look.move[axis]
                    )
                _enter(cells, space, other, part, m)
            else:
                for axis in range(3):
                    moved = number[t, OFFSET + axis] + look.move[axis]
                    if number[other, OFFSET + axis] != moved:
                        wraps = 1
            # link both sides of the face
            if number[other, PART] != part or back < 0:
                return INVALID
            if number[other, ACROSS + back] != UNSEEN:
                return INVALID
            number[t, ACROSS + f] = 4 * other + back
            number[other, ACROSS + back] = 4 * t + f
        t += 1
    bounding = 0
    for row in range(row0, space.used[ROWS]):
        # patches born from broken ties have no area
        bounding += space.area[row] > 1e-10 * surface
    space.total[part, 0] = volume
    space.total[part, 1] = surface
    space.total[part, 2] = wall_sum
    space.part[part, ROW_0] = row0
    space.part[part, ROW_1] = space.used[ROWS]
    space.part[part, CORNER_0] = corner0
    space.part[part, CORNER_1] = space.used[CORNERS]
    space.part[part, BOUNDING] = bounding
    space.part[part, WEAKEST] = where
    space.part[part, WRAPS] = wraps
    space.part[part, TAKEN] = 0
    space.used[PARTS] = part + 1
    return CLOSED
