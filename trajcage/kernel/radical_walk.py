"""One radical (power, Laguerre) Voronoi cell as a walk over its vertices.

Each vertex has three edges. An edge whose other end is unknown leads to the next
vertex; an edge seen from both ends is done and adds its share to the areas of its
two facets. So no facet needs to be traced, and a cell with V vertices takes V - 1
passes over the candidates.
"""

import numpy as np

from trajcage.kernel.codes import BORDER, CLOSED, INVALID
from trajcage.kernel.flood3d import outside
from trajcage.kernel.jit import helper
from trajcage.kernel.radical_planes import (
    BOUNDING,
    FACET,
    LEVEL,
    SHIFTED,
    X,
    Y,
    Z,
    along,
    certain,
    collect,
    first_vertex,
    further,
    leaves,
    next_along,
    solve,
)

__all__ = ["walk_cell"]


@helper
def _add(s, sense, a, b, v, w):
    """Add the edge from vertex v to w to facets a and b."""
    x1, y1, z1 = s.vertex[v, 3], s.vertex[v, 4], s.vertex[v, 5]
    x2, y2, z2 = s.vertex[w, 3], s.vertex[w, 4], s.vertex[w, 5]
    cx = sense * (y1 * z2 - z1 * y2)
    cy = sense * (z1 * x2 - x1 * z2)
    cz = sense * (x1 * y2 - y1 * x2)
    near = s.near
    near[FACET, a] += cx * near[X, a] + cy * near[Y, a] + cz * near[Z, a]
    near[FACET, b] -= cx * near[X, b] + cy * near[Y, b] + cz * near[Z, b]


@helper
def _key(a, b):
    return (min(a, b) << 32) | max(a, b)


@helper
def _push(s, m, a, b, c, v):
    """Put an edge a b that leaves plane c at vertex v on the stack."""
    s.key[m] = _key(a, b)
    s.edge[m, 0] = a
    s.edge[m, 1] = b
    s.edge[m, 2] = c
    s.edge[m, 3] = v
    return m + 1


@helper
def _meet(s, m, a, b, c, v, sense):
    """Close the edge a b at vertex v if its other end is known, else stack it."""
    key = _key(a, b)
    for e in range(m - 1, -1, -1):
        if s.key[e] == key:
            _add(s, sense, a, b, v, s.edge[e, 3])
            m -= 1
            s.key[e] = s.key[m]
            for column in range(4):
                s.edge[e, column] = s.edge[m, column]
            return m
    return _push(s, m, a, b, c, v)


@helper
def walk_cell(grid, s, i, xi, yi, zi, ri, known, limits, shift):
    """Find all vertices of a cell and sum up its facets in row FACET.

    Parameters
    ----------
    grid, s : Grid, CellScratch
    i, xi, yi, zi, ri
        Particle, its position in the grid and its radius.
    known : float
        Distance up to which candidates are collected at first.
    limits : tuple
        r_max^2 - r_i^2; distance up to which the grid is complete; distance
        beyond which a cell is no cell; whether the box has an open edge.
    shift : float
        Strength of the tie-breaking.

    Returns
    -------
    code, n_candidates
    """
    excess, _, _, is_open = limits
    code, n, known, inside, a, b, c = first_vertex(
        grid, s, i, xi, yi, zi, ri, known, limits, shift
    )
    if code != CLOSED:
        return code, n
    for k in range(s.begin[BOUNDING]):
        s.near[SHIFTED, k] = np.inf
    safe = certain(known, excess)
    vertex = s.vertex
    vertex[0, 0], vertex[0, 1], vertex[0, 2] = solve(s, SHIFTED, a, b, c)
    # true vertices relative to the first one
    ox, oy, oz = solve(s, LEVEL, a, b, c)
    vertex[0, 3], vertex[0, 4], vertex[0, 5] = 0.0, 0.0, 0.0
    px, py, pz = vertex[0, 0], vertex[0, 1], vertex[0, 2]
    ball = np.sqrt(px * px + py * py + pz * pz + excess)
    if is_open and outside(grid, xi, yi, zi, px, py, pz, ball):
        return BORDER, n
    n_vertices = 0
    height = 0
    for _ in range(3):
        height = _push(s, height, a, b, c, n_vertices)
        a, b, c = b, c, a
    while height > 0:
        height -= 1
        a, b, c = s.edge[height, 0], s.edge[height, 1], s.edge[height, 2]
        v = s.edge[height, 3]
        px, py, pz = vertex[v, 0], vertex[v, 1], vertex[v, 2]
        nx, ny, nz, sense = along(s, a, b, c)
        while True:
            who, t = next_along(s, n, px, py, pz, nx, ny, nz, a, b, c)
            if who >= 0:
                qx, qy, qz = solve(s, SHIFTED, a, b, who)
                far2 = qx * qx + qy * qy + qz * qz
                if far2 <= safe * safe:
                    break
                far = np.sqrt(far2)
                dx = px + 0.5 * t * nx - qx
                dy = py + 0.5 * t * ny - qy
                dz = pz + 0.5 * t * nz - qz
                if not dx * dx + dy * dy + dz * dz < 1e-6 * far2:
                    # rounding decides where planes meet that belong to centers as
                    # close as 1e-8 of the spacing; no wider view would help
                    return INVALID, n
            else:
                # nothing known bounds the edge
                qx, qy, qz = nx, ny, nz
                far2 = nx * nx + ny * ny + nz * nz
                far = np.inf
            if (
                is_open
                and inside
                and leaves(grid, xi, yi, zi, qx, qy, qz, np.sqrt(far2), safe, excess)
            ):
                return BORDER, n
            code, want = further(known, far, limits)
            if code != CLOSED:
                return code, n
            code, n, _ = collect(grid, s, i, xi, yi, zi, ri, n, known, want, shift)
            if code != CLOSED:
                return code, n
            known = want
            safe = certain(known, excess)
        if is_open and outside(grid, xi, yi, zi, qx, qy, qz, np.sqrt(far2 + excess)):
            return BORDER, n
        if n_vertices + 1 >= 2 * n:
            # more than a polytope with n facets can have
            return INVALID, n
        n_vertices += 1
        w = n_vertices
        vertex[w, 0], vertex[w, 1], vertex[w, 2] = qx, qy, qz
        tx, ty, tz = solve(s, LEVEL, a, b, who)
        vertex[w, 3], vertex[w, 4], vertex[w, 5] = tx - ox, ty - oy, tz - oz
        _add(s, sense, a, b, v, w)
        height = _meet(s, height, a, who, b, w, sense)
        height = _meet(s, height, who, b, a, w, sense)
    s.origin[0], s.origin[1], s.origin[2] = ox, oy, oz
    return CLOSED, n
