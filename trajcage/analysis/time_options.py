"""Settings of the time analysis."""

from dataclasses import dataclass

import numpy as np

from trajcage.analysis.breaking_rule import BreakingRule
from trajcage.analysis.correlation_plan import CorrelationPlan
from trajcage.errors import UsageError

__all__ = ["TimeOptions"]


@dataclass(frozen=True)
class TimeOptions:
    """Settings of the time analysis; lengths and times in the units of the frames.

    Parameters
    ----------
    bonded, broken, fraction_lost, minimum_duration, mobility_window
        See :class:`~trajcage.analysis.breaking_rule.BreakingRule`.
    remove_drift : bool
        Whether displacements are taken relative to the mean over all particles.
    hop_half_window : int
        Frames before and frames after an instant for p_hop.
    caging_length : float or None, length
        Its square is the threshold of p_hop, which is 0.2 mean diameters squared
        unless given (the value of Smessaert & Rottler, from memory).
    max_lag : int
        Longest lag of the correlations, in frames.
    origin_interval : int
        Frames between time origins; half or a quarter of that in short records, if it
        is divisible by them.
    lags_per_octave : int
        Lags between one and its double.
    overlap_length : float or None, length
        Reach of the overlap function; 0.3 mean diameters unless given.
    wave_number : float or None, 1/length
        Of the self-intermediate scattering function; 2 pi over the mean diameter
        unless given.
    """

    bonded: float = 1.35
    broken: float = 1.6
    fraction_lost: float = 0.5
    minimum_duration: float = 0.0
    mobility_window: float | None = None
    remove_drift: bool = False
    hop_half_window: int = 10
    caging_length: float | None = None
    max_lag: int = 1024
    origin_interval: int = 16
    lags_per_octave: int = 2
    overlap_length: float | None = None
    wave_number: float | None = None

    def __post_init__(self) -> None:
        self.rule()
        self.plan(1.0)
        if self.hop_half_window < 1:
            raise UsageError(
                f"expected hop_half_window of 1 or more, got {self.hop_half_window}"
            )
        if self.caging_length is not None and not 0.0 < self.caging_length < np.inf:
            raise UsageError(
                f"expected a positive caging length, got {self.caging_length}"
            )

    def rule(self) -> BreakingRule:
        """When a cage counts as broken."""
        return BreakingRule(
            self.bonded,
            self.broken,
            self.fraction_lost,
            self.minimum_duration,
            self.mobility_window,
        )

    def plan(self, mean_diameter: float) -> CorrelationPlan:
        """Return what the correlations measure for particles of this diameter."""
        overlap, wave = self.overlap_length, self.wave_number
        return CorrelationPlan(
            self.max_lag,
            self.origin_interval,
            self.lags_per_octave,
            0.3 * mean_diameter if overlap is None else overlap,
            2.0 * np.pi / mean_diameter if wave is None else wave,
            self.bonded,
            self.broken,
            self.fraction_lost,
        )

    def hop_threshold(self, mean_diameter: float) -> float:
        """p_hop above which particles of this diameter jump, length^2."""
        if self.caging_length is None:
            return 0.2 * mean_diameter**2
        return self.caging_length**2
