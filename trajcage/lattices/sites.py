"""Sites of perfect lattices."""

import math
from itertools import product

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import UsageError
from trajcage.lattices.ideal import IdealLattice, find_lattice

__all__ = ["lattice_sites", "nearest_directions"]


def lattice_sites(
    name: str, repeats: int | tuple[int, ...], spacing: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the sites of a periodic block of a perfect lattice.

    Parameters
    ----------
    name : str
        Lattice, see :data:`LATTICES`.
    repeats : int or tuple of int
        Conventional rectangular or orthorhombic cells along each axis.
    spacing : float
        Nearest-neighbor distance, length.

    Returns
    -------
    positions : (n, d) float64, length
        Sites, the first one at the origin.
    vectors : (d, d) float64, length
        Box vectors in rows, along the axes.

    Raises
    ------
    UsageError
        If the lattice is unknown, or repeats or spacing are not positive.
    """
    entry = find_lattice(name)
    counts = (repeats,) * entry.dimensions if isinstance(repeats, int) else repeats
    if len(counts) != entry.dimensions or any(
        count < 1 or count != int(count) for count in counts
    ):
        msg = (
            f"repeats must be a positive integer or {entry.dimensions} of them for the "
            f"{entry.name} lattice, got {repeats!r}"
        )
        raise UsageError(msg)
    if not (math.isfinite(spacing) and spacing > 0):
        msg = f"spacing must be a positive number, got {spacing!r}"
        raise UsageError(msg)
    cell = spacing * np.array(entry.cell)
    cells = np.array(
        list(product(*(range(int(count)) for count in counts))), dtype=np.float64
    )
    fractions = cells[:, np.newaxis, :] + np.array(entry.basis)
    positions = (fractions * cell).reshape(-1, entry.dimensions)
    return positions, np.diag(cell * np.array(counts))


def nearest_directions(entry: IdealLattice) -> NDArray[np.float64]:
    """Return the unit vectors from a site to its nearest neighbors, (m, d) float64."""
    sites, vectors = lattice_sites(entry.name, 3, 1.0)
    lengths = np.diag(vectors)
    separations = sites - lengths * np.rint(sites / lengths)
    distances = np.linalg.norm(separations, axis=1)
    return np.asarray(separations[np.abs(distances - 1.0) < 1e-9])
