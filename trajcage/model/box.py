"""The periodic or open region of space that holds the particles."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from trajcage.errors import InputError

__all__ = ["Box"]

_AXES = "xyz"


@dataclass(frozen=True, eq=False)
class Box:
    """A parallelepiped (parallelogram in 2D), periodic or open along each edge.

    Along an open edge the box is the region in which the data are complete:
    what lies beyond it is unknown, not empty.

    Parameters
    ----------
    vectors : (d, d) float64, length
        Edge vectors as rows, d = 2 or 3, any handedness.
    origin : (d,) float64, length
        The corner from which the edge vectors start. It only matters along
        open edges.
    periodic : tuple of d bool
        Whether the box repeats along each edge.

    Raises
    ------
    InputError
        If the vectors are not finite or do not span a volume.
    """

    vectors: NDArray[np.float64]
    origin: NDArray[np.float64]
    periodic: tuple[bool, ...]

    def __post_init__(self) -> None:
        vectors = np.array(self.vectors, dtype=np.float64, order="C")
        origin = np.array(self.origin, dtype=np.float64)
        d = len(vectors)
        if vectors.shape not in {(2, 2), (3, 3)}:
            raise InputError(
                f"a box needs 2 or 3 edge vectors as rows of a square matrix, "
                f"got an array of shape {vectors.shape}"
            )
        if origin.shape != (d,) or len(self.periodic) != d:
            raise InputError(
                f"a box with {d} edge vectors needs {d} origin coordinates and "
                f"{d} boundary flags, got {origin.shape} and {self.periodic}"
            )
        if not (np.isfinite(vectors).all() and np.isfinite(origin).all()):
            raise InputError(f"box with a value that is not finite: {vectors.tolist()}")
        volume = abs(float(np.linalg.det(vectors)))
        lengths = np.linalg.norm(vectors, axis=1)
        if volume <= 1e-9 * float(np.prod(lengths)):
            raise InputError(
                f"box edges {vectors.tolist()} span no volume; give the box with "
                "--box (or box=) if the file has none, and --dimensions 2 for "
                "particles in a plane"
            )
        for array in (vectors, origin):
            array.setflags(write=False)
        object.__setattr__(self, "vectors", vectors)
        object.__setattr__(self, "origin", origin)
        object.__setattr__(self, "periodic", tuple(bool(p) for p in self.periodic))

    @classmethod
    def from_any(
        cls,
        box: ArrayLike,
        *,
        dimensions: int | None = None,
        periodic: str | Sequence[bool] | None = None,
        origin: ArrayLike | None = None,
    ) -> "Box":
        """Build a box from what people write.

        Parameters
        ----------
        box : array_like, length
            d edge lengths, d row vectors, or six numbers (three lengths and
            the angles alpha, beta, gamma in degrees, as MDAnalysis has them).
        dimensions : int, optional
            2 keeps only the xy part of a 3D specification.
        periodic : str or sequence of bool, optional
            Periodic edges, as ``"xy"`` or as flags; all edges unless given.
        origin : array_like, optional
            Corner of the box; the zero vector unless given.

        Raises
        ------
        InputError
            If the numbers do not describe a box.
        """
        numbers = np.asarray(box, dtype=np.float64)
        if numbers.shape == (6,):
            vectors = _vectors_from_angles(numbers)
        elif numbers.ndim == 1 and numbers.size in {2, 3}:
            vectors = np.diag(numbers)
        elif numbers.shape in {(2, 2), (3, 3)}:
            vectors = numbers
        else:
            raise InputError(
                "a box is given as 2 or 3 lengths, as 2 or 3 row vectors, or as "
                f"three lengths and three angles in degrees; got shape {numbers.shape}"
            )
        if dimensions == 2:
            vectors = vectors[:2, :2]
        elif dimensions == 3 and len(vectors) == 2:
            raise InputError("a box with two edges cannot hold a 3D configuration")
        d = len(vectors)
        corner = np.zeros(d) if origin is None else np.asarray(origin, float)[:d]
        return cls(vectors, corner, _periodic_flags(periodic, d))

    @property
    def dimensions(self) -> int:
        """Number of dimensions, 2 or 3."""
        return len(self.vectors)

    @property
    def volume(self) -> float:
        """Volume (area in 2D), length^d."""
        return abs(float(np.linalg.det(self.vectors)))

    @property
    def lengths(self) -> NDArray[np.float64]:
        """Lengths of the edge vectors, (d,) float64."""
        return np.asarray(np.linalg.norm(self.vectors, axis=1), dtype=np.float64)

    @property
    def heights(self) -> NDArray[np.float64]:
        """Distances between opposite faces, (d,) float64, length."""
        inverse = np.linalg.inv(self.vectors)
        return np.asarray(1.0 / np.linalg.norm(inverse, axis=0), dtype=np.float64)

    @property
    def fully_periodic(self) -> bool:
        """Whether the box repeats along every edge."""
        return all(self.periodic)

    def fractional(self, positions: NDArray[np.float64]) -> NDArray[np.float64]:
        """Coordinates along the edges, 0 to 1 inside the box, (n, d) float64."""
        return np.asarray(
            (positions - self.origin) @ np.linalg.inv(self.vectors), dtype=np.float64
        )

    def wrap(self, positions: NDArray[np.float64]) -> NDArray[np.float64]:
        """Bring positions into the box along its periodic edges, (n, d) float64.

        Positions already inside come back bit for bit.
        """
        turns = np.floor(self.fractional(positions))
        turns[:, np.logical_not(self.periodic)] = 0.0
        moved = np.any(turns != 0.0, axis=1, keepdims=True)
        return np.where(moved, positions - turns @ self.vectors, positions)

    def minimum_image(self, displacements: NDArray[np.float64]) -> NDArray[np.float64]:
        """Shortest periodic images of displacement vectors, (n, d) float64.

        Exact in any box: in a tilted box all neighboring images are compared.
        """
        flags = np.array(self.periodic)
        turns = np.round(displacements @ np.linalg.inv(self.vectors))
        turns[:, ~flags] = 0.0
        best = displacements - turns @ self.vectors
        if np.count_nonzero(self.vectors) == self.dimensions:
            return np.asarray(best, dtype=np.float64)
        norm = np.einsum("ij,ij->i", best, best)
        start = best.copy()
        for shift in np.ndindex(*(3 if p else 1 for p in self.periodic)):
            steps = np.where(flags, np.array(shift) - 1.0, 0.0)
            candidate = start + steps @ self.vectors
            size = np.einsum("ij,ij->i", candidate, candidate)
            better = size < norm
            best[better], norm[better] = candidate[better], size[better]
        return np.asarray(best, dtype=np.float64)


def _vectors_from_angles(six: NDArray[np.float64]) -> NDArray[np.float64]:
    """Row vectors from three lengths and three angles in degrees (IUCr convention)."""
    a, b, c = six[:3]
    if np.all(six[3:] == 90.0):  # no rounding from cos(90 degrees)
        return np.diag(six[:3])
    cos_a, cos_b, cos_g = np.cos(np.radians(six[3:]))
    sin_g = np.sin(np.radians(six[5]))
    if sin_g <= 0.0:
        raise InputError(f"box angle gamma must lie between 0 and 180, got {six[5]}")
    cx, cy = c * cos_b, c * (cos_a - cos_b * cos_g) / sin_g
    height = c * c - cx * cx - cy * cy
    if height <= 0.0:
        raise InputError(f"box angles {six[3:].tolist()} do not close to a box")
    return np.array([[a, 0.0, 0.0], [b * cos_g, b * sin_g, 0.0], [cx, cy, height**0.5]])


def _periodic_flags(
    periodic: str | Iterable[bool] | None, dimensions: int
) -> tuple[bool, ...]:
    if periodic is None:
        return (True,) * dimensions
    if isinstance(periodic, str):
        axes = "" if periodic == "none" else periodic
        if set(axes) - set(_AXES[:dimensions]) or len(set(axes)) != len(axes):
            raise InputError(
                f"periodic edges are named by letters out of {_AXES[:dimensions]!r} "
                f"(or 'none'), got {periodic!r}"
            )
        return tuple(axis in axes for axis in _AXES[:dimensions])
    return tuple(bool(flag) for flag in periodic)[:dimensions]
