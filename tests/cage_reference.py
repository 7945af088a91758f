"""A slow reference for one cage, in any dimension: no code shared with the kernel.

The regular triangulation of the other particles comes from a convex hull of lifted
points (Edelsbrunner & Seidel 1986, Discrete Comput. Geom. 1, 25); the cage is the
connected component of its simplices that are joined through open faces. Volume and
surface are sampled. Points are assigned to components by walking up the power
distance, which never leaves the free space.
"""

import itertools
import math
from dataclasses import dataclass

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import ConvexHull

__all__ = ["Cloud", "ReferenceCage", "cloud_around", "reference_cage", "walk_up"]


@dataclass(frozen=True)
class Cloud:
    """The exclusion spheres near one particle, which sits at the origin."""

    centers: np.ndarray  #: (m, d)
    reaches: np.ndarray  #: (m,) exclusion radii
    owners: np.ndarray  #: (m,) particle behind each sphere
    radius: float  #: complete up to this distance

    def powers(self, points):
        """Power of points with respect to all spheres, (k, m)."""
        apart = points[:, None] - self.centers
        return np.einsum("kmd,kmd->km", apart, apart) - self.reaches**2


@dataclass(frozen=True)
class ReferenceCage:
    """What is known about one cage; NaN, empty and -1 where it is not closed."""

    closed: bool
    cloud: Cloud
    walls: np.ndarray  #: spheres of the cloud that touch a corner
    inner: np.ndarray  #: spheres met on the way without a corner: islands or hidden
    corners: np.ndarray  #: (c, d)
    windows: np.ndarray  #: (c, d) spheres of the shut face behind each corner
    simplices: np.ndarray  #: (s, d + 1) sorted spheres of the cage's simplices

    def contains(self, points, start=None):
        """Tell which points lie in the cage (or on its wall: give their spheres)."""
        inside = np.zeros(len(points), bool)
        lowest = np.empty(len(points))
        if len(points):
            powers = self.cloud.powers(points)
            if start is not None:
                powers[np.arange(len(points)), start] = 0.0
            lowest = powers.min(axis=1)
        free = lowest > 0.0 if start is None else lowest >= 0.0
        ends = walk_up(self.cloud, points[free], None if start is None else start[free])
        mine = {tuple(simplex) for simplex in self.simplices}
        inside[free] = [tuple(end) in mine for end in ends]
        return inside

    def sample_volume(self, rng, n):
        """Free volume and its standard error from n uniform points."""
        # a wall of spheres bulges inward, so that only corners are extreme points
        low, high = self.corners.min(axis=0), self.corners.max(axis=0)
        points = rng.uniform(low, high, (n, len(low)))
        return _binomial(self.contains(points).sum(), n, float(np.prod(high - low)))

    def sample_patches(self, rng, n):
        """Areas of the wall on each sphere met and their errors, n points for each."""
        d = self.cloud.centers.shape[1]
        low, high = self.corners.min(axis=0), self.corners.max(axis=0)
        middle, size = (low + high) / 2, np.linalg.norm(high - low) / 2
        areas = {}
        for k in np.concatenate([self.walls, self.inner]):
            reach = self.cloud.reaches[k]
            axis = middle - self.cloud.centers[k]
            distance = np.linalg.norm(axis)
            cosine = -1.0 if size >= distance else math.sqrt(1 - (size / distance) ** 2)
            directions, share = _cap(rng, n, axis / distance, cosine, d)
            points = self.cloud.centers[k] + reach * directions
            hits = self.contains(points, np.full(n, k)).sum()
            whole = 2 * math.pi ** (d / 2) / math.gamma(d / 2) * reach ** (d - 1)
            areas[int(k)] = _binomial(hits, n, whole * share)
        return areas


def _binomial(hits, n, size):
    share = (hits + 1) / (n + 2)  # an error also for no hits or all hits
    return hits / n * size, math.sqrt(share * (1 - share) / n) * size


def _cap(rng, n, axis, cosine, d):
    """Uniform directions within a cone about an axis, and their share of all."""
    if d == 2:
        half = math.acos(cosine)
        angle = math.atan2(axis[1], axis[0]) + rng.uniform(-half, half, n)
        return np.column_stack([np.cos(angle), np.sin(angle)]), half / math.pi
    along = rng.uniform(cosine, 1.0, n)
    around = rng.uniform(0.0, 2 * math.pi, n)
    basis = np.linalg.qr(np.column_stack([axis, np.eye(3)]))[0]
    sine = np.sqrt(1 - along**2)
    local = np.column_stack([along, sine * np.cos(around), sine * np.sin(around)])
    basis[:, 0] = axis  # whatever sign the factorization chose
    return local @ basis.T, (1 - cosine) / 2


def cloud_around(positions, vectors, periodic, radii, i, radius):
    """Collect all images of the other particles within a radius of particle i."""
    heights = 1 / np.linalg.norm(np.linalg.inv(vectors), axis=0)
    span = np.abs((positions - positions[i]) @ np.linalg.inv(vectors)).max(axis=0)
    turns = np.where(periodic, np.ceil(radius / heights + span), 0).astype(int)
    images = list(itertools.product(*(range(-t, t + 1) for t in turns)))
    shifts = np.array(images, float) @ vectors
    apart = (positions - positions[i])[:, None] + shifts
    near = np.linalg.norm(apart, axis=-1) <= radius
    near[i] = False
    owners = np.nonzero(near)[0]
    return Cloud(apart[near], radii[i] + radii[owners], owners, radius)


def walk_up(cloud, points, start=None):
    """Walk from points up the power distance to vertices of the power diagram.

    Parameters
    ----------
    cloud : Cloud
    points : (k, d) array
    start : (k,) array of int, optional
        Sphere to start from, if the points lie on it; else the nearest in power.

    Returns
    -------
    (k, d + 1) array of int
        Sorted spheres of the vertex, -1 for walks that lead to infinity.
    """
    k, d = points.shape
    here = points.copy()
    ends = np.full((k, d + 1), -1)
    if k == 0:
        return ends
    rows = np.arange(k)
    alive = np.ones(k, bool)
    ends[:, 0] = cloud.powers(here).argmin(axis=1) if start is None else start
    for stage in range(1, d + 1):
        base = cloud.centers[ends[:, 0]]
        # away from the flat through the centers met so far
        ahead = here - base
        if stage > 1:
            span = cloud.centers[ends[:, 1:stage]] - base[:, None]
            frame = np.linalg.qr(np.swapaxes(span, 1, 2))[0]
            ahead -= np.einsum(
                "kij,kj->ki", frame, np.einsum("kij,ki->kj", frame, ahead)
            )
        powers = cloud.powers(here)
        rise = powers - powers[rows, ends[:, 0]][:, None]
        pull = 2 * np.einsum("kd,kmd->km", ahead, cloud.centers - base[:, None])
        with np.errstate(divide="ignore", invalid="ignore"):
            steps = np.where(pull > 0, np.maximum(rise, 0.0) / pull, np.inf)
        np.put_along_axis(steps, ends[:, :stage], np.inf, axis=1)
        ends[:, stage] = steps.argmin(axis=1)
        step = steps[rows, ends[:, stage]]
        alive &= np.isfinite(step)
        here = here + np.where(np.isfinite(step), step, 0.0)[:, None] * ahead
    ends.sort(axis=1)
    ends[~alive] = -1
    return ends


def reference_cage(cloud):
    """Find the cage of the particle at the origin from a regular triangulation."""
    d = cloud.centers.shape[1]
    nothing = np.zeros(0, int)
    unknown = ReferenceCage(
        False, cloud, nothing, nothing, np.zeros((0, d)), np.zeros((0, d), int),
        np.zeros((0, d + 1), int),
    )  # fmt: skip
    if len(cloud.centers) < d + 2:
        return unknown
    lifted = np.einsum("md,md->m", cloud.centers, cloud.centers) - cloud.reaches**2
    hull = ConvexHull(np.column_stack([cloud.centers, lifted]))
    lower = hull.equations[:, d] < 0
    simplices = hull.simplices
    first = simplices[:, 0]
    edges = cloud.centers[simplices[:, 1:]] - cloud.centers[first][:, None]
    steps = lifted[simplices[:, 1:]] - lifted[first][:, None]
    # flat ones at the end of the cloud have no vertex
    size = np.prod(np.linalg.norm(edges, axis=2), axis=1)
    lower &= np.abs(np.linalg.det(edges)) > 1e-11 * size
    vertices = np.full((len(simplices), d), np.nan)
    vertices[lower] = np.linalg.solve(edges[lower], steps[lower][..., None] / 2)[..., 0]
    powers = (
        np.sum((vertices - cloud.centers[first]) ** 2, axis=1)
        - cloud.reaches[first] ** 2
    )
    face, other = np.meshgrid(np.arange(d + 1), np.arange(len(simplices)))
    cell, slot = other.ravel(), face.ravel()
    across = hull.neighbors[cell, slot]
    keep = lower[cell] & lower[across] & (powers[cell] > 0)
    cell, slot, across = cell[keep], slot[keep], across[keep]
    # least power along the edge from vertex to vertex, seen from a sphere of the face
    sphere = simplices[cell, np.where(slot == 0, 1, 0)]
    away = vertices[cell] - cloud.centers[sphere]
    ahead = vertices[across] - vertices[cell]
    square = np.sum(ahead**2, axis=1)
    slope = np.sum(away * ahead, axis=1)
    lowest = np.clip(-slope / square, 0.0, 1.0)
    least = powers[cell] + (2 * slope + square * lowest) * lowest
    open_ = least > 0
    n = len(simplices)
    links = coo_array((np.ones(open_.sum()), (cell[open_], across[open_])), (n, n))
    label = connected_components(links, directed=False)[1]
    end = walk_up(cloud, np.zeros((1, d)))[0]
    rows = np.nonzero(lower & np.all(np.sort(simplices, axis=1) == end, axis=1))[0]
    if len(rows) == 0:
        return unknown
    mine = lower & (label == label[rows[0]])
    ball = np.sqrt(powers[mine] + cloud.reaches.max() ** 2)
    if np.any(np.linalg.norm(vertices[mine], axis=1) + ball > cloud.radius):
        return unknown
    if not lower[hull.neighbors[mine]].all():
        # a face without a neighbor: the cloud ends there
        return unknown
    shut = mine[cell] & ~open_
    slope, square, power = slope[shut], square[shut], powers[cell[shut]]
    crossing = power / (np.sqrt(slope**2 - power * square) - slope)
    corners = vertices[cell[shut]] + crossing[:, None] * ahead[shut]
    if np.any(np.linalg.norm(corners, axis=1) + cloud.reaches.max() > cloud.radius):
        return unknown
    others = np.arange(d + 1) != slot[shut][:, None]
    windows = simplices[cell[shut]][others].reshape(-1, d)
    # walks inside the cage meet no sphere beyond these
    extent = np.concatenate(
        [
            np.linalg.norm(vertices[mine], axis=1) + ball,
            np.linalg.norm(corners, axis=1) + cloud.reaches.max(),
        ]
    ).max()
    near = np.linalg.norm(cloud.centers, axis=1) <= extent
    number = np.cumsum(near) - 1
    small = Cloud(
        cloud.centers[near], cloud.reaches[near], cloud.owners[near], float(extent)
    )
    walls = np.unique(windows)
    return ReferenceCage(
        True, small, number[walls], number[np.setdiff1d(simplices[mine], walls)],
        corners, number[windows], number[np.sort(simplices[mine], axis=1)],
    )  # fmt: skip
