"""What a kernel says about cages: numbers for each, rows for walls and windows."""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "PENDING",
    "Output",
    "Rows",
    "Wall",
    "Windows",
    "gather_rows",
    "make_output",
    "make_rows",
]

#: Status of a particle that waits for a wider halo.
PENDING = 255


class Output(NamedTuple):
    """Numbers of each cage; NaN and -1 where it is not closed."""

    numbers: NDArray[np.float64]
    """(n, 4): free volume, free surface, wall sum, weakest window."""
    status: NDArray[np.uint8]  #: (n,)
    bounding: NDArray[np.int32]  #: (n,) bounding neighbors
    members: NDArray[np.int64]  #: (n, d) particles of the weakest window


def make_output(n: int, d: int) -> Output:
    """Allocate the numbers of n cages in d dimensions, all pending."""
    return Output(
        np.full((n, 4), np.nan),
        np.full(n, PENDING, np.uint8),
        np.full(n, -1, np.int32),
        np.full((n, d), -1, np.int64),
    )


class Wall(NamedTuple):
    """Patches of the cage walls, one row for each bounding neighbor (image)."""

    offsets: NDArray[np.int64]  #: (n + 1,)
    neighbors: NDArray[np.int64]  #: (m,)
    areas: NDArray[np.float64]  #: (m,) length^(d-1)
    vectors: NDArray[np.float64]  #: (m, d) to the neighbor, length


class Windows(NamedTuple):
    """Shut windows of the cages, one row for each corner of the wall."""

    offsets: NDArray[np.int64]  #: (n + 1,)
    neighbors: NDArray[np.int64]  #: (m, d) the particles that form the window
    ratios: NDArray[np.float64]  #: (m,) opening ratio
    corners: NDArray[np.float64]  #: (m, d) corner of the wall behind it, length


class Rows(NamedTuple):
    """Growing output of one thread."""

    used: NDArray[np.int64]  #: (2,) rows used of patches and windows
    patch_owner: NDArray[np.int64]
    patch_neighbor: NDArray[np.int64]
    patch_numbers: NDArray[np.float64]  #: area and vector
    window_owner: NDArray[np.int64]
    window_neighbors: NDArray[np.int64]
    window_numbers: NDArray[np.float64]  #: ratio and corner


def make_rows(size: int) -> Rows:
    """Allocate so many rows of each kind."""
    return Rows(
        np.zeros(2, np.int64),
        np.empty(size, np.int64),
        np.empty(size, np.int64),
        np.empty((size, 4)),
        np.empty(size, np.int64),
        np.empty((size, 3), np.int64),
        np.empty((size, 4)),
    )


def gather_rows(rows: list[Rows], n: int, d: int, scale: float) -> tuple[Wall, Windows]:
    """Join the rows of all threads and sort them by particle."""
    owner = np.concatenate([r.patch_owner[: r.used[0]] for r in rows])
    order = np.argsort(owner, kind="stable")
    numbers = np.concatenate([r.patch_numbers[: r.used[0]] for r in rows])[order]
    neighbors = np.concatenate([r.patch_neighbor[: r.used[0]] for r in rows])[order]
    wall = Wall(
        _offsets(owner, n),
        neighbors,
        numbers[:, 0] / scale ** (d - 1),
        numbers[:, 1 : 1 + d] / scale,
    )
    owner = np.concatenate([r.window_owner[: r.used[1]] for r in rows])
    order = np.argsort(owner, kind="stable")
    numbers = np.concatenate([r.window_numbers[: r.used[1]] for r in rows])[order]
    members = np.concatenate([r.window_neighbors[: r.used[1]] for r in rows])[order]
    shut = Windows(
        _offsets(owner, n), members[:, :d], numbers[:, 0], numbers[:, 1 : 1 + d] / scale
    )
    return wall, shut


def _offsets(owner: NDArray[np.int64], n: int) -> NDArray[np.int64]:
    offsets = np.zeros(n + 1, np.int64)
    np.cumsum(np.bincount(owner, minlength=n), out=offsets[1:])
    return offsets
