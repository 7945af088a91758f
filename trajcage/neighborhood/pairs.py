"""Pairs of particles within a cut-off, exact in float64 in any box."""

from collections.abc import Callable

import freud
import numpy as np
from numpy.typing import NDArray

from trajcage.errors import UsageError
from trajcage.model import Box, Frame, NeighborList

__all__ = ["PairRule", "check_distinct", "neighbor_list"]

#: Cut-off of pairs as a function of their two arrays of radii, symmetric in
#: them and growing with both: ``lambda a, b: 1.35 * (a + b)``.
PairRule = Callable[[NDArray[np.float64], NDArray[np.float64]], NDArray[np.float64]]

# Distances to which single precision is trusted, relative to the extent of the
# points: the rounding of six coordinates and of the sum of squares, rounded up.
_SINGLE = 1e-6


def neighbor_list(
    frame: Frame, r_max: float | PairRule, *, self_images: bool = False
) -> NeighborList:
    """Find all pairs of particles up to a center distance.

    Every periodic image counts, so the cut-off may exceed half the box.

    Parameters
    ----------
    frame : Frame
        The configuration.
    r_max : float or PairRule, length
        Largest center distance, included; or a rule that gives it for the
        radii of each pair.
    self_images : bool
        Whether the images of a particle itself count. They move with it, so
        they neither cage nor hold it, but they do make up a lattice.

    Returns
    -------
    NeighborList
        Both i-j and j-i, with exactly opposite vectors; weights are 1. The
        order inside a row is reproducible but not sorted.

    Raises
    ------
    UsageError
        If the cut-off is not positive and finite.

    Notes
    -----
    Images within the cut-off of the box are laid out explicitly around it and
    freud searches them in an open, padded box. This serves small, tilted and
    open boxes alike, which freud's own pair queries refuse or get wrong.
    """
    radii = frame.radii
    if callable(r_max):
        largest = radii.max(keepdims=True)
        reach = float(r_max(largest, largest)[0])
    else:
        reach = float(r_max)
    if not 0.0 < reach < np.inf:
        raise UsageError(f"expected a positive, finite neighbor cut-off, got {reach}")
    positions = frame.box.wrap(frame.positions)
    source, turns = _images(frame.box, positions, reach)
    shifts = turns @ frame.box.vectors
    i, k = _propose(positions, positions[source] + shifts, reach)
    j = source[k]
    # This order of operations makes the vectors of i-j and j-i exact opposites.
    vectors = (positions[j] - positions[i]) + shifts[k]
    limit = r_max(radii[i], radii[j]) if callable(r_max) else reach
    keep = np.einsum("ij,ij->i", vectors, vectors) <= np.square(limit)
    keep &= (k != i) if self_images else (j != i)
    counts = np.bincount(i[keep], minlength=frame.n_particles)
    return NeighborList(
        offsets=np.concatenate(([0], np.cumsum(counts))),
        neighbors=j[keep],
        vectors=vectors[keep],
        weights=np.ones(int(keep.sum())),
    )


def check_distinct(frame: Frame, near: NeighborList | None = None) -> None:
    """Refuse particles that sit on top of each other.

    Overlapping spheres are no matter; only centers closer than 1e-4 of the
    mean spacing, or than single precision can tell apart in this box, are
    duplicates. freud's tessellation ends the whole process on such a pair.

    Parameters
    ----------
    frame : Frame
        The configuration.
    near : NeighborList, optional
        All pairs that touch or overlap, and maybe others; searched if needed.

    Raises
    ------
    FrameError
        Naming the particles by id.
    """
    spacing = (frame.box.volume / frame.n_particles) ** (1.0 / frame.dimensions)
    extent = np.append(frame.box.lengths, np.ptp(frame.box.wrap(frame.positions), 0))
    limit = max(1e-4 * spacing, _SINGLE * float(extent.max()))
    if near is not None and limit <= 2.0 * frame.radii.min():
        shortest = near.distances.min(initial=np.inf)
        if shortest > limit:
            return
    pairs = neighbor_list(frame, limit)
    if len(pairs.neighbors) == 0:
        return
    doubled = pairs.counts > 0
    closest = int(np.argmin(pairs.distances))
    pair = np.isin(
        np.arange(frame.n_particles),
        [pairs.particles[closest], pairs.neighbors[closest]],
    )
    raise frame.error(
        f"expected distinct particles, found centers closer than {limit:.3g} for "
        f"{frame.name_particles(doubled)} (closest: {frame.name_particles(pair)}, "
        f"{pairs.distances[closest]:.3g} apart); remove the duplicates from the input"
    )


def _images(
    box: Box, positions: NDArray[np.float64], reach: float
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Particles and their images within reach of the box.

    Returns the particle index (m,) and the turns (m, d) along the edges; the
    particles themselves come first.
    """
    d = box.dimensions
    fractional = box.fractional(positions)
    source = np.arange(len(positions))
    turns = np.zeros((len(positions), d))
    for axis in np.flatnonzero(box.periodic):
        margin = reach / box.heights[axis] * (1.0 + 1e-9) + 1e-9
        along = fractional[source, axis]
        found_source, found_turns = [source], [turns]
        for turn in range(1, int(np.ceil(margin)) + 1):
            for signed in (turn, -turn):
                moved = along + signed
                near = (moved >= -margin) & (moved <= 1.0 + margin)
                step = turns[near].copy()
                step[:, axis] = signed
                found_source.append(source[near])
                found_turns.append(step)
        source, turns = np.concatenate(found_source), np.concatenate(found_turns)
    return source, turns


def _propose(
    queries: NDArray[np.float64], points: NDArray[np.float64], reach: float
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Find all query-point pairs within reach, and a few beyond it, by index."""
    low, high = points.min(axis=0), points.max(axis=0)
    center = 0.5 * (low + high)
    side = float((high - low).max()) / reach  # in units of the reach from here on
    r_max = 1.0 + _SINGLE * (side + 2.0)
    box = freud.box.Box.cube(side + 3.0 * r_max)
    search = freud.locality.AABBQuery(box, _in_space((points - center) / reach))
    found = search.query(_in_space((queries - center) / reach), {"r_max": r_max})
    pairs = found.toNeighborList()
    return (
        np.asarray(pairs.query_point_indices, dtype=np.int64),
        np.asarray(pairs.point_indices, dtype=np.int64),
    )


def _in_space(points: NDArray[np.float64]) -> NDArray[np.float32]:
    """Points as freud takes them: single precision, three coordinates."""
    return np.pad(points, ((0, 0), (0, 3 - points.shape[1]))).astype(np.float32)
