"""The registry of equations of state, and which of them fit a measured state."""

from collections.abc import Mapping
from types import MappingProxyType

import numpy as np
from numpy.typing import ArrayLike

from trajcage.errors import UsageError
from trajcage.lattices.equation import EquationOfState, Phase
from trajcage.lattices.fluid_equations import DISK_FLUIDS, SPHERE_FLUIDS
from trajcage.lattices.mixture_equations import (
    checked_radii,
    disk_mixture,
    sphere_mixture,
)
from trajcage.lattices.solid_equations import DISK_SOLIDS, SPHERE_SOLIDS

__all__ = ["EQUATIONS", "equations", "reference_equations"]

#: Equations for equal particles by name, best ones first within each phase.
EQUATIONS: Mapping[str, EquationOfState] = MappingProxyType(
    {
        equation.name: equation
        for equation in (*SPHERE_FLUIDS, *SPHERE_SOLIDS, *DISK_FLUIDS, *DISK_SOLIDS)
    }
)

# Particles whose radii spread by less (standard deviation over mean) are equal: more
# than float32 files round, far less than any mixture.
_EQUAL_SPREAD = 1e-6


def equations(
    *, dimensions: int | None = None, phase: Phase | None = None
) -> tuple[EquationOfState, ...]:
    """Return the equations of state for equal particles.

    Parameters
    ----------
    dimensions : int, optional
        2 or 3; both if not given.
    phase : {"fluid", "solid"}, optional
        Both if not given.

    Returns
    -------
    tuple of EquationOfState

    Raises
    ------
    UsageError
        If dimensions or phase are none of these.
    """
    if dimensions is not None:
        _check_dimensions(dimensions)
    if phase not in (None, "fluid", "solid"):
        msg = f"phase must be 'fluid' or 'solid', got {phase!r}"
        raise UsageError(msg)
    return tuple(
        equation
        for equation in EQUATIONS.values()
        if dimensions in (None, equation.dimensions) and phase in (None, equation.phase)
    )


def reference_equations(
    dimensions: int, radii: ArrayLike, packing_fraction: float
) -> tuple[EquationOfState, ...]:
    """Return the equations of state that may be put beside a measured state.

    Parameters
    ----------
    dimensions : int
        2 or 3.
    radii : float or (n,) array of float
        Radii of the particles.
    packing_fraction : float
        Measured packing fraction.

    Returns
    -------
    tuple of EquationOfState
        All in range at that packing fraction, best ones first and fluids before
        solids; empty if there is none. Mixtures have fluid equations only.

    Raises
    ------
    UsageError
        If dimensions, radii or the packing fraction are impossible.
    """
    _check_dimensions(dimensions)
    sizes = checked_radii(radii)
    if not 0 < packing_fraction < 1:
        msg = f"packing fraction must be between 0 and 1, got {packing_fraction!r}"
        raise UsageError(msg)
    if np.std(sizes) < _EQUAL_SPREAD:
        candidates = equations(dimensions=dimensions)
    elif dimensions == 3:
        candidates = (sphere_mixture(sizes),)
    else:
        candidates = (disk_mixture(sizes),)
    return tuple(entry for entry in candidates if entry.in_range(packing_fraction))


def _check_dimensions(dimensions: int) -> None:
    if dimensions not in (2, 3):
        msg = f"dimensions must be 2 or 3, got {dimensions!r}"
        raise UsageError(msg)
