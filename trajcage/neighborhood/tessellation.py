"""Voronoi cells and the neighbors that share their facets."""

from typing import Any

import freud
import numpy as np
from numpy.typing import NDArray

from trajcage.kernel import radical_cells
from trajcage.model import Box, Frame, NeighborList
from trajcage.neighborhood.boxes import freud_box, lower_triangle
from trajcage.neighborhood.memory import return_freed_memory
from trajcage.neighborhood.pairs import check_distinct

__all__ = ["radical_voronoi", "tessellate", "voronoi"]

# Particles of a frame from which on what freud leaves behind is worth the time.
_HUGE = 100_000

# Neighbors whose vectors are computed together: few enough for the cache.
_AT_A_TIME = 16_384


def tessellate(
    frame: Frame, near: NeighborList | None = None
) -> tuple[NDArray[np.float64], NeighborList]:
    """Divide space among the particles: Voronoi for equal radii, radical for others.

    Parameters, results and errors are those of :func:`voronoi` and
    :func:`radical_voronoi`.
    """
    return (voronoi if frame.equal_radii else radical_voronoi)(frame, near)


def voronoi(
    frame: Frame, near: NeighborList | None = None
) -> tuple[NDArray[np.float64], NeighborList]:
    """Tessellate space into the regions nearest to each particle center.

    Parameters
    ----------
    frame : Frame
        The configuration; radii are not used.
    near : NeighborList, optional
        As in :func:`trajcage.neighborhood.check_distinct`.

    Returns
    -------
    cell_volumes : (n,) float64, length^d
        Cell volumes (areas in 2D), right to the single precision of freud
        (about 1e-6 relative). NaN for cells that a particle beyond an open
        edge of the data could still cut.
    neighbors : NeighborList
        Neighbors across the facets, weighted by facet area (length in 2D).
        In a small box a particle can neighbor its own images. Rows of NaN
        cells hold the neighbors found inside the data.

    Raises
    ------
    FrameError
        If two particles sit on top of each other.

    Notes
    -----
    freud 3 mistakes rows of box vectors for columns when it converts boxes by
    itself, ignores open edges, and takes centers closer than an absolute 1e-5
    for duplicates. So the box is built here, from its lower triangular form,
    in units of the mean particle spacing, and open edges are padded.
    """
    check_distinct(frame, near)
    d, n = frame.dimensions, frame.n_particles
    positions = frame.box.wrap(frame.positions)
    scale = (frame.box.volume / n) ** (1.0 / d)
    padded = _padded(frame.box, positions, scale)
    fractional = padded.fractional(positions)
    triangular = lower_triangle(padded.vectors) / scale
    box = freud_box(triangular)
    points = np.zeros((n, 3))
    points[:, :d] = (fractional - 0.5) @ triangular
    tessellation = freud.locality.Voronoi()
    tessellation.compute((box, points.astype(np.float32)))
    volumes = np.asarray(tessellation.volumes, dtype=np.float64) * scale**d
    if not frame.box.fully_periodic:
        unbounded = _depends_on_outside(
            frame.box, padded, tessellation, fractional, triangular * scale, scale
        )
        volumes[unbounded] = np.nan
    pairs = tessellation.nlist
    del tessellation  # with all corners of the cells, the most memory of a run
    if n >= _HUGE:
        return_freed_memory()
    first, second = pairs.query_point_indices, pairs.point_indices
    vectors = np.empty((len(first), d))
    inverse = np.linalg.inv(triangular)
    for start in range(0, len(first), _AT_A_TIME):
        part = slice(start, start + _AT_A_TIME)
        i, j = first[part], second[part]
        proposed = np.asarray(pairs.vectors[part, :d], dtype=np.float64)
        turns = np.round(proposed @ inverse - (fractional[j] - fractional[i]))
        vectors[part] = (positions[j] - positions[i]) + turns @ padded.vectors
    return volumes, NeighborList(
        offsets=np.concatenate(([0], np.cumsum(np.bincount(first, minlength=n)))),
        neighbors=np.asarray(second, dtype=np.int64),
        vectors=vectors,
        weights=np.asarray(pairs.weights, dtype=np.float64) * scale ** (d - 1),
    )


def radical_voronoi(
    frame: Frame, near: NeighborList | None = None
) -> tuple[NDArray[np.float64], NeighborList]:
    """Tessellate space by power distance, |x - x_i|^2 - r_i^2, from each particle.

    Facets lie in the planes of equal power, which pass between unequal spheres that
    do not overlap, so each sphere is inside its own cell. Equal radii give the
    Voronoi cells.

    Parameters
    ----------
    frame : Frame
        The configuration.
    near : NeighborList, optional
        As in :func:`trajcage.neighborhood.check_distinct`.

    Returns
    -------
    cell_volumes : (n,) float64, length^d
        Cell volumes (areas in 2D). NaN for cells that a particle beyond an open edge
        of the data could still cut, if it is no larger than the largest particle
        known; 0 for particles hidden inside larger ones.
    neighbors : NeighborList
        Neighbors across the facets, weighted by facet area (length in 2D).
        In a small box a particle can neighbor its own images. Rows of NaN
        cells are empty.

    Raises
    ------
    FrameError
        If two particles sit on top of each other.

    Notes
    -----
    All in float64 by :func:`trajcage.kernel.radical_cells`; freud has no radical
    cells. Method: B. J. Gellatly & J. L. Finney, J. Non-Cryst. Solids 50, 313 (1982).
    """
    check_distinct(frame, near)
    box = frame.box
    cells = radical_cells(
        box.wrap(frame.positions),
        box.vectors,
        box.origin,
        np.array(box.periodic),
        frame.radii,
    )
    return cells.volumes, NeighborList(
        cells.offsets, cells.neighbors, cells.vectors, cells.areas
    )


def _padded(box: Box, positions: NDArray[np.float64], spacing: float) -> Box:
    """Box that holds all particles and a margin of one spacing along open edges."""
    if box.fully_periodic:
        return box
    is_open = np.logical_not(box.periodic)
    fractional = box.fractional(positions)
    margin = spacing / box.heights
    low = np.where(is_open, np.minimum(fractional.min(axis=0), 0.0) - margin, 0.0)
    high = np.where(is_open, np.maximum(fractional.max(axis=0), 1.0) + margin, 1.0)
    vectors = box.vectors * (high - low)[:, None]
    return Box(vectors, box.origin + low @ box.vectors, box.periodic)


def _depends_on_outside(
    box: Box,
    padded: Box,
    tessellation: Any,
    fractional: NDArray[np.float64],
    triangular: NDArray[np.float64],
    scale: float,
) -> NDArray[np.bool_]:
    """Cells with a vertex nearer to an open edge than to their own particle.

    A particle just beyond that edge would take the vertex away; all other
    cells are certain, whatever lies outside.
    """
    d = box.dimensions
    cells = tessellation.polytopes
    owner = np.repeat(np.arange(len(cells)), [len(cell) for cell in cells])
    corners = np.concatenate(cells)[:, :d] * scale
    vertices = corners @ np.linalg.inv(triangular) + 0.5
    radius = np.linalg.norm((vertices - fractional[owner]) @ triangular, axis=1)
    inside = box.fractional(vertices @ padded.vectors + padded.origin)
    is_open = np.logical_not(box.periodic)
    depth = np.minimum(inside, 1.0 - inside) * box.heights
    unsafe = np.any(depth[:, is_open] < radius[:, None], axis=1)
    return np.bincount(owner, weights=unsafe, minlength=len(fractional)) > 0
