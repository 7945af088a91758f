"""Compiled loops of monte_carlo: cell list, trial moves, overlaps; float64 throughout.

A cell list is two arrays: `heads[cell]` is the first particle of a cell and
`following[i]` the one after i, -1 ends the chain. Cells are at least as wide as the
largest contact distance, so all partners of a particle are in the cells around it.
"""

import math

import numba
import numpy as np
from numpy.typing import NDArray

__all__ = [
    "link_cells",
    "neighbor_cells",
    "resolve_overlaps",
    "smallest_ratio",
    "sweep",
    "wrap",
]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
compiled = numba.njit(cache=True)


@compiled
def wrap(positions: Floats, images: Integers, lengths: Floats) -> None:
    """Put all positions into [0, lengths) and add the crossings to the images."""
    for i in range(positions.shape[0]):
        for k in range(positions.shape[1]):
            turns = math.floor(positions[i, k] / lengths[k])
            positions[i, k] -= turns * lengths[k]
            images[i, k] += turns
            if positions[i, k] >= lengths[k]:  # rounding of a tiny negative number
                positions[i, k] = 0.0
                images[i, k] += 1


@compiled
def _cell_of(point: Floats, lengths: Floats, shape: Integers) -> int:
    index = 0
    for k in range(len(point)):
        index = index * shape[k] + min(
            int(point[k] / lengths[k] * shape[k]), shape[k] - 1
        )
    return index


@compiled
def neighbor_cells(shape: Integers) -> Integers:
    """List the cells around each cell and itself, every one once, padded with -1."""
    d = len(shape)
    n_cells = 1
    for k in range(d):
        n_cells *= shape[k]
    table = np.full((n_cells, 3**d), -1, dtype=np.int64)
    for cell in range(n_cells):
        found = 0
        for offset in range(3**d):
            rest_cell, rest_offset, index, stride = cell, offset, 0, 1
            for k in range(d - 1, -1, -1):
                at = (rest_cell % shape[k] + rest_offset % 3 - 1) % shape[k]
                index += at * stride
                stride *= shape[k]
                rest_cell //= shape[k]
                rest_offset //= 3
            slot = 0
            while slot < found and table[cell, slot] != index:
                slot += 1
            if slot == found:
                table[cell, found] = index
                found += 1
    return table


@compiled
def link_cells(
    positions: Floats, lengths: Floats, shape: Integers,
    heads: Integers, following: Integers,
) -> None:  # fmt: skip
    heads[:] = -1
    for i in range(positions.shape[0]):
        cell = _cell_of(positions[i], lengths, shape)
        following[i] = heads[cell]
        heads[cell] = i


@compiled
def _overlaps(
    point: Floats, radius: float, first: int, second: int, cell: int,
    positions: Floats, radii: Floats, lengths: Floats,
    heads: Integers, following: Integers, neighbors: Integers,
) -> bool:  # fmt: skip
    """Tell whether a sphere meets any particle but `first` and `second`."""
    for slot in range(neighbors.shape[1]):
        other = neighbors[cell, slot]
        if other < 0:
            break
        j = heads[other]
        while j >= 0:
            if j not in (first, second):
                square = 0.0
                for k in range(len(point)):
                    apart = abs(point[k] - positions[j, k])
                    apart = min(apart, lengths[k] - apart)
                    square += apart * apart
                contact = radius + radii[j]
                if square < contact * contact:
                    return True
            j = following[j]
    return False


@compiled
def _propose(
    rng: np.random.Generator, step: float, old: Floats, lengths: Floats,
    point: Floats, turns: Integers,
) -> None:  # fmt: skip
    """Fill `point` with a wrapped trial position, `turns` with its box crossings."""
    for k in range(len(old)):
        point[k] = old[k] + step * (2.0 * rng.random() - 1.0)
        turns[k] = math.floor(point[k] / lengths[k])
        point[k] -= turns[k] * lengths[k]
        if point[k] >= lengths[k]:  # rounding of a tiny negative number
            point[k] = 0.0
            turns[k] += 1


@compiled
def _place(
    i: int, point: Floats, turns: Integers, home: int, cell: int,
    positions: Floats, images: Integers, heads: Integers, following: Integers,
) -> None:  # fmt: skip
    positions[i] = point
    images[i] += turns
    if cell != home:
        if heads[home] == i:
            heads[home] = following[i]
        else:
            j = heads[home]
            while following[j] != i:
                j = following[j]
            following[j] = following[i]
        following[i] = heads[cell]
        heads[cell] = i


@compiled
def sweep(
    rng: np.random.Generator, sweeps: int, step: float, swap_fraction: float,
    mobile: Integers, positions: Floats, images: Integers, radii: Floats,
    lengths: Floats, heads: Integers, following: Integers, shape: Integers,
    neighbors: Integers,
) -> Integers:  # fmt: skip
    """Run the chain; count translations tried and accepted, then exchanges."""
    point = np.empty(positions.shape[1])
    turns = np.empty(positions.shape[1], dtype=np.int64)
    tally = np.zeros(4, dtype=np.int64)
    for _ in range(sweeps * len(mobile)):
        i = mobile[int(rng.random() * len(mobile))]
        home = _cell_of(positions[i], lengths, shape)
        if swap_fraction > 0.0 and rng.random() < swap_fraction:
            j = mobile[int(rng.random() * len(mobile))]
            tally[2] += 1
            # the contact distance of i and j is the same before and after
            if i != j and not (
                _overlaps(
                    positions[i], radii[j], i, j, home,
                    positions, radii, lengths, heads, following, neighbors,
                )
                or _overlaps(
                    positions[j], radii[i], i, j, _cell_of(positions[j], lengths, shape),
                    positions, radii, lengths, heads, following, neighbors,
                )
            ):  # fmt: skip
                radii[i], radii[j] = radii[j], radii[i]
                tally[3] += 1
            continue
        tally[0] += 1
        _propose(rng, step, positions[i], lengths, point, turns)
        cell = _cell_of(point, lengths, shape)
        if not _overlaps(
            point, radii[i], i, i, cell,
            positions, radii, lengths, heads, following, neighbors,
        ):  # fmt: skip
            _place(i, point, turns, home, cell, positions, images, heads, following)
            tally[1] += 1
    return tally


@compiled
def resolve_overlaps(
    rng: np.random.Generator, tries: int, step: float,
    mobile: Integers, positions: Floats, images: Integers, radii: Floats,
    lengths: Floats, heads: Integers, following: Integers, shape: Integers,
    neighbors: Integers,
) -> bool:  # fmt: skip
    """Move overlapping particles to free places; tell whether no overlap is left."""
    point = np.empty(positions.shape[1])
    turns = np.empty(positions.shape[1], dtype=np.int64)
    for i in mobile:
        point[:] = positions[i]
        turns[:] = 0
        home = _cell_of(point, lengths, shape)
        cell = home
        for _ in range(tries):
            if not _overlaps(
                point, radii[i], i, i, cell,
                positions, radii, lengths, heads, following, neighbors,
            ):  # fmt: skip
                _place(i, point, turns, home, cell, positions, images, heads, following)
                break
            _propose(rng, step, positions[i], lengths, point, turns)
            cell = _cell_of(point, lengths, shape)
    for i in range(positions.shape[0]):
        if _overlaps(
            positions[i], radii[i], i, i, _cell_of(positions[i], lengths, shape),
            positions, radii, lengths, heads, following, neighbors,
        ):  # fmt: skip
            return False
    return True


@compiled
def smallest_ratio(
    smallest: float, positions: Floats, radii: Floats, lengths: Floats,
    heads: Integers, following: Integers, shape: Integers, neighbors: Integers,
) -> float:  # fmt: skip
    for i in range(positions.shape[0]):
        cell = _cell_of(positions[i], lengths, shape)
        for slot in range(neighbors.shape[1]):
            other = neighbors[cell, slot]
            if other < 0:
                break
            j = heads[other]
            while j >= 0:
                if j < i:
                    square = 0.0
                    for k in range(positions.shape[1]):
                        apart = abs(positions[i, k] - positions[j, k])
                        apart = min(apart, lengths[k] - apart)
                        square += apart * apart
                    ratio = math.sqrt(square) / (radii[i] + radii[j])
                    smallest = min(smallest, ratio)
                j = following[j]
    return smallest
