"""Exact geometry of cages and power cells: numpy and numba, no I/O, no errors.

Kernels answer with status codes; the analysis floor turns them into words.
"""

from trajcage.kernel.cages import Cages, measure_cages

__all__ = ["Cages", "measure_cages"]
