"""Sums over the pieces of the cage wall that lie on one sphere (3D).

A patch needs no loops traced: its area is a sum over arcs of spherical
triangles to one reference point plus the slivers between arc and geodesic,
modulo the whole sphere (a form of Gauss-Bonnet that stays accurate for patches
much smaller than the sphere). Its vector area is the boundary integral of
r x dr / 2.
"""

import numpy as np

from trajcage.kernel.jit import helper, inlined
from trajcage.kernel.scratch import POWER, REACH, X, Y, Z

__all__ = [
    "ARCS",
    "AREA",
    "AX",
    "AY",
    "AZ",
    "STAMP",
    "TURN",
    "add_arc",
    "held_fast",
    "opening_ratio",
    "patch_area",
    "polish_corners",
    "touch",
    "window",
]

_FULL = 4.0 * np.pi

# columns of Scratch.patch
STAMP, _X0, _Y0, _Z0, _RE, _IM, TURN, AX, AY, AZ, ARCS, AREA, _R0 = range(13)


@helper
def window(s, q):
    """Return the three candidates whose spheres meet in corner q."""
    t = s.mark[q, 0]
    f = s.mark[q, 1]
    a = s.cell[t, 1 if f == 0 else 0]
    b = s.cell[t, 2 if f <= 1 else 1]
    c = s.cell[t, 3 if f <= 2 else 2]
    return a, b, c


@inlined
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
def held_fast(s, n_corners):
    """Tell whether contacts hold the particle to within the rounding of its input.

    The corners of the true spheres then lie in a point, so far as anybody can
    tell, and the sums over the wall are rounding: there is no room. Lengths
    are of the order of one here, see `trajcage.kernel.cages`.
    """
    for q in range(n_corners):
        x, y, z = s.corner[q, 0], s.corner[q, 1], s.corner[q, 2]
        if x * x + y * y + z * z > 1e-28:
            return False
    return n_corners > 0


@inlined
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
    half = 0.5 / det
    p0 = half * (d11 * d22 - d22 * d12)
    q0 = half * (d22 * d11 - d11 * d12)
    p1 = half * ((ra - rb) * d22 - (ra - rc) * d12)
    q1 = half * ((ra - rc) * d11 - (ra - rb) * d12)
    aa = p1 * p1 * d11 + q1 * q1 * d22 + 2.0 * p1 * q1 * d12
    bb = p0 * p1 * d11 + q0 * q1 * d22 + (p0 * q1 + q0 * p1) * d12 - 0.5 * ra
    cc = p0 * p0 * d11 + q0 * q0 * d22 + 2.0 * p0 * q0 * d12
    root = bb * bb - aa * cc
    if root < 0.0 or bb >= 0.0:
        return np.nan
    return np.sqrt(cc / (np.sqrt(root) - bb))


@inlined
def touch(s, a, px, py, pz):
    """Start the sums of sphere a, with p as reference point, at first use."""
    if s.patch[a, STAMP] != s.clock[0]:
        s.patch[a, STAMP] = s.clock[0]
        s.seen[s.clock[1]] = a
        s.clock[1] += 1
        s.patch[a, _X0] = px
        s.patch[a, _Y0] = py
        s.patch[a, _Z0] = pz
        s.patch[a, _RE] = 1.0
        s.patch[a, _IM] = 0.0
        s.patch[a, TURN] = 0.0
        s.patch[a, AX] = 0.0
        s.patch[a, AY] = 0.0
        s.patch[a, AZ] = 0.0
        s.patch[a, ARCS] = 0.0
        px, py, pz = px - s.near[X, a], py - s.near[Y, a], pz - s.near[Z, a]
        s.patch[a, _R0] = np.sqrt(px * px + py * py + pz * pz)


@inlined
def add_arc(s, a, ex, ey, ez, height, circle, px, py, pz, dx, dy, dz):
    """Add the arc p -> p + d, clockwise about the outward axis e of sphere a.

    ``height`` is the distance of the arc's plane from the center along e.
    ``circle`` is the squared radius of the arc's circle, the arc's angle, its
    sine and cosine times the squared radius, and the squared nudge of the
    reference.

    The reference point lies beside the first corner, off it in a direction
    without symmetry by a part of the cage's size: as close as the cage is
    small, and in no symmetric cage opposite to a corner, where a spherical
    triangle has no direction. It need not lie on the sphere. All small
    differences are differences of points relative to the particle, which
    keeps the digits of tiny cages.
    """
    rho2, angle, sine, cosine, nudge2 = circle
    if s.patch[a, STAMP] != s.clock[0]:
        nudge = np.sqrt(nudge2)
        touch(s, a, px + 0.482 * nudge, py + 0.673 * nudge, pz - 0.561 * nudge)
    r = s.near[REACH, a]
    cx, cy, cz = s.near[X, a], s.near[Y, a], s.near[Z, a]
    u1x, u1y, u1z = px - s.patch[a, _X0], py - s.patch[a, _Y0], pz - s.patch[a, _Z0]
    x0, y0, z0 = s.patch[a, _X0] - cx, s.patch[a, _Y0] - cy, s.patch[a, _Z0] - cz
    r0 = s.patch[a, _R0]
    r1x, r1y, r1z = px - cx, py - cy, pz - cz
    r2x, r2y, r2z = r1x + dx, r1y + dy, r1z + dz
    # solid angle of the triangle (reference, p, p + d): E = 2 arg(re + i im)
    # (Van Oosterom & Strackee 1983)
    tx, ty, tz = u1y * dz - u1z * dy, u1z * dx - u1x * dz, u1x * dy - u1y * dx
    im = x0 * tx + y0 * ty + z0 * tz
    re = r0 * (r * r + r1x * r2x + r1y * r2y + r1z * r2z) + r * (
        x0 * (r1x + r2x) + y0 * (r1y + r2y) + z0 * (r1z + r2z)
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
    o_re, o_im = s.patch[a, _RE], s.patch[a, _IM]
    re, im = o_re * re - o_im * im, o_re * im + o_im * re
    size = abs(re) + abs(im)
    if size < 1e-100 or size > 1e100:
        # only the direction of the product matters; keep its size in range
        re /= size
        im /= size
    s.patch[a, _RE] = re
    s.patch[a, _IM] = im
    segment *= -0.5
    s.patch[a, AX] += 0.5 * tx + segment * ex
    s.patch[a, AY] += 0.5 * ty + segment * ey
    s.patch[a, AZ] += 0.5 * tz + segment * ez
    s.patch[a, ARCS] += 1.0


@inlined
def patch_area(s, a):
    """Area of the wall on sphere a over R^2, between 0 and 4 pi."""
    if s.patch[a, ARCS] < 0.0:
        return 0.0
    area = s.patch[a, TURN]
    if s.patch[a, ARCS] == 0.0:
        return area + _FULL
    area += 2.0 * np.arctan2(s.patch[a, _IM], s.patch[a, _RE])
    area -= _FULL * np.floor(area / _FULL)
    if area > _FULL - 1e-6:
        # rounding below zero, or a sphere all but free: its vector area tells
        outward = (
            s.patch[a, AX] * (s.patch[a, _X0] - s.near[X, a])
            + s.patch[a, AY] * (s.patch[a, _Y0] - s.near[Y, a])
            + s.patch[a, AZ] * (s.patch[a, _Z0] - s.near[Z, a])
        )
        r = s.near[REACH, a]
        if outward > -1e-14 * r * r * r:
            area -= _FULL
    return area
