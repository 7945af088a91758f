"""The free region around a disk as a flood over its power diagram (2D).

The same method as in :mod:`trajcage.kernel.flood3d`, with triangles for
tetrahedra and edges for faces.
"""

import numpy as np

from trajcage.kernel.codes import (
    BORDER,
    CLOSED,
    INVALID,
    NEED_CAPACITY,
    NEED_HALO,
    OPEN,
)
from trajcage.kernel.flood3d import (
    collect,
    find_cell,
    nearest,
    outside,
    pad,
    ray_to_sphere,
    slot_of,
)
from trajcage.kernel.jit import helper
from trajcage.kernel.scratch import GAP, SHIFTED, X, Y

__all__ = ["flood"]


@helper
def _solve(s, a, b, c):
    """Point of equal power to three candidates, and that power."""
    x0, y0, g0 = s.near[X, a], s.near[Y, a], s.near[SHIFTED, a]
    x1, y1 = s.near[X, b] - x0, s.near[Y, b] - y0
    x2, y2 = s.near[X, c] - x0, s.near[Y, c] - y0
    h1 = s.near[SHIFTED, b] - g0
    h2 = s.near[SHIFTED, c] - g0
    det = x1 * y2 - y1 * x2
    scale = 0.5 / det
    px = (h1 * y2 - h2 * y1) * scale
    py = (h2 * x1 - h1 * x2) * scale
    if det * det < 1e-6:
        # all but collinear: refine as in 3D
        for _ in range(2):
            r1 = h1 - 2.0 * (px * x1 + py * y1)
            r2 = h2 - 2.0 * (px * x2 + py * y2)
            px += (r1 * y2 - r2 * y1) * scale
            py += (r2 * x1 - r1 * x2) * scale
    return px, py, px * px + py * py - 2.0 * (px * x0 + py * y0) + g0


@helper
def _next_along(s, n, px, py, nx, ny, a, b):
    """First candidate to share the power of ``a`` along the ray p + t n."""
    x0, y0, g0 = s.near[X, a], s.near[Y, a], s.near[SHIFTED, a]
    best = np.inf
    who = -1
    for k in range(n):
        dx = s.near[X, k] - x0
        dy = s.near[Y, k] - y0
        h = 2.0 * (nx * dx + ny * dy)
        rise = s.near[SHIFTED, k] - g0 - 2.0 * (px * dx + py * dy)
        if h > 0.0 and rise < best * h and k != a and k != b:
            best = rise / h
            who = k
    return who, best


@helper
def _climb(grid, s, i, xi, yi, ri, n, known, limits, shift):
    """Walk up the power distance from the particle to the first vertex."""
    reach, largest, tolerance, halo = limits
    a = nearest(s, n)
    b, c = a, a
    px, py = 0.0, 0.0
    stage = 0
    while stage < 2:
        who = -1
        qx, qy = 0.0, 0.0
        need = 0.0
        if a >= 0:
            nx, ny = -s.near[X, a], -s.near[Y, a]
            if stage == 1:
                nx, ny = s.near[Y, a] - s.near[Y, b], s.near[X, b] - s.near[X, a]
                if (px - s.near[X, a]) * nx + (py - s.near[Y, a]) * ny < 0.0:
                    nx, ny = -nx, -ny
            who, step = _next_along(s, n, px, py, nx, ny, a, b)
            edge = ray_to_sphere(px, py, 0.0, nx, ny, 0.0, reach)
            if who >= 0 and step <= edge:
                qx, qy = px + step * nx, py + step * ny
                need = np.sqrt(qx * qx + qy * qy) + largest
            else:
                who = -1
                qx, qy = px + edge * nx, py + edge * ny
        if who < 0:
            # nothing in the way: look further, but step by step
            need = min(reach + largest, max(1.4 * known, known + largest))
        if need > known:
            if not need < np.inf:
                return INVALID, n, known, a, b, c
            if need > halo:
                return NEED_HALO, n, known, a, b, c
            code, n = collect(
                grid, s, i, xi, yi, 0.0, ri, n, known, need, tolerance, shift
            )
            if code != CLOSED:
                return code, n, known, a, b, c
            known = need
            # a new candidate may be nearer than the old two: start again
            a = nearest(s, n)
            b, c = a, a
            px, py = 0.0, 0.0
            stage = 0
            continue
        if who < 0:
            if outside(grid, xi, yi, 0.0, 0.0, 0.0, 0.0, reach + largest):
                return BORDER, n, known, a, b, c
            return OPEN, n, known, a, b, c
        px, py = qx, qy
        if stage == 0:
            b = who
        else:
            c = who
        stage += 1
    return CLOSED, n, known, a, b, c


@helper
def _sorted3(a, b, c):
    if a > b:
        a, b = b, a
    if b > c:
        b, c = c, b
    if a > b:
        a, b = b, a
    return a, b, c


@helper
def _new_cell(s, t, slot, a, b, c, px, py, power):
    s.cell[t, 0] = a
    s.cell[t, 1] = b
    s.cell[t, 2] = c
    s.cell[t, 3] = 0
    for f in range(3):
        s.across[t, f] = -1
    s.vertex[t, 0] = px
    s.vertex[t, 1] = py
    s.vertex[t, 2] = 0.0
    s.vertex[t, 3] = power
    s.slots[slot, 1] = t
    s.slots[slot, 0] = s.clock[0]


@helper
def _gaps(s, begin, n, t):
    """Power of candidates above that of vertex t; infinite for its own three."""
    a = s.cell[t, 0]
    px, py = s.vertex[t, 0], s.vertex[t, 1]
    near = s.near
    base = near[SHIFTED, a] - 2.0 * (px * near[X, a] + py * near[Y, a])
    for k in range(begin, pad(n)):
        near[GAP, k] = (
            near[SHIFTED, k] - 2.0 * (px * near[X, k] + py * near[Y, k]) - base
        )
    for f in range(3):
        near[GAP, s.cell[t, f]] = np.inf


@helper
def flood(grid, s, i, xi, yi, zi, ri, known, limits, shift):
    """Find all power vertices of the cage and the corners of its wall.

    Parameters and results are those of :func:`trajcage.kernel.flood3d.flood`.
    """
    reach, largest, tolerance, halo = limits
    near = s.near
    s.clock[0] += 1
    known = min(known, halo)
    # literals would compile the helpers once more
    none, one, no_fourth = np.int64(0), np.int64(1), np.uint32(0)
    code, n = collect(grid, s, i, xi, yi, zi, ri, none, -1.0, known, tolerance, shift)
    if code != CLOSED:
        return code, n, 0, 0
    while True:
        code, n, known, start_a, start_b, start_c = _climb(
            grid, s, i, xi, yi, ri, n, known, limits, shift
        )
        if code != CLOSED:
            return code, n, 0, 0
        a, b, c = _sorted3(np.uint32(start_a), np.uint32(start_b), np.uint32(start_c))
        px, py, power = _solve(s, a, b, c)
        ball = np.sqrt(max(power, 0.0) + largest * largest)
        need = np.sqrt(px * px + py * py) + ball
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
    if outside(grid, xi, yi, zi, px, py, 0.0, ball):
        return BORDER, n, 0, 0
    _, slot = find_cell(s, a, b, c, no_fourth)
    _new_cell(s, none, slot, a, b, c, px, py, power)
    n_cells = one
    n_corners = 0
    room = len(s.cell)
    s.stack[0] = 0
    height = 1
    while height > 0:
        height -= 1
        t = s.stack[height]
        v0, v1, v2 = s.cell[t, 0], s.cell[t, 1], s.cell[t, 2]
        px, py, power = s.vertex[t, 0], s.vertex[t, 1], s.vertex[t, 3]
        _gaps(s, none, n, t)
        for f in range(3):
            if s.across[t, f] != -1:
                continue
            # the edge opposite to slot f and its outward normal
            e0, e1, apex = v0, v1, v2
            if f == 0:
                e0, e1, apex = v1, v2, v0
            elif f == 1:
                e0, e1, apex = v0, v2, v1
            bx, by = near[X, e0], near[Y, e0]
            nx, ny = near[Y, e1] - by, bx - near[X, e1]
            if nx * (near[X, apex] - bx) + ny * (near[Y, apex] - by) > 0.0:
                nx, ny = -nx, -ny
            # power along p + t n is power + 2 slope t + square t^2
            square = nx * nx + ny * ny
            slope = nx * (px - bx) + ny * (py - by)
            crossing = np.inf
            if slope < 0.0:
                inside = slope * slope - power * square
                if inside >= 0.0:
                    crossing = power / (np.sqrt(inside) - slope)
            level = nx * bx + ny * by
            # slots of the edge's candidates
            f0 = 1 if f == 0 else 0
            f1 = 2 if f <= 1 else 1
            m3 = e0
            while True:
                who = -1
                step = np.inf
                for k in range(n):
                    h = 2.0 * (nx * near[X, k] + ny * near[Y, k] - level)
                    if h > 0.0 and near[GAP, k] < step * h:
                        step = near[GAP, k] / h
                        who = k
                blocked = crossing < np.inf and crossing <= step
                if blocked:
                    qx, qy = px + crossing * nx, py + crossing * ny
                    ball = largest
                    need = np.sqrt(qx * qx + qy * qy) + ball
                else:
                    qx, qy = px + step * nx, py + step * ny
                    if who < 0 or not qx * qx + qy * qy <= reach * reach:
                        # the cage leaves the reach along this edge
                        who = -1
                        edge = ray_to_sphere(px, py, 0.0, nx, ny, 0.0, reach)
                        qx, qy = px + edge * nx, py + edge * ny
                        ball = largest
                        need = min(reach + ball, max(1.4 * known, known + ball))
                    else:
                        m3 = np.uint32(who)
                        a, b, c = _sorted3(e0, e1, m3)
                        other, slot = find_cell(s, a, b, c, no_fourth)
                        if other >= 0:
                            break
                        qx, qy, q_power = _solve(s, a, b, c)
                        ball = np.sqrt(max(q_power, 0.0) + largest * largest)
                        if q_power <= 0.0:
                            # rounding hid the crossing of an edge that ends
                            # within a disk
                            blocked = True
                            ball = largest
                            step = crossing if crossing < np.inf else 0.0
                            qx, qy = px + step * nx, py + step * ny
                        need = np.sqrt(qx * qx + qy * qy) + ball
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
                if outside(grid, xi, yi, zi, qx, qy, 0.0, largest):
                    return BORDER, n, n_cells, n_corners
                if qx * qx + qy * qy > reach * reach:
                    return OPEN, n, n_cells, n_corners
                s.corner[n_corners, 0] = qx
                s.corner[n_corners, 1] = qy
                s.corner[n_corners, 2] = 0.0
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
                if outside(grid, xi, yi, zi, qx, qy, 0.0, ball):
                    return BORDER, n, n_cells, n_corners
                if n_cells == room:
                    return NEED_CAPACITY, n, n_cells, n_corners
                other = n_cells
                _new_cell(s, other, slot, a, b, c, qx, qy, q_power)
                n_cells += 1
                s.stack[height] = other
                height += 1
            # link both sides of the edge
            back = slot_of(s, other, m3)
            if s.cell[other, back] != m3 or back == 3 or s.across[other, back] != -1:
                return INVALID, n, n_cells, n_corners
            s.across[t, f] = other
            s.across[other, back] = t
            j0, j1 = slot_of(s, other, e0), slot_of(s, other, e1)
            s.join[t, f] = j0 << 2 * f0 | j1 << 2 * f1
            s.join[other, back] = f0 << 2 * j0 | f1 << 2 * j1
    return CLOSED, n, n_cells, n_corners
