"""Connected groups of particles, by freud."""

import freud
import numpy as np
from numpy.typing import NDArray

from trajcage.model import NeighborList

__all__ = ["connected_groups"]


def connected_groups(
    neighbors: NeighborList, linked: NDArray[np.bool_]
) -> NDArray[np.int64]:
    """Find the groups of particles that hang together.

    Parameters
    ----------
    neighbors : NeighborList
        Bonds, i-j and j-i.
    linked : (m,) bool
        The bonds that link their particles.

    Returns
    -------
    (n,) int64
        Group of each particle, 0 for the largest; single particles are groups.
    """
    n = neighbors.n_particles
    i, j = neighbors.particles, neighbors.neighbors
    once = linked & (i < j)  # one of the two directions is enough, and half the work
    i, j = i[once], j[once]
    bonds = freud.locality.NeighborList.from_arrays(
        n,
        n,
        i.astype(np.uint32),
        j.astype(np.uint32),
        np.ones((len(i), 3), dtype=np.float32),
    )
    # Only the bonds matter: freud asks for a box and points, but does not use them.
    points = np.zeros((n, 3), dtype=np.float32)
    cluster = freud.cluster.Cluster()
    cluster.compute((freud.box.Box.cube(1.0), points), neighbors=bonds)
    return np.asarray(cluster.cluster_idx, dtype=np.int64)
