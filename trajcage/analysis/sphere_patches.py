"""Parts of a sphere that other spheres leave free, as triangles.

Such a part is bounded by arcs of the circles in which the spheres meet. Each arc is
divided once, so that the patches on both sides of it share its points. With points of
a grid in between they are joined by the Delaunay triangulation on the sphere, that of
the stereographic projection, which maps circles to circles. Arcs that are not sides of
triangles there are divided further, as in conforming Delaunay triangulation.
"""

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import Delaunay, QhullError, cKDTree

__all__ = ["Arc", "Sphere", "free_arcs", "merged"]

_SPACING = 0.7  # of points on arcs, in units of the longest side of a triangle
_WIDEST_STEP = np.pi / 4.0  # between points on an arc
_SHORTEST_ARC = 1e-9  # angle; where more than three spheres meet, arcs shrink to that
_MARGIN = 0.75  # of points of the grid from an arc, in units of its spacing
_SAME = 1e-5  # distance of points that are the same, in units of the longest side

_Points = NDArray[np.float64]


@dataclass(eq=False)
class Arc:
    """Free part of the circle in which two spheres meet."""

    center: _Points  #: (3,) of the circle, length
    axes: _Points  #: (2, 3) from there to two points of it, at right angles
    angles: NDArray[np.float64]  #: (n,) of the points that divide it, increasing

    @property
    def points(self) -> _Points:
        """Points that divide the arc, (n, 3)."""
        turns = np.stack((np.cos(self.angles), np.sin(self.angles)), axis=1)
        return np.asarray(self.center + turns @ self.axes, dtype=np.float64)

    def divide(self, sides: NDArray[np.bool_], edge: float) -> None:
        """Divide some sides in two.

        Those at an end are divided at a distance that is a power of two, so that arcs
        which leave a corner at a sharp angle are divided alike.
        """
        start, stop = self.angles[:-1], self.angles[1:]
        half = 0.5 * (stop - start)
        unit = edge / float(np.linalg.norm(self.axes[0]))
        shell = unit * 2.0 ** np.rint(np.log2(half / unit))
        between = start + half
        between[0] = start[0] + shell[0]
        between[-1] = stop[-1] - shell[-1]
        self.angles = np.sort(np.concatenate((self.angles, between[sides])))


def free_arcs(
    pair: tuple[int, int], centers: _Points, sizes: NDArray[np.float64], edge: float
) -> list[Arc]:
    """Arcs of the circle in which two of the spheres meet that no other one covers.

    Parameters
    ----------
    pair : tuple of int
        Rows of the two spheres, which cross.
    centers, sizes : (k, 3) and (k,) float64, length
        Centers and radii of all spheres.
    edge : float, length
        Longest side of a triangle, about.
    """
    a, b = pair
    length = float(np.linalg.norm(centers[b] - centers[a]))
    axis = (centers[b] - centers[a]) / length
    along = (length**2 + sizes[a] ** 2 - sizes[b] ** 2) / (2.0 * length)
    radius = float(np.sqrt(max(sizes[a] ** 2 - along**2, 0.0)))
    center = centers[a] + along * axis
    sides = _across(axis) * radius
    apart = center - np.delete(centers, pair, axis=0)
    others = np.delete(sizes, pair)
    # a point at angle t is free where reach * cos(t - toward) >= bound
    x, y = sides @ apart.T
    toward, reach = np.arctan2(y, x), np.hypot(x, y)
    bound = 0.5 * (others**2 - np.sum(apart**2, axis=1) - radius**2)
    if np.any(bound >= reach):
        return []
    cuts = bound > -reach
    toward, half = toward[cuts], np.arccos(bound[cuts] / reach[cuts])
    if len(half) == 0:
        return [_divided(center, sides, 0.0, 2.0 * np.pi, edge)]
    ends = np.sort(np.concatenate((toward - half, toward + half)) % (2.0 * np.pi))
    ends = np.append(ends, ends[0] + 2.0 * np.pi)
    middle = 0.5 * (ends[1:] + ends[:-1])
    off = np.abs((middle[:, None] - toward + np.pi) % (2.0 * np.pi) - np.pi)
    free = np.all(off < half, axis=1) & (np.diff(ends) > _SHORTEST_ARC)
    return [
        _divided(center, sides, ends[k], ends[k + 1], edge)
        for k in np.flatnonzero(free)
    ]


def _divided(
    center: _Points, axes: _Points, start: float, stop: float, edge: float
) -> Arc:
    step = min(_SPACING * edge / float(np.linalg.norm(axes[0])), _WIDEST_STEP)
    n = max(int(np.ceil((stop - start) / step)), 2)
    return Arc(center, axes, np.linspace(start, stop, n + 1))


class Sphere:
    """One sphere, its arcs, and the triangles between them.

    Parameters
    ----------
    center : (3,) float64, length
        Center of the sphere.
    size : float, length
        Its radius.
    centers, sizes : (k, 3) and (k,) float64, length
        The spheres that cross it.
    arcs : list of (Arc, bool)
        Free arcs on this sphere, and whether it is the first of the two that meet.
    edge : float, length
        Longest side of a triangle, about.
    """

    def __init__(
        self,
        center: _Points,
        size: float,
        centers: _Points,
        sizes: NDArray[np.float64],
        arcs: list[tuple[Arc, bool]],
        edge: float,
    ) -> None:
        apart = centers - center
        distance = np.linalg.norm(apart, axis=1)
        self.center, self.size, self.edge, self.arcs = center, size, edge, arcs
        # u on the unit sphere is covered where u . axis > limit
        self._axes = apart / distance[:, None]
        self._limits = (distance**2 + size**2 - sizes**2) / (2.0 * distance * size)
        faces = _grid(self._axes, self._limits, edge / size)
        corners, places = merged(faces.reshape(-1, 3), _SAME * edge / size)
        self._whole = len(centers) == 0
        free = self._free(corners)
        self._grid = corners[free]
        self.points = center + size * corners
        self.triangles = places.reshape(-1, 3)[:, ::-1]
        self.n_boundary = 0

    def _free(self, points: _Points) -> NDArray[np.bool_]:
        length = np.linalg.norm(points, axis=1)[:, None]
        return np.asarray(
            np.all(points @ self._axes.T <= self._limits * length, axis=1), np.bool_
        )

    def triangulate(self) -> list[NDArray[np.bool_]]:
        """Join the points of the arcs and of the grid to triangles.

        Sets `points`, of which the first `n_boundary` lie on arcs, and `triangles`,
        counterclockwise seen from within the sphere. Returns for each arc which of
        its sides are not sides of triangles.
        """
        if self._whole:
            return []
        self.points, self.triangles = np.zeros((0, 3)), np.zeros((0, 3), np.int64)
        chains = [(arc.points - self.center) / self.size for arc, _ in self.arcs]
        if not chains:
            return []
        boundary, label = merged(np.concatenate(chains), _SAME * self.edge / self.size)
        ends = np.cumsum([len(chain) for chain in chains])[:-1]
        labels = np.split(label, ends)
        spacing = np.zeros(len(boundary))
        for chain, names in zip(chains, labels, strict=True):
            side = np.linalg.norm(np.diff(chain, axis=0), axis=1)
            np.maximum.at(spacing, names[1:], side)
            np.maximum.at(spacing, names[:-1], side)
        near, nearest = cKDTree(boundary).query(self._grid)
        inner = self._grid[near > _MARGIN * spacing[nearest]]
        points = np.concatenate((boundary, inner))
        self.n_boundary = len(boundary)
        self.points = self.center + self.size * points
        try:
            triangles = Delaunay(self._projected(points)).simplices.astype(np.int64)
        except QhullError:  # all in a line: nothing between the arcs
            return [np.zeros(len(names) - 1, np.bool_) for names in labels]
        n = len(points)
        # seen from within, an arc runs counterclockwise about what the first sphere
        # leaves free, clockwise about what the second one does
        sides = [
            np.stack((names[:-1], names[1:]), axis=1)[:, :: 1 if first else -1]
            for names, (_, first) in zip(labels, self.arcs, strict=True)
        ]
        keys = np.concatenate(sides) @ (n, 1)
        mirrored = np.concatenate(sides) @ (1, n)
        own = triangles[:, [[0, 1], [1, 2], [2, 0]]] @ (n, 1)
        back = triangles[:, [[1, 0], [2, 1], [0, 2]]] @ (n, 1)
        inside, outside = np.isin(own, keys), np.isin(own, mirrored)
        region = _regions(own, back, inside | outside)
        n_inside = np.bincount(region, inside.sum(axis=1))[region]
        n_outside = np.bincount(region, outside.sum(axis=1))[region]
        kept = (n_inside > 0) & (n_outside == 0)
        both = (n_inside > 0) & (n_outside > 0)  # an arc between them is not there yet
        kept |= both & self._free(points[triangles].mean(axis=1))
        self.triangles = triangles[kept]
        return [
            ~np.isin(pairs @ (n, 1), own)
            & ~np.isin(pairs @ (1, n), own)
            & (pairs[:, 0] != pairs[:, 1])
            for pairs in sides
        ]

    def _projected(self, points: _Points) -> _Points:
        """Stereographic projection from the middle of a circle, far from the points."""
        apart = np.linalg.norm(points[:, None] - self._axes, axis=2).min(axis=0)
        pole = self._axes[np.argmax(apart)]
        flat = (points @ _across(pole).T) / (1.0 - points @ pole)[:, None]
        flat -= 0.5 * (flat.min(axis=0) + flat.max(axis=0))
        return np.asarray(flat / np.abs(flat).max(), dtype=np.float64)


def merged(points: _Points, distance: float) -> tuple[_Points, NDArray[np.int64]]:
    """Merge points that are the same up to rounding; where each one went."""
    pairs = cKDTree(points).query_pairs(distance, output_type="ndarray")
    graph = coo_array((np.ones(len(pairs)), pairs.T), shape=(len(points),) * 2)
    _, label = connected_components(graph, directed=False)
    _, first = np.unique(label, return_index=True)
    return points[first], np.asarray(label, dtype=np.int64)


def _regions(
    own: NDArray[np.int64], back: NDArray[np.int64], closed: NDArray[np.bool_]
) -> NDArray[np.int64]:
    """Label triangles that join at sides which are not closed.

    The sides of each triangle, (t, 3), come as numbers, there and back.
    """
    n = len(own)
    order = np.argsort(own, axis=None)
    place = np.searchsorted(own.ravel(), back.ravel(), sorter=order)
    other = order[np.minimum(place, 3 * n - 1)]
    meets = (own.ravel()[other] == back.ravel()) & ~closed.ravel()
    links = np.stack((np.arange(3 * n), other))[:, meets] // 3
    graph = coo_array((np.ones(links.shape[1]), links), shape=(n, n))
    return np.asarray(connected_components(graph, directed=False)[1], np.int64)


def _across(axis: _Points) -> _Points:
    """Two directions at right angles to one and to each other, right-handed."""
    first = np.cross(axis, np.eye(3)[np.argmin(np.abs(axis))])
    first /= np.linalg.norm(first)
    return np.stack((first, np.cross(axis, first)))


def _grid(axes: _Points, limits: NDArray[np.float64], edge: float) -> _Points:
    """Faces of an icosahedron, halved where circles do not cover all of them."""
    angles = np.arccos(np.clip(limits, -1.0, 1.0))
    faces = _icosahedron()
    while len(faces):
        middle = faces.mean(axis=1)
        middle /= np.linalg.norm(middle, axis=1)[:, None]
        chord = np.linalg.norm(faces - middle[:, None], axis=2).max(axis=1)
        radius = 2.0 * np.arcsin(np.minimum(0.5 * chord, 1.0))
        seen = np.all(_angles(middle, axes) + radius[:, None] > angles, axis=1)
        faces, radius = faces[seen], radius[seen]
        if len(faces) == 0 or 2.0 * radius.max() <= edge:
            break
        faces = _halved(faces)
    return faces


def _angles(points: _Points, axes: _Points) -> NDArray[np.float64]:
    """Angles between unit vectors, accurate also where they are small."""
    chord = np.linalg.norm(points[:, None] - axes, axis=2)
    return np.asarray(2.0 * np.arcsin(np.minimum(0.5 * chord, 1.0)), np.float64)


@cache
def _icosahedron() -> _Points:
    """Faces of the icosahedron, (20, 3, 3), on the unit sphere, seen from outside."""
    g = (1.0 + 5.0**0.5) / 2.0
    corners = np.array(
        [(s, t * g, 0.0) for s in (-1, 1) for t in (-1, 1)], dtype=np.float64
    )
    corners = np.concatenate([np.roll(corners, k, axis=1) for k in range(3)])
    corners /= np.linalg.norm(corners, axis=1)[:, None]
    side = np.linalg.norm(corners[:, None] - corners, axis=2)
    joined = (side > 0.1) & (side < 1.1)
    faces = [
        (a, b, c)
        for a in range(12)
        for b in range(a)
        for c in range(b)
        if joined[a, b] and joined[b, c] and joined[a, c]
    ]
    found = corners[np.array(faces)]
    turned = np.einsum("ix,ix->i", found[:, 0], np.cross(found[:, 1], found[:, 2])) < 0
    found[turned] = found[turned][:, ::-1]
    return np.asarray(found, dtype=np.float64)


def _halved(faces: _Points) -> _Points:
    """Divide each face in four."""
    a, b, c = np.swapaxes(faces, 0, 1)

    def between(p: _Points, q: _Points) -> _Points:
        middle = p + q
        return np.asarray(middle / np.linalg.norm(middle, axis=1)[:, None], np.float64)

    ab, bc, ca = between(a, b), between(b, c), between(c, a)
    parts = ((a, ab, ca), (ab, b, bc), (ca, bc, c), (ab, bc, ca))
    return np.concatenate([np.stack(part, axis=1) for part in parts])
