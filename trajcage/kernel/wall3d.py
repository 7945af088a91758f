"""Area, volume and windows of a cage from the corners of its wall (3D).

The wall consists of patches of exclusion spheres, bounded by arcs in which
two spheres meet. A patch needs no loops traced: its area is a sum over arcs
of spherical triangles to one reference point plus the slivers between arc and
geodesic, modulo the whole sphere (a form of Gauss-Bonnet that stays accurate
for patches much smaller than the sphere). Its vector area is the boundary
integral of r x dr / 2. On the sphere about x_j with radius R,
x . n = (|x|^2 - g) / 2R, where g is the power of the particle, so that the
divergence theorem gives the volume as sum (g A - int |x|^2 dA) / 6R, in which
nothing cancels however small the cage.
"""

import numpy as np

from trajcage.kernel.codes import CLOSED, INVALID
from trajcage.kernel.jit import helper
from trajcage.kernel.scratch import POWER, REACH, X, Y, Z

__all__ = [
    "AREA",
    "AX",
    "AY",
    "STAMP",
    "TURN",
    "covered",
    "integrate_wall",
    "opening_ratio",
    "slot_of",
    "touch",
    "window",
]

_FULL = 4.0 * np.pi

# columns of Scratch.patch
STAMP, _X0, _Y0, _Z0, _RE, _IM, TURN, AX, AY, AZ, _ARCS, AREA = range(12)


@helper
def window(s, q):
    """Return the three candidates whose spheres meet in corner q."""
    t = s.mark[q, 0]
    f = s.mark[q, 1]
    a = s.cell[t, 1 if f == 0 else 0]
    b = s.cell[t, 2 if f <= 1 else 1]
    c = s.cell[t, 3 if f <= 2 else 2]
    return a, b, c


@helper
def polish_corners(s, n_corners):
    """Move the corners from the spheres with broken ties to the true ones.

    One Newton step; where three spheres barely meet the step would amplify
    rounding, and the corner stays where it is (its error does not matter: the
    throat it closes has no width there).
    """
    for q in range(n_corners):
        a, b, c = window(s, q)
        px, py, pz = s.corner[q, 0], s.corner[q, 1], s.corner[q, 2]
        pp = px * px + py * py + pz * pz
        ax, ay, az = px - s.near[X, a], py - s.near[Y, a], pz - s.near[Z, a]
        bx, by, bz = px - s.near[X, b], py - s.near[Y, b], pz - s.near[Z, b]
        cx, cy, cz = px - s.near[X, c], py - s.near[Y, c], pz - s.near[Z, c]
        fa = (
            pp
            - 2.0 * (px * s.near[X, a] + py * s.near[Y, a] + pz * s.near[Z, a])
            + s.near[POWER, a]
        )
        fb = (
            pp
            - 2.0 * (px * s.near[X, b] + py * s.near[Y, b] + pz * s.near[Z, b])
            + s.near[POWER, b]
        )
        fc = (
            pp
            - 2.0 * (px * s.near[X, c] + py * s.near[Y, c] + pz * s.near[Z, c])
            + s.near[POWER, c]
        )
        ux, uy, uz = by * cz - bz * cy, bz * cx - bx * cz, bx * cy - by * cx
        vx, vy, vz = cy * az - cz * ay, cz * ax - cx * az, cx * ay - cy * ax
        wx, wy, wz = ay * bz - az * by, az * bx - ax * bz, ax * by - ay * bx
        det = ax * ux + ay * uy + az * uz
        if abs(det) > 1e-4 * s.near[REACH, a] * s.near[REACH, b] * s.near[REACH, c]:
            scale = -0.5 / det
            s.corner[q, 0] = px + scale * (fa * ux + fb * vx + fc * wx)
            s.corner[q, 1] = py + scale * (fa * uy + fb * vy + fc * wy)
            s.corner[q, 2] = pz + scale * (fa * uz + fb * vz + fc * wz)


@helper
def opening_ratio(s, a, b, c):
    """Factor on the exclusion radii at which the window a, b, c is just shut.

    The three scaled spheres then meet in one point of the plane of centers:
    |y - x_a|^2 = mu R_a^2 and likewise b and c, where y is linear in
    mu = lambda^2. For equal spheres lambda is circumradius / R.
    """
    x1, y1, z1 = (
        s.near[X, b] - s.near[X, a],
        s.near[Y, b] - s.near[Y, a],
        s.near[Z, b] - s.near[Z, a],
    )
    x2, y2, z2 = (
        s.near[X, c] - s.near[X, a],
        s.near[Y, c] - s.near[Y, a],
        s.near[Z, c] - s.near[Z, a],
    )
    d11 = x1 * x1 + y1 * y1 + z1 * z1
    d22 = x2 * x2 + y2 * y2 + z2 * z2
    d12 = x1 * x2 + y1 * y2 + z1 * z2
    ra = s.near[REACH, a] * s.near[REACH, a]
    rb = s.near[REACH, b] * s.near[REACH, b]
    rc = s.near[REACH, c] * s.near[REACH, c]
    det = d11 * d22 - d12 * d12
    # y - x_a = p e1 + q e2 with p, q linear in mu
    p0 = 0.5 * (d11 * d22 - d22 * d12) / det
    q0 = 0.5 * (d22 * d11 - d11 * d12) / det
    p1 = 0.5 * ((ra - rb) * d22 - (ra - rc) * d12) / det
    q1 = 0.5 * ((ra - rc) * d11 - (ra - rb) * d12) / det
    aa = p1 * p1 * d11 + q1 * q1 * d22 + 2.0 * p1 * q1 * d12
    bb = p0 * p1 * d11 + q0 * q1 * d22 + (p0 * q1 + q0 * p1) * d12 - 0.5 * ra
    cc = p0 * p0 * d11 + q0 * q0 * d22 + 2.0 * p0 * q0 * d12
    root = bb * bb - aa * cc
    if root < 0.0 or bb >= 0.0:
        return np.nan
    return np.sqrt(cc / (np.sqrt(root) - bb))


@helper
def touch(s, a, px, py, pz):
    """Start the sums of sphere a, with p as reference point, at first use."""
    if s.patch[a, STAMP] != s.clock[0]:
        s.patch[a, STAMP] = s.clock[0]
        s.seen[s.clock[1]] = a
        s.clock[1] += 1
        s.patch[a, _X0] = px - s.near[X, a]
        s.patch[a, _Y0] = py - s.near[Y, a]
        s.patch[a, _Z0] = pz - s.near[Z, a]
        s.patch[a, _RE] = 1.0
        s.patch[a, _IM] = 0.0
        s.patch[a, TURN] = 0.0
        s.patch[a, AX] = 0.0
        s.patch[a, AY] = 0.0
        s.patch[a, AZ] = 0.0
        s.patch[a, _ARCS] = 0.0


@helper
def _add_arc(
    s, a, ex, ey, ez, height, rho2, angle, sine, cosine, px, py, pz, dx, dy, dz
):
    """Add the arc p -> p + d, clockwise about the outward axis e of sphere a.

    ``height`` is the distance of the arc's plane from the center along e;
    sine and cosine are those of the arc's angle, times the squared radius
    ``rho2`` of its circle.
    """
    r = s.near[REACH, a]
    x0, y0, z0 = s.patch[a, _X0], s.patch[a, _Y0], s.patch[a, _Z0]
    r1x, r1y, r1z = px - s.near[X, a], py - s.near[Y, a], pz - s.near[Z, a]
    r2x, r2y, r2z = r1x + dx, r1y + dy, r1z + dz
    # spherical triangle (reference, p, p + d): E = 2 arg(re + i im)
    u1x, u1y, u1z = r1x - x0, r1y - y0, r1z - z0
    tx, ty, tz = u1y * dz - u1z * dy, u1z * dx - u1x * dz, u1x * dy - u1y * dx
    im = x0 * tx + y0 * ty + z0 * tz
    re = r * (
        r * r
        + x0 * (r1x + r2x)
        + y0 * (r1y + r2y)
        + z0 * (r1z + r2z)
        + r1x * r2x
        + r1y * r2y
        + r1z * r2z
    )
    # sliver between geodesic and arc
    if angle < 0.05:
        c = height / r
        s2 = 1.0 - c * c
        a2 = angle * angle
        s.patch[a, TURN] -= (0.5 * c * s2 * angle * a2) * (
            1.0 / 6.0
            - a2 / 120.0 * (1.0 - 3.0 * s2)
            + a2 * a2 / 5040.0 * (1.0 - 15.0 * s2 + 22.5 * s2 * s2)
        )
        segment = rho2 * angle * a2 * (1.0 / 6.0 - a2 / 120.0 + a2 * a2 / 5040.0)
    else:
        k_re = (r + height) * rho2 + (r - height) * cosine
        k_im = (r - height) * sine
        re, im = re * k_re - im * k_im, re * k_im + im * k_re
        s.patch[a, TURN] -= angle * (1.0 - height / r)
        segment = rho2 * angle - sine
    # only the direction of the product matters; keep its size in range
    norm = 1.0 / (abs(re) + abs(im))
    re *= norm
    im *= norm
    o_re, o_im = s.patch[a, _RE], s.patch[a, _IM]
    s.patch[a, _RE] = o_re * re - o_im * im
    s.patch[a, _IM] = o_re * im + o_im * re
    segment *= -0.5
    s.patch[a, AX] += 0.5 * tx + segment * ex
    s.patch[a, AY] += 0.5 * ty + segment * ey
    s.patch[a, AZ] += 0.5 * tz + segment * ez
    s.patch[a, _ARCS] += 1.0


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
def _rotate(s, t, i, j, k, w, n_cells):
    """Turn about the pair in slots i, j of cell t from slot w to k and on.

    Returns (corner, slot of the corner's third sphere, dihedral angle turned).
    """
    a, b = s.cell[t, i], s.cell[t, j]
    for _ in range(4 * n_cells):
        other = s.across[t, w]
        if other < 0:
            return -2 - other, k
        i2 = slot_of(s, other, a)
        j2 = slot_of(s, other, b)
        w2 = slot_of(s, other, s.cell[t, k])
        k = 6 - i2 - j2 - w2
        t, i, j, w = other, i2, j2, w2
    return -1, 0


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
def _covered_half_angle(s, ex, ey, ez, mx, my, mz, c, qx, qy, qz):
    """Angle about the axis e between candidate c and the arc's end q - m."""
    wx, wy, wz = s.near[X, c] - mx, s.near[Y, c] - my, s.near[Z, c] - mz
    along = wx * ex + wy * ey + wz * ez
    wx, wy, wz = wx - along * ex, wy - along * ey, wz - along * ez
    vx, vy, vz = qx - mx, qy - my, qz - mz
    kx, ky, kz = wy * vz - wz * vy, wz * vx - wx * vz, wx * vy - wy * vx
    return np.arctan2(np.sqrt(kx * kx + ky * ky + kz * kz), wx * vx + wy * vy + wz * vz)


@helper
def _turned(s, t, i, j, k, w, n_cells):
    """Sum of the dihedral angles that `_rotate` passes."""
    a, b = s.cell[t, i], s.cell[t, j]
    total = 0.0
    for _ in range(4 * n_cells):
        total += _angle_about(s, a, b, s.cell[t, w], s.cell[t, k])
        other = s.across[t, w]
        if other < 0:
            break
        i2 = slot_of(s, other, a)
        j2 = slot_of(s, other, b)
        w2 = slot_of(s, other, s.cell[t, k])
        k = 6 - i2 - j2 - w2
        t, i, j, w = other, i2, j2, w2
    return total


@helper
def _arcs(s, n_cells, n_corners):
    """Walk every arc of the wall once and add it to its two spheres."""
    for q in range(n_corners):
        for f in range(4):
            s.mark[q, 2 + f] = 0
    for q in range(n_corners):
        t = s.mark[q, 0]
        k = s.mark[q, 1]
        for w in range(4):
            if w == k or s.mark[q, 2 + w] == 1:
                continue
            i = 0
            while i == k or i == w:
                i += 1
            j = 6 - i - k - w
            a, b = s.cell[t, i], s.cell[t, j]
            end, end_slot = _rotate(s, t, i, j, k, w, n_cells)
            if end < 0:
                return INVALID
            s.mark[q, 2 + w] = 1
            s.mark[end, 2 + end_slot] = 1
            ax, ay, az = s.near[X, a], s.near[Y, a], s.near[Z, a]
            ex, ey, ez = s.near[X, b] - ax, s.near[Y, b] - ay, s.near[Z, b] - az
            cx, cy, cz = (
                s.near[X, s.cell[t, w]] - ax,
                s.near[Y, s.cell[t, w]] - ay,
                s.near[Z, s.cell[t, w]] - az,
            )
            dx, dy, dz = (
                s.near[X, s.cell[t, k]] - ax,
                s.near[Y, s.cell[t, k]] - ay,
                s.near[Z, s.cell[t, k]] - az,
            )
            sense = (
                ex * (cy * dz - cz * dy)
                + ey * (cz * dx - cx * dz)
                + ez * (cx * dy - cy * dx)
            )
            # from here on the arc runs counterclockwise about a -> b
            p1, p2 = q, end
            if sense < 0.0:
                p1, p2 = end, q
            length = np.sqrt(ex * ex + ey * ey + ez * ez)
            inverse = 1.0 / length
            ex, ey, ez = ex * inverse, ey * inverse, ez * inverse
            ra, rb = s.near[REACH, a], s.near[REACH, b]
            height = 0.5 * (length + (ra - rb) * (ra + rb) * inverse)
            rho2 = max((ra - height) * (ra + height), 1e-300)
            mx, my, mz = ax + height * ex, ay + height * ey, az + height * ez
            x1, y1, z1 = s.corner[p1, 0], s.corner[p1, 1], s.corner[p1, 2]
            x2, y2, z2 = s.corner[p2, 0], s.corner[p2, 1], s.corner[p2, 2]
            dx, dy, dz = x2 - x1, y2 - y1, z2 - z1
            qx, qy, qz = x1 - mx, y1 - my, z1 - mz
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
                    - _covered_half_angle(
                        s,
                        ex,
                        ey,
                        ez,
                        mx,
                        my,
                        mz,
                        s.cell[t, w],
                        s.corner[q, 0],
                        s.corner[q, 1],
                        s.corner[q, 2],
                    )
                    - _covered_half_angle(
                        s,
                        ex,
                        ey,
                        ez,
                        mx,
                        my,
                        mz,
                        s.cell[s.mark[end, 0], end_slot],
                        s.corner[end, 0],
                        s.corner[end, 1],
                        s.corner[end, 2],
                    )
                )
                if expected > np.pi:
                    angle += 2.0 * np.pi
            elif angle < 0.0:
                angle += 2.0 * np.pi
            touch(s, a, x1, y1, z1)
            touch(s, b, x1, y1, z1)
            # counterclockwise about a -> b is clockwise about b -> a
            _add_arc(
                s,
                b,
                -ex,
                -ey,
                -ez,
                length - height,
                rho2,
                angle,
                sine,
                cosine,
                x1,
                y1,
                z1,
                dx,
                dy,
                dz,
            )
            _add_arc(
                s,
                a,
                ex,
                ey,
                ez,
                height,
                rho2,
                angle,
                sine,
                cosine,
                x2,
                y2,
                z2,
                -dx,
                -dy,
                -dz,
            )
    return CLOSED


@helper
def _ring_is_open(s, t, i, j, n_cells):
    """Tell whether all cells about an edge are in the cage, t the first of them."""
    a, b = s.cell[t, i], s.cell[t, j]
    k = 0
    while k == i or k == j:
        k += 1
    w = 6 - i - j - k
    first = t
    for _ in range(4 * n_cells):
        other = s.across[t, w]
        if other <= first:
            # round once; or a corner, or a ring already seen from an earlier cell
            return other == first
        i2 = slot_of(s, other, a)
        j2 = slot_of(s, other, b)
        w2 = slot_of(s, other, s.cell[t, k])
        k = 6 - i2 - j2 - w2
        t, i, j, w = other, i2, j2, w2
    return False


@helper
def covered(s, n, px, py, pz, depth, a, b):
    """Tell whether any candidate but a and b has a power below -depth at p."""
    for k in range(n):
        dx, dy, dz = s.near[X, k] - px, s.near[Y, k] - py, s.near[Z, k] - pz
        r = s.near[REACH, k]
        if dx * dx + dy * dy + dz * dz - r * r < -depth and k != a and k != b:
            return True
    return False


@helper
def _circles_and_islands(s, n, n_cells):
    """Add full circles in which two spheres meet, and spheres without any arc."""
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
                a, b = s.cell[t, i], s.cell[t, j]
                ex, ey, ez = (
                    s.near[X, b] - s.near[X, a],
                    s.near[Y, b] - s.near[Y, a],
                    s.near[Z, b] - s.near[Z, a],
                )
                length = np.sqrt(ex * ex + ey * ey + ez * ez)
                ra, rb = s.near[REACH, a], s.near[REACH, b]
                height = 0.5 * (length + (ra - rb) * (ra + rb) / length)
                rho2 = (ra - height) * (ra + height)
                if rho2 <= 0.0 or not _ring_is_open(s, t, i, j, n_cells):
                    continue
                ex, ey, ez = ex / length, ey / length, ez / length
                mx = s.near[X, a] + height * ex
                my = s.near[Y, a] + height * ey
                mz = s.near[Z, a] + height * ez
                if covered(s, n, mx, my, mz, rho2, a, b):
                    continue
                touch(s, a, mx, my, mz)
                touch(s, b, mx, my, mz)
                s.patch[a, TURN] -= 2.0 * np.pi * (1.0 - height / ra)
                s.patch[b, TURN] -= 2.0 * np.pi * (1.0 - (length - height) / rb)
                half = np.pi * rho2
                s.patch[a, AX] -= half * ex
                s.patch[a, AY] -= half * ey
                s.patch[a, AZ] -= half * ez
                s.patch[b, AX] += half * ex
                s.patch[b, AY] += half * ey
                s.patch[b, AZ] += half * ez
    for t in range(n_cells):
        for i in range(4):
            a = s.cell[t, i]
            if s.patch[a, STAMP] == s.clock[0]:
                continue
            x, y, z, r = s.near[X, a], s.near[Y, a], s.near[Z, a], s.near[REACH, a]
            touch(s, a, x, y, z)
            if covered(s, n, x, y, z, r * r, a, a):
                # nothing of this sphere is seen
                s.patch[a, _ARCS] = -1.0


@helper
def _patch_area(s, a):
    """Area of the wall on sphere a over R^2, between 0 and 4 pi."""
    if s.patch[a, _ARCS] < 0.0:
        return 0.0
    area = s.patch[a, TURN]
    if s.patch[a, _ARCS] == 0.0:
        return area + _FULL
    area += 2.0 * np.arctan2(s.patch[a, _IM], s.patch[a, _RE])
    area -= _FULL * np.floor(area / _FULL)
    if area > _FULL - 1e-6:
        # rounding below zero, or a sphere all but free: its vector area tells
        outward = (
            s.patch[a, AX] * s.patch[a, _X0]
            + s.patch[a, AY] * s.patch[a, _Y0]
            + s.patch[a, AZ] * s.patch[a, _Z0]
        )
        r = s.near[REACH, a]
        if outward > -1e-14 * r * r * r:
            area -= _FULL
    return area


@helper
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
    _circles_and_islands(s, n, n_cells)
    volume = 0.0
    surface = 0.0
    wall_sum = 0.0
    tx, ty, tz = 0.0, 0.0, 0.0
    for m in range(s.clock[1]):
        a = s.seen[m]
        x, y, z, r = s.near[X, a], s.near[Y, a], s.near[Z, a], s.near[REACH, a]
        power = s.near[POWER, a]
        area = _patch_area(s, a) * r * r
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
    closure = np.sqrt(tx * tx + ty * ty + tz * tz)
    if not closure <= 1e-7 * surface + 1e-280:
        return INVALID, 0.0, 0.0, 0.0, 0, 0.0, -1
    bounding = 0
    for m in range(s.clock[1]):
        # patches born from broken ties have no area
        if s.patch[s.seen[m], AREA] > 1e-10 * surface:
            s.seen[bounding] = s.seen[m]
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
