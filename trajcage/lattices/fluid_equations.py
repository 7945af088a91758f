"""Published equations of state of fluids of equal hard spheres and hard disks."""

from functools import partial

from trajcage.lattices.equation import EquationOfState
from trajcage.lattices.ideal import LATTICES
from trajcage.lattices.phases import DISK_LIQUID_END

__all__ = ["DISK_FLUIDS", "SPHERE_FLUIDS", "carnahan_starling", "kolafa_rottner"]


def carnahan_starling(phi: float) -> float:
    """Return Z of the hard-sphere fluid by Carnahan and Starling."""
    return (1 + phi + phi**2 - phi**3) / (1 - phi) ** 3


def _series(terms: tuple[tuple[int, float], ...], phi: float) -> float:
    """Sum coefficient * x^power with x = phi / (1 - phi)."""
    x = phi / (1 - phi)
    return sum(coefficient * x**power for power, coefficient in terms)


_KOLAFA_LABIK_MALIJEVSKY = (
    (0, 1.0),
    (1, 4.0),
    (2, 6.0),
    (3, 2.3647684),
    (4, -0.8698551),
    (5, 1.1062803),
    (6, -1.1014221),
    (7, 0.66605866),
    (8, -0.03633431),
    (10, -0.20965164),
    (14, 0.10555569),
    (22, -0.00872380),
)

_KOLAFA_ROTTNER = (
    (0, 1.0),
    (1, 2.0),
    (2, 1.12801775),
    (3, 0.00181895291),
    (4, -0.0526134737),
    (5, 0.0504960168),
    (6, -0.0325537792),
    (7, 0.0134578632),
    (8, 0.00140888182),
    (9, -0.00834273601),
    (10, 0.00694127367),
    (11, -0.00262254723),
    (12, 0.000355746352),
    (22, -5.24672938e-9),
    (57, 5.88054639e-23),
)

#: Z of the hard-disk fluid by Kolafa and Rottner.
kolafa_rottner = partial(_series, _KOLAFA_ROTTNER)


def _henderson(phi: float) -> float:
    return (1 + phi**2 / 8) / (1 - phi) ** 2


def _santos_lopez_de_haro_yuste(phi: float) -> float:
    densest = LATTICES["triangular"].close_packing.value
    return 1 / (1 - 2 * phi + (2 * densest - 1) * (phi / densest) ** 2)


#: Fluids of equal spheres, the most accurate first.
SPHERE_FLUIDS = (
    EquationOfState(
        name="kolafa-labik-malijevsky",
        dimensions=3,
        phase="fluid",
        structure="equal",
        lowest=0.0,
        highest=0.5393,
        range_reason="simulations behind the fit end at density 1.03",
        source="Kolafa, Labik & Malijevsky 2004, Phys. Chem. Chem. Phys. 6, 2335",
        formula=partial(_series, _KOLAFA_LABIK_MALIJEVSKY),
    ),
    EquationOfState(
        name="carnahan-starling",
        dimensions=3,
        phase="fluid",
        structure="equal",
        lowest=0.0,
        highest=0.55,
        range_reason="stable and moderately supercompressed fluid, our choice",
        source="Carnahan & Starling 1969, J. Chem. Phys. 51, 635",
        formula=carnahan_starling,
    ),
)

#: Fluids of equal disks, the most accurate first.
DISK_FLUIDS = (
    EquationOfState(
        name="kolafa-rottner",
        dimensions=2,
        phase="fluid",
        structure="equal",
        lowest=0.0,
        highest=DISK_LIQUID_END,
        range_reason="the liquid ends there; the fit itself ends at density 0.90",
        source="Kolafa & Rottner 2006, Mol. Phys. 104, 3435",
        formula=kolafa_rottner,
    ),
    EquationOfState(
        name="santos-lopez-de-haro-yuste",
        dimensions=2,
        phase="fluid",
        structure="equal",
        lowest=0.0,
        highest=DISK_LIQUID_END,
        range_reason="the liquid ends there",
        source="Santos, Lopez de Haro & Yuste 1995, J. Chem. Phys. 103, 4622",
        formula=_santos_lopez_de_haro_yuste,
    ),
    EquationOfState(
        name="henderson",
        dimensions=2,
        phase="fluid",
        structure="equal",
        lowest=0.0,
        highest=DISK_LIQUID_END,
        range_reason="the liquid ends there",
        source="Henderson 1975, Mol. Phys. 30, 971",
        formula=_henderson,
    ),
)
