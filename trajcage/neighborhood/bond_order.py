"""Orientational order of neighbor bonds: harmonics by freud."""

from dataclasses import dataclass
from typing import Any

import freud
import numpy as np
from numpy.typing import NDArray

from trajcage.model import Frame, NeighborList
from trajcage.neighborhood.boxes import freud_box, lower_triangle

__all__ = ["hexatic", "steinhardt"]


def steinhardt(
    frame: Frame,
    neighbors: NeighborList,
    degrees: tuple[int, ...] = (4, 6),
    *,
    average: bool = True,
) -> tuple[NDArray[np.float64], NDArray[np.float64], list[NDArray[np.complex64]]]:
    """Rotation-invariant bond-order parameters in 3D.

    Parameters
    ----------
    frame : Frame
        The configuration.
    neighbors : NeighborList
        Neighbors with weights; a bond counts in proportion to its weight.
    degrees : tuple of int
        Degrees l of the spherical harmonics.
    average : bool
        Whether the harmonics are first averaged over the particle and its
        neighbors.

    Returns
    -------
    q, w : (n, len(degrees)) float64
        q_l, and w_l divided by (sum_m |q_lm|^2)^(3/2). NaN without neighbors.
    harmonics : list of (n, 2 l + 1) complex64
        q_lm of each particle before averaging, in the order of freud: m = 0,
        1, ..., l, -1, ..., -l.

    Notes
    -----
    Steinhardt, Nelson & Ronchetti, Phys. Rev. B 28, 784 (1983); averages:
    Lechner & Dellago, J. Chem. Phys. 129, 114707 (2008); facet weights:
    Mickel et al., J. Chem. Phys. 138, 044501 (2013). Single precision.
    """
    order = freud.order.Steinhardt(
        list(degrees), average=average, wl=True, weighted=True, wl_normalize=True
    )
    bonds = _bonds(frame, neighbors)
    order.compute(bonds.system, neighbors=bonds.neighbors)
    n, kinds = frame.n_particles, len(degrees)
    return (
        np.asarray(order.ql, dtype=np.float64).reshape(-1, kinds)[:n],
        np.asarray(order.particle_order, dtype=np.float64).reshape(-1, kinds)[:n],
        [np.asarray(harmonics)[:n] for harmonics in order.particle_harmonics],
    )


def hexatic(frame: Frame, neighbors: NeighborList, k: int) -> NDArray[np.complex128]:
    """Bond-orientational order psi_k of each particle in 2D, (n,) complex128.

    Parameters
    ----------
    frame : Frame
        The configuration.
    neighbors : NeighborList
        Neighbors with weights; a bond counts in proportion to its weight.
    k : int
        Symmetry of the reference: 6 triangular, 4 square.

    Notes
    -----
    Weights by facet length as in Mickel et al. (2013). NaN without neighbors.
    """
    order = freud.order.Hexatic(k=k, weighted=True)
    bonds = _bonds(frame, neighbors)
    order.compute(bonds.system, neighbors=bonds.neighbors)
    return np.asarray(order.particle_order, dtype=np.complex128)[: frame.n_particles]


@dataclass(frozen=True)
class _Bonds:
    """Points and bonds as freud takes them; the first n points are the frame's."""

    system: tuple[Any, NDArray[np.float32]]
    neighbors: Any


def _bonds(frame: Frame, neighbors: NeighborList) -> _Bonds:
    """Hand bonds to freud, which takes their vectors from the wrapped points.

    It sees the nearest image only. So the box is repeated, and stretched along
    open edges, until every bond is shorter than half of it.
    """
    d, n = frame.dimensions, frame.n_particles
    lengths = neighbors.distances
    longest = float(lengths.max()) if len(lengths) else 0.0
    vectors = frame.box.vectors
    needed = 2.0 * longest * (1.0 + 1e-6) / frame.box.heights
    is_open = np.logical_not(frame.box.periodic)
    vectors = vectors * np.where(is_open, np.maximum(needed, 1.0), 1.0)[:, None]
    repeats = np.where(is_open, 1, np.maximum(np.ceil(needed), 1)).astype(np.int64)
    cells = np.indices(tuple(repeats.tolist())).reshape(d, -1).T
    inverse = np.linalg.inv(vectors)
    fractional = frame.box.wrap(frame.positions) @ inverse
    i, j = neighbors.particles, neighbors.neighbors
    cell = np.zeros((1, 1), dtype=np.int64)
    if len(cells) > 1:
        turns = neighbors.vectors @ inverse + fractional[i] - fractional[j]
        ends = np.round(turns).astype(np.int64) + cells[:, None]
        cell = np.ravel_multi_index(tuple(np.moveaxis(ends % repeats, -1, 0)), repeats)
    points = np.zeros((n * len(cells), 3))
    unit = float(lengths.mean()) if longest > 0.0 else 1.0
    one_cell = lower_triangle(vectors) / unit
    triangular = one_cell * repeats[:, None]
    spread = (fractional + cells[:, None]).reshape(-1, d) / repeats
    points[:, :d] = (spread - np.floor(spread) - 0.5) @ triangular
    bonds = np.zeros((len(i), 3), dtype=np.float32)
    bonds[:, :d] = neighbors.vectors @ (inverse @ one_cell)
    weights = neighbors.weights / neighbors.weights.mean() if len(i) else np.ones(0)
    start = i + n * np.arange(len(cells))[:, None]
    listed = freud.locality.NeighborList.from_arrays(
        len(points),
        len(points),
        start.ravel().astype(np.uint32),
        (j + n * cell).ravel().astype(np.uint32),
        np.tile(bonds, (len(cells), 1)),
        np.tile(weights.astype(np.float32), len(cells)),
    )
    return _Bonds((freud_box(triangular), points.astype(np.float32)), listed)
