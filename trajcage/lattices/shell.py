"""Cages bounded by one shell of equal, equally distant neighbors, to rounding.

The unit of length is the nearest-neighbor distance. All formulas take ``gap``, one
minus the diameter, and are written without differences of nearly equal numbers, so
that they keep their relative accuracy up to close packing, where v_f ~ gap^d.

Seen from the vacated site, the wall at an angle theta from a neighbor's direction
is at r = cos(theta) - sqrt(s^2 - sin^2(theta)) with s the diameter. With
u = cos(theta) and k^2 = 1 - s^2 this is r = u - sqrt(u^2 - k^2), and both
``r^3 du`` and ``r^2 s du / sqrt(u^2 - k^2)`` integrate to polynomials in r. What is
left in space is one integral over the azimuth along each edge of the limiting
polytope, the planes that touch the neighbors at close packing.
"""

import math

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "CageSize",
    "FacetEdges",
    "facet_edges",
    "plane_shell",
    "plane_stage_two",
    "space_shell",
]

#: Free volume and free surface in powers of the nearest-neighbor distance.
CageSize = tuple[float, float]

#: Edges of a polytope, see :func:`facet_edges`.
FacetEdges = tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]

#: Area, inner angles over 2 pi and edges of the polygons around a vacated site.
_JOINED_POLYGONS = {
    "square": (4.0, 3, 8),
    "honeycomb": (4.5 * math.sqrt(3), 5, 12),
}


def plane_shell(n_neighbors: int, gap: float) -> CageSize:
    """Measure the cage of equally spaced neighbors in the plane.

    Parameters
    ----------
    n_neighbors : int
        Nearest neighbors, 3, 4 or 6.
    gap : float
        One minus the diameter.

    Returns
    -------
    tuple of float
        Free area and free perimeter.
    """
    diameter = 1.0 - gap
    half_angle = math.pi / n_neighbors
    sine, cosine = math.sin(half_angle), math.cos(half_angle)
    root = math.sqrt(max(diameter * diameter - sine * sine, 0.0))
    # the corner between two neighbors is at (1 - s^2) / (cos + root) from the site
    half_width = gap * (2.0 - gap) * sine / (cosine + root)
    excess = _arcsine_excess(half_width / diameter)
    area = n_neighbors * half_width * (gap - diameter * excess)
    perimeter = 2.0 * n_neighbors * half_width * (1.0 + excess)
    return area, perimeter


def _arcsine_excess(x: float) -> float:
    """Return asin(x) / x - 1 without cancellation at small x."""
    if x > 0.3:
        return math.asin(x) / x - 1.0
    total, coefficient, square = 0.0, 1.0, x * x
    for k in range(1, 17):
        coefficient *= (2 * k - 1) / (2 * k) * square
        total += coefficient / (2 * k + 1)
    return total


def plane_stage_two(lattice_name: str, gap: float) -> CageSize:
    """Measure the cage in the plane that has grown past its nearest neighbors.

    The vacated site joins the polygons around it into one (four squares, three
    hexagons). The disks on its corners are subtracted; those that share an edge
    overlap in half a lens on the inner side. Derived here.

    Parameters
    ----------
    lattice_name : {"square", "honeycomb"}
        Lattice.
    gap : float
        One minus the diameter; the diameter lies between 1/2 and that at which the
        cage grows.

    Returns
    -------
    tuple of float
        Free area and free perimeter.
    """
    polygon, corner_disks, edges = _JOINED_POLYGONS[lattice_name]
    s = 1.0 - gap
    angle = math.acos(min(0.5 / s, 1.0))
    lens = 2 * s * s * angle - 0.5 * math.sqrt(max(4 * s * s - 1.0, 0.0))
    area = polygon - corner_disks * math.pi * s * s + edges * lens / 2
    return area, 2 * s * (corner_disks * math.pi - edges * angle)


def space_shell(edges: FacetEdges, gap: float) -> CageSize:
    """Measure the cage of equally distant neighbors in space.

    Parameters
    ----------
    edges : FacetEdges
        Edges of the limiting polytope.
    gap : float
        One minus the diameter.

    Returns
    -------
    tuple of float
        Free volume and free surface.
    """
    diameter = 1.0 - gap
    k_squared = gap * (2.0 - gap)
    distances, lower, upper = edges
    offsets = np.concatenate([upper, lower])
    signs = np.concatenate([np.sign(upper), -np.sign(lower)])
    inradii = np.concatenate([distances, distances])[:, np.newaxis]
    ends = np.arctan(np.abs(offsets) / inradii[:, 0])[:, np.newaxis]

    cosine = np.cos(ends * _NODES)
    u = cosine / np.sqrt(cosine * cosine + inradii * inradii)
    r = k_squared / (u + np.sqrt(np.maximum(u * u - k_squared, 0.0)))
    ring = r * r - gap * gap
    weights = signs[:, np.newaxis] * ends * _WEIGHTS
    volume = np.sum(weights * ring * (2 * k_squared - r * r - gap * gap)) / 24
    surface = np.sum(weights * ring) * diameter / 2
    return float(volume), float(surface)


def facet_edges(directions: NDArray[np.float64]) -> FacetEdges:
    """Return all facet edges of the polytope of planes x.n = 1.

    Parameters
    ----------
    directions : (m, 3) float64
        Unit normals n of the facets, the directions to the neighbors.

    Returns
    -------
    distances, lower, upper : (k,) float64
        Distance of the edge's line from the foot of its facet's normal, and where
        along that line, counted from its nearest point, the edge starts and ends.
    """
    edges = []
    for normal in directions:
        cosines = directions @ normal
        others = np.abs(cosines) < 1 - 1e-9
        c = cosines[others, np.newaxis]
        toward = (directions[others] - c * normal) / np.sqrt(1 - c * c)
        feet = np.sqrt((1 - c) / (1 + c))[:, 0]
        for foot, direction in zip(feet, toward, strict=True):
            # the part of this line inside all other lines of the facet
            slope = toward @ np.cross(normal, direction)
            room = feet - foot * (toward @ direction)
            parallel = np.abs(slope) < 1e-9
            if np.any(room[parallel] < -1e-9):
                continue
            rising, falling = slope > 1e-9, slope < -1e-9
            lower = (room[falling] / slope[falling]).max()
            upper = (room[rising] / slope[rising]).min()
            if upper - lower > 1e-9:
                edges.append((foot, lower, upper))
    table = np.array(edges)
    return table[:, 0], table[:, 1], table[:, 2]


def _graded_quadrature() -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return nodes and weights on (0, 1), refined by halves toward 1.

    Where a window is about to open, the integrand has a square root at or just
    past the end of an edge; with panels that halve toward it, Gauss-Legendre rules
    converge as for a smooth function.
    """
    panels = 1.0 - np.append(0.5 ** np.arange(50), 0.0)
    nodes, weights = np.polynomial.legendre.leggauss(16)
    widths = np.diff(panels)[:, np.newaxis]
    points = panels[:-1, np.newaxis] + widths * (nodes + 1) / 2
    return points.ravel(), (widths * weights / 2).ravel()


_NODES, _WEIGHTS = _graded_quadrature()
