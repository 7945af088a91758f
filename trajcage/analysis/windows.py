"""Whether a particle left its cage through the window that was weakest."""

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.unwrapping import along_edges
from trajcage.model import Box

__all__ = ["crosses_window", "window_corners"]


def window_corners(
    box: Box,
    positions: NDArray[np.float64],
    particles: NDArray[np.int64],
    neighbors: NDArray[np.int64],
) -> NDArray[np.float64]:
    """Corners of the windows of some particles, relative to each particle.

    Parameters
    ----------
    box : Box
        Box of the frame.
    positions : (n, d) float64, length
        Positions of all particles, wrapped or not.
    particles : (k,) int64
        Which particles.
    neighbors : (k, d) int64
        Particles at the corners, negative where there is no window.

    Returns
    -------
    corners : (k, d, d) float64, length
        One row a corner. NaN where there is no window, or where a corner is
        further than half the box, so that its index does not tell which image
        it is.
    """
    apart = positions[neighbors] - positions[particles, None]
    turns = -np.rint(along_edges(apart, np.linalg.inv(box.vectors)))
    turns[..., np.logical_not(box.periodic)] = 0.0
    corners = apart + along_edges(turns, box.vectors)
    known = neighbors >= 0
    heights = box.heights[list(box.periodic)]
    if len(heights):
        known &= np.linalg.norm(corners, axis=2) < 0.5 * heights.min()
    corners[~known.all(axis=1)] = np.nan
    return np.asarray(corners, dtype=np.float64)


def crosses_window(
    corners: NDArray[np.float64], moved: NDArray[np.float64]
) -> NDArray[np.int8]:
    """Whether a straight move from the origin leads through a window.

    Parameters
    ----------
    corners : (k, d, d) float64, length
        Corners of the triangle (edge in 2D) relative to the start of the move.
    moved : (k, d) float64, length
        Displacement relative to the mean displacement of the corners.

    Returns
    -------
    crossed : (k,) int8
        1 through, 0 not, -1 unknown (no corners).
    """
    k, d = moved.shape
    crossed = np.full(k, -1, dtype=np.int8)
    known = np.isfinite(corners).all(axis=(1, 2)) & np.isfinite(moved).all(axis=1)
    first = corners[known, 0]
    # s moved = first + sum_m b_m edge_m: solve for s and the coordinates b_m.
    matrix = np.empty((len(first), d, d))
    matrix[:, :, 0] = moved[known]
    matrix[:, :, 1:] = -np.swapaxes(corners[known, 1:] - first[:, None], 1, 2)
    scale = np.linalg.norm(matrix, axis=1).prod(axis=1)
    regular = np.abs(np.linalg.det(matrix)) > 1e-12 * scale
    inside = np.zeros(len(first), dtype=np.bool_)
    if regular.any():
        solution = np.linalg.solve(matrix[regular], first[regular, :, None])[..., 0]
        s, b = solution[:, 0], solution[:, 1:]
        inside[regular] = (
            (s >= 0.0) & (s <= 1.0) & (b >= 0.0).all(axis=1) & (b.sum(axis=1) <= 1.0)
        )
    crossed[known] = inside
    return crossed
