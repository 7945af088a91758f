"""When a cage counts as broken."""

from dataclasses import dataclass

import numpy as np

from trajcage.errors import UsageError

__all__ = ["BreakingRule"]


@dataclass(frozen=True)
class BreakingRule:
    """When a cage counts as broken.

    Parameters
    ----------
    bonded : float
        A1: bonded at a distance up to this times the sum of the radii.
    broken : float
        A2: gone beyond this times the sum of the radii; not less than A1.
    fraction_lost : float
        Share of the neighbors at the start whose loss breaks the cage.
    minimum_duration : float, time
        How long the loss must last to count; 0 counts it at once.
    mobility_window : float or None, time
        How long a particle counts as mobile after its cage broke; ten times the
        spacing of the first two frames unless given.

    Raises
    ------
    UsageError
        If a value makes no sense.
    """

    bonded: float = 1.35
    broken: float = 1.6
    fraction_lost: float = 0.5
    minimum_duration: float = 0.0
    mobility_window: float | None = None

    def __post_init__(self) -> None:
        if not 1.0 <= self.bonded <= self.broken < np.inf:
            raise UsageError(
                "expected 1 <= bonded <= broken in units of the contact distance, got "
                f"bonded {self.bonded} and broken {self.broken}"
            )
        if not 0.0 < self.fraction_lost <= 1.0:
            raise UsageError(
                f"expected a fraction of lost neighbors above 0 and up to 1, got "
                f"{self.fraction_lost}"
            )
        if not 0.0 <= self.minimum_duration < np.inf:
            raise UsageError(
                f"expected a minimum duration of 0 or more, got {self.minimum_duration}"
            )
        if self.mobility_window is not None and not self.mobility_window > 0.0:
            raise UsageError(
                f"expected a positive mobility window, got {self.mobility_window}"
            )
