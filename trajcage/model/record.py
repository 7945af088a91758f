"""What one frame yields, and pairs of neighbors in compressed rows."""

from collections.abc import Mapping
from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from trajcage.model.box import Box

__all__ = ["CageStatus", "FrameRecord", "NeighborList"]


class CageStatus(IntEnum):
    """Whether the cage of a particle could be measured, and if not, why."""

    CLOSED = 0  #: bounded and measured
    OPEN = 1  #: reaches further than the stated reach
    BORDER = 2
    """Depends on what lies beyond an open edge of the data: not closed, and closer to
    an open edge than the reach plus the largest sum of radii."""
    OVERLAP = 3  #: the particle overlaps a neighbor by more than the tolerance
    INVALID = 4  #: no usable position, or a geometry that stayed inconsistent
    WRAPPED = 5  #: wraps around the periodic box: measured, but no cage


@dataclass(frozen=True, eq=False)
class NeighborList:
    """Neighbors of each particle in compressed rows.

    Row i is ``slice(offsets[i], offsets[i + 1])`` of the other arrays.

    Parameters
    ----------
    offsets : (n + 1,) int64
        Where each row starts.
    neighbors : (m,) int64
        Particle index of each neighbor; an index can stand twice in a row, as
        two periodic images.
    vectors : (m, d) float64, length
        From the particle to that image of the neighbor.
    weights : (m,) float64
        Facet area (length in 2D) for Voronoi neighbors, else 1.
    """

    offsets: NDArray[np.int64]
    neighbors: NDArray[np.int64]
    vectors: NDArray[np.float64]
    weights: NDArray[np.float64]

    @property
    def n_particles(self) -> int:
        """Number of rows."""
        return len(self.offsets) - 1

    @property
    def counts(self) -> NDArray[np.int64]:
        """Neighbors of each particle, (n,) int64."""
        return np.diff(self.offsets)

    @property
    def particles(self) -> NDArray[np.int64]:
        """Row index of every entry, (m,) int64."""
        return np.repeat(np.arange(self.n_particles), self.counts)

    @property
    def distances(self) -> NDArray[np.float64]:
        """Center distance of every entry, (m,) float64, length."""
        return np.asarray(np.linalg.norm(self.vectors, axis=1), dtype=np.float64)


@dataclass(frozen=True, eq=False)
class FrameRecord:
    """Everything measured on one frame; it crosses process borders.

    Parameters
    ----------
    index, step : int
        Frame number in the source trajectory and simulation step.
    time : float
        Time in the run's time unit.
    box : Box
        Box of the frame.
    values : mapping of str to array or float
        One entry for each declared :class:`~trajcage.model.Field`: (n, ...)
        arrays for per-particle fields, scalars or small arrays for the rest.
    """

    index: int
    step: int
    time: float
    box: Box
    values: Mapping[str, NDArray[np.generic] | float | int]
