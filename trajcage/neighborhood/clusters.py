"""Connected groups of particles."""

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

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
        Group of each particle, 0 for the largest, equal ones in the order of their
        first particles; single particles are groups.
    """
    n = neighbors.n_particles
    ends = np.concatenate(([0], np.cumsum(linked, dtype=np.int32)))[neighbors.offsets]
    others = neighbors.neighbors[linked].astype(np.int32)
    graph = csr_array((np.ones(len(others)), others, ends), shape=(n, n))
    # With bonds both ways, connected is strongly connected, which is found without
    # the transposed graph.
    n_groups, found = connected_components(graph, connection="strong")
    label = np.asarray(found, dtype=np.int64)
    first = np.empty(n_groups, dtype=np.int64)
    first[label[::-1]] = np.arange(n)[::-1]
    rank = np.empty(n_groups, dtype=np.int64)
    rank[np.lexsort((first, -np.bincount(label)))] = np.arange(n_groups)
    return rank[label]
