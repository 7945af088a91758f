"""Orientational order of neighbor bonds."""

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.harmonics import average_over_bonds, bond_harmonics, invariants
from trajcage.model import NeighborList

__all__ = ["hexatic", "steinhardt"]


def steinhardt(
    neighbors: NeighborList,
    degrees: tuple[int, ...] = (4, 6),
    *,
    average: bool = True,
) -> tuple[NDArray[np.float64], NDArray[np.float64], list[NDArray[np.complex128]]]:
    """Rotation-invariant bond-order parameters in 3D.

    Parameters
    ----------
    neighbors : NeighborList
        Neighbors with weights; a bond counts in proportion to its weight.
    degrees : tuple of int
        Degrees l of the spherical harmonics, even.
    average : bool
        Whether the harmonics are first averaged over the particle and its
        neighbors.

    Returns
    -------
    q, w : (n, len(degrees)) float64
        q_l, and w_l divided by (sum_m |q_lm|^2)^(3/2). NaN without neighbors.
    harmonics : list of (n, l + 1) complex128
        q_lm of each particle before averaging, m = 0, 1, ..., l.

    Notes
    -----
    Steinhardt, Nelson & Ronchetti, Phys. Rev. B 28, 784 (1983); averages:
    Lechner & Dellago, J. Chem. Phys. 129, 114707 (2008); facet weights:
    Mickel et al., J. Chem. Phys. 138, 044501 (2013).
    """
    offsets = neighbors.offsets
    harmonics = [
        bond_harmonics(offsets, neighbors.vectors, neighbors.weights, degree)
        for degree in degrees
    ]
    found = [
        invariants(
            average_over_bonds(offsets, neighbors.neighbors, q) if average else q
        )
        for q in harmonics
    ]
    return (
        np.column_stack([q for q, _ in found]),
        np.column_stack([w for _, w in found]),
        harmonics,
    )


def hexatic(neighbors: NeighborList, k: int) -> NDArray[np.complex128]:
    """Bond-orientational order psi_k of each particle in 2D, (n,) complex128.

    Parameters
    ----------
    neighbors : NeighborList
        Neighbors with weights; a bond counts in proportion to its weight.
    k : int
        Symmetry of the reference: 6 triangular, 4 square.

    Notes
    -----
    Weights by facet length as in Mickel et al. (2013). NaN without neighbors.
    """
    x, y = neighbors.vectors.T
    turned = np.exp(1j * k * np.arctan2(y, x))
    sums = [
        np.bincount(neighbors.particles, values, neighbors.n_particles)
        for values in (
            neighbors.weights * turned.real,
            neighbors.weights * turned.imag,
            neighbors.weights,
        )
    ]
    with np.errstate(invalid="ignore"):  # particles without neighbors
        return np.asarray((sums[0] + 1j * sums[1]) / sums[2], dtype=np.complex128)
