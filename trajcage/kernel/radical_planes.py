"""Planes that bound a radical Voronoi cell, and a first vertex of it.

The cell of a particle at the origin is {x : 2 x . x_k <= b_k for all k} with
b_k = |x_k|^2 + r^2 - r_k^2, where k runs over the images of all particles.

All decisions use b_k + eps h(k) |x_k|^2, h in [0, 1) from a fixed table without
pattern, so that every vertex has exactly three planes, in any lattice. Metric
results use the true planes: where the two differ, they differ by facets without
area. Both are right against unseen particles, since the shift only moves planes
outward.

A particle at distance R cannot cut a point p if R >= |p| + sqrt(|p|^2 + excess) with
excess = r_max^2 - r^2. So once all particles up to R are known, all points up to
(R - excess / R) / 2 from the particle are certain.

In 2D the cell is a thin prism between two planes, which changes nothing else.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.codes import BORDER, CLOSED, INVALID, NEED_CAPACITY, NEED_HALO
from trajcage.kernel.flood3d import outside
from trajcage.kernel.grid import gather
from trajcage.kernel.jit import helper

__all__ = [
    "BOUNDING",
    "EMPTY",
    "FACET",
    "HEIGHT",
    "LEVEL",
    "PARTICLES",
    "SHIFTED",
    "CellScratch",
    "X",
    "Y",
    "Z",
    "along",
    "certain",
    "collect",
    "first_vertex",
    "further",
    "leaves",
    "make_scratch",
    "next_along",
    "solve",
]

#: The particle is hidden below others: its cell is certain to be empty.
EMPTY = 20

# rows of CellScratch.near
X, Y, Z = 0, 1, 2  # coordinates relative to the particle
LEVEL = 3  # b of the plane 2 x . x_k <= b
SHIFTED = 4  # the same with ties broken; infinite while the plane waits
TIE = 5  # numbers in [0, 1) without pattern, to break ties
FACET = 6  # twice the area of the facet times |x_k|
STEP = 7  # twice the distance along the current ray

#: Height of the prism in 2D, small beside the spacing of the particles.
HEIGHT = 2.0**-7

# places of CellScratch.begin; as literals in calls these numbers would make numba
# compile the functions called anew
ALL, BOUNDING, PARTICLES = 0, 1, 2


class CellScratch(NamedTuple):
    """Arrays for one particle at a time.

    The first six candidates are no particles but the sides of a box beyond all
    cells, which keep the start of the walk bounded. In 2D two of them are the
    prism's and bound the cell.
    """

    found: NDArray[np.int64]  #: (candidates,) grid slot
    near: NDArray[np.float64]  #: (8, candidates + 1) rows as named above
    vertex: NDArray[np.float64]
    """(vertices, 6): place with broken ties; true place, counted from ``origin``."""
    key: NDArray[np.int64]  #: (edges,) both facets of each open edge
    edge: NDArray[np.int64]  #: (edges, 4) its facets, the third one, the vertex
    begin: NDArray[np.int64]  #: (3,) first candidate, bounding one, and particle
    origin: NDArray[np.float64]  #: (3,) true place of the first vertex


def make_scratch(n_candidates: int, d: int, far: float) -> CellScratch:
    """Allocate room for so many candidates; ``far`` is beyond all cells."""
    near = np.zeros((8, n_candidates + 1))
    near[TIE] = np.random.default_rng(20).random(n_candidates + 1)
    for k in range(6):
        near[k // 2, k] = 1.0 - 2.0 * (k % 2)
        near[LEVEL, k] = HEIGHT if d == 2 and k >= 4 else far
    return CellScratch(
        np.empty(n_candidates, np.int64),
        near,
        np.empty((2 * n_candidates, 6)),
        np.empty(2 * n_candidates + 4, np.int64),
        np.empty((2 * n_candidates + 4, 4), np.int64),
        np.array([0, 4 if d == 2 else 6, 6]),
        np.zeros(3),
    )


@helper
def collect(grid, s, i, xi, yi, zi, ri, n, inner, outer, shift):
    """Make candidates of the points in a shell; return (code, count, inside).

    ``inside`` tells whether the particle is on the inner side of all new planes.
    Images of the particle itself are candidates as any other.
    """
    total = gather(grid, -1, xi, yi, zi, inner, outer, s.found, n)
    if total < 0:
        return NEED_CAPACITY, n, True
    inside = True
    near = s.near
    for m in range(n, total):
        slot = s.found[m]
        dx = grid.points[0, slot] - xi
        dy = grid.points[1, slot] - yi
        dz = grid.points[2, slot] - zi
        rj = grid.points[3, slot]
        d2 = dx * dx + dy * dy + dz * dz
        level = d2 + (ri - rj) * (ri + rj)
        if d2 == 0.0:
            # the particle, or one on top of it: no plane, the larger has it all
            if level < 0.0:
                return EMPTY, n, False
            if level == 0.0 and grid.owner[slot] != i:
                return INVALID, n, False
            continue
        s.found[n] = slot
        near[X, n] = dx
        near[Y, n] = dy
        near[Z, n] = dz
        near[LEVEL, n] = level
        near[SHIFTED, n] = level + shift * near[TIE, n] * d2
        near[FACET, n] = 0.0
        inside = inside and level >= 0.0
        n += 1
    return CLOSED, n, inside


@helper
def certain(known, excess):
    """Distance up to which no unseen particle can cut, see above."""
    return 0.5 * (known - excess / known)


@helper
def further(known, far, limits):
    """Where to look after ``known`` for what could cut a vertex at distance far."""
    excess, halo, limit, is_open = limits
    if known >= limit:
        # an open edge is nearer than this, and images in all other directions
        return (BORDER if is_open else INVALID), known
    need = far + np.sqrt(far * far + excess)
    want = min(max(need, 1.15 * known), 1.5 * known)
    if want > halo:
        if known >= halo:
            return NEED_HALO, known
        want = halo
    return CLOSED, want


@helper
def leaves(grid, xi, yi, zi, px, py, pz, far, safe, excess):
    """Tell whether the way from the particle to p leaves what is certain.

    The points that no particle beyond the open edges can take away form a
    convex region; the way up to the distance ``safe`` is in the cell for sure.
    """
    if safe <= 0.0:
        return False
    f = safe / far
    return outside(
        grid, xi, yi, zi, f * px, f * py, f * pz, np.sqrt(safe * safe + excess)
    )


@helper
def solve(s, row, a, b, c):
    """Point where three planes meet."""
    near = s.near
    x1, y1, z1 = near[X, a], near[Y, a], near[Z, a]
    x2, y2, z2 = near[X, b], near[Y, b], near[Z, b]
    x3, y3, z3 = near[X, c], near[Y, c], near[Z, c]
    ux, uy, uz = y2 * z3 - z2 * y3, z2 * x3 - x2 * z3, x2 * y3 - y2 * x3
    vx, vy, vz = y3 * z1 - z3 * y1, z3 * x1 - x3 * z1, x3 * y1 - y3 * x1
    wx, wy, wz = y1 * z2 - z1 * y2, z1 * x2 - x1 * z2, x1 * y2 - y1 * x2
    scale = 0.5 / (x1 * ux + y1 * uy + z1 * uz)
    g1, g2, g3 = near[row, a] * scale, near[row, b] * scale, near[row, c] * scale
    return (
        g1 * ux + g2 * vx + g3 * wx,
        g1 * uy + g2 * vy + g3 * wy,
        g1 * uz + g2 * vz + g3 * wz,
    )


@helper
def along(s, a, b, c):
    """Direction of the edge a b that leaves plane c inward, and its sense.

    The sense is that of the edge about facet a: 1 counterclockwise seen from
    outside, -1 clockwise; about facet b it is the opposite.
    """
    near = s.near
    ax, ay, az = near[X, a], near[Y, a], near[Z, a]
    bx, by, bz = near[X, b], near[Y, b], near[Z, b]
    nx, ny, nz = ay * bz - az * by, az * bx - ax * bz, ax * by - ay * bx
    if nx * near[X, c] + ny * near[Y, c] + nz * near[Z, c] > 0.0:
        return -nx, -ny, -nz, -1.0
    return nx, ny, nz, 1.0


@helper
def next_along(s, n, px, py, pz, nx, ny, nz, a, b, c):
    """First plane on the ray p + t n, and 2 t."""
    near = s.near
    for k in range(n):
        h = nx * near[X, k] + ny * near[Y, k] + nz * near[Z, k]
        gap = near[SHIFTED, k] - 2.0 * (
            px * near[X, k] + py * near[Y, k] + pz * near[Z, k]
        )
        near[STEP, k] = gap / h if h > 0.0 else np.inf
    near[STEP, a] = np.inf
    near[STEP, b] = np.inf
    near[STEP, c] = np.inf
    best = np.inf
    who = -1
    for k in range(n):
        if near[STEP, k] < best:
            best = near[STEP, k]
            who = k
    return who, best


@helper
def _postpone(s, begin, n, px, py, pz):
    """Let planes that cut off the point p wait; return how many."""
    near = s.near
    waiting = 0
    for k in range(begin, n):
        height = 2.0 * (px * near[X, k] + py * near[Y, k] + pz * near[Z, k])
        if height > near[SHIFTED, k]:
            near[SHIFTED, k] = np.inf
            waiting += 1
    return waiting


@helper
def _climb(s, n):
    """Walk from the particle to a vertex of the planes that do not wait."""
    near = s.near
    a = s.begin[ALL]
    for k in range(n):
        if near[SHIFTED, k] < near[SHIFTED, a]:
            a = k
    nx, ny, nz = near[X, a], near[Y, a], near[Z, a]
    a, t = next_along(s, n, 0.0, 0.0, 0.0, nx, ny, nz, n, n, n)
    px, py, pz = 0.5 * t * nx, 0.5 * t * ny, 0.5 * t * nz
    # any direction in the plane
    ax, ay, az = near[X, a], near[Y, a], near[Z, a]
    if abs(ax) <= abs(ay) and abs(ax) <= abs(az):
        nx, ny, nz = 0.0, az, -ay
    elif abs(ay) <= abs(az):
        nx, ny, nz = -az, 0.0, ax
    else:
        nx, ny, nz = ay, -ax, 0.0
    b, t = next_along(s, n, px, py, pz, nx, ny, nz, a, a, a)
    px, py, pz = px + 0.5 * t * nx, py + 0.5 * t * ny, pz + 0.5 * t * nz
    nx, ny, nz, _ = along(s, a, b, a)
    c, t = next_along(s, n, px, py, pz, nx, ny, nz, a, b, b)
    return a, b, c


@helper
def _admit(s, n, a, b, c, shift, is_open):
    """Move the vertex behind all planes that wait, one after the other.

    Each time this is a linear program, solved by steps along edges that lead
    down toward the plane. Returns (code, a, b, c); the code is BORDER if the box
    of walls had to stop it, so that only a wider view can tell.
    """
    near = s.near
    for j in range(s.begin[PARTICLES], n):
        if near[SHIFTED, j] < np.inf:
            continue
        xj, yj, zj = near[X, j], near[Y, j], near[Z, j]
        level = near[LEVEL, j] + shift * near[TIE, j] * (xj * xj + yj * yj + zj * zj)
        px, py, pz = solve(s, SHIFTED, a, b, c)
        steps = 0
        while 2.0 * (px * xj + py * yj + pz * zj) > level:
            steps += 1
            if steps > 4 * n:
                return INVALID, a, b, c
            slope = 0.0
            for _ in range(3):
                a, b, c = b, c, a
                nx, ny, nz, _ = along(s, a, b, c)
                slope = nx * xj + ny * yj + nz * zj
                if slope < 0.0:
                    break
            if slope >= 0.0:
                at_wall = is_open and min(a, b, c) < s.begin[BOUNDING]
                return (BORDER if at_wall else EMPTY), a, b, c
            who, t = next_along(s, n, px, py, pz, nx, ny, nz, a, b, c)
            if (level - 2.0 * (px * xj + py * yj + pz * zj)) / slope <= t:
                c = j
                break
            c = who
            px, py, pz = solve(s, SHIFTED, a, b, c)
        near[SHIFTED, j] = level
    return CLOSED, a, b, c


@helper
def first_vertex(grid, s, i, xi, yi, zi, ri, known, limits, shift):
    """Find a vertex of the cell that no unseen particle can cut.

    Returns (code, candidates, radius known, particle in its cell, a, b, c).

    A particle with larger ones around it can lie outside its own cell. Planes
    that cut it off wait, the walk starts in the cell of all others, and the
    vertex reached is then moved behind each waiting plane in turn; the same
    is done with planes that a wider shell brings in.
    """
    excess, halo, _, is_open = limits
    want = min(max(known, 1.1 * np.sqrt(excess)), halo)
    known = -1.0
    n = s.begin[PARTICLES]
    for k in range(n):
        s.near[SHIFTED, k] = s.near[LEVEL, k] + shift * s.near[TIE, k]
        s.near[FACET, k] = 0.0
    inside = True
    waiting = 0
    a, b, c = n, n, n
    px, py, pz = 0.0, 0.0, 0.0
    while True:
        begin = n
        code, n, more = collect(grid, s, i, xi, yi, zi, ri, n, known, want, shift)
        if code != CLOSED:
            break
        inside = inside and more
        waiting += _postpone(s, begin, n, px, py, pz)
        if known < 0.0:
            a, b, c = _climb(s, n)
        known = want
        if waiting > 0:
            code, a, b, c = _admit(s, n, a, b, c, shift, is_open)
            if code == CLOSED:
                waiting = 0
            elif code != BORDER:
                break
        px, py, pz = solve(s, SHIFTED, a, b, c)
        far = np.sqrt(px * px + py * py + pz * pz)
        safe = certain(known, excess)
        if code == BORDER:
            far = np.inf
        elif far <= safe:
            break
        elif not far < np.inf:
            code = INVALID
            break
        elif (
            is_open
            and inside
            and leaves(grid, xi, yi, zi, px, py, pz, far, safe, excess)
        ):
            code = BORDER
            break
        code, want = further(known, far, limits)
        if code != CLOSED:
            break
    return code, n, known, inside, a, b, c
