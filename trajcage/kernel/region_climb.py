"""The way from a particle to the region around it."""

import numpy as np

from trajcage.kernel.codes import INVALID, NEED_CAPACITY, NEED_HALO
from trajcage.kernel.grid import gather
from trajcage.kernel.jit import helper
from trajcage.kernel.region_cells import LEAST, STEP, key_of, name
from trajcage.kernel.region_walk import solve
from trajcage.kernel.scratch import REACH, X, Y, Z

__all__ = ["climb"]


@helper
def climb(spheres, look, i, first, plane):
    """Walk up the power distance from particle i, which is taken out, to a vertex.

    The path stays in its region, since power only grows along it. Returns
    (code, conflict): whether i would cut the vertex. The cell is
    ``look.trial[2]`` and its vertex ``look.point``.
    """
    near = look.near
    grid, reaches, largest = spheres.grid, spheres.reaches, spheres.largest
    xi, yi, zi = grid.home[i, 0], grid.home[i, 1], grid.home[i, 2]
    m = 4 if plane is None else 3
    n = np.int64(LEAST)
    known = -1.0
    want = first
    a, b, c, d = LEAST, LEAST, LEAST, LEAST
    px, py, pz = 0.0, 0.0, 0.0
    stage = m - 1
    while True:
        if want > known:
            if want > grid.halo:
                return NEED_HALO, False
            total = gather(grid, i, xi, yi, zi, known, want, look.found, n)
            if total < 0:
                return NEED_CAPACITY, False
            for k in range(n, total):
                slot = look.found[k]
                x, y, z = (
                    grid.points[0, slot] - xi,
                    grid.points[1, slot] - yi,
                    grid.points[2, slot] - zi,
                )
                r = reaches[grid.owner[slot]]
                near[X, k] = x
                near[Y, k] = y
                near[Z, k] = z
                near[REACH, k] = r
                near[STEP, k] = x * x + y * y + z * z - r * r
            n = total
            known = want
            # a new candidate may be nearer than the old ones: start again
            stage = 0
            a = LEAST
            for k in range(LEAST, n):
                if near[STEP, k] < near[STEP, a]:
                    a = k
            b, c, d = a, a, a
            px, py, pz = 0.0, 0.0, 0.0
            if n == LEAST:
                want = 1.5 * known
                continue
        ax, ay, az = near[X, a], near[Y, a], near[Z, a]
        nx, ny, nz = px - ax, py - ay, pz - az
        if stage > 0:
            ux, uy, uz = near[X, b] - ax, near[Y, b] - ay, near[Z, b] - az
            uu = ux * ux + uy * uy + uz * uz
            if stage == m - 2:
                vx, vy, vz = 0.0, 0.0, 1.0
                if plane is None:
                    vx, vy, vz = near[X, c] - ax, near[Y, c] - ay, near[Z, c] - az
                sx, sy, sz = uy * vz - uz * vy, uz * vx - ux * vz, ux * vy - uy * vx
                if nx * sx + ny * sy + nz * sz < 0.0:
                    sx, sy, sz = -sx, -sy, -sz
                nx, ny, nz = sx, sy, sz
            else:
                along = (nx * ux + ny * uy + nz * uz) / uu
                nx, ny, nz = nx - along * ux, ny - along * uy, nz - along * uz
                if nx * nx + ny * ny + nz * nz < 1e-12 * uu:
                    # on the line of centers: every way out is uphill
                    if abs(ux) <= abs(uy) and abs(ux) <= abs(uz):
                        nx, ny, nz = 0.0, uz, -uy
                    elif abs(uy) <= abs(uz):
                        nx, ny, nz = -uz, 0.0, ux
                    else:
                        nx, ny, nz = uy, -ux, 0.0
        step = np.inf
        who = -1
        g = near[STEP, a]
        for k in range(LEAST, n):
            dx, dy, dz = near[X, k] - ax, near[Y, k] - ay, near[Z, k] - az
            h = 2.0 * (nx * dx + ny * dy + nz * dz)
            rise = near[STEP, k] - g - 2.0 * (px * dx + py * dy + pz * dz)
            if h > 0.0 and rise < step * h and k != a and k != b and k != c:
                step = rise / h
                who = k
        if who < 0:
            want = 1.5 * known
            continue
        qx, qy, qz = px + step * nx, py + step * ny, pz + step * nz
        if stage == m - 2:
            e = np.int64(c) if plane is None else np.int64(who)
            qx, qy, qz, power = solve(near, a, b, e, np.int64(who), plane)
        dx, dy, dz, r = qx - ax, qy - ay, qz - az, near[REACH, a]
        power = dx * dx + dy * dy + dz * dz - r * r
        ball = np.sqrt(max(power, 0.0) + largest * largest)
        want = np.sqrt(qx * qx + qy * qy + qz * qz) + ball
        if not want < np.inf:
            # few candidates can lie in one plane, those of a whole box do not
            if known > spheres.extent:
                return INVALID, False
            want = np.inf
        if want > known:
            want = min(want, 1.3 * known)
            continue
        px, py, pz = qx, qy, qz
        if stage == 0:
            b = who
        elif stage == 1:
            c = who
        else:
            d = who
        stage += 1
        if stage == m - 1:
            break
    for k in range(m):
        who = a if k == 0 else (b if k == 1 else (c if k == 2 else d))
        look.trial[0, k] = key_of(grid, look.found[who])
        if look.trial[0, k] < 0:
            return INVALID, False
    r = reaches[i]
    conflict = px * px + py * py + pz * pz - r * r < power
    # images of i, which were left out
    total = gather(grid, np.int64(-1), xi, yi, zi, 0.0, known, look.found, n)
    if total < 0:
        return NEED_CAPACITY, False
    for k in range(n, total):
        slot = look.found[k]
        if grid.owner[slot] == i:
            dx, dy, dz = (
                grid.points[0, slot] - xi - px,
                grid.points[1, slot] - yi - py,
                grid.points[2, slot] - zi - pz,
            )
            if dx * dx + dy * dy + dz * dz - r * r < power:
                conflict = True
    return name(spheres, look, i, px, py, pz, power, m), conflict
