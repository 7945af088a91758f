"""What is known when all frames are in: curves, scalars, and what is absent why."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.correlation_plan import CORRELATION_FIELDS
from trajcage.analysis.path_splits import msd_crossover
from trajcage.analysis.survival import SURVIVAL_FIELDS, SurvivalCurve
from trajcage.model import Field
from trajcage.store import ArraySpec

__all__ = ["CURVES", "CURVE_ARRAYS", "SUMMARY", "Conclusion", "ConclusionBuilder"]

#: Tables made at the end, by name, and their columns.
CURVES: Mapping[str, tuple[Field, ...]] = {
    "survival": SURVIVAL_FIELDS,
    "persistence": SURVIVAL_FIELDS,
    "correlations": CORRELATION_FIELDS,
}


#: The same columns as arrays of a result file.
CURVE_ARRAYS = tuple(
    ArraySpec(f"/trajcage/{name}/{f.name}", f.description, f.unit, f.dtype)
    for name, fields in CURVES.items()
    for f in fields
)


def _survival_scalars(name: str, cages: str) -> tuple[Field, ...]:
    def scalar(part: str, description: str, unit: str = "time") -> Field:
        return Field(f"{name}_{part}", f"{description}; {cages}", unit, "f8", False)

    return (
        scalar("median", "Kaplan-Meier median"),
        scalar("mean", "Kaplan-Meier mean, if the curve comes down to 0"),
        scalar("restricted_mean", "Mean up to the restriction"),
        scalar("restriction", "Longest time observed"),
        scalar("ended", "Number of ends seen", "1"),
        scalar("censored", "Number still whole at the end of the record", "1"),
    )


#: Scalars known at the end; those that do not exist are NaN and have a reason.
SUMMARY = (
    *_survival_scalars("lifetime", "cages that formed within the record"),
    *_survival_scalars("persistence", "cages of the first frame, timed from there"),
    Field(
        "caging_length",
        "Square root of the mean squared displacement where its log-log curve is flattest",
        "length",
        "f8",
        False,
    ),
    Field("relaxation_time", "Lag at which overlap falls to 1/e", "time", "f8", False),
    Field(
        "cage_relaxation_time",
        "Lag at which cage_correlation falls to 1/e",
        "time",
        "f8",
        False,
    ),
    Field("chi_4_peak", "Largest chi_4", "1", "f8", False),
    Field("chi_4_peak_lag", "Lag of the largest chi_4", "time", "f8", False),
    Field(
        "hop_threshold", "p_hop above which a particle jumps", "length+2", "f8", False
    ),
    Field("jumps", "Jumps completed within the record", "1", "f8", False),
    Field("jumps_unfinished", "Particles still jumping at its end", "1", "f8", False),
    Field("overlap_length", "Reach of the overlap function", "length", "f8", False),
    Field("wave_number", "Wave number of self_scattering", "length-1", "f8", False),
)


@dataclass(frozen=True, eq=False)
class Conclusion:
    """What is known when all frames are in.

    Parameters
    ----------
    curves : dict of str to dict of str to array
        Columns of each table of :data:`CURVES`; empty columns where absent.
    summary : dict of str to float
        One entry for each of :data:`SUMMARY`; NaN where absent.
    reasons : dict of str to str
        Why curves and scalars are absent, by name.
    """

    curves: dict[str, dict[str, NDArray[np.generic]]]
    summary: dict[str, float]
    reasons: dict[str, str]

    @property
    def arrays(self) -> dict[str, NDArray[np.generic]]:
        """Contents of :data:`CURVE_ARRAYS` by their names."""
        return {
            f"{name}/{column}": array
            for name, columns in self.curves.items()
            for column, array in columns.items()
        }


class ConclusionBuilder:
    """Collect results; whatever is left out needs a reason."""

    def __init__(self) -> None:
        self._curves: dict[str, dict[str, NDArray[np.generic]]] = {
            name: {f.name: np.zeros(0, dtype=f.dtype) for f in fields}
            for name, fields in CURVES.items()
        }
        self._summary = {field.name: np.nan for field in SUMMARY}
        self._reasons: dict[str, str] = {}

    def add(self, **scalars: float) -> None:
        """Add scalars of the summary."""
        self._summary.update(scalars)

    def leave_out(self, reason: str, *names: str) -> None:
        """Say why curves or scalars are absent."""
        self._reasons.update(dict.fromkeys(names, reason))

    def add_survival(self, name: str, curve: SurvivalCurve) -> None:
        """Add the curve `name` and its scalars."""
        self._curves[name] = curve.table()
        scalars, reasons = curve.summary(_PREFIX[name])
        self._summary.update(scalars)
        self._reasons.update(reasons)

    def leave_out_survival(self, reason: str) -> None:
        """Say why there is no survival at all."""
        for name, prefix in _PREFIX.items():
            scalars = (f.name for f in SUMMARY if f.name.startswith(f"{prefix}_"))
            self.leave_out(reason, name, *scalars)

    def add_correlations(self, table: dict[str, NDArray[np.generic]]) -> None:
        """Add the correlations and the scalars read off them."""
        self._curves["correlations"] = table
        lag = np.asarray(table["lag"], dtype=np.float64)
        msd = np.asarray(table["msd"], dtype=np.float64)
        crossover, reason = msd_crossover(lag, msd)
        self.add(caging_length=float(np.sqrt(crossover)))
        if reason:
            self.leave_out(reason, "caging_length")
        for name, column in _DECAYS.items():
            decay = np.asarray(table[column], dtype=np.float64)
            time, reason = _decay_time(lag, decay, column)
            self.add(**{name: time})
            if reason:
                self.leave_out(reason, name)
        chi_4 = np.asarray(table["chi_4"], dtype=np.float64)
        if np.isfinite(chi_4).any():
            peak = int(np.nanargmax(chi_4))
            self.add(chi_4_peak=float(chi_4[peak]), chi_4_peak_lag=float(lag[peak]))
        else:
            reason = (
                "no lag was measured from four or more time origins: too few frames"
            )
            self.leave_out(reason, "chi_4_peak", "chi_4_peak_lag")

    def leave_out_correlations(self, reason: str) -> None:
        """Say why there are no correlations."""
        peak = ("chi_4_peak", "chi_4_peak_lag")
        self.leave_out(reason, "correlations", "caging_length", *_DECAYS, *peak)

    def build(self) -> Conclusion:
        """Return the conclusion."""
        return Conclusion(self._curves, self._summary, self._reasons)


# Scalars of a survival curve start with this.
_PREFIX = {"survival": "lifetime", "persistence": "persistence"}

# Times at which a correlation falls to 1/e.
_DECAYS = {"relaxation_time": "overlap", "cage_relaxation_time": "cage_correlation"}


def _decay_time(
    lag: NDArray[np.float64], decay: NDArray[np.float64], name: str
) -> tuple[float, str]:
    """Lag at which a correlation falls to 1/e, between lags log-interpolated."""
    target = np.exp(-1.0)
    below = np.flatnonzero(decay <= target)
    if len(below) == 0:
        return np.nan, (
            f"{name} stays above 1/e up to the longest lag, {lag[-1]:g}"
            if np.isfinite(decay).all()
            else f"{name} is not known at every lag"
        )
    k = int(below[0])
    if k == 0:
        return np.nan, f"{name} is below 1/e at the shortest lag, {lag[0]:g}"
    share = (decay[k - 1] - target) / (decay[k - 1] - decay[k])
    return float(lag[k - 1] * (lag[k] / lag[k - 1]) ** share), ""
