"""Where simulations start: crystals of spheres and disks, and lists of radii."""

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

__all__ = [
    "Packing",
    "bcc",
    "binary",
    "fcc",
    "hcp",
    "polydisperse",
    "solid_volume",
    "triangular",
]

Floats = NDArray[np.float64]


class Packing(NamedTuple):
    """A configuration: positions (n, d), box lengths (d,), radii (n,)."""

    positions: Floats
    lengths: Floats
    radii: Floats


def fcc(n_cells: int | Sequence[int], packing_fraction: float) -> Packing:
    """Face-centered cubic crystal of spheres of diameter 1; 4 to a cell."""
    basis = np.array([[0, 0, 0], [0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]])
    return _crystal(n_cells, packing_fraction, [1, 1, 1], basis)


def bcc(n_cells: int | Sequence[int], packing_fraction: float) -> Packing:
    """Body-centered cubic crystal of spheres of diameter 1; 2 to a cell."""
    return _crystal(
        n_cells, packing_fraction, [1, 1, 1], np.array([[0] * 3, [0.5] * 3])
    )


def hcp(n_cells: int | Sequence[int], packing_fraction: float) -> Packing:
    """Hexagonal close-packed crystal of spheres of diameter 1; 4 to a cell."""
    basis = np.array([[0, 0, 0], [0.5, 0.5, 0], [0.5, 5 / 6, 0.5], [0, 1 / 3, 0.5]])
    edges = [1, math.sqrt(3), math.sqrt(8 / 3)]
    return _crystal(n_cells, packing_fraction, edges, basis)


def triangular(n_cells: int | Sequence[int], packing_fraction: float) -> Packing:
    """Triangular crystal of disks of diameter 1; 2 to a cell of edges 1 : sqrt(3)."""
    basis = np.array([[0, 0], [0.5, 0.5]])
    return _crystal(n_cells, packing_fraction, [1, math.sqrt(3)], basis)


def binary(n: int, ratio: float, *, large_fraction: float = 0.5) -> Floats:
    """Radii of a mixture: the small ones 0.5 first, the large ones 0.5 * ratio last."""
    radii = np.full(n, 0.5)
    radii[n - round(n * large_fraction) :] *= ratio
    return radii


def polydisperse(n: int, deviation: float) -> Floats:
    """Radii of mean 0.5 at the quantiles of a normal distribution.

    Parameters
    ----------
    n : int
    deviation : float
        Standard deviation over mean, met exactly.
    """
    scores = ndtri((np.arange(n) + 0.5) / n)
    radii: Floats = 0.5 * (1.0 + deviation * scores / scores.std())
    return radii


def solid_volume(radii: Floats, dimensions: int) -> float:
    """Volume (area) of all spheres (disks)."""
    unit_ball = math.pi if dimensions == 2 else 4 * math.pi / 3
    return unit_ball * math.fsum(radii**dimensions)


def _crystal(
    n_cells: int | Sequence[int],
    packing_fraction: float,
    edges: Sequence[float],
    basis: Floats,
) -> Packing:
    dimensions = len(edges)
    counts = np.broadcast_to(np.asarray(n_cells, dtype=np.int64), dimensions)
    corners = np.indices(tuple(counts)).reshape(dimensions, -1).T
    sites = (corners[:, None, :] + basis).reshape(-1, dimensions)
    radii = np.full(len(sites), 0.5)
    cells = counts * np.array(edges, dtype=np.float64)
    volume = solid_volume(radii, dimensions) / packing_fraction
    lengths = cells * (volume / math.prod(cells)) ** (1 / dimensions)
    return Packing(sites / counts * lengths, lengths, radii)
