"""Continuous paths of particles across periodic boundaries."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from trajcage.model import Frame

__all__ = ["Motion", "Unwrapper", "along_edges"]

# A crossing is told from a move by its length: below half a box height one of
# the two is excluded. Steps are refused somewhat earlier, because of particles
# that did exceed one half some then show up just below it.
_LONGEST_STEP = 0.4


@dataclass(frozen=True, eq=False)
class Motion:
    """Where the particles of a frame have got to, periodic crossings undone.

    Parameters
    ----------
    positions : (n, d) float64, length
        Continuous positions, equal to those of the frame up to whole box
        vectors. Differences of two of them in one frame are pair vectors.
    path : (n, d) float64, length
        Displacement since the first frame: the sum of the steps, each taken in
        fractional coordinates and the box of its frame, so that a box that
        changes carries its particles along without moving them. Without the
        common drift, if that is removed.
    """

    positions: NDArray[np.float64]
    path: NDArray[np.float64]


class Unwrapper:
    """Follow particles from frame to frame, in any periodic box.

    Parameters
    ----------
    n_particles, dimensions : int
        Shape of the frames to come.
    remove_drift : bool
        Whether the mean displacement of all particles is taken out of `path`.

    Notes
    -----
    Summing steps, rather than scaling unwrapped coordinates with the box,
    keeps displacements free of the spurious growth described by von Buelow,
    Bullerjahn & Hummer, J. Chem. Phys. 153, 021101 (2020).
    """

    def __init__(
        self, n_particles: int, dimensions: int, *, remove_drift: bool
    ) -> None:
        shape = (n_particles, dimensions)
        self._remove_drift = remove_drift
        self._started = False
        self._has_images = False
        self._fractional = np.zeros(shape)
        self._images = np.zeros(shape)  # whole numbers, as floats for speed
        self._turns = np.zeros(shape)
        self._path = np.zeros(shape)
        self._drift = np.zeros(dimensions)

    @property
    def drift(self) -> NDArray[np.float64]:
        """Mean displacement of all particles since the first frame, (d,) float64."""
        return self._drift.copy()

    def advance(self, frame: Frame) -> Motion:
        """Take the next frame.

        Parameters
        ----------
        frame : Frame
            Its image flags are used if it has them. Otherwise each step is the
            shortest one along every periodic edge.

        Raises
        ------
        FrameError
            If a step is too long to tell a crossing of the boundary from a move,
            or if image flags come or go within a trajectory.
        """
        fractional = frame.box.fractional(frame.positions)
        flags = frame.images
        if not self._started:
            self._started = True
            self._has_images = flags is not None
        elif self._has_images != (flags is not None):
            raise frame.error(
                "expected image flags in all frames or in none, found "
                f"{'none' if flags is None else 'flags'} here; write them in all frames"
            )
        else:
            self._step(frame, fractional)
        if flags is not None:
            self._images = flags.astype(np.float64)
        self._fractional = fractional
        return Motion(
            frame.positions + along_edges(self._turns, frame.box.vectors),
            self._path - self._drift if self._remove_drift else self._path.copy(),
        )

    def _step(self, frame: Frame, fractional: NDArray[np.float64]) -> None:
        periodic = np.array(frame.box.periodic)
        step = fractional - self._fractional
        flags = frame.images
        turns = -np.rint(step) if flags is None else flags - self._images
        turns[:, ~periodic] = 0.0
        step += turns
        if flags is None:
            _check_length(frame, np.abs(step) * periodic)
        self._turns += turns
        moved = along_edges(step, frame.box.vectors)
        self._path += moved
        self._drift += moved.mean(axis=0)

    def state(self) -> dict[str, NDArray[np.generic]]:
        """All that is needed to continue, as arrays."""
        return {
            "flags": np.array([self._started, self._has_images]),
            "fractional": self._fractional.copy(),
            "images": self._images[: None if self._has_images else 0].copy(),
            "turns": self._turns.astype(np.int32),
            "path": self._path.copy(),
            "drift": self._drift.copy(),
        }

    def restore(self, state: Mapping[str, NDArray[np.generic]]) -> None:
        """Continue from what :meth:`state` returned."""
        self._started, self._has_images = (bool(flag) for flag in state["flags"])
        self._fractional = np.array(state["fractional"], dtype=np.float64)
        if self._has_images:
            self._images = np.array(state["images"], dtype=np.float64)
        self._turns = np.array(state["turns"], dtype=np.float64)
        self._path = np.array(state["path"], dtype=np.float64)
        self._drift = np.array(state["drift"], dtype=np.float64)


def along_edges(
    numbers: NDArray[np.float64], vectors: NDArray[np.floating]
) -> NDArray[np.float64]:
    """Product of rows (..., d) and a (d, d) matrix.

    Without the linear algebra library, whose threads cost more than they save here
    and can change the last bit with their number.
    """
    total = np.zeros(numbers.shape)
    for k, axis in np.argwhere(vectors):
        total[..., axis] += numbers[..., k] * vectors[k, axis]
    return total


def _check_length(frame: Frame, step: NDArray[np.float64]) -> None:
    """Refuse steps close to half a box height, given in fractions of a height."""
    if step.max() > _LONGEST_STEP:
        too_long = step.max(axis=1) > _LONGEST_STEP
        raise frame.error(
            f"expected particles to move less than {_LONGEST_STEP:g} of the box height "
            f"from one frame to the next, found {step.max():.3g} for "
            f"{frame.name_particles(too_long)}; near one half, a move cannot be told "
            "from a crossing of the periodic boundary: save frames more often, store "
            "image flags, or leave the time analysis out"
        )
