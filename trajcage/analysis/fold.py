"""The ordered fold: all that needs more than one frame, in bounded memory.

Frames are given in order, one at a time. The state between two frames is a flat
mapping of arrays; a fold restored from it continues bit for bit as if it had never
stopped.
"""

import json
from collections.abc import Callable, Mapping
from dataclasses import asdict, dataclass

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.breaking import CageTracker
from trajcage.analysis.conclusion import Conclusion, ConclusionBuilder
from trajcage.analysis.correlations import Correlations
from trajcage.analysis.events import event_table
from trajcage.analysis.jumps import HopIndicator, jump_table
from trajcage.analysis.state import State, prefixed, under
from trajcage.analysis.time_options import TimeOptions
from trajcage.analysis.unwrapping import Unwrapper
from trajcage.errors import ResultFileError
from trajcage.model import Field, Frame
from trajcage.store import TableSpec

__all__ = ["FIELDS", "FoldOutput", "TimeFold", "growing_tables"]

#: Values of each frame.
FIELDS = (
    Field(
        "broken_fraction",
        "Share of the particles whose cage broke within the mobility window",
        per_particle=False,
    ),
    Field(
        "mobility_known",
        "1 if the record before this frame spans the mobility window; before that, "
        "breaks have been missed and too many particles count as unbroken",
        dtype="u1",
        per_particle=False,
    ),
    Field(
        "cage_breaks",
        "Cages found broken on this frame",
        dtype="i8",
        per_particle=False,
    ),
    Field(
        "persisting_fraction",
        "Share of the cages of the first frame that are still whole",
        per_particle=False,
    ),
    Field(
        "without_neighbors",
        "Particles that have no cage because they have no bonded neighbor",
        dtype="i8",
        per_particle=False,
    ),
    Field(
        "drift",
        "Length of the mean displacement of all particles since the first frame",
        unit="length",
        per_particle=False,
    ),
)


def growing_tables(dimensions: int) -> tuple[TableSpec, ...]:
    """Tables to which frames append rows: two kinds of events.

    Parameters
    ----------
    dimensions : int
        2 or 3.
    """
    return event_table(dimensions), jump_table(dimensions)


@dataclass(frozen=True, eq=False)
class FoldOutput:
    """What one frame adds.

    Parameters
    ----------
    values : dict of str to float
        One entry for each of :data:`FIELDS`.
    rows : dict of str to dict of str to array
        New rows of each of :func:`growing_tables`, by column; ragged columns with
        their offsets.
    broken : (n,) bool
        Particles whose cage broke within the mobility window. False on the first
        frame; complete once the record is longer than the window.
    region : (n,) int or None
        What `classify` returned.
    """

    values: dict[str, float]
    rows: dict[str, dict[str, NDArray[np.generic]]]
    broken: NDArray[np.bool_]
    region: NDArray[np.integer] | None


class TimeFold:
    """Consume frames in order: unwrap, find events and jumps, correlate.

    Parameters
    ----------
    options : TimeOptions
        Settings.
    n_particles, dimensions : int
        Shape of the frames to come.
    mean_diameter : float, length
        Scale of the default lengths; that of the first frame, say.
    """

    def __init__(
        self,
        options: TimeOptions,
        n_particles: int,
        dimensions: int,
        mean_diameter: float,
    ) -> None:
        n, d = n_particles, dimensions
        self._options = options
        self._n = n
        self._d = d
        self._plan = options.plan(mean_diameter)
        self._threshold = options.hop_threshold(mean_diameter)
        self._identity = np.frombuffer(
            json.dumps([asdict(options), n, d, mean_diameter]).encode(), dtype=np.uint8
        )
        self._unwrapper = Unwrapper(n, d, remove_drift=options.remove_drift)
        self._cages = CageTracker(n, d, options.rule())
        self._hops = HopIndicator(n, d, options.hop_half_window, self._threshold)
        self._correlations = Correlations(n, d, self._plan)
        self._ids = np.zeros(n, dtype=np.int64)
        self._count = 0
        self._last = np.zeros(3)  # index, step, time of the latest frame
        self._first_time = np.nan
        self._tick = np.nan  # spacing of the first two frames
        self._uneven = np.zeros(0)  # index and spacing of the first uneven frame
        self._n_jumps = 0

    @property
    def n_frames(self) -> int:
        """Frames consumed so far."""
        return self._count

    def update(
        self,
        frame: Frame,
        values: Mapping[str, NDArray[np.generic]],
        classify: Callable[[NDArray[np.bool_]], NDArray[np.integer]] | None = None,
    ) -> FoldOutput:
        """Consume the next frame.

        Parameters
        ----------
        frame : Frame
            The configuration; the same particles in the same order as before.
        values : mapping of str to (n, ...) array
            What was measured on it. Used if present: `free_volume`, `region`,
            `weakest_window`, `weakest_window_neighbors` (n, d) with negative
            entries where there is no window.
        classify : callable, optional
            Given ``broken``, returns the region of each particle, (n,) int; for
            regions that depend on whether a cage broke of late. It takes the place
            of ``values["region"]``.

        Raises
        ------
        FrameError
            If the frame does not follow the one before: another number of
            particles, other ids, a step or time that does not advance, or moves too
            long to unwrap.
        """
        self._check(frame)
        motion = self._unwrapper.advance(frame)
        self._advance_clock(frame)
        broken, region, events = self._cages.advance(
            frame, motion, values, self._tick, classify
        )
        jumps = self._hops.advance(frame, motion.path)
        self._n_jumps += len(jumps["particle"])
        if len(self._uneven) == 0:
            self._correlations.advance(self._count, frame, motion)
        self._count += 1
        scalars = {
            "broken_fraction": float(np.mean(broken)),
            "mobility_known": int(self._mobility_known(frame.time)),
            "cage_breaks": len(events["particle"]),
            "persisting_fraction": self._cages.persisting_fraction,
            "without_neighbors": self._cages.n_without_neighbors,
            "drift": float(np.linalg.norm(self._unwrapper.drift)),
        }
        return FoldOutput(
            scalars,
            {"events": events, "jumps": jumps},
            broken,
            region,
        )

    def _mobility_known(self, time: float) -> bool:
        """Whether all breaks within the mobility window could be seen."""
        window = self._options.mobility_window
        needed = 10.0 * self._tick if window is None else window
        return self._count > 1 and time - self._first_time >= needed * (1.0 - 1e-9)

    def _check(self, frame: Frame) -> None:
        n, d = frame.positions.shape
        if (n, d) != (self._n, self._d):
            raise frame.error(
                f"expected {self._n} particles in {self._d} dimensions as before, "
                f"found {n} in {d}; select particles that are there in all frames"
            )
        if self._count == 0:
            return
        index, step, time = (float(value) for value in self._last)
        if frame.step <= step or frame.index <= index:
            raise frame.error(
                f"expected frames in order, each step once; the frame before is frame "
                f"{index:.0f} with step {step:.0f}; sort the frames and leave out "
                "repetitions"
            )
        if not frame.time > time:
            raise frame.error(
                f"expected a time after {time:g}, that of the frame before, found "
                f"{frame.time:g}; correct the times of the input or give the time step"
            )
        changed = frame.ids != self._ids
        if changed.any():
            raise frame.error(
                "expected the particles of the first frame in the same order, found "
                f"{frame.name_particles(changed)} in place of others; sort each frame "
                "by particle id"
            )

    def _advance_clock(self, frame: Frame) -> None:
        if self._count == 0:
            self._ids = frame.ids.copy()
            self._first_time = frame.time
        else:
            spacing = frame.time - float(self._last[2])
            if self._count == 1:
                self._tick = spacing
            # Times kept in single precision are uneven by their rounding.
            grain = 1e-3 * self._tick + 2.0**-22 * abs(frame.time)
            if len(self._uneven) == 0 and abs(spacing - self._tick) > grain:
                self._uneven = np.array([frame.index, spacing])
        self._last = np.array([frame.index, frame.step, frame.time], dtype=np.float64)

    def conclude(self) -> Conclusion:
        """Make the curves and scalars from the frames so far; changes nothing."""
        result = ConclusionBuilder()
        result.add(
            overlap_length=self._plan.overlap_length,
            wave_number=self._plan.wave_number,
            hop_threshold=self._threshold,
        )
        n_frames = self._count
        too_few = f"{n_frames} frames: the time analysis needs at least two"
        if n_frames < 2:
            result.leave_out_survival(too_few)
        else:
            time, tick = float(self._last[2]), self._tick
            from_first, later = self._cages.open_ages(time, tick)
            for name, counts, ages in (
                ("persistence", self._cages.persistence, from_first),
                ("survival", self._cages.survival, later),
            ):
                result.add_survival(name, counts.curve(ages, tick))
        needed = 2 * self._options.hop_half_window
        if n_frames < needed:
            reason = f"{n_frames} frames: p_hop needs {needed}, two half windows"
            result.leave_out(reason, "jumps", "jumps_unfinished")
        else:
            result.add(jumps=self._n_jumps, jumps_unfinished=self._hops.n_jumping)
        if n_frames < 2:
            result.leave_out_correlations(too_few)
        elif len(self._uneven):
            index, spacing = self._uneven
            result.leave_out_correlations(
                f"frames are not equally spaced in time: {spacing:g} before frame "
                f"{index:.0f}, {self._tick:g} at the start; choose equally spaced frames"
            )
        else:
            result.add_correlations(self._correlations.table())
        return result.build()

    def state(self) -> State:
        """All that is needed to continue, as arrays without pickled objects."""
        state: State = {
            "identity": self._identity.copy(),
            "ids": self._ids.copy(),
            "count": np.array(self._count),
            "last": self._last.copy(),
            "first_time": np.array(self._first_time),
            "tick": np.array(self._tick),
            "uneven": self._uneven.copy(),
            "n_jumps": np.array(self._n_jumps),
        }
        for name, part in self._parts().items():
            state.update(prefixed(name, part.state()))
        return state

    def restore(self, state: Mapping[str, NDArray[np.generic]]) -> None:
        """Continue from what :meth:`state` returned.

        Raises
        ------
        ResultFileError
            If the state belongs to other options or other particles.
        """
        if not np.array_equal(state["identity"], self._identity):
            raise ResultFileError(
                "the saved state of the time analysis was made with other options or "
                f"particles: expected {self._identity.tobytes().decode()}, found "
                f"{np.asarray(state['identity'], dtype=np.uint8).tobytes().decode()}; "
                "resume with the same options, or start a new result file"
            )
        self._ids = np.array(state["ids"], dtype=np.int64)
        self._count = int(state["count"])
        self._last = np.array(state["last"], dtype=np.float64)
        self._first_time = float(state["first_time"])
        self._tick = float(state["tick"])
        self._uneven = np.array(state["uneven"], dtype=np.float64)
        self._n_jumps = int(state["n_jumps"])
        for name, part in self._parts().items():
            part.restore(under(name, state))

    def _parts(
        self,
    ) -> dict[str, Unwrapper | CageTracker | HopIndicator | Correlations]:
        return {
            "unwrapper": self._unwrapper,
            "cages": self._cages,
            "hops": self._hops,
            "correlations": self._correlations,
        }
