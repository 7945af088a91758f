"""Area, volume and windows of a cage from the corners of its wall (3D).

The wall consists of patches of exclusion spheres, bounded by arcs in which
two spheres meet. On the sphere about x_j with radius R,
x . n = (|x|^2 - g) / 2R, where g is the power of the particle, so that the
divergence theorem gives the volume as sum (g A - int |x|^2 dA) / 6R, in which
nothing cancels however small the cage.
"""

import numpy as np

from trajcage.kernel.codes import CLOSED, INVALID
from trajcage.kernel.jit import helper, inlined
from trajcage.kernel.patch3d import (
    ARCS,
    AREA,
    AX,
    AY,
    AZ,
    STAMP,
    TURN,
    add_arc,
    held_fast,
    opening_ratio,
    patch_area,
    polish_corners,
    touch,
    window,
)
from trajcage.kernel.scratch import POWER, REACH, X, Y, Z

__all__ = ["covered", "integrate_wall"]


@helper
def _step(s, t, i, j, k, w):
    """Turn about the edge in slots i, j of cell t over its face without slot w.

    Returns the cell across and the slots there of the edge, of the candidate
    that comes next and of the one in slot k here.
    """
    code = s.join[t, w]
    i2, j2, w2 = code >> 2 * i & 3, code >> 2 * j & 3, code >> 2 * k & 3
    return np.int64(s.across[t, w]), i2, j2, 6 - i2 - j2 - w2, w2


@helper
def _rotate(s, t, i, j, k, w, n_cells):
    """Turn about the edge in slots i, j of cell t from slot w to k and on.

    Returns (corner, slots in its cell of the third sphere and of i).
    """
    for _ in range(4 * n_cells):
        if s.across[t, w] < 0:
            return -2 - s.across[t, w], k, i
        t, i, j, k, w = _step(s, t, i, j, k, w)
    return -1, 0, 0


@helper
def _angle_about(s, a, b, c, d):
    """Dihedral angle at the edge a b between candidates c and d."""
    x0, y0, z0 = s.near[X, a], s.near[Y, a], s.near[Z, a]
    ex, ey, ez = s.near[X, b] - x0, s.near[Y, b] - y0, s.near[Z, b] - z0
    cx, cy, cz = s.near[X, c] - x0, s.near[Y, c] - y0, s.near[Z, c] - z0
    dx, dy, dz = s.near[X, d] - x0, s.near[Y, d] - y0, s.near[Z, d] - z0
    mx, my, mz = ey * cz - ez * cy, ez * cx - ex * cz, ex * cy - ey * cx
    nx, ny, nz = ey * dz - ez * dy, ez * dx - ex * dz, ex * dy - ey * dx
    kx, ky, kz = my * nz - mz * ny, mz * nx - mx * nz, mx * ny - my * nx
    return np.arctan2(np.sqrt(kx * kx + ky * ky + kz * kz), mx * nx + my * ny + mz * nz)


@helper
def _turned(s, t, i, j, k, w, n_cells):
    """Sum of the dihedral angles that `_rotate` passes."""
    total = 0.0
    for _ in range(4 * n_cells):
        total += _angle_about(s, s.cell[t, i], s.cell[t, j], s.cell[t, w], s.cell[t, k])
        if s.across[t, w] < 0:
            break
        t, i, j, k, w = _step(s, t, i, j, k, w)
    return total


@helper
def _foot(s, a, b):
    """Return the unit vector a to b, their distance, and their circle.

    The circle in which the spheres meet: distance of its plane from a, and
    radius squared (negative if they do not meet).
    """
    ex, ey, ez = (
        s.near[X, b] - s.near[X, a],
        s.near[Y, b] - s.near[Y, a],
        s.near[Z, b] - s.near[Z, a],
    )
    length = np.sqrt(ex * ex + ey * ey + ez * ez)
    inverse = 1.0 / length
    ra, rb = s.near[REACH, a], s.near[REACH, b]
    height = 0.5 * (length + (ra - rb) * (ra + rb) * inverse)
    rho2 = (ra - height) * (ra + height)
    return ex * inverse, ey * inverse, ez * inverse, length, height, rho2


@helper
def _covered_half_angle(s, ex, ey, ez, height, q, slot_a, slot_w):
    """Angle about the axis e between corner q and its third candidate."""
    t = s.mark[q, 0]
    a, c = s.cell[t, slot_a], s.cell[t, slot_w]
    wx = s.near[X, c] - s.near[X, a]
    wy = s.near[Y, c] - s.near[Y, a]
    wz = s.near[Z, c] - s.near[Z, a]
    along = wx * ex + wy * ey + wz * ez
    wx, wy, wz = wx - along * ex, wy - along * ey, wz - along * ez
    vx = s.corner[q, 0] - s.near[X, a] - height * ex
    vy = s.corner[q, 1] - s.near[Y, a] - height * ey
    vz = s.corner[q, 2] - s.near[Z, a] - height * ez
    kx, ky, kz = wy * vz - wz * vy, wz * vx - wx * vz, wx * vy - wy * vx
    return np.arctan2(np.sqrt(kx * kx + ky * ky + kz * kz), wx * vx + wy * vy + wz * vz)


@inlined
def _arcs(s, n_cells, n_corners):
    """Walk every arc of the wall once and add it to its two spheres."""
    size2 = 0.0
    for q in range(n_corners):
        px, py, pz = s.corner[q, 0], s.corner[q, 1], s.corner[q, 2]
        size2 = max(size2, px * px + py * py + pz * pz)
        for f in range(4):
            s.mark[q, 2 + f] = 0
    for q in range(n_corners):
        t = np.int64(s.mark[q, 0])
        k = np.int64(s.mark[q, 1])
        for w in range(4):
            if w == k or s.mark[q, 2 + w] == 1:
                continue
            i = 0
            while i == k or i == w:
                i += 1
            j = 6 - i - k - w
            a, b = s.cell[t, i], s.cell[t, j]
            end, end_w, end_i = _rotate(s, t, i, j, k, w, n_cells)
            if end < 0:
                return INVALID
            s.mark[q, 2 + w] = 1
            s.mark[end, 2 + end_w] = 1
            ex, ey, ez, length, height, rho2 = _foot(s, a, b)
            rho2 = max(rho2, 1e-300)
            ra, rb = s.near[REACH, a], s.near[REACH, b]
            ax, ay, az = s.near[X, a], s.near[Y, a], s.near[Z, a]
            c, d = s.cell[t, w], s.cell[t, k]
            cx, cy, cz = s.near[X, c] - ax, s.near[Y, c] - ay, s.near[Z, c] - az
            dx, dy, dz = s.near[X, d] - ax, s.near[Y, d] - ay, s.near[Z, d] - az
            sense = (
                ex * (cy * dz - cz * dy)
                + ey * (cz * dx - cx * dz)
                + ez * (cx * dy - cy * dx)
            )
            x1, y1, z1 = s.corner[q, 0], s.corner[q, 1], s.corner[q, 2]
            x2, y2, z2 = s.corner[end, 0], s.corner[end, 1], s.corner[end, 2]
            if sense < 0.0:
                # from here on the arc runs counterclockwise about a -> b
                x1, y1, z1, x2, y2, z2 = x2, y2, z2, x1, y1, z1
            dx, dy, dz = x2 - x1, y2 - y1, z2 - z1
            qx, qy, qz = (
                x1 - ax - height * ex,
                y1 - ay - height * ey,
                z1 - az - height * ez,
            )
            chord2 = dx * dx + dy * dy + dz * dz
            sine = (
                ex * (qy * dz - qz * dy)
                + ey * (qz * dx - qx * dz)
                + ez * (qx * dy - qy * dx)
            )
            cosine = rho2 - 0.5 * chord2
            angle = np.arctan2(sine, cosine)
            if chord2 < 1e-6 * rho2:
                # next to nothing or next to a full circle: ask the flood
                expected = (
                    _turned(s, t, i, j, k, w, n_cells)
                    - _covered_half_angle(s, ex, ey, ez, height, q, i, w)
                    - _covered_half_angle(s, ex, ey, ez, height, end, end_i, end_w)
                )
                if expected > np.pi:
                    angle += 2.0 * np.pi
            elif angle < 0.0:
                angle += 2.0 * np.pi
            circle = (rho2, angle, sine, cosine, 0.09 * min(size2, ra * rb))
            # counterclockwise about a -> b is clockwise about b -> a
            add_arc(
                s, b, -ex, -ey, -ez, length - height, circle, x1, y1, z1, dx, dy, dz
            )
            add_arc(s, a, ex, ey, ez, height, circle, x2, y2, z2, -dx, -dy, -dz)
    return CLOSED


@helper
def _ring_is_open(s, t, i, j, k, w, n_cells):
    """Tell whether all cells about an edge are in the cage, t the first of them."""
    first = t
    for _ in range(4 * n_cells):
        other = s.across[t, w]
        if other <= first:
            # round once; or a corner, or a ring already seen from an earlier cell
            return other == first
        t, i, j, k, w = _step(s, t, i, j, k, w)
    return False


@helper
def covered(s, n, px, py, pz, ex, ey, ez, rho, a, b):
    """Tell whether a circle of radius rho about p, or a sphere, lies within others.

    The circle is that of candidates a and b about the axis e; with e = 0 the
    sphere of a is asked for. A circle that is free stays clear of the radical
    plane to any candidate c, so that power_c(p) + rho^2 > 2 rho |w|, where w
    leads to c without its part along the axis. One that is not has some
    power_c(p) + rho^2 <= 0. The bound lies in the middle, out of rounding's way.
    """
    for k in range(n):
        dx, dy, dz = s.near[X, k] - px, s.near[Y, k] - py, s.near[Z, k] - pz
        r = s.near[REACH, k]
        along = dx * ex + dy * ey + dz * ez
        square = dx * dx + dy * dy + dz * dz
        aside = np.sqrt(max(square - along * along, 0.0))
        if square - r * r + rho * rho < rho * aside and k != a and k != b:
            return True
    return False


@inlined
def _circles(s, n, n_cells):
    """Add the full circles in which two spheres meet."""
    for t in range(n_cells):
        for k in range(3):
            # an edge whose cells are all open: both its faces here lead on
            if s.across[t, k] < t:
                continue
            for w in range(k + 1, 4):
                if s.across[t, w] < t:
                    continue
                i = 0
                while i == k or i == w:
                    i += 1
                j = 6 - i - k - w
                if not _ring_is_open(s, t, i, j, k, w, n_cells):
                    continue
                a, b = s.cell[t, i], s.cell[t, j]
                ex, ey, ez, length, height, rho2 = _foot(s, a, b)
                mx = s.near[X, a] + height * ex
                my = s.near[Y, a] + height * ey
                mz = s.near[Z, a] + height * ez
                if not rho2 > 0.0 or covered(
                    s, n, mx, my, mz, ex, ey, ez, np.sqrt(rho2), a, b
                ):
                    continue
                touch(s, a, mx, my, mz)
                touch(s, b, mx, my, mz)
                ra, rb = s.near[REACH, a], s.near[REACH, b]
                s.patch[a, TURN] -= 2.0 * np.pi * (1.0 - height / ra)
                s.patch[b, TURN] -= 2.0 * np.pi * (1.0 - (length - height) / rb)
                half = np.pi * rho2
                s.patch[a, AX] -= half * ex
                s.patch[a, AY] -= half * ey
                s.patch[a, AZ] -= half * ez
                s.patch[b, AX] += half * ex
                s.patch[b, AY] += half * ey
                s.patch[b, AZ] += half * ez


@inlined
def _islands(s, n, n_cells):
    """Add the spheres that meet no other: seen in full, or hidden."""
    for t in range(n_cells):
        for i in range(4):
            a = s.cell[t, i]
            if s.patch[a, STAMP] == s.clock[0]:
                continue
            x, y, z, r = s.near[X, a], s.near[Y, a], s.near[Z, a], s.near[REACH, a]
            touch(s, a, x, y, z)
            if covered(s, n, x, y, z, 0.0, 0.0, 0.0, r, a, a):
                # nothing of this sphere is seen
                s.patch[a, ARCS] = -1.0


@inlined
def integrate_wall(s, n, n_cells, n_corners):
    """Volume, area, wall sum, bounding neighbors and weakest window of a cage.

    Returns
    -------
    code, volume, surface, wall_sum, bounding, weakest, corner
        ``weakest`` is the largest opening ratio over the shut windows and
        ``corner`` the corner behind it (-1 if the wall has none). The first
        ``bounding`` entries of Scratch.seen are the spheres of the wall.
    """
    s.clock[1] = 0
    polish_corners(s, n_corners)
    code = _arcs(s, n_cells, n_corners)
    if code != CLOSED:
        return code, 0.0, 0.0, 0.0, 0, 0.0, -1
    _circles(s, n, n_cells)
    _islands(s, n, n_cells)
    volume = 0.0
    surface = 0.0
    wall_sum = 0.0
    tx, ty, tz = 0.0, 0.0, 0.0
    for m in range(s.clock[1]):
        a = s.seen[m]
        x, y, z, r = s.near[X, a], s.near[Y, a], s.near[Z, a], s.near[REACH, a]
        power = s.near[POWER, a]
        area = patch_area(s, a) * r * r
        s.patch[a, AREA] = area
        ax, ay, az = s.patch[a, AX], s.patch[a, AY], s.patch[a, AZ]
        tx += ax
        ty += ay
        tz += az
        # int |x|^2 dA from |x|^2 = 2 x . x_j - g on the sphere
        moment = 2.0 * (
            x * (x * area + r * ax) + y * (y * area + r * ay) + z * (z * area + r * az)
        )
        volume += (2.0 * power * area - moment) / (6.0 * r)
        surface += area
        wall_sum += r * area
    volume = max(volume, 0.0)
    held = held_fast(s, n_corners)
    if held:
        volume = 0.0
    elif not np.sqrt(tx * tx + ty * ty + tz * tz) <= 1e-7 * surface + 1e-280:
        return INVALID, 0.0, 0.0, 0.0, 0, 0.0, -1
    bounding = 0
    for m in range(s.clock[1]):
        a = s.seen[m]
        # patches born from broken ties have no area; in a point none has
        if s.patch[a, AREA] > 1e-10 * surface or (held and s.patch[a, ARCS] > 0.0):
            s.seen[bounding] = a
            bounding += 1
    weakest = -1.0
    where = -1
    for q in range(n_corners):
        a, b, c = window(s, q)
        ratio = opening_ratio(s, a, b, c)
        if ratio > weakest:
            weakest = ratio
            where = q
    return CLOSED, volume, surface, wall_sum, bounding, weakest, where
