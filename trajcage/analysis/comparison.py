"""Measured means beside equations of state, ideal lattices and phase marks."""

import math
from dataclasses import asdict

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.statistics import MeanEstimate
from trajcage.analysis.thermodynamics import lattice_names, lattice_reference
from trajcage.lattices import phase_marks, reference_equations

__all__ = ["compare_equations", "compare_lattices", "phase_table"]

_Row = dict[str, object]


def compare_equations(
    dimensions: int,
    radii: NDArray[np.float64],
    packing_fraction: float,
    measured: MeanEstimate,
) -> list[_Row]:
    """Measured compressibility factor beside the equations of state in range.

    Parameters
    ----------
    dimensions : int
        2 or 3.
    radii : (n,) float64, length
        Radii of the particles.
    packing_fraction : float
        Mean packing fraction.
    measured : MeanEstimate
        Measured compressibility factor.

    Returns
    -------
    list of dict
        One for each equation: `name`, `phase`, `structure`, `source`,
        `compressibility_factor`, and the `deviation` of the measured value from
        it, also as `deviation_in_errors`, in units of the error of the measured
        value.
    """
    rows: list[_Row] = []
    for equation in reference_equations(dimensions, radii, packing_fraction):
        factor = equation.compressibility_factor(packing_fraction)
        deviation = measured.mean - factor
        error = measured.error
        rows.append(
            {
                "name": equation.name,
                "phase": equation.phase,
                "structure": equation.structure,
                "compressibility_factor": factor,
                "deviation": deviation,
                "deviation_in_errors": deviation / error if error > 0 else math.nan,
                "source": equation.source,
            }
        )
    return rows


def compare_lattices(
    dimensions: int,
    packing_fraction: float,
    equal_diameter: float,
    free_volume_mean: float,
) -> list[_Row]:
    """Ideal lattices that exist at a packing fraction.

    Parameters
    ----------
    dimensions : int
        2 or 3.
    packing_fraction : float
        Mean packing fraction.
    equal_diameter : float, length
        Diameter of equal particles of the same packing fraction and number density,
        in any unit.
    free_volume_mean : float, length^d
        Measured mean free volume, in powers of that unit.

    Returns
    -------
    list of dict
        One for each lattice: `name`, `cage_status`, `free_volume`, `free_surface`
        (in powers of that unit), `bounding_neighbors`, `weakest_window`,
        `compressibility_factor` of the cell theory, and `free_volume_ratio` of the
        measured mean to it.
    """
    d, rows = dimensions, []
    for name in lattice_names(d):
        found = lattice_reference(name, packing_fraction)
        if found is None:
            continue
        volume = found.free_volume * equal_diameter**d
        row: _Row = {
            "name": name,
            "cage_status": found.status.name.lower(),
            "free_volume": volume,
            "free_surface": found.free_surface * equal_diameter ** (d - 1),
            "bounding_neighbors": found.bounding_neighbors,
            "weakest_window": found.weakest_window,
            "compressibility_factor": found.compressibility_factor,
            "free_volume_ratio": free_volume_mean / volume if volume else math.nan,
        }
        rows.append(row)
    return rows


def phase_table(dimensions: int) -> list[_Row]:
    """List published packing fractions at which equal hard particles change phase."""
    return [asdict(mark) for mark in phase_marks(dimensions)]
