"""Crystal, glass and fluid: the region of each particle, and connected regions."""

from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.structure import Structure
from trajcage.model import CageStatus, Field, Frame, NeighborList
from trajcage.neighborhood import connected_groups

__all__ = [
    "FIELDS",
    "Region",
    "RegionOptions",
    "RegionTable",
    "find_regions",
    "measure_regions",
]

# A region that fills 95 % of an edge evenly has a circular mean of this length.
_WINDING = 0.05


class Region(IntEnum):
    """What a particle is part of, as stored."""

    FLUID = 0  #: neither crystal nor glass
    GLASS = 1  #: not crystal, in a closed cage that has not broken
    CRYSTAL = 2  #: solid by bond order
    UNKNOWN = 3  #: structure or cage could not be measured


FIELDS = (
    Field(
        "region",
        "crystal: solid by bond order; glass: else closed-caged and, where "
        "glass_needs_unbroken is 1, has not broken its cage within the time window",
        dtype="u1",
        codes=tuple(code.name.lower() for code in Region),
    ),
    Field(
        "interface",
        "1 if the particle is crystal and has a fluid or glass neighbor",
        dtype="u1",
    ),
    Field(
        "crystal_fraction",
        "Crystal among the particles of known region",
        per_particle=False,
    ),
    Field(
        "glass_fraction",
        "Glass among the particles of known region",
        per_particle=False,
    ),
    Field(
        "fluid_fraction",
        "Fluid among the particles of known region",
        per_particle=False,
    ),
    Field(
        "region_unknown",
        "Particles left out of the fractions, their region being unknown",
        dtype="i8",
        per_particle=False,
    ),
    Field(
        "glass_needs_unbroken",
        "1 if glass also requires an unbroken cage, 0 if no cage breaking was known",
        dtype="u1",
        per_particle=False,
    ),
)


@dataclass(frozen=True)
class RegionOptions:
    """Which connected regions are listed.

    Parameters
    ----------
    smallest : int
        Particles from which on a connected region gets a row in the table.
    """

    smallest: int = 10


@dataclass(frozen=True, eq=False)
class RegionTable:
    """Connected regions of one frame, the largest first.

    Parameters
    ----------
    label : (n,) int64
        Row of each particle's region, -1 for regions too small to be listed
        and for unknown particles.
    kind : (k,) uint8
        Codes of :class:`Region`.
    size : (k,) int64
        Number of particles.
    center : (k, d) float64, length
        Center of the particles, inside the box; NaN where it depends on a
        periodic edge that the region winds around.
    free_volume, packing_fraction, weakest_window : (k,) float64
        Means over the particles with a finite value: free volume (length^d),
        local packing fraction, opening ratio of the weakest window.
    n_free_volume, n_packing_fraction, n_weakest_window : (k,) int64
        How many particles these means hold.
    """

    label: NDArray[np.int64]
    kind: NDArray[np.uint8]
    size: NDArray[np.int64]
    center: NDArray[np.float64]
    free_volume: NDArray[np.float64]
    packing_fraction: NDArray[np.float64]
    weakest_window: NDArray[np.float64]
    n_free_volume: NDArray[np.int64]
    n_packing_fraction: NDArray[np.int64]
    n_weakest_window: NDArray[np.int64]


def measure_regions(
    structure: NDArray[np.uint8],
    cage_status: NDArray[np.uint8],
    broken: NDArray[np.bool_] | None,
    neighbors: NeighborList,
) -> dict[str, NDArray[np.generic] | float | int]:
    """Tell crystal, glass and fluid particles apart.

    Parameters
    ----------
    structure : (n,) uint8
        Codes of :class:`trajcage.analysis.structure.Structure`.
    cage_status : (n,) uint8
        Codes of :class:`trajcage.model.CageStatus`.
    broken : (n,) bool or None
        Whether the particle has broken its cage within the window of time;
        None if that is not known, then closed cages alone make glass.
    neighbors : NeighborList
        Neighbors that can make a crystal particle part of the interface.

    Returns
    -------
    dict
        One entry for each of ``FIELDS``.
    """
    crystal = (structure != Structure.DISORDERED) & (structure != Structure.UNKNOWN)
    closed = cage_status == CageStatus.CLOSED
    caged = closed if broken is None else closed & ~broken
    measured = closed | np.isin(cage_status, (CageStatus.OPEN, CageStatus.WRAPPED))
    unknown = (structure == Structure.UNKNOWN) | (~crystal & ~measured)
    region = np.select(
        [unknown, crystal, caged], [Region.UNKNOWN, Region.CRYSTAL, Region.GLASS]
    ).astype(np.uint8)
    outside = (region == Region.FLUID) | (region == Region.GLASS)
    facing = np.zeros(len(region), dtype=np.bool_)
    facing[neighbors.particles[outside[neighbors.neighbors]]] = True
    known = int(np.count_nonzero(~unknown))

    def share(kind: Region) -> float:
        return np.count_nonzero(region == kind) / known if known else float("nan")

    return {
        "region": region,
        "interface": (facing & (region == Region.CRYSTAL)).astype(np.uint8),
        "crystal_fraction": share(Region.CRYSTAL),
        "glass_fraction": share(Region.GLASS),
        "fluid_fraction": share(Region.FLUID),
        "region_unknown": len(region) - known,
        "glass_needs_unbroken": np.uint8(broken is not None),
    }


def find_regions(
    frame: Frame,
    region: NDArray[np.uint8],
    neighbors: NeighborList,
    free_volume: NDArray[np.float64],
    packing_fraction: NDArray[np.float64],
    weakest_window: NDArray[np.float64],
    options: RegionOptions,
) -> RegionTable:
    """Group neighbors of the same kind into connected regions.

    Parameters
    ----------
    frame : Frame
        The configuration.
    region : (n,) uint8
        Codes of :class:`Region`.
    neighbors : NeighborList
        Neighbors that hang together if they are of one kind.
    free_volume, packing_fraction, weakest_window : (n,) float64
        Values to average; NaN is left out and counted.
    options : RegionOptions
        The smallest region listed.
    """
    same = region[neighbors.particles] == region[neighbors.neighbors]
    group = connected_groups(neighbors, same)
    size = np.bincount(group)
    first = np.unique(group, return_index=True)[1]
    kind = region[first]
    listed = np.flatnonzero((size >= options.smallest) & (kind != Region.UNKNOWN))
    listed = listed[np.argsort(-size[listed], kind="stable")]
    row = np.full(len(size), -1)
    row[listed] = np.arange(len(listed))
    label = row[group]
    means = {
        name: _means(label, len(listed), value)
        for name, value in {
            "free_volume": free_volume,
            "packing_fraction": packing_fraction,
            "weakest_window": weakest_window,
        }.items()
    }
    return RegionTable(
        label=label,
        kind=kind[listed],
        size=size[listed],
        center=_centers(frame, label, len(listed)),
        free_volume=means["free_volume"][0],
        packing_fraction=means["packing_fraction"][0],
        weakest_window=means["weakest_window"][0],
        n_free_volume=means["free_volume"][1],
        n_packing_fraction=means["packing_fraction"][1],
        n_weakest_window=means["weakest_window"][1],
    )


def _means(
    label: NDArray[np.int64], n_regions: int, values: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Mean of the finite values in each region, and their number."""
    used = (label >= 0) & np.isfinite(values)
    count = np.bincount(label[used], minlength=n_regions)
    total = np.bincount(label[used], weights=values[used], minlength=n_regions)
    with np.errstate(invalid="ignore"):  # a region without any value has mean NaN
        return total / count, count


def _centers(
    frame: Frame, label: NDArray[np.int64], n_regions: int
) -> NDArray[np.float64]:
    """Centers of the regions, (n_regions, d), length.

    Along a periodic edge the circular mean tells where the region is, and the
    mean of the displacements from there is its center. A region that winds
    around the edge leaves a circular mean near zero and has no center.
    """
    inside = label >= 0
    label = label[inside]
    fractional = frame.box.fractional(frame.box.wrap(frame.positions[inside]))
    size = np.bincount(label, minlength=n_regions)
    center = np.empty((n_regions, frame.dimensions))
    for axis, periodic in enumerate(frame.box.periodic):
        along = fractional[:, axis]
        middle = np.zeros(n_regions)
        if periodic:
            turn = np.exp(2j * np.pi * along)
            circular = (
                np.bincount(label, turn.real, n_regions)
                + 1j * np.bincount(label, turn.imag, n_regions)
            ) / size
            middle = np.angle(circular) / (2.0 * np.pi)
            middle[np.abs(circular) < _WINDING] = np.nan
            along = along - middle[label]
            along -= np.round(along)
        center[:, axis] = middle + np.bincount(label, along, n_regions) / size
        if periodic:
            center[:, axis] %= 1.0
    vectors = frame.box.vectors  # of which zeros must not spread NaN
    parts = np.where(vectors == 0.0, 0.0, center[:, :, None] * vectors)
    return np.asarray(parts.sum(axis=1) + frame.box.origin)
