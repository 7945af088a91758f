"""One configuration, checked, in float64, ready for the geometry."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import FrameError
from trajcage.model.box import Box

__all__ = ["Frame"]


@dataclass(frozen=True, eq=False)
class Frame:
    """Positions, radii and box of one instant.

    Parameters
    ----------
    positions : (n, d) float64, length
        Particle centers, wrapped or not.
    radii : (n,) float64, length
        Hard-sphere radii, all positive.
    box : Box
        The region that holds the particles.
    index : int
        Frame number in the source trajectory, counted from 0.
    step : int
        Simulation step; the frame number where the format stores none.
    time : float
        Time in the run's time unit.
    ids : (n,) int64
        Particle ids of the source (0, 1, ... where it has none).
    species : (n,) int32
        Type index of each particle, 0 for all where the source has no types.
    images : (n, d) int32 or None
        How often each particle has crossed each periodic edge, if known.
    resolution : float, length
        Coarsest spacing of the coordinates as stored in the source.

    Raises
    ------
    FrameError
        If a position or radius is not finite, a radius is not positive, or
        the arrays do not match; the message names particles by id.
    """

    positions: NDArray[np.float64]
    radii: NDArray[np.float64]
    box: Box
    index: int = 0
    step: int = 0
    time: float = 0.0
    ids: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, np.int64))
    species: NDArray[np.int32] = field(default_factory=lambda: np.zeros(0, np.int32))
    images: NDArray[np.int32] | None = None
    resolution: float = 0.0

    def __post_init__(self) -> None:
        n = len(self.positions)
        if len(self.ids) == 0:
            object.__setattr__(self, "ids", np.arange(n, dtype=np.int64))
        if len(self.species) == 0:
            object.__setattr__(self, "species", np.zeros(n, dtype=np.int32))
        if n == 0:
            raise self.error("expected particles, found none")
        if self.positions.shape != (n, self.box.dimensions):
            raise self.error(
                f"positions of shape {self.positions.shape} do not fit a box with "
                f"{self.box.dimensions} dimensions"
            )
        for name in ("radii", "ids", "species"):
            if getattr(self, name).shape != (n,):
                raise self.error(f"{n} particles but {len(getattr(self, name))} {name}")
        finite = np.all(np.isfinite(self.positions), axis=1)
        if not finite.all():
            raise self.error(
                f"expected finite positions, found NaN or infinity for "
                f"{self.name_particles(~finite)}; remove these particles or the "
                "frame from the input"
            )
        usable = np.isfinite(self.radii) & (self.radii > 0.0)
        if not usable.all():
            first = self.radii[~usable][0]
            raise self.error(
                f"expected positive radii, found {first:g} for "
                f"{self.name_particles(~usable)}; give diameters with --diameter "
                "(or diameter=)"
            )

    @property
    def n_particles(self) -> int:
        """Number of particles."""
        return len(self.positions)

    @property
    def dimensions(self) -> int:
        """Number of dimensions, 2 or 3."""
        return self.box.dimensions

    @property
    def mean_diameter(self) -> float:
        """Number mean of the hard-sphere diameters, length."""
        return float(2.0 * self.radii.mean())

    @property
    def equal_radii(self) -> bool:
        """Whether all radii are the same to 1e-6, the grain of single precision."""
        return bool(np.ptp(self.radii) <= 1e-6 * self.radii.mean())

    @property
    def packing_fraction(self) -> float:
        """Volume (area) of the particles over the volume (area) of the box."""
        if self.dimensions == 2:
            body = float(np.pi * np.sum(self.radii**2))
        else:
            body = float(4.0 / 3.0 * np.pi * np.sum(self.radii**3))
        return body / self.box.volume

    def name_particles(self, mask: NDArray[np.bool_], limit: int = 5) -> str:
        """Name the particles of a mask by their ids, the first few of them."""
        ids = self.ids[mask]
        shown = ", ".join(str(i) for i in ids[:limit])
        noun = "particle" if len(ids) == 1 else "particles"
        more = f" and {len(ids) - limit} more" if len(ids) > limit else ""
        return f"{noun} {shown}{more}"

    def error(self, message: str) -> FrameError:
        """Return an error about this frame, ready to raise."""
        return FrameError(message, frame=self.index, step=self.step)
