"""Cage breaking: particles that lose the neighbors that held them.

A neighbor is bonded when r <= A1 (r_i + r_j) and gone when r > A2 (r_i + r_j); in
between it stays what it was, so rattling around one distance changes nothing
(A1 = 1.1, A2 = 1.6 in 2D and 1.5 in 3D in Yamamoto & Onuki, Phys. Rev. E 58, 3515
(1998), from memory). A cage is the set of neighbors bonded at its start. It is
broken when a set fraction of them is gone, and the next cage starts there.
"""

from collections.abc import Callable, Mapping

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.bonds import Bonds, all_bonds, bonds_of
from trajcage.analysis.breaking_rule import BreakingRule
from trajcage.analysis.events import Moment, Present
from trajcage.analysis.state import prefixed, under
from trajcage.analysis.survival import LifetimeCounts
from trajcage.analysis.unwrapping import Motion
from trajcage.analysis.windows import crosses_window, window_corners
from trajcage.model import Frame

__all__ = ["CageTracker"]

#: Turns "has broken its cage of late", (n,) bool, into regions, (n,) int.
Classify = Callable[[NDArray[np.bool_]], NDArray[np.integer]]


# Share of the frame spacing by which times may be off through rounding.
_TIME_GRAIN = 0.01

# Arrays of the tracker that make up its state, beside its parts.
_ARRAYS = (
    "gone",
    "size",
    "lost",
    "whole",
    "corners",
    "corner_path",
    "through",
    "last_break",
)


class CageTracker:
    """Follow the cage of every particle through its starts and ends.

    Parameters
    ----------
    n_particles, dimensions : int
        Shape of the frames to come.
    rule : BreakingRule
        When a cage counts as broken.
    """

    def __init__(self, n_particles: int, dimensions: int, rule: BreakingRule) -> None:
        n, d = n_particles, dimensions
        self._rule = rule
        self._n = n
        self._first_frame = -1
        self._bonds = Bonds.none(d)
        self._gone = np.zeros(0, dtype=np.bool_)
        self._size = np.zeros(n, dtype=np.int64)
        when, measured = ("frame", "step", "time"), ("region", "free_volume")
        window = ("weakest_window", "corners")
        # the cage begins; it is still mostly whole; the loss begins that still lasts
        self._start = Moment(n, d, *when, "path")
        self._before = Moment(n, d, "path", *measured, *window)
        self._end = Moment(n, d, *when, "path", *measured)
        self._lost = np.zeros(n, dtype=np.bool_)
        self._whole = np.zeros(n, dtype=np.bool_)
        self._corners = np.full((n, d, d), np.nan)
        self._corner_path = np.full((n, d), np.nan)
        self._through = np.full(n, -1, dtype=np.int8)
        self._last_break = np.full(n, -np.inf)
        self._previous: Present | None = None
        self.persistence = LifetimeCounts()
        self.survival = LifetimeCounts()

    def advance(
        self,
        frame: Frame,
        motion: Motion,
        values: Mapping[str, NDArray[np.generic]],
        tick: float,
        classify: Classify | None,
    ) -> tuple[
        NDArray[np.bool_],
        NDArray[np.integer] | None,
        dict[str, NDArray[np.generic]],
    ]:
        """Take the next frame.

        Parameters
        ----------
        frame : Frame
            The configuration.
        motion : Motion
            Its continuous positions and displacements.
        values : mapping of str to array
            What is known of `free_volume`, `region`, `weakest_window` (n,) and
            `weakest_window_neighbors` (n, d).
        tick : float, time
            Unit in which lifetimes are counted; not used on the first frame.
        classify : callable or None
            Gives the regions once it is known who broke a cage; takes the place of
            ``values["region"]``.

        Returns
        -------
        mobile : (n,) bool
            Particles that broke a cage within the mobility window.
        region : (n,) int or None
            What `classify` returned.
        events : dict of str to array
            Rows of the event table.
        """
        first = self._first_frame < 0
        if first:
            self._first_frame = frame.index
        grain = _TIME_GRAIN * tick  # unknown on the first frame, when nothing breaks
        n_lost, begun, broken = self._losses(frame, motion, grain)
        self._last_break[broken] = frame.time
        age = frame.time - self._last_break
        window = self._rule.mobility_window
        mobile = age < (10.0 * tick if window is None else window) - grain
        known, region = dict(values), None
        if classify is not None:
            known["region"] = region = classify(mobile)
        present = Present.of(frame, motion, known)
        self._leave(self._whole & (2 * n_lost >= self._critical))
        self._whole = (2 * n_lost < self._critical) & (self._size > 0)
        self._lose(np.flatnonzero(begun), present)
        restart = np.flatnonzero(broken | (self._size == 0))
        fresh = self._fresh_bonds(restart, frame, motion, everyone=first)
        events = self._events(np.flatnonzero(broken), fresh, tick)
        if len(restart):
            self._begin(restart, fresh, present)
        self._previous = present
        return mobile, region, events

    def _losses(
        self, frame: Frame, motion: Motion, grain: float
    ) -> tuple[NDArray[np.int64], NDArray[np.bool_], NDArray[np.bool_]]:
        """Neighbors lost by each particle; whose loss begins; whose cage broke."""
        bonds, rule = self._bonds, self._rule
        squared = bonds.squared_lengths(motion, frame.box)
        closest = 2.0 * rule.bonded * frame.radii.min()
        apart = np.flatnonzero(squared > closest**2)  # the others are surely bonded
        squared = squared[apart]
        contact = frame.radii[bonds.first[apart]] + frame.radii[bonds.second[apart]]
        gone = self._gone[apart] & (squared > (rule.bonded * contact) ** 2)
        gone |= squared > (rule.broken * contact) ** 2
        self._gone = np.zeros(len(bonds), dtype=np.bool_)
        self._gone[apart] = gone
        n_lost = np.bincount(bonds.first[self._gone], minlength=self._n)
        lost = (self._size > 0) & (n_lost >= self._critical)
        begun = lost & ~self._lost
        since = np.where(begun, frame.time, self._end["time"])
        broken = lost & (frame.time - since >= rule.minimum_duration - grain)
        self._lost = lost
        return n_lost, begun, broken

    @property
    def _critical(self) -> NDArray[np.float64]:
        """Losses that break each cage; rounding must not ask for one more."""
        return np.asarray(self._rule.fraction_lost * self._size - 1e-9, np.float64)

    def _leave(self, leaving: NDArray[np.bool_]) -> None:
        """Remember the last frame on which some cages were mostly whole."""
        who, last = np.flatnonzero(leaving), self._previous
        if last is None or len(who) == 0:
            return
        self._before.take(who, last.columns)
        neighbors = last.columns["corners"][who]
        self._corners[who] = window_corners(last.box, last.positions, who, neighbors)
        self._corner_path[who] = last.columns["path"][neighbors].mean(axis=1)

    def _lose(self, who: NDArray[np.int64], present: Present) -> None:
        """Remember where some particles are when their loss is complete."""
        self._end.take(who, present.columns)
        path = present.columns["path"]
        moved = path[who] - self._before["path"][who]
        carried = path[self._before["corners"][who]].mean(axis=1)
        carried -= self._corner_path[who]
        self._through[who] = crosses_window(self._corners[who], moved - carried)

    def _fresh_bonds(
        self,
        restart: NDArray[np.int64],
        frame: Frame,
        motion: Motion,
        *,
        everyone: bool,
    ) -> Bonds:
        """Bonds of the cages that start now."""
        if everyone:
            return all_bonds(frame, motion, self._rule.bonded)
        if len(restart) == 0:
            return Bonds.none(frame.dimensions)
        return bonds_of(restart, frame, motion, self._rule.bonded)

    def _begin(
        self, restart: NDArray[np.int64], fresh: Bonds, present: Present
    ) -> None:
        """Start the next cages of some particles."""
        who = np.zeros(self._n, dtype=np.bool_)
        who[restart] = True
        kept = np.flatnonzero(~who[self._bonds.first])
        self._bonds = self._bonds.select(kept).join(fresh)
        self._gone = np.concatenate((self._gone[kept], np.zeros(len(fresh), np.bool_)))
        self._size[restart] = np.bincount(fresh.first, minlength=self._n)[restart]
        self._whole[restart] = self._size[restart] > 0
        self._lost[restart] = False
        self._start.take(restart, present.columns)

    def _events(
        self, broken: NDArray[np.int64], fresh: Bonds, tick: float
    ) -> dict[str, NDArray[np.generic]]:
        """Rows for the cages that broke, and their lifetimes counted."""
        start, before, end = self._start, self._before, self._end
        since_first = start["frame"][broken] == self._first_frame
        ticks = self._ticks(end["time"][broken] - start["time"][broken], tick)
        self.persistence.add(ticks[since_first])
        self.survival.add(ticks[~since_first])
        listed = np.zeros(self._n, dtype=np.bool_)
        listed[broken] = True
        old = np.flatnonzero(listed[self._bonds.first])
        new = np.flatnonzero(listed[fresh.first])
        was = self._bonds.first[old] * self._n + self._bonds.second[old]
        lost = was[self._gone[old]]
        gained = fresh.first[new] * self._n + fresh.second[new]
        # Two images of one neighbor count once, and not if one of them is left.
        lost = np.setdiff1d(lost, was[~self._gone[old]])
        gained = np.setdiff1d(gained, was)

        def offsets(pairs: NDArray[np.int64]) -> NDArray[np.int64]:
            counts = np.bincount(pairs // self._n, minlength=self._n)[broken]
            return np.concatenate(([0], np.cumsum(counts)))

        return {
            "particle": broken,
            "start_frame": start["frame"][broken],
            "end_frame": end["frame"][broken],
            "start_step": start["step"][broken],
            "end_step": end["step"][broken],
            "start_time": start["time"][broken],
            "end_time": end["time"][broken],
            "from_record_start": since_first.astype(np.uint8),
            "displacement": end["path"][broken] - start["path"][broken],
            "n_neighbors_start": self._size[broken],
            "region_before": before["region"][broken],
            "region_after": end["region"][broken],
            "free_volume_before": before["free_volume"][broken],
            "free_volume_after": end["free_volume"][broken],
            "weakest_window_before": before["weakest_window"][broken],
            "through_weakest_window": self._through[broken],
            "neighbors_lost": lost % self._n,
            "neighbors_lost_offsets": offsets(lost),
            "neighbors_gained": gained % self._n,
            "neighbors_gained_offsets": offsets(gained),
        }

    def open_ages(
        self, time: float, tick: float
    ) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Ages of the cages still whole, (k,) int64, in ticks.

        Returns
        -------
        persistence, survival : (k,) int64
            Of cages of the first frame, and of cages that began later.
        """
        ages = np.rint((time - self._start["time"]) / tick).astype(np.int64)
        since_first = self._start["frame"] == self._first_frame
        caged = self._size > 0
        return ages[caged & since_first], ages[caged & ~since_first]

    @property
    def persisting_fraction(self) -> float:
        """Share of the cages of the first frame that are still whole."""
        since_first = self._start["frame"] == self._first_frame
        whole = int(np.count_nonzero(since_first & (self._size > 0)))
        total = whole + self.persistence.total
        return whole / total if total else np.nan

    @property
    def n_without_neighbors(self) -> int:
        """Particles that have no cage because they have no bonded neighbor."""
        return int(np.count_nonzero(self._size == 0))

    def state(self) -> dict[str, NDArray[np.generic]]:
        """All that is needed to continue, as arrays."""
        state: dict[str, NDArray[np.generic]] = {
            "first_frame": np.array(self._first_frame),
            **{name: getattr(self, f"_{name}").copy() for name in _ARRAYS},
        }
        for name, part in self._parts().items():
            state.update(prefixed(name, part.state()))
        state.update(prefixed("bonds", self._bonds.state()))
        if self._previous is not None:
            state.update(prefixed("previous", self._previous.state()))
        return state

    def restore(self, state: Mapping[str, NDArray[np.generic]]) -> None:
        """Continue from what :meth:`state` returned."""
        self._first_frame = int(state["first_frame"])
        for name in _ARRAYS:
            kind = getattr(self, f"_{name}").dtype
            setattr(self, f"_{name}", np.array(state[name], dtype=kind))
        for name, part in self._parts().items():
            part.restore(under(name, state))
        self._bonds = Bonds.from_state(under("bonds", state))
        previous = under("previous", state)
        self._previous = Present.from_state(previous) if previous else None

    def _parts(self) -> dict[str, Moment | LifetimeCounts]:
        return {
            "start": self._start,
            "before": self._before,
            "end": self._end,
            "persistence": self.persistence,
            "survival": self.survival,
        }

    @staticmethod
    def _ticks(durations: NDArray[np.float64], tick: float) -> NDArray[np.int64]:
        return np.maximum(np.rint(durations / tick), 1.0).astype(np.int64)
