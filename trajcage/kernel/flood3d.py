"""The free region around a particle as a flood over its power diagram (3D).

Method: Edelsbrunner & Muecke's weighted alpha shapes, walked locally. The
power diagram of the neighbors without the particle has its vertices where the
power distance to the exclusion spheres is largest. Two vertices belong to the
same cage exactly if a path of edges with positive power connects them.

All decisions use powers with broken ties: the power of the particle with
respect to candidate k is multiplied by 1 + eps * h(k), h in [0, 1) from a
fixed table without pattern. That makes any lattice generic, and since the shift is relative to
the gap it also holds for contacts of 1e-12. Metric results do not use it.
"""

import numpy as np

from trajcage.kernel.codes import (
    BORDER,
    CLOSED,
    INVALID,
    NEED_CAPACITY,
    NEED_HALO,
    OPEN,
    OVERLAP,
)
from trajcage.kernel.grid import CORNER, INVERSE_HEIGHT, gather
from trajcage.kernel.jit import helper, inlined
from trajcage.kernel.scratch import AHEAD, GAP, POWER, REACH, SHIFTED, TIE, X, Y, Z

__all__ = [
    "collect",
    "find_cell",
    "flood",
    "nearest",
    "outside",
    "pad",
    "ray_to_sphere",
    "slot_of",
]


@helper
def pad(n):
    """Round up to whole vector registers: loops without a remainder."""
    return (n + 15) & ~15


@helper
def collect(grid, s, i, xi, yi, zi, ri, n, inner, outer, tolerance, shift):
    """Make candidates of the grid points in a shell; return (code, count).

    An overlap within the tolerance counts as a contact: the exclusion radius
    of that pair is the distance itself.
    """
    total = gather(grid, i, xi, yi, zi, inner, outer, s.found, n)
    if total < 0:
        return NEED_CAPACITY, n
    code = CLOSED
    for k in range(n, total):
        slot = s.found[k]
        dx = grid.points[X, slot] - xi
        dy = grid.points[Y, slot] - yi
        dz = grid.points[Z, slot] - zi
        reach = ri + grid.points[REACH, slot]
        distance = np.sqrt(dx * dx + dy * dy + dz * dz)
        # (d - R)(d + R) keeps all digits of a small gap
        power = (distance - reach) * (distance + reach)
        if power < 0.0:
            if reach - distance > tolerance:
                code = OVERLAP
            reach = distance
            power = 0.0
        s.near[X, k] = dx
        s.near[Y, k] = dy
        s.near[Z, k] = dz
        s.near[REACH, k] = reach
        s.near[POWER, k] = power
        s.near[SHIFTED, k] = power + s.near[TIE, k] * (shift[0] * power + shift[1])
    if pad(total) > len(s.found):
        return NEED_CAPACITY, n
    for k in range(total, pad(total)):
        # never the next along any ray: see Scratch.near
        for row in range(3):
            s.near[row, k] = 0.0
        s.near[REACH, k] = 0.0
        s.near[POWER, k] = np.inf
        s.near[SHIFTED, k] = np.inf
    return code, total


@helper
def outside(grid, xi, yi, zi, px, py, pz, radius):
    """Tell whether a ball about a point reaches beyond an open edge of the box."""
    geometry = grid.geometry
    dx = xi + px - geometry[CORNER, 0]
    dy = yi + py - geometry[CORNER, 1]
    dz = zi + pz - geometry[CORNER, 2]
    for axis in range(3):
        if grid.shape[1, axis] == 0:
            f = dx * geometry[0, axis] + dy * geometry[1, axis] + dz * geometry[2, axis]
            w = radius * geometry[INVERSE_HEIGHT, axis]
            if f - w < 0.0 or f + w > 1.0:
                return True
    return False


@inlined
def _solve(s, a, b, c, d):
    """Point of equal power to four candidates, and that power."""
    x0, y0, z0, g0 = s.near[X, a], s.near[Y, a], s.near[Z, a], s.near[SHIFTED, a]
    x1, y1, z1 = s.near[X, b] - x0, s.near[Y, b] - y0, s.near[Z, b] - z0
    x2, y2, z2 = s.near[X, c] - x0, s.near[Y, c] - y0, s.near[Z, c] - z0
    x3, y3, z3 = s.near[X, d] - x0, s.near[Y, d] - y0, s.near[Z, d] - z0
    h1 = s.near[SHIFTED, b] - g0
    h2 = s.near[SHIFTED, c] - g0
    h3 = s.near[SHIFTED, d] - g0
    ux, uy, uz = y2 * z3 - z2 * y3, z2 * x3 - x2 * z3, x2 * y3 - y2 * x3
    vx, vy, vz = y3 * z1 - z3 * y1, z3 * x1 - x3 * z1, x3 * y1 - y3 * x1
    wx, wy, wz = y1 * z2 - z1 * y2, z1 * x2 - x1 * z2, x1 * y2 - y1 * x2
    det = x1 * ux + y1 * uy + z1 * uz
    scale = 0.5 / det
    px = (h1 * ux + h2 * vx + h3 * wx) * scale
    py = (h1 * uy + h2 * vy + h3 * wy) * scale
    pz = (h1 * uz + h2 * vz + h3 * wz) * scale
    if det * det < 1e-6:
        # A flat cell: large terms cancel and leave an error within its plane.
        # Refinement leaves one along the normal only, which no decision feels.
        for _ in range(2):
            r1 = h1 - 2.0 * (px * x1 + py * y1 + pz * z1)
            r2 = h2 - 2.0 * (px * x2 + py * y2 + pz * z2)
            r3 = h3 - 2.0 * (px * x3 + py * y3 + pz * z3)
            px += (r1 * ux + r2 * vx + r3 * wx) * scale
            py += (r1 * uy + r2 * vy + r3 * wy) * scale
            pz += (r1 * uz + r2 * vz + r3 * wz) * scale
    power = px * px + py * py + pz * pz - 2.0 * (px * x0 + py * y0 + pz * z0) + g0
    return px, py, pz, power


@helper
def _next_along(s, n, px, py, pz, nx, ny, nz, a, b, c):
    """First candidate to share the power of ``a`` along the ray p + t n."""
    x0, y0, z0, g0 = s.near[X, a], s.near[Y, a], s.near[Z, a], s.near[SHIFTED, a]
    best = np.inf
    who = -1
    for k in range(n):
        dx = s.near[X, k] - x0
        dy = s.near[Y, k] - y0
        dz = s.near[Z, k] - z0
        h = 2.0 * (nx * dx + ny * dy + nz * dz)
        rise = s.near[SHIFTED, k] - g0 - 2.0 * (px * dx + py * dy + pz * dz)
        if h > 0.0 and rise < best * h and k != a and k != b and k != c:
            best = rise / h
            who = k
    return who, best


@helper
def nearest(s, n):
    """Candidate of least power at the particle, -1 if there is none."""
    who = -1
    least = np.inf
    for k in range(n):
        if s.near[SHIFTED, k] < least:
            least = s.near[SHIFTED, k]
            who = k
    return who


@helper
def ray_to_sphere(px, py, pz, nx, ny, nz, radius):
    """Parameter at which p + t n leaves the sphere of that radius about 0."""
    aa = nx * nx + ny * ny + nz * nz
    bb = px * nx + py * ny + pz * nz
    cc = px * px + py * py + pz * pz - radius * radius
    if cc >= 0.0:
        return 0.0
    return (-bb + np.sqrt(bb * bb - aa * cc)) / aa


@inlined
def _climb(grid, s, i, xi, yi, zi, ri, n, known, limits, shift):
    """Walk up the power distance from the particle to the first vertex.

    Returns (code, candidates, radius known, a, b, c, d). The path stays in
    the cage, since power only grows along it and every candidate that could
    cut it is within ``known``.
    """
    reach, largest, tolerance, halo = limits
    a = nearest(s, n)
    b, c, d = a, a, a
    px, py, pz = 0.0, 0.0, 0.0
    stage = 0
    while stage < 3:
        need = 0.0
        who = -1
        step = np.inf
        nx, ny, nz = 0.0, 0.0, 0.0
        qx, qy, qz = 0.0, 0.0, 0.0
        if a >= 0:
            ax, ay, az = s.near[X, a], s.near[Y, a], s.near[Z, a]
            if stage == 0:
                nx, ny, nz = -ax, -ay, -az
            elif stage == 1:
                ux, uy, uz = s.near[X, b] - ax, s.near[Y, b] - ay, s.near[Z, b] - az
                vx, vy, vz = px - ax, py - ay, pz - az
                uu = ux * ux + uy * uy + uz * uz
                along = (vx * ux + vy * uy + vz * uz) / uu
                nx, ny, nz = vx - along * ux, vy - along * uy, vz - along * uz
                if nx * nx + ny * ny + nz * nz < 1e-12 * uu:
                    # on the line of centers: every way out is uphill
                    if abs(ux) <= abs(uy) and abs(ux) <= abs(uz):
                        nx, ny, nz = 0.0, uz, -uy
                    elif abs(uy) <= abs(uz):
                        nx, ny, nz = -uz, 0.0, ux
                    else:
                        nx, ny, nz = uy, -ux, 0.0
            else:
                ux, uy, uz = s.near[X, b] - ax, s.near[Y, b] - ay, s.near[Z, b] - az
                vx, vy, vz = s.near[X, c] - ax, s.near[Y, c] - ay, s.near[Z, c] - az
                nx, ny, nz = uy * vz - uz * vy, uz * vx - ux * vz, ux * vy - uy * vx
                if (px - ax) * nx + (py - ay) * ny + (pz - az) * nz < 0.0:
                    nx, ny, nz = -nx, -ny, -nz
            who, step = _next_along(s, n, px, py, pz, nx, ny, nz, a, b, c)
            edge = ray_to_sphere(px, py, pz, nx, ny, nz, reach)
            if who >= 0 and step <= edge:
                qx, qy, qz = px + step * nx, py + step * ny, pz + step * nz
                need = np.sqrt(qx * qx + qy * qy + qz * qz) + largest
            else:
                who = -1
                qx, qy, qz = px + edge * nx, py + edge * ny, pz + edge * nz
        if who < 0:
            # nothing in the way: look further, but step by step
            need = min(reach + largest, max(1.4 * known, known + largest))
        if need > known:
            if not need < np.inf:
                return INVALID, n, known, a, b, c, d
            if need > halo:
                return NEED_HALO, n, known, a, b, c, d
            code, n = collect(
                grid, s, i, xi, yi, zi, ri, n, known, need, tolerance, shift
            )
            if code != CLOSED:
                return code, n, known, a, b, c, d
            known = need
            # a new candidate may be nearer than the old three: start again
            a = nearest(s, n)
            b, c, d = a, a, a
            px, py, pz = 0.0, 0.0, 0.0
            stage = 0
            continue
        if who < 0:
            if outside(grid, xi, yi, zi, 0.0, 0.0, 0.0, reach + largest):
                return BORDER, n, known, a, b, c, d
            return OPEN, n, known, a, b, c, d
        px, py, pz = qx, qy, qz
        if stage == 0:
            b = who
        elif stage == 1:
            c = who
        else:
            d = who
        stage += 1
    return CLOSED, n, known, a, b, c, d


@helper
def _sorted4(a, b, c, d):
    if a > b:
        a, b = b, a
    if c > d:
        c, d = d, c
    if a > c:
        a, c = c, a
    if b > d:
        b, d = d, b
    if b > c:
        b, c = c, b
    return a, b, c, d


@helper
def slot_of(s, t, a):
    """Slot of candidate a in cell t, which has it."""
    if s.cell[t, 0] == a:
        return 0
    if s.cell[t, 1] == a:
        return 1
    if s.cell[t, 2] == a:
        return 2
    return 3


@helper
def find_cell(s, a, b, c, d):
    """Look up a sorted cell; return (cell or -1, free slot of the hash table)."""
    mask = len(s.slots) - 1
    clock = s.clock[0]
    key = (a * 73856093) ^ (b * 19349663) ^ (c * 83492791) ^ (d * 49979687)
    slot = (key ^ (key >> 15)) & mask
    while s.slots[slot, 0] == clock:
        t = s.slots[slot, 1]
        if (
            s.cell[t, 0] == a
            and s.cell[t, 1] == b
            and s.cell[t, 2] == c
            and s.cell[t, 3] == d
        ):
            return t, slot
        slot = (slot + 1) & mask
    return -1, slot


@helper
def _new_cell(s, t, slot, a, b, c, d, px, py, pz, power):
    s.cell[t, 0] = a
    s.cell[t, 1] = b
    s.cell[t, 2] = c
    s.cell[t, 3] = d
    for f in range(4):
        s.across[t, f] = -1
    s.vertex[t, 0] = px
    s.vertex[t, 1] = py
    s.vertex[t, 2] = pz
    s.vertex[t, 3] = power
    s.slots[slot, 1] = t
    s.slots[slot, 0] = s.clock[0]


@helper
def _gaps(s, begin, n, t):
    """Power of candidates above that of vertex t; infinite for its own four."""
    a = s.cell[t, 0]
    px, py, pz = s.vertex[t, 0], s.vertex[t, 1], s.vertex[t, 2]
    near = s.near
    base = near[SHIFTED, a] - 2.0 * (
        px * near[X, a] + py * near[Y, a] + pz * near[Z, a]
    )
    for k in range(begin, pad(n)):
        near[GAP, k] = (
            near[SHIFTED, k]
            - 2.0 * (px * near[X, k] + py * near[Y, k] + pz * near[Z, k])
            - base
        )
    for f in range(4):
        near[GAP, s.cell[t, f]] = np.inf


@helper
def flood(grid, s, i, xi, yi, zi, ri, known, limits, shift):
    """Find all power vertices of the cage and the corners of its wall.

    Parameters
    ----------
    grid, s : Grid, Scratch
    i, xi, yi, zi, ri
        Particle, its position in the grid and its radius.
    known : float
        Distance up to which candidates are collected at first.
    limits : tuple of float
        How far from the particle a cage is followed; the largest exclusion
        radius; overlap tolerance; distance up to which the grid is complete.
    shift : (2,) float64
        Strength of the tie-breaking, relative and absolute.

    Returns
    -------
    code, n_candidates, n_cells, n_corners
    """
    reach, largest, tolerance, halo = limits
    s.clock[0] += 1
    known = min(known, halo)
    # literals would compile the helpers once more
    none, one = np.int64(0), np.int64(1)
    code, n = collect(grid, s, i, xi, yi, zi, ri, none, -1.0, known, tolerance, shift)
    if code != CLOSED:
        return code, n, 0, 0
    while True:
        code, n, known, start_a, start_b, start_c, start_d = _climb(
            grid, s, i, xi, yi, zi, ri, n, known, limits, shift
        )
        if code != CLOSED:
            return code, n, 0, 0
        a, b, c, d = _sorted4(
            np.uint32(start_a),
            np.uint32(start_b),
            np.uint32(start_c),
            np.uint32(start_d),
        )
        px, py, pz, power = _solve(s, a, b, c, d)
        ball = np.sqrt(max(power, 0.0) + largest * largest)
        need = np.sqrt(px * px + py * py + pz * pz) + ball
        if need <= known:
            break
        # the vertex is not final: look further and climb again
        if not need < np.inf:
            return INVALID, n, 0, 0
        if need > halo:
            return NEED_HALO, n, 0, 0
        code, n = collect(grid, s, i, xi, yi, zi, ri, n, known, need, tolerance, shift)
        if code != CLOSED:
            return code, n, 0, 0
        known = need
    if outside(grid, xi, yi, zi, px, py, pz, ball):
        return BORDER, n, 0, 0
    _, slot = find_cell(s, a, b, c, d)
    _new_cell(s, none, slot, a, b, c, d, px, py, pz, power)
    n_cells = one
    n_corners = 0
    room = len(s.cell)
    near = s.near
    s.stack[0] = 0
    height = 1
    while height > 0:
        height -= 1
        t = s.stack[height]
        open_faces = 0
        for f in range(4):
            if s.across[t, f] == -1:
                open_faces += 1
        if open_faces == 0:
            continue
        v0, v1, v2, v3 = s.cell[t, 0], s.cell[t, 1], s.cell[t, 2], s.cell[t, 3]
        px, py, pz = s.vertex[t, 0], s.vertex[t, 1], s.vertex[t, 2]
        power = s.vertex[t, 3]
        _gaps(s, none, n, t)
        x0, y0, z0 = s.near[X, v0], s.near[Y, v0], s.near[Z, v0]
        x1, y1, z1 = s.near[X, v1] - x0, s.near[Y, v1] - y0, s.near[Z, v1] - z0
        x2, y2, z2 = s.near[X, v2] - x0, s.near[Y, v2] - y0, s.near[Z, v2] - z0
        x3, y3, z3 = s.near[X, v3] - x0, s.near[Y, v3] - y0, s.near[Z, v3] - z0
        ux, uy, uz = y2 * z3 - z2 * y3, z2 * x3 - x2 * z3, x2 * y3 - y2 * x3
        vx, vy, vz = y3 * z1 - z3 * y1, z3 * x1 - x3 * z1, x3 * y1 - y3 * x1
        wx, wy, wz = y1 * z2 - z1 * y2, z1 * x2 - x1 * z2, x1 * y2 - y1 * x2
        if x1 * ux + y1 * uy + z1 * uz > 0.0:
            ux, uy, uz = -ux, -uy, -uz
            vx, vy, vz = -vx, -vy, -vz
            wx, wy, wz = -wx, -wy, -wz
        for f in range(4):
            if s.across[t, f] != -1:
                continue
            # outward normal of the face opposite to slot f, and a point on it
            bx, by, bz = x0, y0, z0
            if f == 0:
                nx, ny, nz = -(ux + vx + wx), -(uy + vy + wy), -(uz + vz + wz)
                bx, by, bz = s.near[X, v1], s.near[Y, v1], s.near[Z, v1]
            elif f == 1:
                nx, ny, nz = ux, uy, uz
            elif f == 2:
                nx, ny, nz = vx, vy, vz
            else:
                nx, ny, nz = wx, wy, wz
            # power along p + t n is power + 2 slope t + square t^2
            square = nx * nx + ny * ny + nz * nz
            slope = nx * (px - bx) + ny * (py - by) + nz * (pz - bz)
            crossing = np.inf
            if slope < 0.0:
                inside = slope * slope - power * square
                if inside >= 0.0:
                    crossing = power / (np.sqrt(inside) - slope)
            # slots and candidates of the face
            f0 = 1 if f == 0 else 0
            f1 = 2 if f <= 1 else 1
            f2 = 3 if f <= 2 else 2
            m0, m1, m2 = s.cell[t, f0], s.cell[t, f1], s.cell[t, f2]
            m3 = m0
            while True:
                who = -1
                step = np.inf
                level = nx * bx + ny * by + nz * bz
                blocked = True
                if crossing < np.inf:
                    twice = 2.0 * crossing
                    before = 0
                    for k in range(pad(n)):
                        h = nx * near[X, k] + ny * near[Y, k] + nz * near[Z, k] - level
                        before += near[GAP, k] < twice * h
                    blocked = before == 0
                else:
                    blocked = False
                if blocked:
                    qx = px + crossing * nx
                    qy = py + crossing * ny
                    qz = pz + crossing * nz
                    far = np.sqrt(qx * qx + qy * qy + qz * qz)
                    ball = largest
                else:
                    # vector code first, then one branch that is rarely taken
                    for k in range(pad(n)):
                        h = nx * near[X, k] + ny * near[Y, k] + nz * near[Z, k] - level
                        ahead = 0.5 * near[GAP, k] / h
                        near[AHEAD, k] = ahead if h > 0.0 else np.inf
                    for k in range(n):
                        if near[AHEAD, k] < step:
                            step = near[AHEAD, k]
                            who = k
                    qx, qy, qz = px + step * nx, py + step * ny, pz + step * nz
                    if who < 0 or not qx * qx + qy * qy + qz * qz <= reach * reach:
                        # the cage leaves the reach along this edge
                        who = -1
                        edge = ray_to_sphere(px, py, pz, nx, ny, nz, reach)
                        qx, qy, qz = px + edge * nx, py + edge * ny, pz + edge * nz
                        ball = largest
                        far = min(reach, max(1.4 * known - ball, known))
                    else:
                        m3 = np.uint32(who)
                        a, b, c, d = _sorted4(m0, m1, m2, m3)
                        other, slot = find_cell(s, a, b, c, d)
                        if other >= 0:
                            break
                        qx, qy, qz, q_power = _solve(s, a, b, c, d)
                        ball = np.sqrt(max(q_power, 0.0) + largest * largest)
                        if q_power <= 0.0:
                            # rounding hid the crossing of an edge that ends
                            # within a sphere
                            blocked = True
                            ball = largest
                            step = crossing if crossing < np.inf else 0.0
                            qx, qy, qz = px + step * nx, py + step * ny, pz + step * nz
                        far = np.sqrt(qx * qx + qy * qy + qz * qz)
                need = far + ball
                if need <= known:
                    break
                if not need < np.inf:
                    return INVALID, n, n_cells, n_corners
                if need > halo:
                    return NEED_HALO, n, n_cells, n_corners
                code, total = collect(
                    grid, s, i, xi, yi, zi, ri, n, known, need, tolerance, shift
                )
                if code != CLOSED:
                    return code, n, n_cells, n_corners
                _gaps(s, n, total, t)
                n = total
                known = need
            if blocked:
                if outside(grid, xi, yi, zi, qx, qy, qz, largest):
                    return BORDER, n, n_cells, n_corners
                if far > reach:
                    return OPEN, n, n_cells, n_corners
                s.corner[n_corners, 0] = qx
                s.corner[n_corners, 1] = qy
                s.corner[n_corners, 2] = qz
                s.mark[n_corners, 0] = t
                s.mark[n_corners, 1] = f
                s.across[t, f] = -2 - n_corners
                n_corners += 1
                continue
            if who < 0:
                # whichever way out the flood found first, near an open edge of
                # the data nobody knows whether it is one
                if outside(grid, xi, yi, zi, 0.0, 0.0, 0.0, reach + largest):
                    return BORDER, n, n_cells, n_corners
                return OPEN, n, n_cells, n_corners
            if other < 0:
                if outside(grid, xi, yi, zi, qx, qy, qz, ball):
                    return BORDER, n, n_cells, n_corners
                if n_cells == room:
                    return NEED_CAPACITY, n, n_cells, n_corners
                other = n_cells
                _new_cell(s, other, slot, a, b, c, d, qx, qy, qz, q_power)
                n_cells += 1
                s.stack[height] = other
                height += 1
            # link both sides of the face
            back = slot_of(s, other, m3)
            if s.cell[other, back] != m3 or s.across[other, back] != -1:
                return INVALID, n, n_cells, n_corners
            s.across[t, f] = other
            s.across[other, back] = t
            j0, j1, j2 = (
                slot_of(s, other, m0),
                slot_of(s, other, m1),
                slot_of(s, other, m2),
            )
            s.join[t, f] = j0 << 2 * f0 | j1 << 2 * f1 | j2 << 2 * f2
            s.join[other, back] = f0 << 2 * j0 | f1 << 2 * j1 | f2 << 2 * j2
    return CLOSED, n, n_cells, n_corners
