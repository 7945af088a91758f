"""Bonds between particles and particular images of others, followed in time."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Self

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.unwrapping import Motion, along_edges
from trajcage.model import Box, Frame
from trajcage.neighborhood import neighbor_list

__all__ = ["Bonds", "all_bonds", "bonds_of"]

# A search over all particles costs as much as looking at about this many pairs
# one by one.
_MANY_PAIRS = 300_000


@dataclass(frozen=True, eq=False)
class Bonds:
    """Directed bonds, each to one periodic image of its second particle.

    Parameters
    ----------
    first, second : (m,) int64
        Particle indices.
    crossing : (k,) int64
        Bonds, ascending, to other images of `second` than the one at its continuous
        position.
    shifts : (d, k) int32
        Box vectors to add to that position for them. It stays the same image when
        particles cross boundaries.
    """

    first: NDArray[np.int64]
    second: NDArray[np.int64]
    crossing: NDArray[np.int64]
    shifts: NDArray[np.int32]

    @classmethod
    def none(cls, dimensions: int) -> Self:
        """No bonds at all."""
        empty = np.zeros(0, dtype=np.int64)
        return cls(empty, empty, empty, np.zeros((dimensions, 0), dtype=np.int32))

    @classmethod
    def build(
        cls,
        first: NDArray[np.int64],
        second: NDArray[np.int64],
        turns: NDArray[np.float64],
    ) -> Self:
        """Make bonds from whole turns (m, d) around the box."""
        crossing = np.flatnonzero(turns.any(axis=1))
        shifts = np.ascontiguousarray(turns[crossing].T, dtype=np.int32)
        return cls(first, second, crossing, shifts)

    def __len__(self) -> int:
        return len(self.first)

    def squared_lengths(self, motion: Motion, box: Box) -> NDArray[np.float64]:
        """Squared bond lengths now, (m,) float64, length^2."""
        total = np.zeros(len(self))
        for axis in range(box.dimensions):
            along = np.ascontiguousarray(motion.positions[:, axis])
            delta = along.take(self.second)
            delta -= along.take(self.first)
            for edge in np.flatnonzero(box.vectors[:, axis]):
                delta[self.crossing] += self.shifts[edge] * box.vectors[edge, axis]
            delta *= delta
            total += delta
        return total

    def select(self, which: NDArray[np.int64]) -> Self:
        """Keep the bonds at these places of the arrays, ascending."""
        kept = np.zeros(len(self), dtype=np.bool_)
        kept[which] = True
        still = np.flatnonzero(kept[self.crossing])
        return type(self)(
            self.first.take(which),
            self.second.take(which),
            np.searchsorted(which, self.crossing[still]),
            self.shifts.take(still, axis=1),
        )

    def join(self, other: Self) -> Self:
        """Return these bonds followed by others."""
        return type(self)(
            np.concatenate((self.first, other.first)),
            np.concatenate((self.second, other.second)),
            np.concatenate((self.crossing, other.crossing + len(self))),
            np.concatenate((self.shifts, other.shifts), axis=1),
        )

    def state(self) -> dict[str, NDArray[np.generic]]:
        """Return the bonds as compact arrays; bonds of one particle mostly follow."""
        starts = np.flatnonzero(np.diff(self.first, prepend=-1))
        return {
            "first": self.first[starts].astype(np.int32),
            "runs": np.diff(starts, append=len(self)).astype(np.int32),
            "second": self.second.astype(np.int32),
            "crossing": self.crossing.astype(np.int32),
            "shifts": self.shifts.copy(),
        }

    @classmethod
    def from_state(cls, state: Mapping[str, NDArray[np.generic]]) -> Self:
        """Rebuild from what :meth:`state` returned."""
        first = np.array(state["first"], dtype=np.int64)
        return cls(
            np.repeat(first, np.array(state["runs"], dtype=np.int64)),
            np.array(state["second"], dtype=np.int64),
            np.array(state["crossing"], dtype=np.int64),
            np.array(state["shifts"], dtype=np.int32),
        )


def all_bonds(frame: Frame, motion: Motion, factor: float) -> Bonds:
    """All pairs with r <= factor (r_i + r_j), in both directions.

    Parameters
    ----------
    frame : Frame
        The configuration.
    motion : Motion
        Its continuous positions.
    factor : float
        Bond length in units of the sum of the radii.
    """
    pairs = neighbor_list(frame, lambda a, b: factor * (a + b))
    first, second = pairs.particles, pairs.neighbors
    apart = motion.positions[second] - motion.positions[first]
    turns = along_edges(pairs.vectors - apart, np.linalg.inv(frame.box.vectors))
    return Bonds.build(first, second, np.rint(turns))


def bonds_of(
    particles: NDArray[np.int64], frame: Frame, motion: Motion, factor: float
) -> Bonds:
    """Bonds of some particles, the same as in :func:`all_bonds`.

    Parameters
    ----------
    particles : (k,) int64
        First particles.
    frame, motion, factor
        As in :func:`all_bonds`.
    """
    box = frame.box
    reach = 2.0 * factor * float(frame.radii.max())
    periodic = np.array(box.periodic)
    # Within half the box the nearest image is the only one and found by rounding.
    one_image = np.all(box.heights[periodic] > 2.0 * reach)
    axis = int(np.argmax(box.heights))
    limits = reach / box.heights * (1.0 + 1e-9)
    n_pairs = len(particles) * frame.n_particles * 2.0 * limits[axis]
    if n_pairs > _MANY_PAIRS or not one_image:
        everyone = all_bonds(frame, motion, factor)
        wanted = np.zeros(frame.n_particles, dtype=np.bool_)
        wanted[particles] = True
        return everyone.select(np.flatnonzero(wanted[everyone.first]))
    inverse = np.linalg.inv(box.vectors)
    depths = along_edges(motion.positions, inverse).T
    first, second = _close_along(depths[axis], particles, limits[axis], periodic[axis])
    for other in np.flatnonzero(np.arange(box.dimensions) != axis):
        depth = np.ascontiguousarray(depths[other])
        apart = depth.take(second) - depth.take(first)
        if periodic[other]:
            apart -= np.rint(apart)
        near = np.flatnonzero(np.abs(apart) <= limits[other])
        first, second = first.take(near), second.take(near)
    vectors = motion.positions[second] - motion.positions[first]
    turns = -np.rint(along_edges(vectors, inverse))
    turns[:, ~periodic] = 0.0
    vectors += along_edges(turns, box.vectors)
    contact = frame.radii[first] + frame.radii[second]
    bonded = np.einsum("ij,ij->i", vectors, vectors) <= np.square(factor * contact)
    bonded &= first != second
    return Bonds.build(first[bonded], second[bonded], turns[bonded])


def _close_along(
    depth: NDArray[np.float64],
    particles: NDArray[np.int64],
    limit: float,
    periodic: np.bool_,
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Pairs whose depths, modulo 1 if periodic, differ by at most a limit below 1/2."""
    if periodic:
        depth = depth - np.floor(depth)
    order = np.argsort(depth, kind="stable")
    ascending = depth[order]
    first, second = [], []
    for image in (-1.0, 0.0, 1.0) if periodic else (0.0,):
        center = depth[particles] + image
        start = np.searchsorted(ascending, center - limit, side="left")
        counts = np.searchsorted(ascending, center + limit, side="right") - start
        rank = np.arange(counts.sum()) - np.repeat(np.cumsum(counts) - counts, counts)
        first.append(np.repeat(particles, counts))
        second.append(order[np.repeat(start, counts) + rank])
    return np.concatenate(first), np.concatenate(second)
