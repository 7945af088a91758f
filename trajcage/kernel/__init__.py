"""Exact geometry of cages and power cells: numpy and numba, no I/O, no errors.

Kernels answer with status codes; the analysis floor turns them into words.
"""

from trajcage.kernel.cages import Cages, measure_cages
from trajcage.kernel.radical import RadicalCells, radical_cells

__all__ = ["Cages", "RadicalCells", "measure_cages", "radical_cells"]
