"""Length, area and windows of a cage from the corners of its wall (2D).

On the circle about x_j with radius R, x . n = (|x|^2 - g) / 2R with g the
power of the particle, so that the area is sum (g L - int |x|^2 dl) / 4R, in
which nothing cancels however small the cage. For an arc p1 -> p2 the integral of
the normal is the chord turned by a right angle.
"""

import numpy as np

from trajcage.kernel.codes import CLOSED, INVALID
from trajcage.kernel.jit import helper
from trajcage.kernel.patch3d import AREA, AX, AY, STAMP, TURN, held_fast, touch
from trajcage.kernel.scratch import POWER, REACH, X, Y
from trajcage.kernel.wall3d import covered

__all__ = ["integrate_wall", "opening_ratio", "window"]


@helper
def window(s, q):
    """Return the two candidates whose circles meet in corner q."""
    t = s.mark[q, 0]
    f = s.mark[q, 1]
    return s.cell[t, 1 if f == 0 else 0], s.cell[t, 2 if f <= 1 else 1]


@helper
def opening_ratio(s, a, b):
    """Factor on the exclusion radii at which the two disks just touch."""
    dx, dy = s.near[X, b] - s.near[X, a], s.near[Y, b] - s.near[Y, a]
    return np.sqrt(dx * dx + dy * dy) / (s.near[REACH, a] + s.near[REACH, b])


@helper
def _polish_corners(s, n_corners):
    """Move the corners from the circles with broken ties to the true ones."""
    for q in range(n_corners):
        a, b = window(s, q)
        px, py = s.corner[q, 0], s.corner[q, 1]
        pp = px * px + py * py
        ax, ay = px - s.near[X, a], py - s.near[Y, a]
        bx, by = px - s.near[X, b], py - s.near[Y, b]
        fa = pp - 2.0 * (px * s.near[X, a] + py * s.near[Y, a]) + s.near[POWER, a]
        fb = pp - 2.0 * (px * s.near[X, b] + py * s.near[Y, b]) + s.near[POWER, b]
        det = ax * by - ay * bx
        if abs(det) > 1e-4 * s.near[REACH, a] * s.near[REACH, b]:
            s.corner[q, 0] = px - 0.5 * (fa * by - fb * ay) / det
            s.corner[q, 1] = py - 0.5 * (fb * ax - fa * bx) / det


@helper
def _turn(s, t, i, k, n_cells):
    """Turn about slot i of cell t, from its third slot to slot k and on.

    Returns (corner, slot of the center in its cell, angle turned). The edge
    from i to the third slot is shut.
    """
    total = 0.0
    for _ in range(4 * n_cells):
        third = 3 - i - k
        a, b, c = s.cell[t, i], s.cell[t, third], s.cell[t, k]
        ux, uy = s.near[X, b] - s.near[X, a], s.near[Y, b] - s.near[Y, a]
        vx, vy = s.near[X, c] - s.near[X, a], s.near[Y, c] - s.near[Y, a]
        total += np.arctan2(abs(ux * vy - uy * vx), ux * vx + uy * vy)
        if s.across[t, third] < 0:
            return -2 - s.across[t, third], i, total
        code = s.join[t, third]
        t, i, k = (
            s.across[t, third],
            code >> 2 * i & 3,
            3 - (code >> 2 * i & 3) - (code >> 2 * k & 3),
        )
    return -1, 0, total


@helper
def _covered_half_angle(s, q, slot):
    """Angle at the center in a slot between corner q and the corner's other disk."""
    t = s.mark[q, 0]
    a, b = s.cell[t, slot], s.cell[t, 3 - slot - s.mark[q, 1]]
    ux, uy = s.near[X, b] - s.near[X, a], s.near[Y, b] - s.near[Y, a]
    vx, vy = s.corner[q, 0] - s.near[X, a], s.corner[q, 1] - s.near[Y, a]
    return np.arctan2(abs(ux * vy - uy * vx), ux * vx + uy * vy)


@helper
def _arcs(s, n_cells, n_corners):
    """Walk every arc of the wall once, counterclockwise on its disk."""
    for q in range(n_corners):
        t = s.mark[q, 0]
        f = s.mark[q, 1]
        for i in range(3):
            if i == f:
                continue
            # the arc on disk a that starts here and runs counterclockwise
            a = s.cell[t, i]
            j = 3 - i - f
            ux = s.near[X, s.cell[t, j]] - s.near[X, a]
            uy = s.near[Y, s.cell[t, j]] - s.near[Y, a]
            vx = s.near[X, s.cell[t, f]] - s.near[X, a]
            vy = s.near[Y, s.cell[t, f]] - s.near[Y, a]
            if ux * vy - uy * vx < 0.0:
                continue
            end, end_i, turned = _turn(s, t, i, f, n_cells)
            if end < 0:
                return INVALID
            qx, qy = s.corner[q, 0] - s.near[X, a], s.corner[q, 1] - s.near[Y, a]
            dx = s.corner[end, 0] - s.corner[q, 0]
            dy = s.corner[end, 1] - s.corner[q, 1]
            r2 = s.near[REACH, a] * s.near[REACH, a]
            chord2 = dx * dx + dy * dy
            angle = np.arctan2(qx * dy - qy * dx, r2 - 0.5 * chord2)
            if chord2 < 1e-6 * r2:
                # next to nothing or next to a full circle: ask the flood
                turned -= _covered_half_angle(s, q, i)
                turned -= _covered_half_angle(s, end, end_i)
                if turned > np.pi:
                    angle += 2.0 * np.pi
            elif angle < 0.0:
                angle += 2.0 * np.pi
            touch(s, a, 0.0, 0.0, 0.0)
            s.patch[a, TURN] += angle
            s.patch[a, AX] += dy
            s.patch[a, AY] -= dx
    return CLOSED


@helper
def integrate_wall(s, n, n_cells, n_corners):
    """Area, length, wall sum, bounding neighbors and weakest window of a cage.

    Returns what :func:`trajcage.kernel.wall3d.integrate_wall` does.
    """
    s.clock[1] = 0
    _polish_corners(s, n_corners)
    code = _arcs(s, n_cells, n_corners)
    if code != CLOSED:
        return code, 0.0, 0.0, 0.0, 0, 0.0, -1
    for t in range(n_cells):
        for f in range(3):
            a = s.cell[t, f]
            if s.patch[a, STAMP] != s.clock[0]:
                # a disk without any arc: an island, or hidden
                x, y, r = s.near[X, a], s.near[Y, a], s.near[REACH, a]
                touch(s, a, 0.0, 0.0, 0.0)
                if not covered(s, n, x, y, 0.0, 0.0, 0.0, 0.0, r, a, a):
                    s.patch[a, TURN] = 2.0 * np.pi
    area = 0.0
    length = 0.0
    wall_sum = 0.0
    tx, ty = 0.0, 0.0
    for m in range(s.clock[1]):
        a = s.seen[m]
        x, y, r, power = s.near[X, a], s.near[Y, a], s.near[REACH, a], s.near[POWER, a]
        arc = s.patch[a, TURN] * r
        s.patch[a, AREA] = arc
        ax, ay = s.patch[a, AX], s.patch[a, AY]
        tx += ax
        ty += ay
        moment = 2.0 * (x * (x * arc + r * ax) + y * (y * arc + r * ay))
        area += (2.0 * power * arc - moment) / (4.0 * r)
        length += arc
        wall_sum += r * arc
    area = max(area, 0.0)
    held = held_fast(s, n_corners)
    if held:
        area = 0.0
    elif not np.sqrt(tx * tx + ty * ty) <= 1e-7 * length + 1e-280:
        return INVALID, 0.0, 0.0, 0.0, 0, 0.0, -1
    bounding = 0
    for m in range(s.clock[1]):
        a = s.seen[m]
        # arcs born from broken ties have no length; in a point none has
        if s.patch[a, AREA] > 1e-10 * length or (held and s.patch[a, TURN] != 0.0):
            s.seen[bounding] = a
            bounding += 1
    weakest = -1.0
    where = -1
    for q in range(n_corners):
        a, b = window(s, q)
        ratio = opening_ratio(s, a, b)
        if ratio > weakest:
            weakest = ratio
            where = q
    return CLOSED, area, length, wall_sum, bounding, weakest, where
