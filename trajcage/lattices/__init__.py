"""Ideal lattices and published equations of state: what to compare cages with."""

from trajcage.lattices.effective_diameter import effective_diameter_wca
from trajcage.lattices.equation import EquationOfState
from trajcage.lattices.equations import EQUATIONS, equations, reference_equations
from trajcage.lattices.exact import SMALLEST_VORONOI_CELL, ExactNumber
from trajcage.lattices.ideal import LATTICES
from trajcage.lattices.mixture_equations import disk_mixture, sphere_mixture
from trajcage.lattices.phases import PHASE_MARKS, PhaseMark, phase_marks
from trajcage.lattices.reference import (
    LatticeReference,
    LatticeThresholds,
    Window,
    lattice,
    thresholds,
)
from trajcage.lattices.sites import lattice_sites

__all__ = [
    "EQUATIONS",
    "LATTICES",
    "PHASE_MARKS",
    "SMALLEST_VORONOI_CELL",
    "EquationOfState",
    "ExactNumber",
    "LatticeReference",
    "LatticeThresholds",
    "PhaseMark",
    "Window",
    "disk_mixture",
    "effective_diameter_wca",
    "equations",
    "lattice",
    "lattice_sites",
    "phase_marks",
    "reference_equations",
    "sphere_mixture",
    "thresholds",
]
