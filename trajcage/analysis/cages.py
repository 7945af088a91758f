"""The cage of every particle: input checks around the exact kernel."""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from trajcage.errors import UsageError
from trajcage.kernel import measure_cages
from trajcage.kernel.cages import Cages
from trajcage.lattices import LATTICES
from trajcage.model import (
    Box,
    CageStatus,
    CageTable,
    CageWalls,
    CageWindows,
    Field,
    Frame,
    NeighborList,
)
from trajcage.neighborhood import check_distinct, neighbor_list

__all__ = [
    "DENSEST_PACKING",
    "CageOptions",
    "Overlaps",
    "cages",
    "check_packing",
    "default_overlap_tolerance",
    "fields",
    "find_overlaps",
    "frame_cages",
    "kernel_cages",
    "stored_values",
]

#: Highest packing fraction of equal particles, by dimension: no packing of spheres is
#: denser than FCC (Hales 2005, Ann. Math. 162, 1065), none of disks than the triangular
#: lattice (Fejes Toth 1940).
DENSEST_PACKING = {
    2: LATTICES["triangular"].close_packing.value,
    3: LATTICES["fcc"].close_packing.value,
}

# Single precision of box and radii, in a packing fraction.
_GRAIN = 1e-5


@dataclass(frozen=True)
class CageOptions:
    """How cages are measured.

    Parameters
    ----------
    reach : float, length, optional
        A cage that extends further than this from its particle is open; ten of
        the largest diameters unless given. With ``inf`` regions that wrap around a
        fully periodic box are measured, too.
    overlap_tolerance : float, length, optional
        Overlaps up to this depth count as contacts; see
        :func:`default_overlap_tolerance`.
    strict : bool
        Whether a deeper overlap is an error. Otherwise the particles concerned
        have the status ``overlap`` and no cage.

    Raises
    ------
    UsageError
        If a length makes no sense.
    """

    reach: float | None = None
    overlap_tolerance: float | None = None
    strict: bool = False

    def __post_init__(self) -> None:
        if self.reach is not None and not self.reach > 0.0:
            raise UsageError(
                f"reach, the distance beyond which a cage is open, must be > 0, "
                f"got {self.reach}"
            )
        tolerance = self.overlap_tolerance
        if tolerance is not None and not 0.0 <= tolerance < math.inf:
            raise UsageError(
                f"the overlap tolerance is a length of 0 or more, got {tolerance}"
            )

    def tolerance(self, frame: Frame) -> float:
        """Depth up to which an overlap in a frame counts as a contact, length."""
        if self.overlap_tolerance is None:
            return default_overlap_tolerance(frame)
        return self.overlap_tolerance


def fields(dimensions: int) -> tuple[Field, ...]:
    """Declare the per-particle quantities of a :class:`CageTable`, as stored."""
    d = dimensions
    left_out = "NaN where cage_status is neither closed nor wrapped"
    return (
        Field(
            "free_volume",
            "Volume (area in 2D) of the region that the center can reach while all "
            f"other particles are held fixed; {left_out}",
            f"length+{d}",
        ),
        Field(
            "free_surface",
            f"Area (length in 2D) of the wall of that region; {left_out}",
            f"length+{d - 1}",
        ),
        Field(
            "wall_sum",
            "Sum over the bounding neighbors of the contact distance times the wall "
            f"area on their exclusion sphere; {left_out}",
            f"length+{d}",
        ),
        Field(
            "cage_status",
            "closed: measured; open: reaches further than the stated reach; border: "
            "depends on what lies beyond an open edge of the data; overlap: the "
            "particle overlaps a neighbor beyond the tolerance; invalid: geometry "
            "inconsistent; wrapped: the region wraps around the periodic box and is "
            "measured as a whole (infinite reach only)",
            dtype="u1",
            codes=tuple(code.name.lower() for code in CageStatus),
        ),
        Field(
            "bounding_neighbors",
            "Number of neighbors (periodic images counted apart) whose exclusion "
            "sphere carries a piece of the wall; -1 where unknown",
            dtype="i4",
        ),
        Field(
            "weakest_window",
            "Largest opening ratio among the shut windows of the cage: the factor on "
            f"the exclusion radii at which the window would just open; {left_out}",
        ),
        Field(
            "weakest_window_neighbors",
            "Indices of the particles that form the weakest window; -1 where there is "
            "none",
            dtype="i4",
            shape=(d,),
        ),
    )


@dataclass(frozen=True)
class Overlaps:
    """Pairs closer than the sum of their radii.

    Parameters
    ----------
    count : int
        Pairs deeper than the tolerance.
    deepest : float, length
        Depth of the deepest overlap, within the tolerance or not; 0 if none.
    pair : tuple of int
        Ids of that pair; -1 if none.
    """

    count: int
    deepest: float
    pair: tuple[int, int]


def default_overlap_tolerance(frame: Frame) -> float:
    """Depth up to which an overlap is the rounding of a contact, length.

    2 sqrt(d) times the resolution of the coordinates: rounding both ends of a pair
    shifts it by up to sqrt(d) resolutions, and programs that move particles in
    the precision in which they save them add as much again. At least 1e-9 mean
    diameters, the contact precision of event-driven and compression codes
    (common practice).
    """
    rounding = 2.0 * math.sqrt(frame.dimensions) * frame.resolution
    return max(rounding, 1e-9 * frame.mean_diameter)


def check_packing(frame: Frame) -> str:
    """Refuse a packing fraction that no equal hard particles can have.

    Returns
    -------
    str
        A warning if particles of several sizes exceed it, which they may, though
        rarely; else empty.

    Raises
    ------
    FrameError
        If equal particles exceed it.
    """
    phi, densest = frame.packing_fraction, DENSEST_PACKING[frame.dimensions]
    if phi <= densest * (1.0 + _GRAIN):
        return ""
    shape = "disks" if frame.dimensions == 2 else "spheres"
    told = (
        f"the packing fraction is {phi:.4g}, above {densest:.4f}, the densest of equal "
        f"{shape}"
    )
    if frame.equal_radii:
        raise frame.error(
            f"{told}; correct the diameter ({frame.mean_diameter:.6g}) or the box "
            f"(edges {', '.join(f'{x:.6g}' for x in frame.box.lengths)}): often one "
            "of them is in another unit"
        )
    return f"{told}: right only if small particles fill the gaps between large ones"


def find_overlaps(
    frame: Frame, tolerance: float, near: NeighborList | None = None
) -> Overlaps:
    """Find the pairs that overlap, every periodic image counted.

    Parameters
    ----------
    frame : Frame
        The configuration.
    tolerance : float, length
        Overlaps up to this depth are not counted.
    near : NeighborList, optional
        All pairs that overlap, and maybe others; searched unless given.

    Raises
    ------
    FrameError
        If particles coincide; the message names them.
    """
    pairs = neighbor_list(frame, lambda a, b: a + b) if near is None else near
    first, second = pairs.particles, pairs.neighbors
    depth = frame.radii[first] + frame.radii[second] - pairs.distances
    once = (first < second) & (depth >= 0.0)
    first, second, depth = first[once], second[once], depth[once]
    if len(depth) == 0:
        return Overlaps(0, 0.0, (-1, -1))
    worst = int(np.argmax(depth))
    if depth[worst] > frame.radii[first[worst]]:
        check_distinct(frame)
    return Overlaps(
        int(np.count_nonzero(depth > tolerance)),
        float(depth[worst]),
        (int(frame.ids[first[worst]]), int(frame.ids[second[worst]])),
    )


def kernel_cages(frame: Frame, options: CageOptions, **wanted: Any) -> Cages:
    """Give a frame to :func:`~trajcage.kernel.measure_cages`, with all it `wanted`."""
    box = frame.box
    return measure_cages(
        np.ascontiguousarray(frame.positions),
        box.vectors,
        box.origin,
        np.array(box.periodic),
        np.ascontiguousarray(frame.radii),
        reach=options.reach,
        overlap_tolerance=options.tolerance(frame),
        **wanted,
    )


def frame_cages(
    frame: Frame,
    options: CageOptions,
    *,
    windows: bool = False,
    threads: int = 1,
    near: NeighborList | None = None,
) -> tuple[CageTable, Overlaps]:
    """Measure the cages of a frame.

    Parameters
    ----------
    frame : Frame
        The configuration.
    options : CageOptions
        Reach and tolerance.
    windows : bool
        Whether to list every wall patch and every window.
    threads : int
        Threads to share the particles among; the result does not depend on it.
    near : NeighborList, optional
        As in :func:`find_overlaps`.

    Returns
    -------
    CageTable, Overlaps

    Raises
    ------
    FrameError
        If particles coincide, fill more than space allows, or, with
        ``options.strict``, overlap.
    """
    check_packing(frame)
    tolerance = options.tolerance(frame)
    overlaps = find_overlaps(frame, tolerance, near)
    if options.strict and overlaps.count:
        raise frame.error(
            f"expected no overlap beyond {tolerance:.3g}, found overlapping pairs: "
            f"{overlaps.count}; the deepest is that of particles {overlaps.pair[0]} and "
            f"{overlaps.pair[1]} by {overlaps.deepest:.3g}; correct the diameters, or "
            "allow it: without strict, or with a larger overlap tolerance"
        )
    found = kernel_cages(frame, options, windows=windows, threads=threads)
    table = CageTable(
        free_volume=found.free_volume,
        free_surface=found.free_surface,
        wall_sum=found.wall_sum,
        status=found.status,
        bounding_neighbors=found.bounding_neighbors,
        weakest_window=found.weakest_window,
        weakest_window_neighbors=found.weakest_window_neighbors,
        walls=None if found.wall is None else CageWalls(*found.wall),
        windows=None if found.windows is None else CageWindows(*found.windows),
    )
    return table, overlaps


def stored_values(table: CageTable) -> dict[str, NDArray[np.generic]]:
    """Values for each of :func:`fields`."""
    return {
        "free_volume": table.free_volume,
        "free_surface": table.free_surface,
        "wall_sum": table.wall_sum,
        "cage_status": table.status,
        "bounding_neighbors": table.bounding_neighbors,
        "weakest_window": table.weakest_window,
        "weakest_window_neighbors": table.weakest_window_neighbors.astype(np.int32),
    }


def cages(
    positions: ArrayLike,
    box: ArrayLike,
    radii: ArrayLike,
    *,
    periodic: str | Sequence[bool] | None = None,
    origin: ArrayLike | None = None,
    reach: float | None = None,
    overlap_tolerance: float | None = None,
    windows: bool = False,
    threads: int = 1,
) -> CageTable:
    """Measure the cage of every particle of one configuration, exactly.

    Parameters
    ----------
    positions : (n, d) array_like, length
        Centers of hard spheres (d = 3) or disks (d = 2), wrapped or not.
    box : array_like, length
        d edge lengths, d row vectors, or three lengths and three angles in degrees.
    radii : float or (n,) array_like, length
        Radii of the particles.
    periodic : str or sequence of bool, optional
        Periodic edges, such as ``"xy"``, ``"none"`` or d flags; all unless given.
    origin : (d,) array_like, length, optional
        Corner of the box; it matters along open edges only. Zero unless given.
    reach : float, length, optional
        A cage that extends further than this from its particle is open; ten of
        the largest diameters unless given. With ``inf`` regions that wrap around a
        fully periodic box are measured, too (status ``wrapped``).
    overlap_tolerance : float, length, optional
        Overlaps up to this depth count as contacts; 1e-9 mean diameters unless
        given.
    windows : bool
        Whether to list every patch of the walls and every shut window.
    threads : int
        Threads to share the particles among; the result does not depend on it.

    Returns
    -------
    CageTable

    Raises
    ------
    InputError
        If arrays do not fit each other, positions are not finite, particles
        coincide, or equal particles fill more than space allows.
    UsageError
        If an option makes no sense.

    Notes
    -----
    The cage is the connected region, outside the exclusion spheres of all other
    particles, that contains the center (as in Sastry et al., Mol. Phys. 95, 289
    (1998), from memory); it is found by flooding the power diagram of the neighbors,
    and integrated in closed form.
    """
    points = np.array(positions, dtype=np.float64, order="C", ndmin=2)
    if points.ndim != 2 or points.shape[1] not in {2, 3}:
        raise UsageError(
            f"positions are an array (n, 3) or (n, 2), got shape {points.shape}"
        )
    if threads < 1:
        raise UsageError(f"threads must be 1 or more, got {threads}")
    n, d = points.shape
    sizes = np.asarray(radii, dtype=np.float64)
    if sizes.shape not in {(), (n,)}:
        raise UsageError(
            f"radii are one number or one for each of the {n} particles, got shape "
            f"{sizes.shape}"
        )
    region = Box.from_any(box, dimensions=d, periodic=periodic, origin=origin)
    frame = Frame(points, np.broadcast_to(sizes, (n,)).copy(), region)
    options = CageOptions(reach, overlap_tolerance)
    return frame_cages(frame, options, windows=windows, threads=threads)[0]
