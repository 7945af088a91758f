"""What an equation of state is: a formula, its range and its source."""

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

__all__ = ["EquationOfState", "Phase"]

Phase = Literal["fluid", "solid"]


@dataclass(frozen=True)
class EquationOfState:
    """Compressibility factor Z = P V / (N k T) of hard particles.

    Parameters
    ----------
    name : str
        Name in the registry.
    dimensions : int
        2 or 3.
    phase : {"fluid", "solid"}
        Phase that it describes.
    structure : str
        Lattice of a solid; ``"equal"`` or ``"mixture"`` for the particles of a fluid.
    lowest, highest : float
        Packing fractions between which the equation may be used, ends included.
    range_reason : str
        Why the range ends there.
    source : str
        Publication of the formula.
    formula : callable
        Z from the packing fraction, without a check of the range.
    """

    name: str
    dimensions: int
    phase: Phase
    structure: str
    lowest: float
    highest: float
    range_reason: str
    source: str
    formula: Callable[[float], float]

    def in_range(self, packing_fraction: float) -> bool:
        """Return whether the equation may be used at this packing fraction."""
        return self.lowest <= packing_fraction <= self.highest

    def compressibility_factor(self, packing_fraction: float) -> float:
        """Return Z, or NaN outside the range: the equation never extrapolates."""
        if not self.in_range(packing_fraction):
            return math.nan
        return float(self.formula(packing_fraction))
