"""Steps from one cell of a periodic power diagram to the next.

All particles that can take part in a cell lie about its vertex: none that is further
than sqrt(p + R_max^2) can cut a vertex of power p, none further than R_max a corner.
So the cost of a step does not depend on the number of particles.
"""

import numpy as np

from trajcage.kernel.codes import CLOSED, INVALID, NEED_CAPACITY, NEED_HALO
from trajcage.kernel.grid import gather
from trajcage.kernel.jit import helper
from trajcage.kernel.region_cells import (
    GAP,
    KEY,
    LEAST,
    OWNER_BITS,
    STEP,
    VERTEX,
    key_of,
    name,
    opposite,
    translated,
)
from trajcage.kernel.scratch import REACH, X, Y, Z

__all__ = ["cross", "solve"]


@helper
def _collect(spheres, cells, look, t, skip, n, inner, outer, m):
    """Make candidates of the grid points in a shell about the vertex of cell t.

    Those of particle ``skip`` are noted, but are never met. Returns (code, count).
    """
    near = look.near
    value = cells.value
    grid, reaches = spheres.grid, spheres.reaches
    origin = cells.number[t, KEY] >> OWNER_BITS
    ox, oy, oz = grid.home[origin, 0], grid.home[origin, 1], grid.home[origin, 2]
    px, py, pz = value[t, VERTEX], value[t, VERTEX + 1], value[t, VERTEX + 2]
    power = value[t, VERTEX + 3]
    if np.sqrt(px * px + py * py + pz * pz) + outer > grid.halo:
        return NEED_HALO, n
    none = np.int64(-1)
    total = gather(grid, none, ox + px, oy + py, oz + pz, inner, outer, look.found, n)
    if total < 0:
        return NEED_CAPACITY, n
    o0 = cells.number[t, KEY] >> OWNER_BITS
    o1 = cells.number[t, KEY + 1] >> OWNER_BITS
    o2 = cells.number[t, KEY + 2] >> OWNER_BITS
    o3 = cells.number[t, KEY + m - 1] >> OWNER_BITS
    for at in range(n, total):
        slot = look.found[at]
        owner = grid.owner[slot]
        x, y, z = (
            grid.points[0, slot] - ox,
            grid.points[1, slot] - oy,
            grid.points[2, slot] - oz,
        )
        if owner == o0 or owner == o1 or owner == o2 or owner == o3:
            own = False
            for k in range(m):
                dx, dy, dz = x - near[X, k], y - near[Y, k], z - near[Z, k]
                own = own or dx * dx + dy * dy + dz * dz < 1e-12
            if own:
                continue
        r = reaches[owner]
        dx, dy, dz = x - px, y - py, z - pz
        near[X, n] = x
        near[Y, n] = y
        near[Z, n] = z
        near[REACH, n] = r
        near[GAP, n] = dx * dx + dy * dy + dz * dz - r * r - power
        if owner == skip:
            near[GAP, n] = np.inf
        look.found[n] = slot
        n += 1
    return CLOSED, n


@helper
def solve(near, a, b, c, d, plane):
    """Point of equal power to the candidates (three in a plane), and that power."""
    x0, y0, z0, r0 = near[X, a], near[Y, a], near[Z, a], near[REACH, a]
    x1, y1, z1, r1 = near[X, b] - x0, near[Y, b] - y0, near[Z, b] - z0, near[REACH, b]
    x2, y2, z2, r2 = near[X, c] - x0, near[Y, c] - y0, near[Z, c] - z0, near[REACH, c]
    x3, y3, z3, h3 = 0.0, 0.0, 1.0, 0.0
    h1 = x1 * x1 + y1 * y1 + z1 * z1 + (r0 - r1) * (r0 + r1)
    h2 = x2 * x2 + y2 * y2 + z2 * z2 + (r0 - r2) * (r0 + r2)
    if plane is None:
        r3 = near[REACH, d]
        x3, y3, z3 = near[X, d] - x0, near[Y, d] - y0, near[Z, d] - z0
        h3 = x3 * x3 + y3 * y3 + z3 * z3 + (r0 - r3) * (r0 + r3)
    ux, uy, uz = y2 * z3 - z2 * y3, z2 * x3 - x2 * z3, x2 * y3 - y2 * x3
    vx, vy, vz = y3 * z1 - z3 * y1, z3 * x1 - x3 * z1, x3 * y1 - y3 * x1
    wx, wy, wz = y1 * z2 - z1 * y2, z1 * x2 - x1 * z2, x1 * y2 - y1 * x2
    scale = 0.5 / (x1 * ux + y1 * uy + z1 * uz)
    px = (h1 * ux + h2 * vx + h3 * wx) * scale
    py = (h1 * uy + h2 * vy + h3 * wy) * scale
    pz = (h1 * uz + h2 * vz + h3 * wz) * scale
    for _ in range(2):
        # a flat cell: what is left is an error along its normal, as in flood3d
        e1 = h1 - 2.0 * (px * x1 + py * y1 + pz * z1)
        e2 = h2 - 2.0 * (px * x2 + py * y2 + pz * z2)
        e3 = h3 - 2.0 * (px * x3 + py * y3 + pz * z3)
        px += (e1 * ux + e2 * vx + e3 * wx) * scale
        py += (e1 * uy + e2 * vy + e3 * wy) * scale
        pz += (e1 * uz + e2 * vz + e3 * wz) * scale
    power = px * px + py * py + pz * pz - r0 * r0
    return px + x0, py + y0, pz + z0, power


@helper
def cross(spheres, cells, look, t, f, skip, n, known, plane):
    """Find what lies beyond the face opposite to slot f of cell t.

    Parameters
    ----------
    skip : int
        Particle that does not count, -1 if all do.
    n, known : int, float
        Candidates collected about the vertex of t, and up to which distance;
        `LEAST` and a negative number at first.

    Returns
    -------
    code, n, known, shut, back, conflict
        ``back`` is the slot of the cell beyond (``look.trial[2]``) that leads back.
        ``conflict`` tells whether ``skip`` cuts its vertex (``look.point``). If the
        face is shut, ``look.point`` is the corner of the wall behind it.
    """
    m = 4 if plane is None else 3
    near = look.near
    value = cells.value
    largest = spheres.largest
    px, py, pz = value[t, VERTEX], value[t, VERTEX + 1], value[t, VERTEX + 2]
    power = value[t, VERTEX + 3]
    a, b, c = opposite(f)
    # outward normal
    bx, by, bz = near[X, a], near[Y, a], near[Z, a]
    ux, uy, uz = near[X, b] - bx, near[Y, b] - by, near[Z, b] - bz
    vx, vy, vz = 0.0, 0.0, 1.0
    if plane is None:
        vx, vy, vz = near[X, c] - bx, near[Y, c] - by, near[Z, c] - bz
    nx, ny, nz = uy * vz - uz * vy, uz * vx - ux * vz, ux * vy - uy * vx
    size = np.sqrt(nx * nx + ny * ny + nz * nz)
    if nx * (near[X, f] - bx) + ny * (near[Y, f] - by) + nz * (near[Z, f] - bz) > 0.0:
        size = -size
    nx, ny, nz = nx / size, ny / size, nz / size
    # power along p + t n is power + 2 slope t + t^2
    slope = nx * (px - bx) + ny * (py - by) + nz * (pz - bz)
    crossing = np.inf
    if slope < 0.0:
        inside = slope * slope - power
        if inside >= 0.0:
            crossing = power / (np.sqrt(inside) - slope)
    level = nx * bx + ny * by + nz * bz
    # what most likely bounds all edges
    want = 1.6 * np.sqrt(power + largest * largest)
    while True:
        if want > known:
            code, n = _collect(spheres, cells, look, t, skip, n, known, want, m)
            if code != CLOSED:
                return code, n, known, False, -1, False
            known = want
        for k in range(LEAST, n):
            h = 2.0 * (nx * near[X, k] + ny * near[Y, k] + nz * near[Z, k] - level)
            near[STEP, k] = near[GAP, k] / h if h > 0.0 else np.inf
        step = np.inf
        who = -1
        for k in range(LEAST, n):
            if near[STEP, k] < step:
                step = near[STEP, k]
                who = k
        shut = crossing <= step and crossing < np.inf
        if shut:
            need = crossing + largest
        elif who < 0:
            need = 1.5 * known
        else:
            q_power = power + (2.0 * slope + step) * step
            need = abs(step) + np.sqrt(max(q_power, 0.0) + largest * largest)
        if need <= known:
            break
        if not need < np.inf:
            return INVALID, n, known, shut, -1, False
        # with few candidates a vertex seems to be further away than it is
        want = min(1.001 * need, 1.3 * known)
    if not shut:
        d = np.int64(who) if plane is None else np.int64(0)
        e = np.int64(c) if plane is None else np.int64(who)
        qx, qy, qz, q_power = solve(near, a, b, e, d, plane)
        # rounding can hide the crossing of an edge that ends within a sphere
        shut = q_power <= 0.0
        if shut:
            crossing = min(crossing, step)
    if shut:
        look.point[0] = px + crossing * nx
        look.point[1] = py + crossing * ny
        look.point[2] = pz + crossing * nz
        return CLOSED, n, known, True, -1, False
    for k in range(m):
        look.trial[0, k] = cells.number[t, KEY + k]
    # keys hold shifts from places in the box, and so do those of the cell
    key = key_of(spheres.grid, look.found[who])
    if key < 0 or not qx * qx + qy * qy + qz * qz < np.inf:
        return INVALID, n, known, False, -1, False
    look.trial[0, f] = key
    conflict = False
    if skip >= 0:
        for k in range(LEAST, n):
            if spheres.grid.owner[look.found[k]] == skip:
                dx, dy, dz = near[X, k] - qx, near[Y, k] - qy, near[Z, k] - qz
                r = near[REACH, k]
                if dx * dx + dy * dy + dz * dz - r * r < q_power:
                    conflict = True
    origin = cells.number[t, KEY] >> OWNER_BITS
    code = name(spheres, look, origin, qx, qy, qz, q_power, m)
    moved = translated(look, key)
    back = -1
    for k in range(m):
        if look.trial[2, k] == moved:
            back = k
    return code, n, known, False, back, conflict
