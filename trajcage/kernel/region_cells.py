"""Cells of a periodic power diagram: their names, a table of them, their particles.

A cell is a simplex of d + 1 particles, dual to a vertex of the power diagram, and
known up to translations by box edges. Each of its particles is one number, its *key*,
made of the particle's index and of the box edges between its image and its place in
the box. Of all translations of a cell the one counts in which a particle of lowest
index is in its place; if several can be, the one with the lowest sorted keys.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.codes import CLOSED, INVALID
from trajcage.kernel.grid import Grid
from trajcage.kernel.jit import helper
from trajcage.kernel.scratch import REACH

__all__ = [
    "ACROSS",
    "GAP",
    "KEY",
    "LEAST",
    "NEXT",
    "OFFSET",
    "OWNER_BITS",
    "PART",
    "ROW",
    "SHUT",
    "STEP",
    "UNSEEN",
    "VERTEX",
    "VOLUME",
    "Cells",
    "Look",
    "Spheres",
    "find",
    "forget",
    "has",
    "insert",
    "key_of",
    "load",
    "make_cells",
    "make_look",
    "name",
    "opposite",
    "translated",
]

# A key holds three shifts of 13 bits below the index of the particle.
_SHIFT_BITS, OWNER_BITS = 13, 39
_ZERO = 1 << (_SHIFT_BITS - 1)
_MASK = (1 << _SHIFT_BITS) - 1
_LARGEST_SHIFT = _ZERO // 2

# columns of Cells.number
KEY = 0  # four keys, ascending
ACROSS = 4  # 4 x cell beyond the face opposite to each key + slot there, or:
UNSEEN, SHUT = -1, -2
OFFSET = 8  # box edges from the first cell of its part, three
PART = 11
ROW = 12  # row of each of its particles, see `trajcage.kernel.region_parts`
NEXT = 16  # next cell in this row's list, for each of its particles

# columns of Cells.value
VERTEX = 0  # power vertex from the place of the first particle, and its power
VOLUME = 4  # free volume; wall area on each of its spheres

# rows of Look.near; the first four as in Scratch.near, from the place of the cell's
# first particle
GAP = 4  # power above that of the vertex
STEP = 5  # where a ray meets the candidate
LEAST = 4  # candidates begin here, after the particles of the cell


class Spheres(NamedTuple):
    """Exclusion spheres of a periodic box."""

    grid: Grid
    edges: NDArray[np.float64]  #: (3, 3) box edges as rows
    reaches: NDArray[np.float64]  #: (n,) exclusion radii
    largest: float  #: of these
    extent: float  #: lengths of all edges together


class Cells(NamedTuple):
    """Cells and a hash table to find them by their keys."""

    number: NDArray[np.int64]  #: (cells, 20) columns as named above
    value: NDArray[np.float64]  #: (cells, 9) columns as named above
    slots: NDArray[np.int32]  #: (slots,) cell or -1
    used: NDArray[np.int64]  #: (1,) number of cells


class Look(NamedTuple):
    """What lies about one vertex, and what was found across a face."""

    found: NDArray[np.int64]  #: (candidates,) slot of the grid
    near: NDArray[np.float64]  #: (6, candidates) rows as named above
    trial: NDArray[np.int64]  #: (3, 4) keys: as found, translated, the best so far
    move: NDArray[np.int64]  #: (3,) box edges from the keys as found to the best
    point: NDArray[np.float64]  #: (4,) vertex of the cell found, and its power


def make_cells(n_cells: int) -> Cells:
    """Allocate room for so many cells."""
    return Cells(
        np.empty((n_cells, 20), np.int64),
        np.empty((n_cells, 9)),
        np.full(1 << int(np.ceil(np.log2(2 * n_cells))), -1, np.int32),
        np.zeros(1, np.int64),
    )


def make_look(n_candidates: int) -> Look:
    """Allocate room for so many candidates."""
    near = np.zeros((6, n_candidates))
    near[GAP, :LEAST] = np.inf
    return Look(
        np.empty(n_candidates, np.int64),
        near,
        np.zeros((3, 4), np.int64),
        np.zeros(3, np.int64),
        np.zeros(4),
    )


@helper
def _shift(key, axis):
    """Box edges along an axis between the image and the particle's place."""
    return ((key >> (_SHIFT_BITS * (2 - axis))) & _MASK) - _ZERO


@helper
def key_of(grid, slot):
    """Key of a grid point, -1 if it is too many box edges away."""
    owner = grid.owner[slot]
    key = owner
    for axis in range(3):
        f = 0.0
        for row in range(3):
            f += (grid.points[row, slot] - grid.home[owner, row]) * grid.geometry[
                row, axis
            ]
        turn = int(np.floor(f + 0.5))
        if abs(turn) > _LARGEST_SHIFT:
            return np.int64(-1)
        key = (key << _SHIFT_BITS) | (turn + _ZERO)
    return key


@helper
def _canonical(look, m):
    """Translate the m keys of ``look.trial[0]``; the result is ``look.trial[2]``."""
    trial = look.trial
    lowest = trial[0, 0] >> OWNER_BITS
    for p in range(1, m):
        lowest = min(lowest, trial[0, p] >> OWNER_BITS)
    have = False
    for p in range(m):
        key = trial[0, p]
        if key >> OWNER_BITS != lowest:
            continue
        u, v, w = _shift(key, 0), _shift(key, 1), _shift(key, 2)
        if max(abs(u), abs(v), abs(w)) > _LARGEST_SHIFT:
            return INVALID
        down = (((u << _SHIFT_BITS) + v) << _SHIFT_BITS) + w
        for k in range(m):
            new = trial[0, k] - down
            at = k
            while at > 0 and trial[1, at - 1] > new:
                trial[1, at] = trial[1, at - 1]
                at -= 1
            trial[1, at] = new
        better = not have
        if have:
            for k in range(m):
                if trial[1, k] != trial[2, k]:
                    better = trial[1, k] < trial[2, k]
                    break
        if better:
            have = True
            look.move[0], look.move[1], look.move[2] = -u, -v, -w
            for k in range(m):
                trial[2, k] = trial[1, k]
    return CLOSED


@helper
def find(cells, look):
    """Look up the cell ``look.trial[2]``; return (cell or -1, its hash slot)."""
    mask = len(cells.slots) - 1
    a, b, c, d = look.trial[2, 0], look.trial[2, 1], look.trial[2, 2], look.trial[2, 3]
    code = (a * 73856093) ^ (b * 19349663) ^ (c * 83492791) ^ (d * 49979687)
    code ^= code >> 40
    code ^= code >> 17
    slot = code & mask
    number = cells.number
    while cells.slots[slot] >= 0:
        t = cells.slots[slot]
        if (
            number[t, KEY] == a
            and number[t, KEY + 1] == b
            and number[t, KEY + 2] == c
            and number[t, KEY + 3] == d
        ):
            return np.int64(t), slot
        slot = (slot + 1) & mask
    return np.int64(-1), slot


@helper
def insert(cells, look, slot):
    """Append the cell ``look.trial[2]`` with its vertex ``look.point``."""
    t = cells.used[0]
    for k in range(4):
        cells.number[t, KEY + k] = look.trial[2, k]
        cells.number[t, ACROSS + k] = UNSEEN
        cells.value[t, VERTEX + k] = look.point[k]
    cells.slots[slot] = t
    cells.used[0] = t + 1
    return t


@helper
def forget(cells, look, begin):
    """Remove the last cells, down to ``begin``; in this order the hash table can."""
    while cells.used[0] > begin:
        t = cells.used[0] - 1
        for k in range(4):
            look.trial[2, k] = cells.number[t, KEY + k]
        _, slot = find(cells, look)
        cells.slots[slot] = -1
        cells.used[0] = t


@helper
def has(cells, t, i, m):
    """Tell whether particle i is one of the m of a cell."""
    for k in range(m):
        if cells.number[t, KEY + k] >> OWNER_BITS == i:
            return True
    return False


@helper
def opposite(f):
    """Slots of the face opposite to slot f; the third one does not count in 2D."""
    return 1 if f == 0 else 0, 2 if f <= 1 else 1, 3 if f <= 2 else 2


@helper
def load(spheres, cells, look, t, m):
    """Put the m particles of a cell in front of the candidates."""
    near = look.near
    home, edges = spheres.grid.home, spheres.edges
    origin = cells.number[t, KEY] >> OWNER_BITS
    for k in range(m):
        key = cells.number[t, KEY + k]
        owner = key >> OWNER_BITS
        for axis in range(3):
            place = home[owner, axis] + (
                _shift(key, 0) * edges[0, axis]
                + _shift(key, 1) * edges[1, axis]
                + _shift(key, 2) * edges[2, axis]
            )
            near[axis, k] = place - home[origin, axis]
        near[REACH, k] = spheres.reaches[owner]


@helper
def translated(look, key):
    """Key after the move that `name` made."""
    u, v, w = look.move[0], look.move[1], look.move[2]
    return key + (((u << _SHIFT_BITS) + v) << _SHIFT_BITS) + w


@helper
def name(spheres, look, origin, px, py, pz, power, m):
    """Name the cell of the m keys ``look.trial[0]``: ``look.trial[2]``.

    Its vertex, given from the place of particle ``origin``, becomes ``look.point``.
    """
    code = _canonical(look, m)
    if code != CLOSED:
        return code
    home = spheres.grid.home
    first = look.trial[2, 0] >> OWNER_BITS
    for axis in range(3):
        moved = home[origin, axis] - home[first, axis]
        for row in range(3):
            moved += look.move[row] * spheres.edges[row, axis]
        p = px if axis == 0 else (py if axis == 1 else pz)
        look.point[axis] = p + moved
    look.point[3] = power
    return CLOSED
