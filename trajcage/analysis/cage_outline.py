"""The outline of one cage of hard disks: the exact arcs of its wall.

Corners of the wall and lengths of its parts come from the kernel. From a corner on,
the wall follows the exclusion circle of a bounding neighbor counterclockwise up to the
next corner on that circle.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.cages import CageOptions
from trajcage.analysis.single_cage import SingleCage, measure_single_cage
from trajcage.errors import UsageError
from trajcage.kernel.cages import Wall
from trajcage.model import Frame

__all__ = ["CageOutline", "outline_cage"]

_LARGEST_DEVIATION = 1e-5  # of area or length: beyond it the arcs are not the cage
_ON_CIRCLE = 1e-7  # of a radius: how far a corner may be from the circle it lies on


@dataclass(frozen=True, eq=False, kw_only=True)
class CageOutline(SingleCage):
    """The wall of one cage in the plane; positions are relative to the particle.

    Parameters
    ----------
    patch : (m,) int64
        Row of the neighbor on whose exclusion circle each arc lies.
    angles : (m, 2) float64, radian
        Start and end of each arc, counterclockwise about that neighbor.
    loops : tuple of tuple of int
        The closed lines that the arcs form: each arc ends where the one before it in
        the line starts, so that the cage lies on the left of a line followed against
        the angles.
    """

    patch: NDArray[np.int64]
    angles: NDArray[np.float64]
    loops: tuple[tuple[int, ...], ...]

    @property
    def length(self) -> float:
        """Sum over the arcs, length."""
        return float(np.sum(np.diff(self.angles)[:, 0] * self.sigmas[self.patch]))

    @property
    def area(self) -> float:
        """Area within the arcs, length^2: that within their chords, less what bulges."""
        turned = np.diff(self.angles)[:, 0]
        start, end = np.moveaxis(
            np.array([self.points(arc, 2) for arc in range(len(self.patch))]), 1, 0
        )
        chords = end[:, 0] * start[:, 1] - end[:, 1] * start[:, 0]
        bulges = self.sigmas[self.patch] ** 2 * (turned - np.sin(turned))
        return 0.5 * float(np.sum(chords - bulges))

    def points(self, arc: int, n: int) -> NDArray[np.float64]:
        """Points along an arc from its start to its end, (n, 2), length."""
        angle = np.linspace(self.angles[arc, 0], self.angles[arc, 1], n)
        row = self.patch[arc]
        around = np.column_stack((np.cos(angle), np.sin(angle)))
        return np.asarray(self.vectors[row] + self.sigmas[row] * around, np.float64)


def outline_cage(
    frame: Frame, particle_id: int, options: CageOptions | None = None
) -> CageOutline:
    """Find the arcs of the wall of one cage of hard disks.

    Parameters
    ----------
    frame : Frame
        The configuration, in two dimensions.
    particle_id : int
        Id of the particle.
    options : CageOptions, optional
        As for :func:`~trajcage.analysis.cages.frame_cages`.

    Returns
    -------
    CageOutline

    Raises
    ------
    UsageError
        If the particle is not there or the frame has three dimensions.
    FrameError
        If the cage is not closed, or its arcs are not what was measured.
    """
    if frame.dimensions != 2:
        raise UsageError(
            "the outline of a cage is a line in the plane; these particles lie in space"
        )
    cage, _, wall, windows = measure_single_cage(frame, particle_id, options)
    patch, angles = _arcs(wall, windows.corners, cage.sigmas)
    outline = CageOutline(
        **vars(cage),
        patch=patch,
        angles=angles,
        loops=_loops(wall, cage.sigmas, patch, angles),
    )
    deviation = max(
        abs(outline.area / outline.free_volume - 1.0),
        abs(outline.length / outline.free_surface - 1.0),
    )
    if deviation > _LARGEST_DEVIATION:
        raise frame.error(
            f"the arcs of the cage of particle {particle_id} deviate by {deviation:.2g} "
            "from its free area or perimeter; its corners lie too close to each other "
            "for them"
        )
    return outline


def _arcs(
    wall: Wall, corners: NDArray[np.float64], sigmas: NDArray[np.float64]
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Neighbor and angles of every arc, from corner to corner of the wall.

    An arc starts at a corner where counterclockwise is away from the other circles
    there; the next corner on its circle ends it.
    """
    apart = corners[:, None] - wall.vectors
    on = np.abs(np.linalg.norm(apart, axis=2) - sigmas) < _ON_CIRCLE * sigmas
    patch: list[int] = []
    angles: list[tuple[float, float]] = []
    for row in range(len(sigmas)):
        here = np.flatnonzero(on[:, row])
        if len(here) == 0:
            patch.append(row)
            angles.append((0.0, 2.0 * math.pi))
            continue
        around = np.arctan2(apart[here, row, 1], apart[here, row, 0])
        order = np.argsort(around)
        here, around = here[order], around[order]
        along = np.column_stack((-np.sin(around), np.cos(around)))
        away = np.einsum("qd,qjd->qj", along, apart[here]) > 0.0
        met = on[here]
        met[:, row] = False
        after = np.append(around[1:], around[0] + 2.0 * math.pi)
        for k in np.flatnonzero(np.all(away | ~met, axis=1)):
            patch.append(row)
            angles.append((float(around[k]), float(after[k])))
    return np.array(patch), np.array(angles)


def _loops(
    wall: Wall,
    sigmas: NDArray[np.float64],
    patch: NDArray[np.int64],
    angles: NDArray[np.float64],
) -> tuple[tuple[int, ...], ...]:
    """Chain the arcs to closed lines, against their sense: the cage on the left."""
    rays = np.stack((np.cos(angles), np.sin(angles)), axis=-1)
    ends = wall.vectors[patch][:, None] + sigmas[patch][:, None, None] * rays
    left = set(range(len(patch)))
    loops = []
    while left:
        loop = [min(left)]
        left.remove(loop[0])
        while True:
            here = ends[loop[-1], 0]
            home = float(np.linalg.norm(ends[loop[0], 1] - here))
            nearest, gap = -1, math.inf
            for arc in left:
                apart = float(np.linalg.norm(ends[arc, 1] - here))
                if apart < gap:
                    nearest, gap = arc, apart
            if home <= gap:
                break
            loop.append(nearest)
            left.remove(nearest)
        loops.append(tuple(loop))
    return tuple(loops)
