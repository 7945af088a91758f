"""What the cages of one frame say as a whole: pressure, means, lattices beside them."""

import functools
import math
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.cages import Overlaps
from trajcage.lattices import LATTICES, LatticeReference, lattice
from trajcage.model import CageStatus, CageTable, Field, Frame

__all__ = [
    "CompressibilityStatus",
    "compressibility_factor",
    "equal_diameter",
    "fields",
    "lattice_names",
    "lattice_reference",
    "measure_thermodynamics",
]

#: Largest share of particles without a measured cage that Z tolerates.
UNRESOLVED_SHARE = 1e-3

# Spread of the free volumes, relative to their mean, up to which a frame can be an
# ideal lattice. In thermal crystals it is of order one at any density.
_LARGEST_LATTICE_SPREAD = 0.1


class CompressibilityStatus(IntEnum):
    """Why the compressibility factor of a frame exists or does not."""

    MEASURED = 0  #: all but 1 in 1000 cages are resolved
    UNRESOLVED = 1  #: more cages than that are open, border, overlap or invalid
    IDEAL_LATTICE = 2  #: all cages are equal: a fixed lattice, no thermal sample


def fields(dimensions: int) -> tuple[Field, ...]:
    """Declare what :func:`measure_thermodynamics` returns."""
    d = dimensions
    over = "over the particles with a closed cage"

    def scalar(
        name: str, description: str, unit: str = "1", dtype: str = "f8"
    ) -> Field:
        return Field(name, description, unit, dtype, per_particle=False)

    return (
        scalar(
            "packing_fraction",
            "Volume (area in 2D) of the particles over that of the box",
        ),
        scalar("closed_fraction", "Particles with a closed cage among all"),
        *(
            scalar(
                f"cages_{code.name.lower()}",
                f"Particles of cage_status {code.name.lower()}, left out of means over "
                "closed cages",
                dtype="i8",
            )
            for code in CageStatus
            if code is not CageStatus.CLOSED
        ),
        scalar("free_volume_mean", f"Mean free volume {over}", f"length+{d}"),
        scalar(
            "free_volume_geometric_mean",
            f"Geometric mean of the free volume {over}",
            f"length+{d}",
        ),
        scalar("free_surface_mean", f"Mean free surface {over}", f"length+{d - 1}"),
        scalar("bounding_neighbors_mean", f"Mean number of bounding neighbors {over}"),
        scalar("weakest_window_mean", f"Mean weakest opening ratio {over}"),
        scalar(
            "compressibility_factor",
            "Z = P V / (N k T) = 1 + <wall_sum / free_volume> / (2 d), mean of the "
            "ratio over the particles with a closed cage or a wrapped region; NaN "
            "unless compressibility_status is measured",
        ),
        scalar(
            "reduced_pressure",
            "P sigma^d / (k T) with the mean diameter sigma, from "
            "compressibility_factor and the number density",
        ),
        Field(
            "compressibility_status",
            "measured; unresolved: more than 1 in 1000 cages are neither closed nor "
            "wrapped; "
            "ideal_lattice: all cages are equal, so this is no thermal sample",
            dtype="u1",
            per_particle=False,
            codes=tuple(code.name.lower() for code in CompressibilityStatus),
        ),
        scalar(
            "overlaps", "Pairs that overlap by more than overlap_tolerance", "1", "i8"
        ),
        scalar(
            "overlap_tolerance", "Overlap depth up to which particles touch", "length"
        ),
        scalar("deepest_overlap", "Depth of the deepest overlap, 0 if none", "length"),
        Field(
            "deepest_overlap_ids",
            "Ids of the two particles of the deepest overlap, -1 if none",
            dtype="i8",
            per_particle=False,
            shape=(2,),
        ),
        *(
            scalar(f"lattice_{name}_{part}", description, unit)
            for name in lattice_names(d)
            for part, description, unit in _lattice_parts(name, d)
        ),
    )


def _lattice_parts(name: str, d: int) -> tuple[tuple[str, str, str], ...]:
    """Name, description and unit of what stands beside an ideal lattice."""
    where = (
        f"on the ideal {name} lattice of equal particles at this packing fraction and "
        "number density; NaN where it does not exist or its cages are open"
    )
    return (
        ("free_volume", f"Free volume {where}", f"length+{d}"),
        ("free_surface", f"Free surface {where}", f"length+{d - 1}"),
        ("free_volume_ratio", f"free_volume_mean over the free volume {where}", "1"),
        ("free_surface_ratio", f"free_surface_mean over the free surface {where}", "1"),
    )


def measure_thermodynamics(
    frame: Frame, table: CageTable, overlaps: Overlaps, tolerance: float
) -> dict[str, NDArray[np.generic] | float | int]:
    """Sum up the cages of one frame.

    Parameters
    ----------
    frame : Frame
        The configuration.
    table : CageTable
        Its cages.
    overlaps : Overlaps
        Its overlaps.
    tolerance : float, length
        The overlap tolerance that was used.

    Returns
    -------
    dict
        One entry for each of :func:`fields`.
    """
    d, phi, counts = frame.dimensions, frame.packing_fraction, table.counts
    closed = table.closed
    factor, status = compressibility_factor(frame, table)
    sigma = frame.mean_diameter
    volume, surface = table.mean_free_volume, _mean(table.free_surface[closed])
    with np.errstate(divide="ignore"):  # jammed particles have no free volume
        logarithm = _mean(np.log(table.free_volume[closed]))
    return {
        "packing_fraction": phi,
        "closed_fraction": counts["closed"] / len(table),
        **{f"cages_{name}": n for name, n in counts.items() if name != "closed"},
        "free_volume_mean": volume,
        "free_volume_geometric_mean": math.exp(logarithm),
        "free_surface_mean": surface,
        "bounding_neighbors_mean": _mean(table.bounding_neighbors[closed]),
        "weakest_window_mean": _mean(table.weakest_window[closed]),
        "compressibility_factor": factor,
        "reduced_pressure": factor * len(table) / frame.box.volume * sigma**d,
        "compressibility_status": int(status),
        "overlaps": overlaps.count,
        "overlap_tolerance": tolerance,
        "deepest_overlap": overlaps.deepest,
        "deepest_overlap_ids": np.array(overlaps.pair, dtype=np.int64),
        **_beside_lattices(phi, equal_diameter(frame), volume, surface, d),
    }


def _beside_lattices(
    phi: float, diameter: float, volume: float, surface: float, d: int
) -> dict[str, float]:
    """Cages of the ideal lattices of equal particles, and the measured means over them."""
    values: dict[str, float] = {}
    for name in lattice_names(d):
        found = lattice_reference(name, phi)
        size = area = math.nan
        if found is not None:
            size = found.free_volume * diameter**d
            area = found.free_surface * diameter ** (d - 1)
        values |= {
            f"lattice_{name}_free_volume": size,
            f"lattice_{name}_free_surface": area,
            # close packing leaves nothing to compare with
            f"lattice_{name}_free_volume_ratio": volume / size if size else math.nan,
            f"lattice_{name}_free_surface_ratio": surface / area if area else math.nan,
        }
    return values


def compressibility_factor(
    frame: Frame, table: CageTable
) -> tuple[float, CompressibilityStatus]:
    """Compressibility factor from the cages of one frame of an equilibrium sample.

    Z = 1 + <w_f / v_f> / (2 d), the mean over particles of the ratio of wall sum and
    free volume. With all others held fixed, a particle is anywhere in its cage with
    equal probability, so that s_f / v_f is the rate of its contacts. That holds for
    regions that wrap around the periodic box, too.

    Returns
    -------
    float
        Z; NaN unless the status is ``MEASURED``.
    CompressibilityStatus

    Notes
    -----
    Hoover, Ashurst & Grover, J. Chem. Phys. 57, 1259 (1972); Speedy, J. Chem. Soc.
    Faraday Trans. 2 76, 693 (1980); unequal sizes: Corti & Bowles, Mol. Phys. 96,
    1623 (1999). Citations from memory. On a perfect lattice with its neighbors fixed
    this average is not the pressure: Z - 1 comes out half that of the cell theory.
    """
    measured = table.measured
    if np.count_nonzero(~measured) > UNRESOLVED_SHARE * len(table):
        return math.nan, CompressibilityStatus.UNRESOLVED
    if _is_ideal_lattice(frame, table):
        return math.nan, CompressibilityStatus.IDEAL_LATTICE
    walls, volumes = table.wall_sum[measured], table.free_volume[measured]
    # without room contacts never cease, and neither volume nor wall is left
    ratio = np.divide(
        walls, volumes, out=np.full(len(volumes), np.inf), where=volumes > 0.0
    )
    z = 1.0 + float(ratio.mean()) / (2.0 * frame.dimensions)
    return z, CompressibilityStatus.MEASURED


def _is_ideal_lattice(frame: Frame, table: CageTable) -> bool:
    """Whether all particles of a size have the same cage, up to stored rounding.

    Shifts of the neighbors by the resolution of the coordinates change a free
    volume by up to the free surface times that shift. Two particles alone always
    have equal cages, by symmetry, and are no lattice.
    """
    known = table.measured
    volumes, sizes = table.free_volume[known], frame.radii[known]
    _, group = np.unique(np.round(sizes / sizes.mean(), 6), return_inverse=True)
    members = np.bincount(group)
    if frame.n_particles <= 2 or len(volumes) < 4 * len(members):
        return False
    mean = (np.bincount(group, volumes) / members)[group]
    steepness = np.divide(
        table.free_surface[known],
        volumes,
        out=np.zeros_like(volumes),
        where=volumes > 0,
    )  # touching neighbors leave nothing, not even a slope
    shift = 2.0 * math.sqrt(frame.dimensions) * frame.resolution
    limit = min(1e-6 + shift * float(steepness.mean()), _LARGEST_LATTICE_SPREAD)
    return bool(np.all(np.abs(volumes - mean) <= limit * mean))


def equal_diameter(frame: Frame) -> float:
    """Diameter of equal particles that fill as much at the same number density."""
    d = frame.dimensions
    return float(2.0 * np.mean(frame.radii**d) ** (1.0 / d))


def lattice_names(dimensions: int) -> tuple[str, ...]:
    """Names of the ideal lattices of one dimension."""
    return tuple(n for n, entry in LATTICES.items() if entry.dimensions == dimensions)


@functools.lru_cache(maxsize=1024)
def lattice_reference(name: str, packing_fraction: float) -> LatticeReference | None:
    """Cage of an ideal lattice, None where the lattice cannot be that dense."""
    if packing_fraction > LATTICES[name].close_packing.value:
        return None
    return lattice(name, packing_fraction)


def _mean(values: NDArray[np.generic]) -> float:
    """Mean over closed cages, NaN without any."""
    return (
        float(np.mean(np.asarray(values, dtype=np.float64)))
        if len(values)
        else math.nan
    )
