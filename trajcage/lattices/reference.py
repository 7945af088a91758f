"""What a particle would measure on an ideal lattice at a packing fraction."""

import math
from dataclasses import dataclass
from functools import cache

import numpy as np

from trajcage.errors import UsageError
from trajcage.lattices.exact import ExactNumber
from trajcage.lattices.ideal import CageStage, IdealLattice, find_lattice
from trajcage.lattices.shell import (
    CageSize,
    FacetEdges,
    facet_edges,
    plane_shell,
    plane_stage_two,
    space_shell,
)
from trajcage.lattices.sites import lattice_sites, nearest_directions
from trajcage.model import CageStatus

__all__ = ["LatticeReference", "LatticeThresholds", "Window", "lattice", "thresholds"]

# Closer than this to a threshold, relative to the spacing, the measured cages of
# later stages are taken at this distance from it: there the kernel, which breaks the
# ties of a perfect lattice by 1e-10, could decide either way.
_THRESHOLD_MARGIN = 1e-8


@dataclass(frozen=True)
class Window:
    """A class of equivalent windows of a lattice cage.

    Parameters
    ----------
    description : str
        Which neighbors are its corners.
    corners : int
        Number of corners: 2 in the plane, 3 or 4 in space.
    multiplicity : int
        How many windows of the class one cage has.
    opening_ratio : float
        Circumradius of the corners over the diameter; open above 1, else shut.
    """

    description: str
    corners: int
    multiplicity: int
    opening_ratio: float


@dataclass(frozen=True)
class LatticeReference:
    """The cage of a site of an ideal lattice, lengths in particle diameters.

    All other sites keep their particle. An open cage has no size: its free volume,
    free surface, wall sum, weakest window and compressibility factor are NaN and
    nothing bounds it.

    Parameters
    ----------
    name : str
        Lattice.
    dimensions : int
        2 or 3.
    packing_fraction : float
        Packing fraction asked for.
    close_packing : float
        Highest packing fraction of the lattice.
    spacing : float
        Nearest-neighbor distance.
    cell_volume : float
        Volume (area in 2D) of the Voronoi cell of a site.
    status : CageStatus
        ``CLOSED`` or ``OPEN``.
    free_volume : float
        Volume (area in 2D) of the cage.
    free_surface : float
        Bounding area (length in 2D) of the cage.
    wall_sum : float
        Sum of diameter times wall area over the neighbors.
    bounding_neighbors : int
        Neighbors that carry a piece of the wall.
    windows : tuple of Window
        The windows that shut the cage, or those through which the particle leaves.
    weakest_window : float
        Largest opening ratio of a shut window.
    compressibility_factor : float
        Cell theory, Z = 1 + diameter * free_surface / (d * free_volume): every
        particle rattles in a cage of its own that expands with the crystal. It is
        the identity a dv_f/da = d v_f + sigma s_f put into P = kT d(ln v_f)/dv, and
        its Z - 1 is twice that of the law for cages in equilibrium. Infinite at close
        packing.
    """

    name: str
    dimensions: int
    packing_fraction: float
    close_packing: float
    spacing: float
    cell_volume: float
    status: CageStatus
    free_volume: float
    free_surface: float
    wall_sum: float
    bounding_neighbors: int
    windows: tuple[Window, ...]
    weakest_window: float
    compressibility_factor: float


@dataclass(frozen=True)
class LatticeThresholds:
    """Packing fractions at which the cage of a lattice changes its nature.

    Parameters
    ----------
    name : str
        Lattice.
    dimensions : int
        2 or 3.
    close_packing : ExactNumber
        Highest packing fraction.
    growth : ExactNumber or None
        Below it further shells bound the cage; None if that never happens.
    escape : ExactNumber
        Below it the cage is open.
    volume_factor, volume_slope : ExactNumber
        C and c1 of v_f = C delta^d (1 + c1 delta / a) toward close packing, where a
        is the nearest-neighbor distance and delta = a - diameter.
    """

    name: str
    dimensions: int
    close_packing: ExactNumber
    growth: ExactNumber | None
    escape: ExactNumber
    volume_factor: ExactNumber
    volume_slope: ExactNumber


def thresholds(name: str) -> LatticeThresholds:
    """Return where the cage of a lattice grows and opens, in closed form.

    Parameters
    ----------
    name : str
        Lattice: square, triangular, honeycomb, sc, bcc, fcc, hcp or diamond.

    Returns
    -------
    LatticeThresholds

    Raises
    ------
    UsageError
        If there is no lattice of that name.
    """
    entry = find_lattice(name)
    return LatticeThresholds(
        name=entry.name,
        dimensions=entry.dimensions,
        close_packing=entry.close_packing,
        growth=entry.stages[0].lower_limit if len(entry.stages) > 1 else None,
        escape=entry.stages[-1].lower_limit,
        volume_factor=entry.volume_factor,
        volume_slope=entry.volume_slope,
    )


def lattice(name: str, packing_fraction: float) -> LatticeReference:
    """Measure the cage of an ideal lattice.

    While the nearest neighbors alone bound the cage, its size comes from closed forms
    (plane) or one smooth integral (space), to rounding at any distance from close
    packing. Later stages have closed forms in the plane; in space the same kernel
    that measures trajectories measures the perfect lattice, to 1e-12: so
    much the size depends on how its ties are broken.

    Parameters
    ----------
    name : str
        Lattice: square, triangular, honeycomb, sc, bcc, fcc, hcp or diamond.
    packing_fraction : float
        Packing fraction, above 0 and up to close packing.

    Returns
    -------
    LatticeReference

    Raises
    ------
    UsageError
        If the lattice is unknown or cannot have that packing fraction.
    """
    entry = find_lattice(name)
    highest = entry.close_packing.value
    try:
        phi = float(packing_fraction)
    except (TypeError, ValueError):
        phi = math.nan
    if not 0.0 < phi <= highest:
        msg = (
            f"packing fraction of the {entry.name} lattice must be above 0 and at most "
            f"{entry.close_packing.expression} = {highest:.12g} (close packing), "
            f"got {packing_fraction!r}"
        )
        raise UsageError(msg)
    d = entry.dimensions
    # 1 - diameter / spacing, exact to rounding also next to close packing
    gap = -math.expm1(math.log1p((phi - highest) / highest) / d)
    spacing = 1.0 / (1.0 - gap)
    stage = next((s for s in entry.stages if phi >= s.lower_limit.value), None)
    # at a threshold rounding must not open a window of a closed cage
    largest = math.inf if stage is None else 1.0
    windows = tuple(
        Window(
            description=shape.description,
            corners=shape.corners,
            multiplicity=shape.multiplicity,
            opening_ratio=min(shape.circumradius * spacing, largest),
        )
        for shape in (stage or entry.stages[-1]).windows
    )
    volume = surface = weakest = factor = math.nan
    if stage is not None:
        volume, surface = _cage_size(entry, stage, gap)
        volume *= spacing**d
        surface *= spacing ** (d - 1)
        weakest = max(window.opening_ratio for window in windows)
        factor = 1.0 + surface / (d * volume) if volume > 0 else math.inf
    return LatticeReference(
        name=entry.name,
        dimensions=d,
        packing_fraction=phi,
        close_packing=highest,
        spacing=spacing,
        cell_volume=math.pi / (6 if d == 3 else 4) / phi,
        status=CageStatus.OPEN if stage is None else CageStatus.CLOSED,
        free_volume=volume,
        free_surface=surface,
        wall_sum=surface,
        bounding_neighbors=0 if stage is None else stage.bounding_neighbors,
        windows=windows,
        weakest_window=weakest,
        compressibility_factor=factor,
    )


def _cage_size(entry: IdealLattice, stage: CageStage, gap: float) -> CageSize:
    """Return free volume and surface in units of the nearest-neighbor distance."""
    if stage is entry.stages[0]:
        if entry.dimensions == 2:
            return plane_shell(stage.bounding_neighbors, gap)
        return space_shell(_limiting_edges(entry.name), gap)
    if entry.dimensions == 2:
        return plane_stage_two(entry.name, gap)
    return _measured_cage(entry, stage, gap)


@cache
def _limiting_edges(name: str) -> FacetEdges:
    return facet_edges(nearest_directions(find_lattice(name)))


def _measured_cage(entry: IdealLattice, stage: CageStage, gap: float) -> CageSize:
    """Measure a cage of several shells with the kernel."""
    from trajcage.kernel import measure_cages  # here: numba is slow to load

    upper = entry.stages[entry.stages.index(stage) - 1].spacing_ratio
    diameter = min(1.0 - gap, upper * (1 - _THRESHOLD_MARGIN))
    diameter = max(diameter, stage.spacing_ratio * (1 + _THRESHOLD_MARGIN))
    # cage and the exclusion spheres around it reach 3 spacings at most
    repeats = tuple(math.ceil(7.0 / edge) for edge in entry.cell)
    positions, vectors = lattice_sites(entry.name, repeats, 1.0)
    cages = measure_cages(
        positions,
        vectors,
        np.zeros(3),
        np.ones(3, dtype=bool),
        np.full(len(positions), diameter / 2),
        subset=np.array([0]),
    )
    return float(cages.free_volume[0]), float(cages.free_surface[0])
