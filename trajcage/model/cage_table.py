"""The cages of one configuration as a table over particles."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from trajcage.model.record import CageStatus

__all__ = ["CageTable", "CageWalls", "CageWindows"]


@dataclass(frozen=True, eq=False)
class CageWalls:
    """Patches of the cage walls; row i of the cages is ``offsets[i]:offsets[i + 1]``.

    Parameters
    ----------
    offsets : (n + 1,) int64
        Where the patches of each cage start.
    neighbors : (m,) int64
        Particle whose exclusion sphere carries the patch; a particle stands
        twice if two of its periodic images bound the cage.
    areas : (m,) float64, length^(d-1)
        Size of the patch.
    vectors : (m, d) float64, length
        From the particle in the cage to that image of the neighbor.
    """

    offsets: NDArray[np.int64]
    neighbors: NDArray[np.int64]
    areas: NDArray[np.float64]
    vectors: NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class CageWindows:
    """Shut windows of the cages; row i of the cages is ``offsets[i]:offsets[i + 1]``.

    Parameters
    ----------
    offsets : (n + 1,) int64
        Where the windows of each cage start.
    neighbors : (m, d) int64
        The particles that form the window.
    ratios : (m,) float64
        Opening ratio: the factor on the exclusion radii at which the window
        would be exactly shut, at most 1.
    corners : (m, d) float64, length
        Corner of the cage wall behind the window.
    """

    offsets: NDArray[np.int64]
    neighbors: NDArray[np.int64]
    ratios: NDArray[np.float64]
    corners: NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class CageTable:
    """What is known about the cage of every particle of one configuration.

    Sizes are NaN, counts and neighbors -1 where the cage is neither closed nor
    wrapped; the latter, regions that wrap around the periodic box, are measured only
    with an infinite reach.

    Parameters
    ----------
    free_volume : (n,) float64, length^d
        Volume (area in 2D) of the cage.
    free_surface : (n,) float64, length^(d-1)
        Area (length in 2D) of its wall.
    wall_sum : (n,) float64, length^d
        Sum over the bounding neighbors of the contact distance times the wall
        area on their exclusion sphere.
    status : (n,) uint8
        Codes of :class:`~trajcage.model.CageStatus`.
    bounding_neighbors : (n,) int32
        Neighbors, images counted apart, that carry a piece of the wall.
    weakest_window : (n,) float64
        Largest opening ratio of a shut window.
    weakest_window_neighbors : (n, d) int64
        The particles that form that window.
    walls : CageWalls or None
        Every patch of the walls, if asked for.
    windows : CageWindows or None
        Every shut window, if asked for.
    """

    free_volume: NDArray[np.float64]
    free_surface: NDArray[np.float64]
    wall_sum: NDArray[np.float64]
    status: NDArray[np.uint8]
    bounding_neighbors: NDArray[np.int32]
    weakest_window: NDArray[np.float64]
    weakest_window_neighbors: NDArray[np.int64]
    walls: CageWalls | None = None
    windows: CageWindows | None = None

    def __len__(self) -> int:
        return len(self.status)

    @property
    def closed(self) -> NDArray[np.bool_]:
        """The closed cages, (n,) bool."""
        return np.asarray(self.status == CageStatus.CLOSED)

    @property
    def measured(self) -> NDArray[np.bool_]:
        """Closed cages and regions that wrap around the box, (n,) bool."""
        return np.asarray(self.closed | (self.status == CageStatus.WRAPPED))

    @property
    def counts(self) -> dict[str, int]:
        """Number of cages of each status, by its name."""
        found = np.bincount(self.status, minlength=len(CageStatus))
        return {code.name.lower(): int(found[code]) for code in CageStatus}

    @property
    def left_out(self) -> int:
        """Number of particles that no mean over closed cages contains."""
        return len(self) - int(np.count_nonzero(self.closed))

    @property
    def mean_free_volume(self) -> float:
        """Mean over the closed cages, NaN without any; see :attr:`left_out`."""
        closed = self.closed
        return float(self.free_volume[closed].mean()) if closed.any() else float("nan")

    def __repr__(self) -> str:
        counts = ", ".join(f"{n} {name}" for name, n in self.counts.items() if n)
        return f"<CageTable: {len(self)} particles, cages {counts}>"
