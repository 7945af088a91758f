"""The curved wall of one cage as triangles.

On the exclusion sphere of each bounding neighbor the other exclusion spheres leave
free what lies beyond their circles of intersection. That is triangulated by halving
the faces of an icosahedron where something is left, and cutting them at the circles.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from trajcage.analysis.cages import CageOptions, default_overlap_tolerance
from trajcage.analysis.sphere_patches import exposed_triangles
from trajcage.errors import UsageError
from trajcage.kernel import measure_cages
from trajcage.kernel.cages import Wall, Windows
from trajcage.model import CageStatus, Frame

__all__ = ["CageMesh", "mesh_cage"]

_LARGEST_DEVIATION = 0.05  # of area or volume: beyond it the mesh is not the cage

_Points = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class CageMesh:
    """The wall of one cage; positions are relative to the particle.

    Parameters
    ----------
    particle_id : int
        Whose cage.
    radius : float, length
        Of the particle.
    free_volume, free_surface, weakest_window : float
        As measured exactly; lengths in the unit of the input.
    neighbors : (k,) int64
        Ids of the bounding neighbors, an entry for each periodic image.
    vectors : (k, 3) float64, length
        To their centers.
    radii : (k,) float64, length
        Their radii.
    vertices : (m, 3) float64, length
        Corners of the triangles.
    triangles : (t, 3) int64
        Their rows, counterclockwise seen from outside.
    patch : (t,) int64
        Row of the neighbor on whose exclusion sphere each lies.
    window : tuple of int
        Rows of the neighbors that form the weakest window; empty if unknown.
    window_corner : (3,) float64, length
        Corner of the wall behind that window.
    """

    particle_id: int
    radius: float
    free_volume: float
    free_surface: float
    weakest_window: float
    neighbors: NDArray[np.int64]
    vectors: _Points
    radii: NDArray[np.float64]
    vertices: _Points
    triangles: NDArray[np.int64]
    patch: NDArray[np.int64]
    window: tuple[int, ...]
    window_corner: _Points

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
        Triangles are this much smaller than the cube root of the free volume.

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
    options = options or CageOptions()
    if frame.dimensions != 3:
        raise UsageError(
            "the wall of a cage is a surface in three dimensions; these particles lie "
            "in a plane"
        )
    if not 1.0 <= fineness <= 100.0:
        raise UsageError(f"the fineness lies between 1 and 100, got {fineness:g}")
    found = np.flatnonzero(frame.ids == particle_id)
    if len(found) == 0:
        raise UsageError(
            f"there is no particle {particle_id}; ids go from {frame.ids.min()} to "
            f"{frame.ids.max()}"
        )
    i = int(found[0])
    tolerance = options.overlap_tolerance
    if tolerance is None:
        tolerance = default_overlap_tolerance(frame)
    cage = measure_cages(
        np.ascontiguousarray(frame.positions),
        frame.box.vectors,
        frame.box.origin,
        np.array(frame.box.periodic),
        np.ascontiguousarray(frame.radii),
        subset=np.array([i]),
        reach=options.reach,
        overlap_tolerance=tolerance,
        windows=True,
    )
    status = CageStatus(int(cage.status[i]))
    volume = float(cage.free_volume[i])
    if status != CageStatus.CLOSED or not volume > 0.0:
        state = status.name.lower() if status != CageStatus.CLOSED else "without volume"
        raise frame.error(
            f"the cage of particle {particle_id} is {state}; only a closed cage has a "
            "wall to draw"
        )
    assert cage.wall is not None
    assert cage.windows is not None
    corners = cage.windows.corners
    extent = 1.0001 * float(np.linalg.norm(corners, axis=1).max())
    centers, sizes = _exclusion_spheres(frame, i, extent)
    edge = volume ** (1.0 / 3.0) / fineness
    pieces, patch = [], []
    sigmas = frame.radii[i] + frame.radii[cage.wall.neighbors]
    for row, vector in enumerate(cage.wall.vectors):
        own = np.linalg.norm(centers - vector, axis=1) > 1e-9 * sigmas[row]
        triangles = exposed_triangles(
            vector, float(sigmas[row]), centers[own], sizes[own], edge, extent
        )
        on_wall = np.abs(np.linalg.norm(corners - vector, axis=1) - sigmas[row])
        near = corners[on_wall < 1e-6 * sigmas[row]]
        kept = _of_cage(triangles, near, float(cage.wall.areas[row]), edge)
        pieces.append(kept)
        patch.append(np.full(len(kept), row))
    triangles = np.concatenate(pieces)
    vertices, places = _shared(triangles.reshape(-1, 3), edge)
    mesh = CageMesh(
        particle_id=particle_id,
        radius=float(frame.radii[i]),
        free_volume=volume,
        free_surface=float(cage.free_surface[i]),
        weakest_window=float(cage.weakest_window[i]),
        neighbors=frame.ids[cage.wall.neighbors],
        vectors=cage.wall.vectors,
        radii=frame.radii[cage.wall.neighbors],
        vertices=vertices,
        triangles=places.reshape(-1, 3),
        patch=np.concatenate(patch),
        window=_weakest(cage.windows, cage.wall, sigmas),
        window_corner=corners[np.argmax(cage.windows.ratios)],
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


def _of_cage(triangles: _Points, corners: _Points, area: float, edge: float) -> _Points:
    """Keep the connected pieces that belong to the wall of this cage.

    The free part of a sphere can also bound other voids. Pieces at the corners of
    the cage belong to it; so do pieces without corners if the area asks for them.
    """
    if len(triangles) == 0:
        return triangles
    areas = _areas(triangles)
    if areas.sum() <= 1.02 * area:
        return triangles
    _, places = _shared(triangles.reshape(-1, 3), edge)
    places = places.reshape(-1, 3)
    n = int(places.max()) + 1
    links = np.concatenate((places[:, :2], places[:, 1:]))
    graph = coo_array((np.ones(len(links)), links.T), shape=(n, n))
    n_pieces, label = connected_components(graph, directed=False)
    piece = label[places[:, 0]]
    size = np.bincount(piece, areas, minlength=n_pieces)
    kept = np.zeros(n_pieces, dtype=np.bool_)
    if len(corners):
        nearest = cKDTree(triangles.reshape(-1, 3)).query(corners)[1]
        kept[piece[nearest // 3]] = True
    for k in np.argsort(size)[::-1]:
        total = float(size[kept].sum())
        if not kept[k] and abs(total + size[k] - area) < abs(total - area):
            kept[k] = True
    return np.asarray(triangles[kept[piece]], dtype=np.float64)


def _shared(points: _Points, edge: float) -> tuple[_Points, NDArray[np.int64]]:
    """Merge points that are the same up to rounding; where each one went."""
    pairs = cKDTree(points).query_pairs(1e-5 * edge, output_type="ndarray")
    graph = coo_array((np.ones(len(pairs)), pairs.T), shape=(len(points),) * 2)
    _, label = connected_components(graph, directed=False)
    _, first = np.unique(label, return_index=True)
    return points[first], np.asarray(label, dtype=np.int64)


def _weakest(
    windows: Windows, wall: Wall, sigmas: NDArray[np.float64]
) -> tuple[int, ...]:
    """Rows of the neighbors of the weakest window: the images that touch its corner."""
    k = int(np.argmax(windows.ratios))
    gap = np.abs(np.linalg.norm(wall.vectors - windows.corners[k], axis=1) - sigmas)
    rows: list[int] = []
    for neighbor in windows.neighbors[k]:
        images = np.flatnonzero(wall.neighbors == neighbor)
        images = images[~np.isin(images, rows)]
        if len(images) == 0:
            return ()
        rows.append(int(images[np.argmin(gap[images])]))
    return tuple(rows)


def _areas(triangles: _Points) -> NDArray[np.float64]:
    a, b, c = np.swapaxes(triangles, 0, 1)
    return np.asarray(0.5 * np.linalg.norm(np.cross(b - a, c - a), axis=1), np.float64)
