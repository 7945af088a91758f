"""The table of cage-breaking events, and what is remembered until one happens."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.regions import Region
from trajcage.analysis.state import State, prefixed, under
from trajcage.analysis.unwrapping import Motion
from trajcage.model import Box, Field, Frame
from trajcage.store import TableSpec

__all__ = ["Moment", "Present", "event_table"]

_WHEN = ("frame", "step", "time")


def event_table(dimensions: int) -> TableSpec:
    """Declare the table of cage-breaking events.

    Parameters
    ----------
    dimensions : int
        2 or 3.
    """

    def column(
        name: str, description: str, unit: str = "1", dtype: str = "i8", d: int = 0
    ) -> Field:
        return Field(name, description, unit, dtype, False, (d,) if d else ())

    before = "on the last frame on which less than half of that loss had happened"
    after = "on the end frame"
    region = f"({Region.UNKNOWN.value} unknown; codes as in the field region)"
    volume = f"length+{dimensions}"
    columns = (
        column("particle", "Index of the particle whose cage broke"),
        column("start_frame", "Source frame on which the cage began"),
        column("end_frame", "First source frame on which it is broken"),
        column("start_step", "Simulation step of the start frame"),
        column("end_step", "Simulation step of the end frame"),
        column("start_time", "Time of the start frame", "time", "f8"),
        column("end_time", "Time of the end frame", "time", "f8"),
        column(
            "from_record_start",
            "1 if the cage was there on the first frame, so that its age is unknown",
            dtype="u1",
        ),
        column(
            "displacement",
            "Displacement from start to end",
            "length",
            "f8",
            dimensions,
        ),
        column("n_neighbors_start", "Neighbors at the start of the cage"),
        column("region_before", f"Region {before} {region}", dtype="u1"),
        column("region_after", f"Region {after} {region}", dtype="u1"),
        column("free_volume_before", f"Free volume {before}", volume, "f8"),
        column("free_volume_after", f"Free volume {after}", volume, "f8"),
        column(
            "weakest_window_before",
            f"Opening ratio of the weakest window {before}",
            "1",
            "f8",
        ),
        column(
            "through_weakest_window",
            "Whether the straight move from there to the end crosses that window as it "
            "was then, relative to its corners: 1 yes, 0 no, -1 unknown",
            dtype="i1",
        ),
    )
    ragged = (
        column("neighbors_lost", "Neighbors of the start that are gone, by index"),
        column("neighbors_gained", "Neighbors of the next cage that are new, by index"),
    )
    return TableSpec(
        "/trajcage/events",
        columns,
        ragged,
        "Cages that broke: particles that lost a set share of the neighbors they had",
    )


@dataclass(frozen=True, eq=False)
class Present:
    """What is known of all particles on one frame.

    Parameters
    ----------
    box : Box
        Box of the frame.
    positions : (n, d) float64, length
        Continuous positions.
    columns : dict of str to (n, ...) array
        What :class:`Moment` remembers: `frame`, `step`, `time`, `path`, and the
        measured `region`, `free_volume`, `weakest_window` (NaN unknown)
        and `corners`, the particles (n, d) of that window (negative unknown).
    """

    box: Box
    positions: NDArray[np.float64]
    columns: dict[str, NDArray[Any]]

    @classmethod
    def of(
        cls, frame: Frame, motion: Motion, values: Mapping[str, NDArray[np.generic]]
    ) -> Self:
        """Gather a frame and what was measured on it."""
        n, d = frame.positions.shape
        columns = {
            "frame": np.full(n, frame.index, dtype=np.int64),
            "step": np.full(n, frame.step, dtype=np.int64),
            "time": np.full(n, frame.time),
            "path": motion.path,
            "region": np.full(n, Region.UNKNOWN, dtype=np.uint8),
            "free_volume": np.full(n, np.nan),
            "weakest_window": np.full(n, np.nan),
            "corners": np.full((n, d), -1, dtype=np.int32),
        }
        names = {"corners": "weakest_window_neighbors"}
        for name in ("region", "free_volume", "weakest_window", "corners"):
            measured = values.get(names.get(name, name))
            if measured is not None:
                columns[name][:] = measured
        return cls(frame.box, motion.positions, columns)

    def state(self) -> State:
        """All that the next frame needs of this one, as arrays: not when it was."""
        columns = {k: a for k, a in self.columns.items() if k not in _WHEN}
        return {
            "vectors": self.box.vectors.copy(),
            "origin": self.box.origin.copy(),
            "periodic": np.array(self.box.periodic),
            "positions": self.positions.copy(),
            **prefixed("columns", columns),
        }

    @classmethod
    def from_state(cls, state: Mapping[str, NDArray[np.generic]]) -> Self:
        """Rebuild from what :meth:`state` returned."""
        return cls(
            Box(
                np.array(state["vectors"], dtype=np.float64),
                np.array(state["origin"], dtype=np.float64),
                tuple(bool(flag) for flag in state["periodic"]),
            ),
            np.array(state["positions"], dtype=np.float64),
            {name: np.array(a) for name, a in under("columns", state).items()},
        )


class Moment:
    """One remembered instant for each particle, a column a quantity.

    Parameters
    ----------
    n_particles, dimensions : int
        Shape of the frames to come.
    names : str
        Which columns of :class:`Present` are remembered.
    """

    def __init__(self, n_particles: int, dimensions: int, *names: str) -> None:
        n, d = n_particles, dimensions
        columns: dict[str, NDArray[Any]] = {
            "frame": np.full(n, -1, dtype=np.int64),
            "step": np.zeros(n, dtype=np.int64),
            "time": np.zeros(n),
            "path": np.zeros((n, d)),
            "region": np.full(n, Region.UNKNOWN, dtype=np.uint8),
            "free_volume": np.full(n, np.nan),
            "weakest_window": np.full(n, np.nan),
            "corners": np.full((n, d), -1, dtype=np.int32),
        }
        self._columns = {name: columns[name] for name in names}

    def __getitem__(self, name: str) -> NDArray[Any]:
        return self._columns[name]

    def take(
        self, who: NDArray[np.int64], present: Mapping[str, NDArray[np.generic]]
    ) -> None:
        """Remember the present of some particles, by index."""
        for name, column in self._columns.items():
            column[who] = present[name][who]

    def state(self) -> State:
        """All that is needed to continue, as arrays."""
        return {name: column.copy() for name, column in self._columns.items()}

    def restore(self, state: Mapping[str, NDArray[np.generic]]) -> None:
        """Continue from what :meth:`state` returned."""
        for name, column in self._columns.items():
            column[:] = state[name]
