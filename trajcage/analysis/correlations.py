"""Time correlations over logarithmic lags and many time origins.

Time origins lie an interval apart that is short at first and doubles, as the
record grows, up to the one that was asked for; what was measured from origins
that drop out is dropped too. So the origins are evenly spaced over the whole
record, and a short record has as many of them as a variance needs.

Origins are kept only as long as a lag needs them: a lag l is measured from
origins that lie about l / 2 apart, since closer ones bring next to nothing new.
So the number of origins in memory is some three for each octave of lags, or
seventeen at the start, and does not depend on the number of frames.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.special import j0

from trajcage.analysis.bonds import Bonds, all_bonds
from trajcage.analysis.correlation_plan import CORRELATION_FIELDS, CorrelationPlan
from trajcage.analysis.state import State, prefixed, under
from trajcage.analysis.statistics import BlockMoments
from trajcage.analysis.unwrapping import Motion
from trajcage.model import Frame

__all__ = ["Correlations"]

# A variance over fewer origins, and even more so its error, is noise.
_FEWEST_FOR_VARIANCE = 4

# After so many intervals between origins, half of the origins are dropped.
_MANY_INTERVALS = 16

# Components of the value averaged over origins.
_R2, _R4, _RELATIVE, _Q, _Q2, _SCATTERING, _BONDS, _CAGES, _LAG, _LEFT_OUT = range(10)
_N_VALUES = 10
_MEANS = {
    "msd": _R2,
    "cage_relative_msd": _RELATIVE,
    "overlap": _Q,
    "self_scattering": _SCATTERING,
    "neighbor_correlation": _BONDS,
    "cage_correlation": _CAGES,
}


@dataclass(frozen=True, eq=False)
class _Origin:
    """A frame that later ones are compared with; each pair of particles once."""

    count: int
    time: float
    path: NDArray[np.float64]
    bonds: Bonds
    n_neighbors: NDArray[np.int64]
    average: csr_array  # takes the mean over the neighbors

    @classmethod
    def build(
        cls, count: int, time: float, path: NDArray[np.float64], bonds: Bonds
    ) -> "_Origin":
        n = len(path)
        first = np.concatenate((bonds.first, bonds.second))
        second = np.concatenate((bonds.second, bonds.first))
        n_neighbors = np.bincount(first, minlength=n)
        average = csr_array((1.0 / n_neighbors[first], (first, second)), shape=(n, n))
        return cls(count, time, path, bonds, n_neighbors, average)


class Correlations:
    """Accumulate correlations frame by frame in bounded memory.

    Parameters
    ----------
    n_particles, dimensions : int
        Shape of the frames to come.
    plan : CorrelationPlan
        What to measure.
    """

    def __init__(
        self, n_particles: int, dimensions: int, plan: CorrelationPlan
    ) -> None:
        self._n = n_particles
        self._d = dimensions
        self._plan = plan
        self._lags = plan.lags()
        self._rows = {lag: row for row, lag in enumerate(self._lags)}
        self._space(plan.first_interval)
        self._moments = BlockMoments(len(self._lags), _N_VALUES)
        # What has been measured, row and count of its origin beside it, as long as
        # some of the origins may drop out again.
        self._early: list[tuple[int, int, NDArray[np.float64]]] = []
        self._origins: list[_Origin] = []

    def _space(self, interval: int) -> None:
        self._interval = interval
        self._spacings = [self._plan.spacing(lag, interval) for lag in self._lags]

    def advance(self, count: int, frame: Frame, motion: Motion) -> None:
        """Take the next frame.

        Parameters
        ----------
        count : int
            Number of frames before this one.
        frame : Frame
            The configuration.
        motion : Motion
            Its continuous positions and displacements.
        """
        spaced = self._interval == self._plan.origin_interval
        for origin in self._origins:
            row = self._rows.get(count - origin.count)
            if row is not None and origin.count % self._spacings[row] == 0:
                value = self._compare(origin, frame, motion)
                self._moments.add(row, value)
                if not spaced:
                    self._early.append((row, origin.count, value))
        if not spaced and count == _MANY_INTERVALS * self._interval:
            self._thin_out()
        self._origins = [o for o in self._origins if self._needed(o.count, count)]
        if count % self._interval == 0:
            bonds = all_bonds(frame, motion, self._plan.bonded)
            once = bonds.select(np.flatnonzero(bonds.first < bonds.second))
            self._origins.append(
                _Origin.build(count, frame.time, motion.path.copy(), once)
            )

    def _thin_out(self) -> None:
        """Double the interval, as if it had been that from the start."""
        self._space(2 * self._interval)
        self._moments = BlockMoments(len(self._lags), _N_VALUES)
        self._early = [e for e in self._early if e[1] % self._spacings[e[0]] == 0]
        for row, _, value in self._early:
            self._moments.add(row, value)
        if self._interval == self._plan.origin_interval:
            self._early = []

    def _needed(self, origin: int, count: int) -> bool:
        """Whether a lag is still to be measured from an origin after this frame."""
        return any(
            origin + lag > count and origin % spacing == 0
            for lag, spacing in zip(self._lags, self._spacings, strict=True)
        )

    def _compare(
        self, origin: _Origin, frame: Frame, motion: Motion
    ) -> NDArray[np.float64]:
        plan = self._plan
        moved = motion.path - origin.path
        r2 = np.einsum("ij,ij->i", moved, moved)
        phase = plan.wave_number * np.sqrt(r2)
        wave = np.sinc(phase / np.pi) if self._d == 3 else j0(phase)
        overlap = float(np.mean(r2 <= plan.overlap_length**2))
        caged = origin.n_neighbors > 0
        relative = (moved - origin.average @ moved)[caged]
        bonds = origin.bonds
        squared = bonds.squared_lengths(motion, frame.box)
        closest = 2.0 * plan.broken * frame.radii.min()
        apart = np.flatnonzero(squared > closest**2)  # the others are surely kept
        first, second = bonds.first[apart], bonds.second[apart]
        contact = frame.radii[first] + frame.radii[second]
        lost = squared[apart] > (plan.broken * contact) ** 2
        n_lost = np.bincount(first[lost], minlength=self._n)
        n_lost += np.bincount(second[lost], minlength=self._n)
        whole = n_lost < plan.fraction_lost * origin.n_neighbors - 1e-9
        n_caged = np.count_nonzero(caged)
        value = np.full(_N_VALUES, np.nan)
        value[_R2] = r2.mean()
        value[_R4] = np.mean(r2 * r2)
        value[_Q], value[_Q2] = overlap, overlap * overlap
        value[_SCATTERING] = wave.mean()
        value[_LAG] = frame.time - origin.time
        value[_LEFT_OUT] = self._n - n_caged
        if n_caged:
            value[_RELATIVE] = np.einsum("ij,ij->", relative, relative) / n_caged
            value[_BONDS] = 1.0 - np.count_nonzero(lost) / len(bonds)
            value[_CAGES] = np.count_nonzero(whole & caged) / n_caged
        return value

    def table(self) -> dict[str, NDArray[np.generic]]:
        """Columns under the names of :data:`CORRELATION_FIELDS`, measured lags only."""
        rows = [row for row in range(len(self._lags)) if self._moments.count(row)]
        table: dict[str, NDArray[np.generic]] = {
            field.name: np.full(len(rows), np.nan).astype(field.dtype)
            if field.dtype == "f8"
            else np.zeros(len(rows), dtype=field.dtype)
            for field in CORRELATION_FIELDS
        }
        for k, row in enumerate(rows):
            n_origins = self._moments.count(row)
            table["lag_frames"][k] = self._lags[row]
            table["lag"][k] = self._moments.mean(row)[_LAG]
            table["n_origins"][k] = n_origins
            table["without_neighbors"][k] = self._moments.mean(row)[_LEFT_OUT]
            converged = True
            for name, (value, gradient) in self._functions(row).items():
                estimate = self._moments.estimate(row, value, gradient)
                table[name][k] = value
                table[f"{name}_error"][k] = estimate.error
                converged &= estimate.converged
            table["errors_converged"][k] = converged
        return table

    def _functions(self, row: int) -> dict[str, tuple[float, NDArray[np.float64]]]:
        """Value and gradient, by the means over origins, of each column."""
        mean, unit = self._moments.mean(row), np.eye(_N_VALUES)
        functions = {name: (float(mean[k]), unit[k]) for name, k in _MEANS.items()}
        ratio = self._d / (self._d + 2.0)
        if mean[_R2] > 0.0:
            gradient = ratio * (
                unit[_R4] / mean[_R2] ** 2
                - 2.0 * unit[_R2] * mean[_R4] / mean[_R2] ** 3
            )
            alpha = ratio * mean[_R4] / mean[_R2] ** 2 - 1.0
            functions["non_gaussian"] = (float(alpha), gradient)
        # The mean of few or correlated origins follows their fluctuations; its own
        # variance makes up for what they lose by that.
        error = self._moments.estimate(row, float(mean[_Q]), unit[_Q]).error
        if self._moments.count(row) >= _FEWEST_FOR_VARIANCE:
            variance = max(mean[_Q2] - mean[_Q] ** 2, 0.0) + error**2
            gradient = self._n * (unit[_Q2] - 2.0 * mean[_Q] * unit[_Q])
            functions["chi_4"] = (float(self._n * variance), gradient)
        return functions

    def state(self) -> State:
        """All that is needed to continue, as arrays."""
        rows, counts, values = (
            zip(*self._early, strict=True) if self._early else [[]] * 3
        )
        state: State = {
            "interval": np.array(self._interval),
            "early_rows": np.array(rows, dtype=np.int64),
            "early_counts": np.array(counts, dtype=np.int64),
            "early_values": np.array(values, dtype=np.float64).reshape(-1, _N_VALUES),
            "origin_counts": np.array([o.count for o in self._origins], dtype=np.int64),
            "origin_times": np.array([o.time for o in self._origins]),
        }
        for k, origin in enumerate(self._origins):
            state[f"origin{k}.path"] = origin.path.copy()
            state.update(prefixed(f"origin{k}.bonds", origin.bonds.state()))
        state.update(prefixed("moments", self._moments.state()))
        return state

    def restore(self, state: Mapping[str, NDArray[np.generic]]) -> None:
        """Continue from what :meth:`state` returned."""
        self._space(int(state["interval"]))
        self._early = [
            (int(row), int(count), np.array(value, dtype=np.float64))
            for row, count, value in zip(
                state["early_rows"],
                state["early_counts"],
                state["early_values"],
                strict=True,
            )
        ]
        self._moments.restore(under("moments", state))
        self._origins = [
            _Origin.build(
                int(count),
                float(time),
                np.array(state[f"origin{k}.path"], dtype=np.float64),
                Bonds.from_state(under(f"origin{k}.bonds", state)),
            )
            for k, (count, time) in enumerate(
                zip(state["origin_counts"], state["origin_times"], strict=True)
            )
        ]
