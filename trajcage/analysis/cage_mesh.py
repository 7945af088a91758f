"""The curved wall of one cage as triangles.

Its patches lie on the exclusion spheres of the bounding neighbors and share the points
on the arcs where they meet, so that the triangles enclose a volume. Flat triangles lie
below a sphere; points within a patch are raised by that depth in the mean.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from trajcage.analysis.cages import CageOptions
from trajcage.analysis.single_cage import SingleCage, measure_single_cage
from trajcage.analysis.sphere_patches import Arc, Sphere, free_arcs, merged
from trajcage.errors import UsageError
from trajcage.kernel.cages import Wall
from trajcage.model import Frame

__all__ = ["CageMesh", "mesh_cage"]

_LARGEST_DEVIATION = 0.05  # of area or volume: beyond it the mesh is not the cage
_MOST_ROUNDS = 12  # of dividing arcs that come close to others

_Points = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True)
class CageMesh(SingleCage):
    """The wall of one cage; positions are relative to the particle.

    Parameters
    ----------
    vertices : (m, 3) float64, length
        Corners of the triangles.
    triangles : (t, 3) int64
        Their rows, counterclockwise seen from outside.
    patch : (t,) int64
        Row of the neighbor on whose exclusion sphere each lies.
    """

    vertices: _Points
    triangles: NDArray[np.int64]
    patch: NDArray[np.int64]

    @property
    def volume(self) -> float:
        """Volume within the triangles, length^3; the free volume when they are fine."""
        a, b, c = np.swapaxes(self.vertices[self.triangles], 0, 1)
        return float(np.sum(a * np.cross(b, c))) / 6.0

    @property
    def area(self) -> float:
        """Area of the triangles, length^2."""
        return float(_areas(self.vertices[self.triangles]).sum())


def mesh_cage(
    frame: Frame,
    particle_id: int,
    options: CageOptions | None = None,
    *,
    fineness: float = 12.0,
) -> CageMesh:
    """Triangulate the cage of one particle.

    Parameters
    ----------
    frame : Frame
        The configuration, in three dimensions.
    particle_id : int
        Id of the particle.
    options : CageOptions, optional
        As for :func:`~trajcage.analysis.cages.frame_cages`.
    fineness : float
        Triangles are this much smaller than the cube root of the free volume and than
        any exclusion sphere.

    Returns
    -------
    CageMesh

    Raises
    ------
    UsageError
        If the particle is not there, or the frame or the fineness cannot be used.
    FrameError
        If the cage is not closed.
    """
    if frame.dimensions != 3:
        raise UsageError(
            "the wall of a cage is a surface in three dimensions; these particles lie "
            "in a plane"
        )
    if not 1.0 <= fineness <= 100.0:
        raise UsageError(f"the fineness lies between 1 and 100, got {fineness:g}")
    cage, i, wall, windows = measure_single_cage(frame, particle_id, options)
    corners = windows.corners
    edge = min(cage.free_volume ** (1.0 / 3.0), float(cage.sigmas.min())) / fineness
    pieces, patch = [], []
    for row, sphere in enumerate(_spheres(frame, i, wall, edge)):
        off = np.abs(np.linalg.norm(corners - sphere.center, axis=1) - sphere.size)
        near = corners[off < 1e-6 * sphere.size]
        kept = _of_cage(sphere, near, float(wall.areas[row]))
        pieces.append(_raised(sphere, kept)[kept])
        patch.append(np.full(len(kept), row))
    vertices, places = merged(np.concatenate(pieces).reshape(-1, 3), 1e-5 * edge)
    mesh = CageMesh(
        **vars(cage),
        vertices=vertices,
        triangles=places.reshape(-1, 3),
        patch=np.concatenate(patch),
    )
    _check(mesh, frame)
    return mesh


def _check(mesh: CageMesh, frame: Frame) -> None:
    """Refuse a mesh that is not the cage that was measured."""
    volume, area = mesh.volume / mesh.free_volume, mesh.area / mesh.free_surface
    if max(abs(volume - 1.0), abs(area - 1.0)) > _LARGEST_DEVIATION:
        raise frame.error(
            f"the triangles of the cage of particle {mesh.particle_id} hold "
            f"{volume:.3f} of its free volume and {area:.3f} of its free surface: the "
            "cage is too intricate for them; raise the fineness"
        )


def _spheres(frame: Frame, i: int, wall: Wall, edge: float) -> list[Sphere]:
    """Triangulate what is free of the exclusion sphere of each bounding neighbor."""
    sigmas = frame.radii[i] + frame.radii[wall.neighbors]
    extent = float((np.linalg.norm(wall.vectors, axis=1) + sigmas).max())
    centers, sizes = _exclusion_spheres(frame, i, extent)
    rows = cKDTree(centers).query(wall.vectors)[1]
    arcs: dict[tuple[int, int], list[Arc]] = {}
    spheres = []
    for row in rows:
        apart = np.linalg.norm(centers - centers[row], axis=1)
        crossing = (apart < sizes[row] + sizes) & (apart > np.abs(sizes[row] - sizes))
        crossing = np.flatnonzero(crossing)
        around = np.append(crossing, row)
        for k, other in enumerate(crossing):
            pair = (min(row, other), max(row, other))
            if pair not in arcs:
                ends = (k, len(crossing)) if other < row else (len(crossing), k)
                arcs[pair] = free_arcs(ends, centers[around], sizes[around], edge)
        own = [
            (arc, bool(row < k))
            for k in crossing
            for arc in arcs[min(row, k), max(row, k)]
        ]
        spheres.append(
            Sphere(
                centers[row],
                float(sizes[row]),
                centers[crossing],
                sizes[crossing],
                own,
                edge,
            )
        )
    changed = spheres
    for _ in range(_MOST_ROUNDS):
        missing: dict[Arc, NDArray[np.bool_]] = {}
        for sphere in changed:
            for (arc, _), sides in zip(sphere.arcs, sphere.triangulate(), strict=True):
                if sides.any():
                    missing[arc] = missing.get(arc, np.False_) | sides
        if not missing:
            break
        for arc, sides in missing.items():
            arc.divide(sides, edge)
        changed = [s for s in spheres if any(arc in missing for arc, _ in s.arcs)]
    return spheres


def _raised(sphere: Sphere, triangles: NDArray[np.int64]) -> _Points:
    """Points of a sphere, those within the patch so high that it keeps its volume."""
    if len(triangles) == 0:
        return sphere.points
    apart = sphere.points[triangles] - sphere.center
    areas = _areas(apart)
    # mean square of the distance to a center over a triangle, by its corners
    square = np.sum(apart.sum(axis=1) ** 2, axis=1) + np.sum(apart**2, axis=(1, 2))
    depth = 0.5 * (sphere.size - square / (12.0 * sphere.size))
    shares = np.bincount(
        triangles.ravel(), np.repeat(areas / 3.0, 3), len(sphere.points)
    )
    shares[: sphere.n_boundary] = 0.0
    if not shares.any():
        return sphere.points
    height = float(areas @ depth) / float(shares.sum())
    scale = np.ones((len(sphere.points), 1))
    scale[sphere.n_boundary :] += height / sphere.size
    return np.asarray(sphere.center + scale * (sphere.points - sphere.center))


def _exclusion_spheres(
    frame: Frame, i: int, extent: float
) -> tuple[_Points, NDArray[np.float64]]:
    """Centers, relative to the particle, and radii of all that reach the cage."""
    box, sizes = frame.box, frame.radii + frame.radii[i]
    apart = frame.positions - frame.positions[i]
    turns = np.rint(apart @ np.linalg.inv(box.vectors))
    turns[:, np.logical_not(box.periodic)] = 0.0
    apart = apart - turns @ box.vectors
    far = extent + float(sizes.max())
    reach = [
        int(np.ceil(far / height + 0.5)) if flag else 0
        for height, flag in zip(box.heights, box.periodic, strict=True)
    ]
    centers, radii = [], []
    for shift in np.ndindex(*(2 * k + 1 for k in reach)):
        image = apart + (np.array(shift) - reach) @ box.vectors
        distance = np.linalg.norm(image, axis=1)
        near = distance - sizes < extent
        if np.array_equal(shift, reach):
            near[i] = False
        centers.append(image[near])
        radii.append(sizes[near])
    return np.concatenate(centers), np.concatenate(radii)


def _of_cage(sphere: Sphere, corners: _Points, area: float) -> NDArray[np.int64]:
    """Keep the connected pieces that belong to the wall of this cage.

    The free part of a sphere can also bound other voids. Pieces at the corners of
    the cage belong to it; so do pieces without corners if the area asks for them.
    """
    triangles, n = sphere.triangles, len(sphere.points)
    if len(triangles) == 0:
        return triangles
    links = np.concatenate((triangles[:, :2], triangles[:, 1:]))
    graph = coo_array((np.ones(len(links)), links.T), shape=(n, n))
    n_pieces, label = connected_components(graph, directed=False)
    piece = label[triangles[:, 0]]
    areas = _areas(sphere.points[triangles])
    size = np.bincount(piece, areas, minlength=n_pieces)
    kept = np.zeros(n_pieces, dtype=np.bool_)
    if len(corners):
        used = np.unique(triangles)
        nearest = cKDTree(sphere.points[used]).query(corners)[1]
        kept[label[used[nearest]]] = True
    for k in np.argsort(size)[::-1]:
        total = float(size[kept].sum())
        if not kept[k] and abs(total + size[k] - area) < abs(total - area):
            kept[k] = True
    return np.asarray(triangles[kept[piece]], dtype=np.int64)


def _areas(triangles: _Points) -> NDArray[np.float64]:
    a, b, c = np.swapaxes(triangles, 0, 1)
    return np.asarray(0.5 * np.linalg.norm(np.cross(b - a, c - a), axis=1), np.float64)
