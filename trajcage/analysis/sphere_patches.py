"""Parts of a sphere as triangles, cut exactly at its circles with other spheres."""

import numpy as np
from numpy.typing import NDArray

__all__ = ["exposed_triangles"]

_Points = NDArray[np.float64]


def exposed_triangles(
    center: _Points,
    sigma: float,
    centers: _Points,
    sizes: NDArray[np.float64],
    edge: float,
    extent: float,
) -> _Points:
    """Triangulate what other spheres leave free of one sphere.

    Parameters
    ----------
    center : (3,) float64, length
        Center of the sphere.
    sigma : float, length
        Its radius.
    centers, sizes : (k, 3) and (k,) float64, length
        The other spheres.
    edge : float, length
        Longest side of a triangle, about.
    extent : float, length
        Only what lies within this distance of the origin is wanted.

    Returns
    -------
    (t, 3, 3) float64, length
        Corners of the triangles, counterclockwise seen from within the sphere.
    """
    apart = centers - center
    distance = np.linalg.norm(apart, axis=1)
    crossing = (distance < sigma + sizes) & (distance > np.abs(sigma - sizes))
    apart, distance, sizes = apart[crossing], distance[crossing], sizes[crossing]
    axes = apart / distance[:, None]
    # u on the unit sphere is covered where u . axis > limit
    limits = (distance**2 + sigma**2 - sizes**2) / (2.0 * distance * sigma)
    angles = np.arccos(np.clip(limits, -1.0, 1.0))
    home = -center / np.linalg.norm(center)
    # directions on the sphere that lie within the extent of the cage
    away = float(np.linalg.norm(center))
    cosine = (away**2 + sigma**2 - extent**2) / (2.0 * away * sigma)
    opening = float(np.arccos(np.clip(cosine, -1.0, 1.0)))
    faces = _icosahedron()
    while len(faces):
        middle = faces.mean(axis=1)
        middle /= np.linalg.norm(middle, axis=1)[:, None]
        radius = 2.0 * np.arcsin(
            np.minimum(
                0.5 * np.linalg.norm(faces - middle[:, None], axis=2).max(axis=1), 1.0
            )
        )
        apart_from = _angles(middle, axes)
        seen = np.all(apart_from + radius[:, None] > angles, axis=1)
        seen &= _angles(middle, home[None])[:, 0] - radius < opening
        faces, radius = faces[seen], radius[seen]
        if len(faces) == 0 or sigma * 2.0 * radius.max() <= edge:
            break
        faces = _halved(faces)
    triangles = []
    covered = np.any(np.einsum("tvx,kx->tvk", faces, axes) > limits, axis=1)
    for face, hidden in zip(faces, covered, strict=True):
        polygon = list(face)
        for k in np.flatnonzero(hidden):
            polygon = _cut(polygon, axes[k], float(limits[k]))
            if not polygon:
                break
        triangles += [
            (polygon[0], polygon[m + 1], polygon[m]) for m in range(1, len(polygon) - 1)
        ]
    if not triangles:
        return np.zeros((0, 3, 3))
    return center + sigma * np.array(triangles)


def _angles(points: _Points, axes: _Points) -> NDArray[np.float64]:
    """Angles between directions, accurate also where they are small."""
    chord = np.linalg.norm(
        points[:, None] / np.linalg.norm(points, axis=1)[:, None, None] - axes, axis=2
    )
    return np.asarray(2.0 * np.arcsin(np.minimum(0.5 * chord, 1.0)), np.float64)


def _cut(polygon: list[_Points], axis: _Points, limit: float) -> list[_Points]:
    """Cut off the part of a spherical polygon that a circle covers."""
    heights = [float(p @ axis) - limit for p in polygon]
    left: list[_Points] = []
    for k, (point, height) in enumerate(zip(polygon, heights, strict=True)):
        before, other = polygon[k - 1], heights[k - 1]
        if (height > 0.0) != (other > 0.0):
            left.append(_meet(before, point, other, height, axis, limit))
        if height <= 0.0:
            left.append(point)
    return left


def _meet(
    a: _Points, b: _Points, low: float, high: float, axis: _Points, limit: float
) -> _Points:
    """Where the arc between two directions meets a circle, by the Illinois rule."""
    start, end, kept = 0.0, 1.0, 0
    point = a
    for _ in range(30):
        share = start + (end - start) * low / (low - high)
        point = a + share * (b - a)
        point = point / np.linalg.norm(point)
        height = float(point @ axis) - limit
        if abs(height) < 1e-15:
            break
        if (height > 0.0) == (low > 0.0):
            start, low = share, height
            high *= 0.5 if kept > 0 else 1.0
            kept = 1
        else:
            end, high = share, height
            low *= 0.5 if kept < 0 else 1.0
            kept = -1
    return point


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
