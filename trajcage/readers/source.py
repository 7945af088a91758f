"""What every kind of file has to tell, whoever reads it."""

import warnings
from abc import ABC, abstractmethod
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import FrameError, InputError

__all__ = [
    "Particles",
    "RawFrame",
    "Source",
    "check_file",
    "collect_warnings",
    "float_spacing",
]

# Warnings of the third-party readers about things that do not touch us: we
# never use their masses, units, elements or time step.
_HARMLESS = (
    "DCDReader currently makes independent timesteps",
    "Reader has no dt information",
    "Cannot write lock/offset file",
    "Reload offsets from trajectory",
    "Couldn't save offsets",
    "Element information is missing",
    "Unknown element",
    "Unknown masses",
    "No velocities",
    "Found no information for attr",
)


@dataclass(frozen=True, eq=False)
class Particles:
    """What a topology says about the particles.

    Parameters
    ----------
    type_names : tuple of str
        Names of the types.
    types : (n,) int32
        Index of each particle's type.
    radii : (n,) float64 or None, length
        Radii, if the file stores any.
    radii_source : str
        Where the radii stand in the file.
    ids : (n,) int64 or None
        Particle ids, if the file stores any.
    """

    type_names: tuple[str, ...]
    types: NDArray[np.int32]
    radii: NDArray[np.float64] | None = None
    radii_source: str = ""
    ids: NDArray[np.int64] | None = None

    def own_ids(self) -> NDArray[np.int64]:
        """Return the ids, counted from 0 where the file has none."""
        if self.ids is None:
            return np.arange(len(self.types), dtype=np.int64)
        return self.ids.copy()

    def rows(self, ids: NDArray[np.int64]) -> NDArray[np.intp]:
        """Find the rows of these ids, by order where the file has no ids.

        Raises
        ------
        ValueError
            If the ids, or their number, are others.
        """
        if len(ids) != len(self.types):
            raise ValueError(
                f"expected the {len(self.types)} particles of the topology, found "
                f"{len(ids)}"
            )
        if self.ids is None:
            return np.arange(len(ids))
        order = np.argsort(self.ids)
        found = np.searchsorted(self.ids[order], ids).clip(max=len(order) - 1)
        rows = order[found]
        if not np.array_equal(self.ids[rows], ids):
            raise ValueError("the particle ids are not those of the topology")
        return np.asarray(rows)


@dataclass(frozen=True, eq=False)
class RawFrame:
    """One frame as stored, in float64, before the user's options apply.

    Parameters
    ----------
    positions : (n, 3) float64, length
        Particle centers.
    ids : (n,) int64
        Particle ids.
    types : (n,) int32
        Index into the type names of the source.
    vectors : (3, 3) float64 or None, length
        Box edges as rows, if the file has a box.
    origin : (3,) float64 or None, length
        Corner of the box, if the format defines it.
    periodic : tuple of 3 bool or None
        Periodic edges, if the file says so.
    step : int or None
        Simulation step, if the format stores one.
    time : float or None
        Time, if the format stores one.
    radii : (n,) float64 or None, length
        Radii, if the file has them.
    images : (n, 3) int32 or None
        Crossings of the edges: ``positions + images @ vectors`` is unwrapped.
    """

    positions: NDArray[np.float64]
    ids: NDArray[np.int64]
    types: NDArray[np.int32]
    vectors: NDArray[np.float64] | None = None
    origin: NDArray[np.float64] | None = None
    periodic: tuple[bool, ...] | None = None
    step: int | None = None
    time: float | None = None
    radii: NDArray[np.float64] | None = None
    images: NDArray[np.int32] | None = None


class Source(ABC):
    """One open input, read frame by frame.

    Subclasses fill the attributes when they open the file.

    Attributes
    ----------
    files : tuple of Path
        The files behind this source.
    format : str
        Name of the format.
    n_frames : int
        Frames found; the last ones may prove unreadable.
    type_names : tuple of str
        Names of the particle types.
    planar : bool or None
        Whether the file says that it is two-dimensional, None if it is silent.
    radii_source, box_source : str
        Where radii and box stand, as part of a sentence.
    box_anchor : {"corner", "center"} or None
        Whether the format places the origin in a corner or in the center of
        the box; None if writers differ.
    has_ids : bool
        Whether the ids come from the file.
    notes : list of str
        What the user should know about this input.
    """

    files: tuple[Path, ...]
    format: str
    n_frames: int
    type_names: tuple[str, ...]
    planar: bool | None = None
    radii_source: str = ""
    box_source: str = ""
    box_anchor: str | None = None
    has_ids: bool = False
    notes: list[str]

    @abstractmethod
    def read(self, index: int) -> RawFrame:
        """Read one frame; raises FrameError if that fails."""

    @abstractmethod
    def spacing(self, raw: RawFrame) -> float:
        """Return the coarsest spacing of the stored coordinates of a frame."""

    @abstractmethod
    def close(self) -> None:
        """Close the files."""

    def index_types(self, names: Sequence[str], frame: int) -> NDArray[np.int32]:
        """Turn type names into indices; a type unknown to frame 0 is an error."""
        known = {name: k for k, name in enumerate(self.type_names)}
        try:
            return np.array([known[name] for name in names], dtype=np.int32)
        except KeyError:
            unknown = sorted(set(names) - set(known))
        raise FrameError(
            f"expected the particle types {', '.join(self.type_names)} of the first "
            f"frame, found {', '.join(unknown)}",
            frame=frame,
        )


@contextmanager
def collect_warnings(notes: list[str]) -> Iterator[None]:
    """Turn warnings of third-party readers into notes, drop the harmless ones."""
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        yield
    for warning in caught:
        text = " ".join(str(warning.message).split())
        if not any(known in text for known in _HARMLESS) and text not in notes:
            notes.append(text)


def float_spacing(positions: NDArray[np.float64], dtype: type = np.float32) -> float:
    """Distance of neighboring floats at the largest coordinate, length."""
    finite = np.abs(positions[np.isfinite(positions)])
    return float(np.spacing(dtype(finite.max()))) if finite.size else 0.0


def check_file(path: Path) -> None:
    """Raise InputError unless the path is a readable file with something in it."""
    try:
        with path.open("rb") as file:
            empty = not file.read(1)
    except FileNotFoundError:
        raise InputError(f"expected an input file, found nothing at {path}") from None
    except IsADirectoryError:
        raise InputError(f"expected an input file, {path} is a folder") from None
    except OSError as error:
        raise InputError(f"cannot read {path}: {error.strerror}") from error
    if empty:
        raise InputError(f"expected a trajectory or topology, {path} is empty")
