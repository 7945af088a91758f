"""One closed cage with its wall and windows, for those who draw it."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.cages import CageOptions, kernel_cages
from trajcage.errors import UsageError
from trajcage.kernel.cages import Wall, Windows
from trajcage.model import CageStatus, Frame

__all__ = ["SingleCage", "measure_single_cage"]


@dataclass(frozen=True, eq=False, kw_only=True)
class SingleCage:
    """The cage of one particle; positions are relative to the particle.

    Parameters
    ----------
    particle_id : int
        Whose cage.
    radius : float, length
        Of the particle.
    free_volume, free_surface, weakest_window : float
        As measured exactly (area and length in the plane); lengths in the unit of the
        input.
    neighbors : (k,) int64
        Ids of the bounding neighbors, an entry for each periodic image.
    vectors : (k, d) float64, length
        To their centers.
    radii : (k,) float64, length
        Their radii.
    window : tuple of int
        Rows of the neighbors that form the weakest window; empty if unknown.
    window_corner : (d,) float64, length
        Corner of the wall behind that window.
    """

    particle_id: int
    radius: float
    free_volume: float
    free_surface: float
    weakest_window: float
    neighbors: NDArray[np.int64]
    vectors: NDArray[np.float64]
    radii: NDArray[np.float64]
    window: tuple[int, ...]
    window_corner: NDArray[np.float64]

    @property
    def sigmas(self) -> NDArray[np.float64]:
        """Radii of the exclusion spheres of the bounding neighbors, (k,), length."""
        return self.radii + self.radius


def measure_single_cage(
    frame: Frame, particle_id: int, options: CageOptions | None
) -> tuple[SingleCage, int, Wall, Windows]:
    """Measure the cage of one particle.

    Returns
    -------
    cage : SingleCage
        What is known of it.
    i : int
        Index of the particle in the frame.
    wall, windows
        Of this cage alone, as the kernel gives them.

    Raises
    ------
    UsageError
        If the particle is not there.
    FrameError
        If the cage is not closed.
    """
    found = np.flatnonzero(frame.ids == particle_id)
    if len(found) == 0:
        raise UsageError(
            f"there is no particle {particle_id}; ids go from {frame.ids.min()} to "
            f"{frame.ids.max()}"
        )
    i = int(found[0])
    table = kernel_cages(
        frame, options or CageOptions(), subset=np.array([i]), windows=True
    )
    status = CageStatus(int(table.status[i]))
    volume = float(table.free_volume[i])
    if status != CageStatus.CLOSED or not volume > 0.0:
        size = "volume" if frame.dimensions == 3 else "area"
        state = (
            status.name.lower() if status != CageStatus.CLOSED else f"without {size}"
        )
        raise frame.error(
            f"the cage of particle {particle_id} is {state}; only a closed cage has a "
            "wall to draw"
        )
    wall, windows = table.wall, table.windows
    assert wall is not None
    assert windows is not None
    cage = SingleCage(
        particle_id=particle_id,
        radius=float(frame.radii[i]),
        free_volume=volume,
        free_surface=float(table.free_surface[i]),
        weakest_window=float(table.weakest_window[i]),
        neighbors=frame.ids[wall.neighbors],
        vectors=wall.vectors,
        radii=frame.radii[wall.neighbors],
        window=_weakest(wall, windows, frame.radii[i] + frame.radii[wall.neighbors]),
        window_corner=windows.corners[np.argmax(windows.ratios)],
    )
    return cage, i, wall, windows


def _weakest(
    wall: Wall, windows: Windows, sigmas: NDArray[np.float64]
) -> tuple[int, ...]:
    """Rows of the neighbors of the weakest window: the images that touch its corner."""
    k = int(np.argmax(windows.ratios))
    gap = np.abs(np.linalg.norm(wall.vectors - windows.corners[k], axis=1) - sigmas)
    rows: list[int] = []
    for neighbor in windows.neighbors[k]:
        images = np.flatnonzero(wall.neighbors == neighbor)
        images = images[~np.isin(images, rows)]
        if len(images) == 0:
            return ()
        rows.append(int(images[np.argmin(gap[images])]))
    return tuple(rows)
