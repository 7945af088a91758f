"""Equations of state of fluid mixtures with any distribution of sizes."""

from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike, NDArray

from trajcage.errors import UsageError
from trajcage.lattices.equation import EquationOfState
from trajcage.lattices.fluid_equations import kolafa_rottner
from trajcage.lattices.phases import DISK_LIQUID_END

__all__ = ["checked_radii", "disk_mixture", "sphere_mixture"]


def sphere_mixture(radii: ArrayLike) -> EquationOfState:
    """Return the equation of Boublik and of Mansoori et al. for these spheres.

    Parameters
    ----------
    radii : (n,) array of float
        One radius for each particle; only their ratios matter.

    Returns
    -------
    EquationOfState
        For one size it is that of Carnahan and Starling.

    Raises
    ------
    UsageError
        If a radius is not a positive number.
    """
    sizes = checked_radii(radii)
    mean, square, cube = (float(np.mean(sizes**k)) for k in (1, 2, 3))
    first, second = mean * square / cube, square**3 / cube**2

    def formula(phi: float) -> float:
        free = 1 - phi
        return (
            1 / free + 3 * phi * first / free**2 + phi**2 * (3 - phi) * second / free**3
        )

    return EquationOfState(
        name="boublik-mansoori-carnahan-starling-leland",
        dimensions=3,
        phase="fluid",
        structure="mixture",
        lowest=0.0,
        highest=0.6,
        range_reason="equilibrated supercompressed mixtures reach that far, our choice",
        source=(
            "Boublik 1970, J. Chem. Phys. 53, 471; Mansoori, Carnahan, Starling & "
            "Leland 1971, J. Chem. Phys. 54, 1523"
        ),
        formula=formula,
    )


def disk_mixture(radii: ArrayLike) -> EquationOfState:
    """Return the mixture rule of Santos, Yuste and Lopez de Haro for these disks.

    Z = (1 - w) / (1 - phi) + w Z_1(phi) with w = <r>^2 / <r^2> and Z_1 of equal disks
    by Kolafa and Rottner. Exact in the second virial coefficient, for equal disks and
    for a fluid of points between disks.

    Parameters
    ----------
    radii : (n,) array of float
        One radius for each particle; only their ratios matter.

    Returns
    -------
    EquationOfState

    Raises
    ------
    UsageError
        If a radius is not a positive number.
    """
    sizes = checked_radii(radii)
    weight = float(np.mean(sizes) ** 2 / np.mean(sizes**2))
    one_component: Callable[[float], float] = kolafa_rottner

    def formula(phi: float) -> float:
        return (1 - weight) / (1 - phi) + weight * one_component(phi)

    return EquationOfState(
        name="santos-yuste-lopez-de-haro-mixture",
        dimensions=2,
        phase="fluid",
        structure="mixture",
        lowest=0.0,
        highest=DISK_LIQUID_END,
        range_reason="the one-component equation inside ends there",
        source=(
            "Santos, Yuste & Lopez de Haro 1999, Mol. Phys. 96, 1, with Kolafa & "
            "Rottner 2006, Mol. Phys. 104, 3435"
        ),
        formula=formula,
    )


def checked_radii(radii: ArrayLike) -> NDArray[np.float64]:
    """Return radii as a flat array divided by their mean.

    Raises
    ------
    UsageError
        If there is none, or one is not a positive number.
    """
    sizes = np.atleast_1d(np.asarray(radii, dtype=np.float64)).ravel()
    wrong = np.flatnonzero(~(np.isfinite(sizes) & (sizes > 0)))
    if len(sizes) == 0 or len(wrong):
        came = "none" if len(sizes) == 0 else f"{sizes[wrong[0]]} (particle {wrong[0]})"
        msg = f"radii must be positive numbers, one for each particle, got {came}"
        raise UsageError(msg)
    return np.asarray(sizes / sizes.mean())
