"""Published equations of state of crystals of equal hard spheres and hard disks."""

import math
from functools import partial

from trajcage.lattices.equation import EquationOfState
from trajcage.lattices.ideal import LATTICES
from trajcage.lattices.phases import HEXATIC_SOLID, MELTING

__all__ = ["DISK_SOLIDS", "SPHERE_SOLIDS"]

_FCC = LATTICES["fcc"].close_packing.value
_TRIANGULAR = LATTICES["triangular"].close_packing.value

_MELTS = "from melting to close packing"


def _hall(phi: float) -> float:
    alpha, g = (_FCC - phi) / phi, 4 * (_FCC - phi) / _FCC
    return (
        3 / alpha
        + 2.557696
        + 0.1253077 * g
        + 0.1762393 * g**2
        - 1.053308 * g**3
        + 2.818621 * g**4
        - 2.921934 * g**5
        + 1.118413 * g**6
    )


def _speedy(a: float, b: float, c: float, phi: float) -> float:
    z = phi / _FCC
    return 3 * _FCC / (_FCC - phi) - a * (z - b) / (z - c)


def _alder_hoover_young(
    dimensions: int, constant: float, slope: float, densest: float, phi: float
) -> float:
    alpha = (densest - phi) / phi
    return dimensions / alpha + constant + slope * alpha


def _almarza_work(y: float) -> float:
    """Return P (v - v_0) / kT at y = kT / (P diameter^3)."""
    return (
        3
        - 1.807846 * y
        + 11.56350 * y**2
        + 141.6000 * y**3
        - 2609.260 * y**4
        + 19328.09 * y**5
    )


def _almarza(phi: float) -> float:
    from scipy.optimize import brentq  # here: it takes longer to load than all else

    volume = math.pi / (6 * phi)
    excess = volume * (_FCC - phi) / _FCC
    # y * work(y) rises with y over the stable crystal, where y stays below 0.09
    inverse_pressure = brentq(
        lambda y: y * _almarza_work(y) - excess, 0.0, 0.1, xtol=1e-300, rtol=1e-14
    )
    return float(volume / inverse_pressure)


def _cell_theory(dimensions: int, densest: float, phi: float) -> float:
    return -1 / math.expm1(math.log1p((phi - densest) / densest) / dimensions)


# At close packing itself every crystal has an infinite pressure.
_BELOW_FCC = math.nextafter(_FCC, 0)
_BELOW_TRIANGULAR = math.nextafter(_TRIANGULAR, 0)

#: Crystals of equal spheres, face-centered first.
SPHERE_SOLIDS = (
    EquationOfState(
        name="hall",
        dimensions=3,
        phase="solid",
        structure="fcc",
        lowest=MELTING,
        highest=_BELOW_FCC,
        range_reason=_MELTS,
        source="Hall 1972, J. Chem. Phys. 57, 2252",
        formula=_hall,
    ),
    EquationOfState(
        name="speedy-fcc",
        dimensions=3,
        phase="solid",
        structure="fcc",
        lowest=MELTING,
        highest=_BELOW_FCC,
        range_reason=_MELTS,
        source="Speedy 1998, J. Phys.: Condens. Matter 10, 4387",
        formula=partial(_speedy, 0.5921, 0.7072, 0.601),
    ),
    EquationOfState(
        name="almarza",
        dimensions=3,
        phase="solid",
        structure="fcc",
        lowest=MELTING,
        highest=_BELOW_FCC,
        range_reason=_MELTS,
        source="Almarza 2009, J. Chem. Phys. 130, 184106",
        formula=_almarza,
    ),
    EquationOfState(
        name="alder-hoover-young-fcc",
        dimensions=3,
        phase="solid",
        structure="fcc",
        lowest=MELTING,
        highest=_BELOW_FCC,
        range_reason=_MELTS,
        source="Alder, Hoover & Young 1968, J. Chem. Phys. 49, 3688",
        formula=partial(_alder_hoover_young, 3, 2.56, 0.56, _FCC),
    ),
    EquationOfState(
        name="speedy-hcp",
        dimensions=3,
        phase="solid",
        structure="hcp",
        lowest=MELTING,
        highest=_BELOW_FCC,
        range_reason=_MELTS,
        source="Speedy 1998, J. Phys.: Condens. Matter 10, 4387",
        formula=partial(_speedy, 0.5935, 0.7080, 0.601),
    ),
    EquationOfState(
        name="cell-theory-fcc",
        dimensions=3,
        phase="solid",
        structure="fcc",
        lowest=MELTING,
        highest=_BELOW_FCC,
        range_reason=_MELTS,
        source="free volume of the limiting cage, Z = 1/(1 - (phi/phi_cp)^(1/3))",
        formula=partial(_cell_theory, 3, _FCC),
    ),
)

#: Crystals of equal disks.
DISK_SOLIDS = (
    EquationOfState(
        name="alder-hoover-young-triangular",
        dimensions=2,
        phase="solid",
        structure="triangular",
        lowest=HEXATIC_SOLID,
        highest=_BELOW_TRIANGULAR,
        range_reason=_MELTS,
        source="Alder, Hoover & Young 1968, J. Chem. Phys. 49, 3688",
        formula=partial(_alder_hoover_young, 2, 1.90, 0.67, _TRIANGULAR),
    ),
    EquationOfState(
        name="cell-theory-triangular",
        dimensions=2,
        phase="solid",
        structure="triangular",
        lowest=HEXATIC_SOLID,
        highest=_BELOW_TRIANGULAR,
        range_reason=_MELTS,
        source="free area of the limiting cage, Z = 1/(1 - (phi/phi_cp)^(1/2))",
        formula=partial(_cell_theory, 2, _TRIANGULAR),
    ),
)
