"""What correlations in time hold: lags, origins, lengths and columns."""

from dataclasses import dataclass

import numpy as np

from trajcage.errors import UsageError
from trajcage.model import Field

__all__ = ["CORRELATION_FIELDS", "CorrelationPlan"]

# A short record starts with a quarter of the interval between origins.
_HALVINGS = 2


def _pair(name: str, description: str, unit: str = "1") -> tuple[Field, Field]:
    error = f"Blocking error of {name}; NaN with fewer than two origins"
    return (
        Field(name, description, unit, "f8", False),
        Field(f"{name}_error", error, unit, "f8", False),
    )


#: Columns of the table of correlations, a row a lag.
CORRELATION_FIELDS = (
    Field("lag_frames", "Lag in frames", "1", "i8", False),
    Field("lag", "Lag in time, mean over the origins", "time", "f8", False),
    Field("n_origins", "Time origins averaged over", "1", "i8", False),
    *_pair("msd", "Mean squared displacement", "length+2"),
    *_pair(
        "cage_relative_msd",
        "Mean squared displacement relative to the mean displacement of the neighbors "
        "at the origin; particles without neighbors left out",
        "length+2",
    ),
    Field(
        "without_neighbors",
        "Particles without neighbors at the origin, mean over the origins; they are left "
        "out of cage_relative_msd and cage_correlation",
        "1",
        "f8",
        False,
    ),
    *_pair(
        "non_gaussian",
        "Non-Gaussian parameter d <r^4> / ((d + 2) <r^2>^2) - 1, averages over "
        "particles and origins",
    ),
    *_pair(
        "overlap", "Share of particles displaced by no more than the overlap length"
    ),
    *_pair(
        "chi_4",
        "Variance of that share over the origins, times the number of particles; NaN "
        "with fewer than four origins",
    ),
    *_pair(
        "self_scattering",
        "Self-intermediate scattering function at the wave number, direction-averaged",
    ),
    *_pair(
        "neighbor_correlation",
        "Share of the bonds at the origin (r <= A1 sigma_ij) that are not broken "
        "(r > A2 sigma_ij) at the lag",
    ),
    *_pair(
        "cage_correlation",
        "Share of the particles with neighbors at the origin that have lost less than "
        "the set fraction of them at the lag",
    ),
    Field(
        "errors_converged",
        "Whether the blocking errors of all columns are converged (else lower bounds)",
        "1",
        "i1",
        False,
    ),
)


@dataclass(frozen=True)
class CorrelationPlan:
    """Which lags, from which origins, with which lengths.

    Parameters
    ----------
    max_lag : int
        Longest lag in frames.
    origin_interval : int
        Frames between time origins in a long record; in a short one half or a quarter
        of that, if it is divisible by them.
    lags_per_octave : int
        Lags between a lag and its double, as far as whole frames allow.
    overlap_length : float, length
        Reach of the overlap function.
    wave_number : float, 1/length
        Of the self-intermediate scattering function.
    bonded, broken, fraction_lost : float
        As in :class:`~trajcage.analysis.breaking_rule.BreakingRule`.
    """

    max_lag: int
    origin_interval: int
    lags_per_octave: int
    overlap_length: float
    wave_number: float
    bonded: float
    broken: float
    fraction_lost: float

    def __post_init__(self) -> None:
        for name in ("max_lag", "origin_interval", "lags_per_octave"):
            if getattr(self, name) < 1:
                raise UsageError(
                    f"expected {name} of 1 or more, got {getattr(self, name)}"
                )
        for name in ("overlap_length", "wave_number"):
            if not 0.0 < getattr(self, name) < np.inf:
                raise UsageError(
                    f"expected a positive {name}, got {getattr(self, name)}"
                )

    def lags(self) -> list[int]:
        """Lags in frames, ascending."""
        lags, octave = set(), 0
        while 2**octave <= self.max_lag:
            for part in range(self.lags_per_octave):
                lags.add(round(2.0 ** (octave + part / self.lags_per_octave)))
            octave += 1
        return sorted(lag for lag in lags if lag <= self.max_lag)

    @property
    def first_interval(self) -> int:
        """Frames between time origins at the start of a record."""
        interval = self.origin_interval
        for _ in range(_HALVINGS):
            interval = interval if interval % 2 else interval // 2
        return interval

    @staticmethod
    def spacing(lag: int, interval: int) -> int:
        """Frames between the origins that are used for a lag, out of all origins."""
        spacing = interval
        while 2 * spacing <= lag / 2:
            spacing *= 2
        return spacing
