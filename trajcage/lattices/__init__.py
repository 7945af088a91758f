"""Ideal lattices and published equations of state: what to compare cages with."""

from trajcage.lattices.exact import SMALLEST_VORONOI_CELL, ExactNumber
from trajcage.lattices.ideal import LATTICES, lattice_sites
from trajcage.lattices.reference import (
    LatticeReference,
    LatticeThresholds,
    Window,
    lattice,
    thresholds,
)

__all__ = [
    "LATTICES",
    "SMALLEST_VORONOI_CELL",
    "ExactNumber",
    "LatticeReference",
    "LatticeThresholds",
    "Window",
    "lattice",
    "lattice_sites",
    "thresholds",
]
