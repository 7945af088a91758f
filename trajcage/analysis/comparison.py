"""Measured means beside equations of state, ideal lattices and phase marks."""

import math
from collections.abc import Mapping
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
    dimensions: int, packing_fraction: float, estimates: Mapping[str, MeanEstimate]
) -> list[_Row]:
    """Ideal lattices that exist at a packing fraction.

    Parameters
    ----------
    dimensions : int
        2 or 3.
    packing_fraction : float
        Mean packing fraction.
    estimates : mapping of str to MeanEstimate
        Means over the frames of what :mod:`trajcage.analysis.thermodynamics` measures
        beside the lattices.

    Returns
    -------
    list of dict
        One for each lattice. From the frames: `free_volume`, `free_surface`, and the
        measured means over them, `free_volume_ratio`, `free_surface_ratio`, with the
        errors of these. At the mean packing fraction: `name`, `cage_status`,
        `bounding_neighbors`, `weakest_window`, `compressibility_factor` of the cell
        theory.
    """
    rows: list[_Row] = []
    for name in lattice_names(dimensions):
        found = lattice_reference(name, packing_fraction)
        if found is None:
            continue
        row: _Row = {"name": name, "cage_status": found.status.name.lower()}
        for part in ("free_volume", "free_surface"):
            ratio = estimates[f"lattice_{name}_{part}_ratio"]
            row |= {
                part: estimates[f"lattice_{name}_{part}"].mean,
                f"{part}_ratio": ratio.mean,
                f"{part}_ratio_error": ratio.error,
            }
        row |= {
            "bounding_neighbors": found.bounding_neighbors,
            "weakest_window": found.weakest_window,
            "compressibility_factor": found.compressibility_factor,
        }
        rows.append(row)
    return rows


def phase_table(dimensions: int) -> list[_Row]:
    """List published packing fractions at which equal hard particles change phase."""
    return [asdict(mark) for mark in phase_marks(dimensions)]
