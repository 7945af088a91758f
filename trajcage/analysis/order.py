"""Bond order: solid bonds, averaged order parameters and local structure."""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.structure import Structure, classify_plane, classify_space
from trajcage.errors import UsageError
from trajcage.model import Field, Frame, NeighborList
from trajcage.neighborhood import hexatic, neighbor_list, steinhardt

__all__ = [
    "OrderOptions",
    "fields",
    "first_shell_cutoff",
    "measure_order",
    "order_neighbors",
]


# Bonds whose harmonics are multiplied together: few enough for the cache.
_AT_A_TIME = 16_384


@dataclass(frozen=True)
class OrderOptions:
    """How bonds are found and when they count as solid.

    Parameters
    ----------
    neighbors : {"voronoi", "cutoff"}
        Neighbors across Voronoi facets, weighted by facet area (Mickel et
        al., J. Chem. Phys. 138, 044501 (2013)), or all within a cut-off.
    r_max : float, optional
        The cut-off in units of length; the first minimum of the frame's g(r)
        unless given.
    bond_threshold : float
        A bond is solid above this normalized product of the sixth harmonics
        of its two particles (Filion et al., J. Chem. Phys. 133, 244115 (2010)).
    solid_bonds : int
        Solid bonds from which on a particle is solid (same source: 6 to 8).
    bond_threshold_plane : float
        In 2D a bond is solid above this Re psi(i) psi*(j), not normalized,
        because two phases alone agree too often (common practice).
    solid_share_plane : float
        In 2D a particle is solid if more than this share of its bonds is.
    structure_tolerance, structure_margin : float
        Largest distance from an ideal shell and least lead over the next, in
        units of the thermal scatter near melting.
    """

    neighbors: Literal["voronoi", "cutoff"] = "voronoi"
    r_max: float | None = None
    bond_threshold: float = 0.7
    solid_bonds: int = 7
    bond_threshold_plane: float = 0.5
    solid_share_plane: float = 0.5
    structure_tolerance: float = 5.0
    structure_margin: float = 0.25

    def __post_init__(self) -> None:
        if self.neighbors not in {"voronoi", "cutoff"}:
            raise UsageError(
                "expected neighbors for the bond order 'voronoi' or 'cutoff', got "
                f"{self.neighbors!r}"
            )


_SOLID_BONDS = Field(
    "solid_bonds",
    "Number of solid bonds; -1 if it depends on what lies beyond an open edge",
    dtype="i4",
)
_STRUCTURE = Field(
    "structure",
    "Ideal lattice that the surroundings of a solid particle resemble",
    dtype="u1",
    codes=tuple(code.name.lower() for code in Structure),
)
_CUTOFF = Field(
    "order_cutoff",
    "Largest distance of neighbors for the bond order; NaN for Voronoi neighbors",
    unit="length+1",
    per_particle=False,
)


def fields(dimensions: int) -> tuple[Field, ...]:
    """Declare what :func:`measure_order` returns in this dimension."""
    if dimensions == 2:
        return (
            _SOLID_BONDS,
            Field("psi6", "Modulus of the hexatic bond-orientational order psi_6"),
            Field("psi4", "Modulus of the tetratic bond-orientational order psi_4"),
            _STRUCTURE,
            _CUTOFF,
        )
    of = "of the harmonics averaged over the particle and its neighbors"
    return (
        _SOLID_BONDS,
        Field("qbar4", f"Bond-order parameter q_4 {of}"),
        Field("qbar6", f"Bond-order parameter q_6 {of}"),
        Field("wbar4", f"Normalized third-order invariant w_4 {of}"),
        Field("wbar6", f"Normalized third-order invariant w_6 {of}"),
        _STRUCTURE,
        _CUTOFF,
    )


def measure_order(
    frame: Frame,
    cells: tuple[NDArray[np.float64], NeighborList],
    options: OrderOptions,
) -> dict[str, NDArray[np.generic] | float]:
    """Measure the bond order of every particle.

    Parameters
    ----------
    frame : Frame
        The configuration.
    cells : tuple
        Cell volumes and neighbors of :func:`trajcage.neighborhood.voronoi`.
    options : OrderOptions
        Neighbors and thresholds.

    Returns
    -------
    dict
        One entry for each of :func:`fields`. Order parameters are NaN, bonds
        -1 and the structure unknown where they depend on particles beyond an
        open edge.
    """
    neighbors, certain, cutoff = order_neighbors(frame, cells, options)
    unsettled = np.bincount(
        neighbors.particles,
        weights=~certain[neighbors.neighbors],
        minlength=frame.n_particles,
    )
    certain = certain & (unsettled == 0)  # averages reach one shell further
    plane = frame.dimensions == 2
    measured = (_plane if plane else _space)(frame, neighbors, options)
    bonds, structure = measured["solid_bonds"], measured["structure"]
    result: dict[str, NDArray[np.generic] | float] = {
        name: np.where(certain, value, np.nan) for name, value in measured.items()
    }
    result["solid_bonds"] = np.where(certain, bonds, -1).astype(np.int32)
    result["structure"] = np.where(certain, structure, Structure.UNKNOWN).astype(
        np.uint8
    )
    result["order_cutoff"] = cutoff
    return result


def order_neighbors(
    frame: Frame,
    cells: tuple[NDArray[np.float64], NeighborList],
    options: OrderOptions,
) -> tuple[NeighborList, NDArray[np.bool_], float]:
    """Find the neighbors that the bond order is measured with.

    Returns
    -------
    neighbors : NeighborList
    certain : (n,) bool
        Whether no particle beyond an open edge could be a neighbor.
    cutoff : float, length
        NaN for Voronoi neighbors.
    """
    if options.neighbors == "voronoi":
        volumes, neighbors = cells
        return neighbors, np.isfinite(volumes), float("nan")
    cutoff = options.r_max or first_shell_cutoff(frame)
    is_open = np.logical_not(frame.box.periodic)
    fractional = frame.box.fractional(frame.positions)[:, is_open]
    depth = np.minimum(fractional, 1.0 - fractional) * frame.box.heights[is_open]
    neighbors = neighbor_list(frame, cutoff, self_images=True)
    return neighbors, np.all(depth >= cutoff, axis=1), cutoff


def first_shell_cutoff(frame: Frame) -> float:
    """Distance of the first minimum of the radial distribution function, length.

    The histogram of pair distances in bins of 2 % of the mean spacing, divided
    by that of an ideal gas and smoothed over three bins, is searched behind its
    first peak, up to twice that distance. Between the sharp shells of a perfect
    lattice this gives the middle of the empty gap.

    Raises
    ------
    FrameError
        If there are not enough pairs to see a shell.
    """
    d = frame.dimensions
    spacing = (frame.box.volume / frame.n_particles) ** (1.0 / d)
    edges = np.arange(0.0, 2.0, 0.02) * spacing
    distances = neighbor_list(frame, float(edges[-1])).distances
    if len(distances) < frame.n_particles:
        raise frame.error(
            f"expected enough neighbors for g(r), found {len(distances)} within "
            f"{edges[-1]:.3g}; give the cut-off of the bond order (r_max)"
        )
    density = np.histogram(distances, edges)[0] / np.diff(edges**d)
    smooth = np.convolve(density, np.ones(3) / 3, mode="same")
    rise = int(np.argmax(smooth >= 0.5 * smooth.max()))  # later shells can be higher
    peak = rise + int(np.argmax(smooth[rise : rise + rise // 4 + 1]))
    stop = min(2 * peak, len(smooth))
    valley = smooth[peak:stop]
    lowest = peak + int(np.argmin(valley))
    last = lowest
    while last + 1 < stop and smooth[last + 1] <= smooth[lowest]:
        last += 1
    return float(0.5 * (edges[lowest] + edges[last + 1]))


def _space(
    frame: Frame, neighbors: NeighborList, options: OrderOptions
) -> dict[str, NDArray[np.generic]]:
    q, w, harmonics = steinhardt(frame, neighbors)
    sixth = harmonics[1]
    with np.errstate(invalid="ignore"):  # particles without neighbors
        unit = sixth / np.linalg.norm(sixth, axis=1, keepdims=True)
    # q_lm of -m is the conjugate of that of m up to a sign: m >= 0 is enough.
    half = unit[:, :7] * np.sqrt([1, 2, 2, 2, 2, 2, 2]).astype(np.float32)
    parts = half.view(np.float32)  # real and imaginary
    i, j = neighbors.particles, neighbors.neighbors
    solid = np.empty(len(i), dtype=np.bool_)
    for start in range(0, len(i), _AT_A_TIME):
        some = slice(start, start + _AT_A_TIME)
        product = np.einsum("ij,ij->i", parts[i[some]], parts[j[some]])
        solid[some] = product > options.bond_threshold
    bonds = np.bincount(i[solid], minlength=len(q))
    structure = classify_space(
        np.column_stack([q, w]),
        bonds >= options.solid_bonds,
        options.neighbors,
        options.structure_tolerance,
        options.structure_margin,
    )
    return {
        "solid_bonds": bonds,
        "qbar4": q[:, 0],
        "qbar6": q[:, 1],
        "wbar4": w[:, 0],
        "wbar6": w[:, 1],
        "structure": structure,
    }


def _plane(
    frame: Frame, neighbors: NeighborList, options: OrderOptions
) -> dict[str, NDArray[np.generic]]:
    i, j = neighbors.particles, neighbors.neighbors
    moduli, bonds = [], np.zeros(frame.n_particles, dtype=np.int64)
    for k in (6, 4):
        psi = hexatic(frame, neighbors, k)
        solid = (psi[i] * psi[j].conj()).real > options.bond_threshold_plane
        bonds = np.maximum(bonds, np.bincount(i[solid], minlength=len(bonds)))
        moduli.append(np.abs(psi))
    structure = classify_plane(
        moduli[0], moduli[1], bonds > options.solid_share_plane * neighbors.counts
    )
    return {
        "solid_bonds": bonds,
        "psi6": moduli[0],
        "psi4": moduli[1],
        "structure": structure,
    }
