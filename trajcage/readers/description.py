"""What was understood of an input."""

from collections.abc import Mapping
from dataclasses import dataclass

__all__ = ["InputDescription"]


@dataclass(frozen=True)
class InputDescription:
    """What was understood of an input, and from where.

    Values that may change with time are those of the first frame.

    Parameters
    ----------
    files : tuple of str
        Topology and trajectory.
    format : str
        Format of the frames.
    n_particles, n_frames : int
        Sizes; the last frames of a damaged file may prove unreadable.
    dimensions : int
        Number of dimensions, and in `dimensions_source` why.
    box_vectors : tuple of d rows, length
        Box edges.
    box_lengths : tuple of d float, length
        Their lengths.
    box_origin : tuple of d float, length
        The corner where they start.
    periodic : tuple of d bool
        Periodic edges.
    box_source, periodic_source, radii_source, time_source : str
        Where each comes from, as sentences.
    radius_min, radius_max, radius_mean : float, length
        Radii.
    species : mapping of str to int
        Number of particles of each type.
    first_step, first_time, last_step, last_time
        Clock of the first and the last frame; None if the last is unreadable.
    dt : float or None
        Time of one step, if given.
    time_unit : str
        Name of the time unit; ``"step"`` if times are step numbers.
    resolution : float, length
        Coarsest spacing of the coordinates as stored.
    notes : tuple of str
        What else the user should know.
    """

    files: tuple[str, ...]
    format: str
    n_particles: int
    n_frames: int
    dimensions: int
    dimensions_source: str
    box_vectors: tuple[tuple[float, ...], ...]
    box_lengths: tuple[float, ...]
    box_origin: tuple[float, ...]
    box_source: str
    periodic: tuple[bool, ...]
    periodic_source: str
    radius_min: float
    radius_max: float
    radius_mean: float
    radii_source: str
    species: Mapping[str, int]
    first_step: int
    first_time: float
    last_step: int | None
    last_time: float | None
    dt: float | None
    time_unit: str
    time_source: str
    resolution: float
    notes: tuple[str, ...]
