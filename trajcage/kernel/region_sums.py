"""Free volume and wall area of one cell, in pieces that can be added up in any order.

A simplex with vertex z of the power diagram is cut into right-angled simplices with
signs, one for each chain of a sphere, an edge, a face and the cell: their corners are
the sphere's center, the radical points of edge and face, and z. In each of them only
its own sphere counts, and what it leaves free has a closed form. The signed sum over
the cells of a region is its volume although a single cell may not keep to its part.

Method: S. Sastry, D. S. Corti, P. G. Debenedetti & F. H. Stillinger, Phys. Rev. E 56,
5524 (1997), for spheres of any size and with closed forms in arc tangents.
"""

import numpy as np

from trajcage.kernel.jit import helper
from trajcage.kernel.region_cells import VERTEX, VOLUME, opposite
from trajcage.kernel.scratch import REACH, X, Y, Z

__all__ = ["sum_cell"]


@helper
def _right_angled(h1, h2, h3, r):
    """Free volume of a right-angled tetrahedron with legs h1, h2, h3 >= 0.

    The sphere of radius r about the first corner leaves the last one free. Also
    returns the area of the sphere inside.
    """
    rho2 = (r - h1) * (r + h1)
    angle = np.arctan2(h3, h2)
    d3 = np.sqrt(h1 * h1 + h2 * h2 + h3 * h3)
    solid = -np.arctan2(h1 * h3, h2 * d3)
    if rho2 <= 0.0:
        # the sphere does not reach the radical plane
        area = r * r * (angle + solid)
        return (0.5 * h1 * h2 * h3 - r * area) / 3.0, area
    free = 0.5 * h2 * h3
    if rho2 > h2 * h2:
        # it reaches beyond the radical line of the face, up to height c
        c = np.sqrt(rho2 - h2 * h2)
        if c >= h3:
            return 0.0, 0.0
        free -= 0.5 * h2 * c
        angle -= np.arctan2(c, h2)
        solid += np.arctan2(h1 * c, h2 * r)
    free -= 0.5 * rho2 * angle
    area = r * (h1 * angle + r * solid)
    return (h1 * free - r * area) / 3.0, area


@helper
def _right_angled_plane(h1, h2, r):
    """Do the same in a plane: free area of a triangle, and length of the circle."""
    angle = np.arctan2(h2, h1)
    free = 0.5 * h1 * h2
    if r > h1:
        c = np.sqrt((r - h1) * (r + h1))
        if c >= h2:
            return 0.0, 0.0
        free -= 0.5 * h1 * c
        angle -= np.arctan2(c, h1)
    return free - 0.5 * r * r * angle, r * angle


@helper
def _edge(near, a, b):
    """Return the unit vector a to b and how far their radical plane is from both."""
    ex, ey, ez = (
        near[X, b] - near[X, a],
        near[Y, b] - near[Y, a],
        near[Z, b] - near[Z, a],
    )
    length = np.sqrt(ex * ex + ey * ey + ez * ez)
    ra, rb = near[REACH, a], near[REACH, b]
    h = 0.5 * (length + (ra - rb) * (ra + rb) / length)
    return ex / length, ey / length, ez / length, h, length - h


@helper
def sum_cell(cells, look, t, plane):
    """Write the free volume of a loaded cell and the wall area on its spheres."""
    near = look.near
    value = cells.value
    for k in range(5):
        value[t, VOLUME + k] = 0.0
    px, py, pz = value[t, VERTEX], value[t, VERTEX + 1], value[t, VERTEX + 2]
    if plane is not None:
        for c in range(3):
            a = 1 if c == 0 else 0
            b = 3 - a - c
            ex, ey, _, ha, hb = _edge(near, a, b)
            wx, wy = near[X, c] - near[X, a], near[Y, c] - near[Y, a]
            side = ex * wy - ey * wx
            h2 = ex * (py - near[Y, a]) - ey * (px - near[X, a])
            if side < 0.0:
                h2 = -h2
            for k in range(2):
                who, h = (a, ha) if k == 0 else (b, hb)
                free, arc = _right_angled_plane(abs(h), abs(h2), near[REACH, who])
                sign = -1.0 if (h < 0.0) != (h2 < 0.0) else 1.0
                value[t, VOLUME] += sign * free
                value[t, VOLUME + 1 + who] += sign * arc
        return
    for f in range(4):
        i, j, k = opposite(f)
        x0, y0, z0 = near[X, i], near[Y, i], near[Z, i]
        ux, uy, uz = near[X, j] - x0, near[Y, j] - y0, near[Z, j] - z0
        vx, vy, vz = near[X, k] - x0, near[Y, k] - y0, near[Z, k] - z0
        nx, ny, nz = uy * vz - uz * vy, uz * vx - ux * vz, ux * vy - uy * vx
        size = np.sqrt(nx * nx + ny * ny + nz * nz)
        top = nx * (near[X, f] - x0) + ny * (near[Y, f] - y0) + nz * (near[Z, f] - z0)
        if top < 0.0:
            size = -size
        nx, ny, nz = nx / size, ny / size, nz / size
        h3 = nx * (px - x0) + ny * (py - y0) + nz * (pz - z0)
        for m in range(3):
            a, b, c = (i, j, k) if m == 0 else ((i, k, j) if m == 1 else (j, k, i))
            ex, ey, ez, ha, hb = _edge(near, a, b)
            # within the face, away from the edge toward c
            wx, wy, wz = ny * ez - nz * ey, nz * ex - nx * ez, nx * ey - ny * ex
            ax, ay, az = near[X, a], near[Y, a], near[Z, a]
            h2 = wx * (px - ax) + wy * (py - ay) + wz * (pz - az)
            if (
                wx * (near[X, c] - ax) + wy * (near[Y, c] - ay) + wz * (near[Z, c] - az)
                < 0.0
            ):
                h2 = -h2
            flip = (h2 < 0.0) != (h3 < 0.0)
            free, area = _right_angled(abs(ha), abs(h2), abs(h3), near[REACH, a])
            sign = -1.0 if flip != (ha < 0.0) else 1.0
            value[t, VOLUME] += sign * free
            value[t, VOLUME + 1 + a] += sign * area
            free, area = _right_angled(abs(hb), abs(h2), abs(h3), near[REACH, b])
            sign = -1.0 if flip != (hb < 0.0) else 1.0
            value[t, VOLUME] += sign * free
            value[t, VOLUME + 1 + b] += sign * area
