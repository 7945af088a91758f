"""The ideal lattices: sites, close packing, and the stages of their cages.

A cage belongs to one vacated site while all other sites keep their particle. On
expansion it passes stages: from close packing down it is bounded by the nearest
neighbors alone, in some lattices it then grows into pockets bounded by further
shells, and at last the windows between neighbors open all the way.

Limits follow from circumradii: a window is shut while the diameter is at least the
circumradius of its corners. The one exception is the body-centered cage, which
grows when its corners reach the exclusion spheres of the second shell.
"""

import math
from dataclasses import dataclass

from trajcage.errors import UsageError
from trajcage.lattices.exact import ExactNumber
from trajcage.wording import near_miss

__all__ = [
    "LATTICES",
    "CageStage",
    "IdealLattice",
    "WindowShape",
    "find_lattice",
]

_R2, _R3, _R6, _PI = math.sqrt(2), math.sqrt(3), math.sqrt(6), math.pi


@dataclass(frozen=True)
class WindowShape:
    """A class of equivalent windows of a cage.

    Parameters
    ----------
    description : str
        Which neighbors are its corners.
    corners : int
        Number of corners: 2 in the plane, 3 or 4 in space.
    multiplicity : int
        How many windows of the class one cage has.
    circumradius : float
        Radius of the circle through the corners in nearest-neighbor distances.
    """

    description: str
    corners: int
    multiplicity: int
    circumradius: float


@dataclass(frozen=True)
class CageStage:
    """Range of packing fractions in which one set of neighbors bounds the cage.

    Parameters
    ----------
    lower_limit : ExactNumber
        Lowest packing fraction of the stage.
    spacing_ratio : float
        Diameter over nearest-neighbor distance at the lower limit.
    bounding_neighbors : int
        Neighbors whose exclusion spheres carry a piece of the wall.
    windows : tuple of WindowShape
        The windows that shut the cage in this stage.
    """

    lower_limit: ExactNumber
    spacing_ratio: float
    bounding_neighbors: int
    windows: tuple[WindowShape, ...]


@dataclass(frozen=True)
class IdealLattice:
    """One lattice in units of its nearest-neighbor distance.

    Parameters
    ----------
    name : str
        Name in the catalog.
    dimensions : int
        2 or 3.
    cell : tuple of float
        Edges of a conventional rectangular or orthorhombic cell.
    basis : tuple of tuple of float
        Sites of that cell in fractions of its edges.
    close_packing : ExactNumber
        Packing fraction at contact of nearest neighbors.
    volume_factor : ExactNumber
        C of the limit v_f = C delta^d (1 + c1 delta / a) toward close packing, with
        a the nearest-neighbor distance and delta = a - diameter.
    volume_slope : ExactNumber
        c1 of the same limit.
    stages : tuple of CageStage
        From close packing down; below the last one the particle escapes.
    """

    name: str
    dimensions: int
    cell: tuple[float, ...]
    basis: tuple[tuple[float, ...], ...]
    close_packing: ExactNumber
    volume_factor: ExactNumber
    volume_slope: ExactNumber
    stages: tuple[CageStage, ...]


_SQUARE = IdealLattice(
    name="square",
    dimensions=2,
    cell=(1.0, 1.0),
    basis=((0.0, 0.0),),
    close_packing=ExactNumber("pi/4", _PI / 4),
    volume_factor=ExactNumber("4", 4.0),
    volume_slope=ExactNumber("1/3", 1 / 3),
    stages=(
        CageStage(
            ExactNumber("pi/8", _PI / 8),
            1 / _R2,
            4,
            (WindowShape("edge of 2 nearest neighbors", 2, 4, 1 / _R2),),
        ),
        CageStage(
            ExactNumber("pi/16", _PI / 16),
            1 / 2,
            8,
            (WindowShape("edge of a nearest and a diagonal neighbor", 2, 8, 1 / 2),),
        ),
    ),
)

_TRIANGULAR = IdealLattice(
    name="triangular",
    dimensions=2,
    cell=(1.0, _R3),
    basis=((0.0, 0.0), (1 / 2, 1 / 2)),
    close_packing=ExactNumber("pi/(2*sqrt(3))", _PI / (2 * _R3)),
    volume_factor=ExactNumber("2*sqrt(3)", 2 * _R3),
    volume_slope=ExactNumber("1/9", 1 / 9),
    stages=(
        CageStage(
            ExactNumber("pi/(8*sqrt(3))", _PI / (8 * _R3)),
            1 / 2,
            6,
            (WindowShape("edge of 2 nearest neighbors", 2, 6, 1 / 2),),
        ),
    ),
)

_HONEYCOMB = IdealLattice(
    name="honeycomb",
    dimensions=2,
    cell=(_R3, 3.0),
    basis=((0.0, 0.0), (0.0, 1 / 3), (1 / 2, 1 / 2), (1 / 2, 5 / 6)),
    close_packing=ExactNumber("pi/(3*sqrt(3))", _PI / (3 * _R3)),
    volume_factor=ExactNumber("3*sqrt(3)", 3 * _R3),
    volume_slope=ExactNumber("1", 1.0),
    stages=(
        CageStage(
            ExactNumber("sqrt(3)*pi/12", _R3 * _PI / 12),
            _R3 / 2,
            3,
            (WindowShape("edge of 2 nearest neighbors", 2, 3, _R3 / 2),),
        ),
        CageStage(
            ExactNumber("pi/(12*sqrt(3))", _PI / (12 * _R3)),
            1 / 2,
            12,
            (WindowShape("edge of an adjoining hexagon", 2, 12, 1 / 2),),
        ),
    ),
)

_SC = IdealLattice(
    name="sc",
    dimensions=3,
    cell=(1.0, 1.0, 1.0),
    basis=((0.0, 0.0, 0.0),),
    close_packing=ExactNumber("pi/6", _PI / 6),
    volume_factor=ExactNumber("8", 8.0),
    volume_slope=ExactNumber("1", 1.0),
    stages=(
        CageStage(
            ExactNumber("sqrt(6)*pi/27", _R6 * _PI / 27),
            math.sqrt(2 / 3),
            6,
            (WindowShape("triangle of 3 nearest neighbors", 3, 8, math.sqrt(2 / 3)),),
        ),
        CageStage(
            ExactNumber("sqrt(2)*pi/24", _R2 * _PI / 24),
            1 / _R2,
            26,
            (
                WindowShape("outer face of an adjoining cube", 4, 24, 1 / _R2),
                WindowShape("half face between two pockets", 3, 12, 1 / _R2),
            ),
        ),
    ),
)

_BCC = IdealLattice(
    name="bcc",
    dimensions=3,
    cell=(2 / _R3, 2 / _R3, 2 / _R3),
    basis=((0.0, 0.0, 0.0), (1 / 2, 1 / 2, 1 / 2)),
    close_packing=ExactNumber("sqrt(3)*pi/8", _R3 * _PI / 8),
    volume_factor=ExactNumber("4*sqrt(3)", 4 * _R3),
    volume_slope=ExactNumber("3/4", 3 / 4),
    stages=(
        CageStage(
            ExactNumber("9*pi/64", 9 * _PI / 64),
            _R3 / 2,
            8,
            (WindowShape("square of 4 nearest neighbors", 4, 6, math.sqrt(2 / 3)),),
        ),
        CageStage(
            ExactNumber("9*sqrt(2)*pi/256", 9 * _R2 * _PI / 256),
            _R6 / 4,
            14,
            (WindowShape("triangle of 2 nearest and a second", 3, 24, _R6 / 4),),
        ),
    ),
)

# A face-centered and a hexagonal close-packed cage consist of the same two halves,
# one of them mirrored, so their stages are one.
_CLOSE_PACKED_STAGES = (
    CageStage(
        ExactNumber("pi/12", _PI / 12),
        1 / _R2,
        12,
        (
            WindowShape("square of 4 nearest neighbors", 4, 6, 1 / _R2),
            WindowShape("triangle of 3 nearest neighbors", 3, 8, 1 / _R3),
        ),
    ),
    CageStage(
        ExactNumber("sqrt(6)*pi/54", _R6 * _PI / 54),
        1 / _R3,
        18,
        (
            WindowShape("triangle of 3 nearest neighbors", 3, 8, 1 / _R3),
            WindowShape("triangle of 2 nearest and a second", 3, 24, 1 / _R3),
        ),
    ),
)

_FCC = IdealLattice(
    name="fcc",
    dimensions=3,
    cell=(_R2, _R2, _R2),
    basis=((0.0, 0.0, 0.0), (0.0, 0.5, 0.5), (0.5, 0.0, 0.5), (0.5, 0.5, 0.0)),
    close_packing=ExactNumber("sqrt(2)*pi/6", _R2 * _PI / 6),
    volume_factor=ExactNumber("4*sqrt(2)", 4 * _R2),
    volume_slope=ExactNumber("3/8", 3 / 8),
    stages=_CLOSE_PACKED_STAGES,
)

_HCP = IdealLattice(
    name="hcp",
    dimensions=3,
    cell=(1.0, _R3, math.sqrt(8 / 3)),
    basis=((0.0, 0.0, 0.0), (0.5, 0.5, 0.0), (0.5, 1 / 6, 0.5), (0.0, 2 / 3, 0.5)),
    close_packing=ExactNumber("sqrt(2)*pi/6", _R2 * _PI / 6),
    volume_factor=ExactNumber("4*sqrt(2)", 4 * _R2),
    volume_slope=ExactNumber("3/8", 3 / 8),
    stages=_CLOSE_PACKED_STAGES,
)

_DIAMOND = IdealLattice(
    name="diamond",
    dimensions=3,
    cell=(4 / _R3, 4 / _R3, 4 / _R3),
    basis=tuple(
        (x + shift, y + shift, z + shift)
        for shift in (0.0, 0.25)
        for x, y, z in _FCC.basis
    ),
    close_packing=ExactNumber("sqrt(3)*pi/16", _R3 * _PI / 16),
    volume_factor=ExactNumber("8*sqrt(3)", 8 * _R3),
    volume_slope=ExactNumber("3", 3.0),
    stages=(
        CageStage(
            ExactNumber("sqrt(6)*pi/27", _R6 * _PI / 27),
            2 * _R2 / 3,
            4,
            (WindowShape("triangle of 3 nearest neighbors", 3, 4, 2 * _R2 / 3),),
        ),
    ),
)

#: The catalog, by name; plane lattices first.
LATTICES = {
    entry.name: entry
    for entry in (
        _SQUARE,
        _TRIANGULAR,
        _HONEYCOMB,
        _SC,
        _BCC,
        _FCC,
        _HCP,
        _DIAMOND,
    )
}


def find_lattice(name: str) -> IdealLattice:
    """Return the catalog entry of a lattice.

    Parameters
    ----------
    name : str
        One of the names in :data:`LATTICES`, in upper or lower case.

    Returns
    -------
    IdealLattice

    Raises
    ------
    UsageError
        If there is no lattice of that name.
    """
    key = str(name).lower()
    if key in LATTICES:
        return LATTICES[key]
    raise UsageError(
        f"there is no lattice {name!r}{near_miss(key, LATTICES)}; choose among "
        f"{', '.join(LATTICES)}"
    )
