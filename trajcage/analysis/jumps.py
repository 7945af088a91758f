"""Jumps of single particles: the hop indicator, frame by frame.

A jump is a move of the particle itself. It is a different kind of event from a
change of neighbors (:mod:`trajcage.analysis.breaking`), which can happen around
a particle that hardly moves.
"""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from trajcage.model import Field, Frame
from trajcage.store import TableSpec

__all__ = ["HopIndicator", "jump_table"]


def jump_table(dimensions: int) -> TableSpec:
    """Declare the table of jumps.

    Parameters
    ----------
    dimensions : int
        2 or 3.
    """
    columns = (
        Field("particle", "Index of the particle that jumped", "1", "i8", False),
        Field("frame", "Source frame at which p_hop peaks", "1", "i8", False),
        Field("step", "Simulation step of that frame", "1", "i8", False),
        Field("time", "Time of that frame", "time", "f8", False),
        Field("p_hop", "Peak value of the hop indicator", "length+2", "f8", False),
        Field(
            "displacement",
            "Mean position in the half window after the peak minus that before",
            "length",
            "f8",
            False,
            (dimensions,),
        ),
    )
    return TableSpec(
        "/trajcage/jumps",
        columns,
        description="Particles that jumped: runs of frames with p_hop above a threshold",
    )


class HopIndicator:
    """Hop indicator p_hop, frame by frame, and the jumps where it peaks.

    With A the half window before a frame and B the one that begins with it,

        p_hop = sqrt( <(r - <r>_B)^2>_A <(r - <r>_A)^2>_B ).

    A clean step of length D gives p_hop = D^2 on the first frame after it. A jump
    is an unbroken run of frames with p_hop above the threshold; it is placed at
    the largest value and reported when p_hop has come down again. So jumps that follow each other
    within the window can count as one.

    Parameters
    ----------
    n_particles, dimensions : int
        Shape of the paths.
    half_window : int
        Frames in A and in B.
    threshold : float, length^2
        Above it a particle jumps.

    Notes
    -----
    Candelier et al., Phys. Rev. Lett. 105, 135702 (2010); Smessaert & Rottler,
    Phys. Rev. E 88, 022314 (2013).
    """

    def __init__(
        self, n_particles: int, dimensions: int, half_window: int, threshold: float
    ) -> None:
        n, d, h = n_particles, dimensions, half_window
        self._half = h
        self._threshold = threshold
        self._count = 0
        self._window = np.zeros((2 * h, n, d))
        self._instants = np.zeros((2 * h, 3))  # source frame, step, time
        self._sums = np.zeros((2, n, d))  # over A and B
        self._squares = np.zeros((2, n))
        self._jumping = np.zeros(n, dtype=np.bool_)
        self._peak = np.zeros(n)
        self._peak_instant = np.zeros((n, 3))
        self._peak_move = np.zeros((n, d))

    @property
    def n_jumping(self) -> int:
        """Particles whose p_hop is above the threshold at the latest frame."""
        return int(np.count_nonzero(self._jumping))

    def advance(
        self, frame: Frame, path: NDArray[np.float64]
    ) -> dict[str, NDArray[np.generic]]:
        """Take the next frame and return the jumps that have ended.

        Parameters
        ----------
        frame : Frame
            Gives index, step and time.
        path : (n, d) float64, length
            Displacements of the particles since the first frame.
        """
        h, count = self._half, self._count
        if count >= 2 * h:
            self._move(count, 0, -1)
        if count >= h:
            self._move(count - h, 1, -1)
            self._move(count - h, 0, 1)
        slot = count % (2 * h)
        self._window[slot] = path
        self._instants[slot] = frame.index, frame.step, frame.time
        self._move(count, 1, 1)
        self._count += 1
        if self._count < 2 * h:
            return self._rows(np.zeros(0, dtype=np.int64))
        return self._peaks(count - h + 1)

    def _move(self, count: int, half: int, sign: int) -> None:
        """Add a frame of the window to one of the running sums, or take it out."""
        path = self._window[count % (2 * self._half)]
        self._sums[half] += sign * path
        self._squares[half] += sign * np.einsum("ij,ij->i", path, path)

    def _peaks(self, center: int) -> dict[str, NDArray[np.generic]]:
        before, after = self._sums / self._half
        move = after - before
        spread = self._squares / self._half
        spread[0] -= np.einsum("ij,ij->i", before, before)
        spread[1] -= np.einsum("ij,ij->i", after, after)
        np.maximum(spread, 0.0, out=spread)
        spread += np.einsum("ij,ij->i", move, move)
        p_hop = np.sqrt(spread[0] * spread[1])
        above = p_hop > self._threshold
        rows = self._rows(np.flatnonzero(self._jumping & ~above))
        higher = above & (~self._jumping | (p_hop > self._peak))
        self._peak[higher] = p_hop[higher]
        self._peak_instant[higher] = self._instants[center % (2 * self._half)]
        self._peak_move[higher] = move[higher]
        self._jumping = above
        return rows

    def _rows(self, particles: NDArray[np.int64]) -> dict[str, NDArray[np.generic]]:
        frame, step, time = self._peak_instant[particles].T
        return {
            "particle": particles,
            "frame": frame.astype(np.int64),
            "step": step.astype(np.int64),
            "time": time.copy(),
            "p_hop": self._peak[particles],
            "displacement": self._peak_move[particles],
        }

    def state(self) -> dict[str, NDArray[np.generic]]:
        """All that is needed to continue, as arrays."""
        return {
            "count": np.array(self._count),
            "window": self._window.copy(),
            "instants": self._instants.copy(),
            "sums": self._sums.copy(),
            "squares": self._squares.copy(),
            "jumping": self._jumping.copy(),
            "peak": self._peak.copy(),
            "peak_instant": self._peak_instant.copy(),
            "peak_move": self._peak_move.copy(),
        }

    def restore(self, state: Mapping[str, NDArray[np.generic]]) -> None:
        """Continue from what :meth:`state` returned."""
        self._count = int(state["count"])
        self._window = np.array(state["window"], dtype=np.float64)
        self._instants = np.array(state["instants"], dtype=np.float64)
        self._sums = np.array(state["sums"], dtype=np.float64)
        self._squares = np.array(state["squares"], dtype=np.float64)
        self._jumping = np.array(state["jumping"], dtype=np.bool_)
        self._peak = np.array(state["peak"], dtype=np.float64)
        self._peak_instant = np.array(state["peak_instant"], dtype=np.float64)
        self._peak_move = np.array(state["peak_move"], dtype=np.float64)
