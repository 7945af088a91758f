"""Which ideal lattice the surroundings of a solid particle resemble."""

from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

__all__ = ["Structure", "classify_plane", "classify_space"]


class Structure(IntEnum):
    """Local structure of a particle, as stored."""

    DISORDERED = 0  #: not solid by its bond order
    FCC = 1  #: face-centered cubic
    HCP = 2  #: hexagonal close-packed
    BCC = 3  #: body-centered cubic
    OTHER = 4  #: solid, but further than the tolerance from all ideal shells
    UNDECIDED = 5  #: solid, about as near to one ideal shell as to another
    TRIANGULAR = 6  #: triangular lattice in 2D
    SQUARE = 7  #: square lattice in 2D
    UNKNOWN = 8  #: depends on what lies beyond an open edge of the data


@dataclass(frozen=True)
class _Shell:
    """Order parameters (q4, q6, w4, w6) of an ideal shell of neighbors.

    Unweighted values: spherical harmonics and Wigner 3j symbols of the shell;
    they equal those of Steinhardt, Nelson & Ronchetti, Phys. Rev. B 28, 784
    (1983) and Mickel et al., J. Chem. Phys. 138, 044501 (2013). In a perfect
    lattice the averaged parameters are the same.
    """

    structure: Structure
    order: tuple[float, float, float, float]


_FCC = _Shell(Structure.FCC, (0.19094065, 0.57452426, -0.15931737, -0.01316060))
_HCP = _Shell(Structure.HCP, (0.09722222, 0.48476169, 0.13409705, -0.01244196))
_BCC_8 = _Shell(Structure.BCC, (0.50917508, 0.62853936, -0.15931737, 0.01316060))
_BCC_14 = _Shell(Structure.BCC, (0.03636965, 0.51068823, 0.15931737, 0.01316060))
# The truncated octahedron has 8 hexagons and 6 squares of one edge: facet areas
# 3 sqrt(3)/2 and 1 weigh the two shells of 8 and 6 neighbors.
_BCC_FACETS = _Shell(Structure.BCC, (0.22402528, 0.56693996, -0.15931737, 0.01316060))

#: Ideal shells for neighbors weighted by facets, and for unweighted neighbors
#: within a cut-off (behind the first or the second shell of BCC).
SHELLS = {
    "voronoi": (_FCC, _HCP, _BCC_FACETS),
    "cutoff": (_FCC, _HCP, _BCC_8, _BCC_14),
}

# Thermal scatter about the ideal values in (q4, q6, w4, w6): deviations of these
# sizes count as one. Set from hard-sphere crystals near melting (packing fraction
# 0.545), as the largest scatter over the lattices around their shifted means.
SCALES = np.array([0.02, 0.1, 0.06, 0.006])


def classify_space(
    order: NDArray[np.float64],
    solid: NDArray[np.bool_],
    neighbors: str,
    tolerance: float,
    margin: float,
) -> NDArray[np.uint8]:
    """Assign each solid particle of a 3D frame to the nearest ideal shell.

    Parameters
    ----------
    order : (n, 4) float64
        Averaged q4, q6 and normalized w4, w6.
    solid : (n,) bool
        Particles with enough solid bonds.
    neighbors : str
        What the order parameters were measured with, a key of SHELLS.
    tolerance : float
        Largest distance from a shell, in units of the thermal scatter SCALES.
    margin : float
        Least lead in distance over the next structure.

    Returns
    -------
    (n,) uint8
        Codes of :class:`Structure`.
    """
    shells = SHELLS[neighbors]
    ideal = np.array([shell.order for shell in shells])
    codes = np.array([shell.structure for shell in shells], dtype=np.uint8)
    apart = np.linalg.norm((order[:, None] - ideal) / SCALES, axis=2)
    best = np.argmin(apart, axis=1)
    code: NDArray[np.uint8] = codes[best]
    rival = np.where(codes == code[:, None], np.inf, apart).min(axis=1)
    nearest = apart[np.arange(len(apart)), best]
    code[rival - nearest < margin] = Structure.UNDECIDED
    code[nearest > tolerance] = Structure.OTHER
    code[~solid] = Structure.DISORDERED
    return code


def classify_plane(
    psi6: NDArray[np.float64], psi4: NDArray[np.float64], solid: NDArray[np.bool_]
) -> NDArray[np.uint8]:
    """Assign each solid particle of a 2D frame to the triangular or square lattice.

    Parameters
    ----------
    psi6, psi4 : (n,) float64
        Moduli of the bond-orientational order.
    solid : (n,) bool
        Particles with enough solid bonds.

    Returns
    -------
    (n,) uint8
        Codes of :class:`Structure`.
    """
    code = np.where(psi6 >= psi4, Structure.TRIANGULAR, Structure.SQUARE)
    return np.where(solid, code, Structure.DISORDERED).astype(np.uint8)
