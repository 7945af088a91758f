"""Lifetimes of cages in a record that begins and ends: Kaplan-Meier survival.

A cage that is still whole when the record ends has a lifetime longer than what
was seen (right-censored). A cage already there when the record begins has an
unknown age, so its lifetime is unknown even if its end is seen. The two kinds
are therefore never mixed:

- *persistence*: cages present on the first frame, timed from that frame. This
  is the distribution of waiting times from an arbitrary moment.
- *survival*: cages that formed within the record, timed from their start. This
  is the distribution of lifetimes proper. The particles that break their first
  cage at all feed it, so active particles are over-represented in a record
  that is short compared with the lifetimes.

The distinction between persistence and exchange times: Jung, Garrahan &
Chandler, Phys. Rev. E 69, 061205 (2004).
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtri

from trajcage.errors import UsageError
from trajcage.model import Field

__all__ = ["SURVIVAL_FIELDS", "LifetimeCounts", "SurvivalCurve", "kaplan_meier"]

#: Columns of a survival table.
SURVIVAL_FIELDS = (
    Field("time", "Age at which cages end or leave observation", "time", "f8", False),
    Field("survival", "Kaplan-Meier probability to outlive this age", "1", "f8", False),
    Field(
        "survival_lower",
        "Lower edge of the pointwise 95 % band (Greenwood variance of log(-log S), "
        "cages taken as independent)",
        "1",
        "f8",
        False,
    ),
    Field("survival_upper", "Upper edge of that band", "1", "f8", False),
    Field("at_risk", "Cages observed up to this age", "1", "i8", False),
    Field("ended", "Cages that broke at this age", "1", "i8", False),
    Field("censored", "Cages last seen whole at this age", "1", "i8", False),
)

# Ages are exact up to 2^11 ticks and good to 1 in 2^10 beyond: bounded memory.
_EXACT_BITS = 11
_EXACT = 1 << _EXACT_BITS
_HALF = _EXACT // 2
_OCTAVES = 30
_BINS = _EXACT + _HALF * _OCTAVES


@dataclass(frozen=True, eq=False)
class SurvivalCurve:
    """A Kaplan-Meier estimate; all arrays have one entry for each distinct time.

    Parameters
    ----------
    time : (m,) float64, time
        Distinct durations in ascending order.
    survival : (m,) float64
        Probability to survive beyond that time.
    lower, upper : (m,) float64
        Pointwise confidence band from Greenwood's variance on the log-log
        scale; NaN where the estimate is 0 or 1.
    at_risk, ended, censored : (m,) int64
        Individuals under observation just before, and what became of them.
    """

    time: NDArray[np.float64]
    survival: NDArray[np.float64]
    lower: NDArray[np.float64]
    upper: NDArray[np.float64]
    at_risk: NDArray[np.int64]
    ended: NDArray[np.int64]
    censored: NDArray[np.int64]

    @property
    def n_ended(self) -> int:
        """Number of ends seen."""
        return int(self.ended.sum())

    @property
    def n_censored(self) -> int:
        """Number of individuals last seen alive."""
        return int(self.censored.sum())

    @property
    def median(self) -> float:
        """Time by which half have ended; NaN if the curve stays above 1/2."""
        below = np.flatnonzero(self.survival <= 0.5)
        return float(self.time[below[0]]) if len(below) else np.nan

    @property
    def restricted_mean(self) -> float:
        """Mean time survived up to the longest duration seen, `time[-1]`."""
        if len(self.time) == 0:
            return np.nan
        steps = np.diff(self.time, prepend=0.0)
        heights = np.concatenate(([1.0], self.survival[:-1]))
        return float(np.sum(steps * heights))

    @property
    def mean(self) -> float:
        """Mean duration; NaN if the curve does not come down to 0."""
        if len(self.time) == 0 or self.survival[-1] > 0.0:
            return np.nan
        return self.restricted_mean

    def table(self) -> dict[str, NDArray[np.generic]]:
        """Columns under the names of :data:`SURVIVAL_FIELDS`."""
        return {
            "time": self.time,
            "survival": self.survival,
            "survival_lower": self.lower,
            "survival_upper": self.upper,
            "at_risk": self.at_risk,
            "ended": self.ended,
            "censored": self.censored,
        }

    def summary(self, prefix: str) -> tuple[dict[str, float], dict[str, str]]:
        """Scalars that exist, and reasons for those that do not.

        Parameters
        ----------
        prefix : str
            What the names start with: ``"lifetime"`` gives ``lifetime_median``,
            ``lifetime_mean`` and so on.
        """
        values = {
            f"{prefix}_median": self.median,
            f"{prefix}_mean": self.mean,
            f"{prefix}_restricted_mean": self.restricted_mean,
            f"{prefix}_restriction": float(self.time[-1]) if len(self.time) else np.nan,
            f"{prefix}_ended": float(self.n_ended),
            f"{prefix}_censored": float(self.n_censored),
        }
        if len(self.time) == 0:
            reason = "no cage of this kind was observed"
            missing = ("median", "mean", "restricted_mean", "restriction")
            return values, {f"{prefix}_{name}": reason for name in missing}
        reasons = {}
        last = f"the survival curve ends at {self.survival[-1]:.3g}"
        if np.isnan(values[f"{prefix}_median"]):
            reasons[f"{prefix}_median"] = f"{last}, above 1/2"
        if np.isnan(values[f"{prefix}_mean"]):
            reasons[f"{prefix}_mean"] = (
                f"{last}, above 0: the longest lifetimes were not seen; see "
                f"{prefix}_restricted_mean"
            )
        return values, reasons


def kaplan_meier(
    durations: ArrayLike,
    ended: ArrayLike,
    *,
    confidence: float = 0.95,
) -> SurvivalCurve:
    """Estimate a survival curve from durations of which some are censored.

    Parameters
    ----------
    durations : (n,) array_like, time
        How long each individual was observed.
    ended : (n,) array_like of bool
        Whether its end was seen; otherwise it is right-censored.
    confidence : float
        Level of the pointwise band.

    Returns
    -------
    SurvivalCurve

    Raises
    ------
    UsageError
        If the arrays do not match, or a duration is negative or not finite.

    Notes
    -----
    Kaplan & Meier, J. Am. Stat. Assoc. 53, 457 (1958). Individuals censored at
    a time at which others end count as at risk there. The band is the
    log-log transformed one with Greenwood's variance.
    """
    time = np.asarray(durations, dtype=np.float64)
    event = np.asarray(ended, dtype=np.bool_)
    if time.ndim != 1 or time.shape != event.shape:
        raise UsageError(
            f"survival needs one duration and one flag for each individual, got "
            f"shapes {time.shape} and {event.shape}"
        )
    if not (np.isfinite(time).all() and (time >= 0.0).all()):
        raise UsageError(
            "survival needs durations that are finite and not negative, got "
            f"{time[~(np.isfinite(time) & (time >= 0.0))][0]:g}"
        )
    distinct, index = np.unique(time, return_inverse=True)
    n_ended = np.bincount(index, weights=event, minlength=len(distinct))
    n_all = np.bincount(index, minlength=len(distinct))
    return _curve(
        distinct, n_ended.astype(np.int64), n_all - n_ended.astype(np.int64), confidence
    )


def _curve(
    time: NDArray[np.float64],
    ended: NDArray[np.int64],
    censored: NDArray[np.int64],
    confidence: float,
) -> SurvivalCurve:
    """Product-limit estimate from counts at distinct ascending times."""
    leaving = ended + censored
    at_risk = leaving[::-1].cumsum()[::-1]
    survival = np.cumprod(1.0 - ended / at_risk)
    with np.errstate(divide="ignore", invalid="ignore"):
        greenwood = np.cumsum(ended / (at_risk * (at_risk - ended)))
        spread = np.sqrt(greenwood) / np.abs(np.log(survival))
        z = float(ndtri(0.5 * (1.0 + confidence)))
        lower = survival ** np.exp(z * spread)
        upper = survival ** np.exp(-z * spread)
    certain = (survival <= 0.0) | (survival >= 1.0)
    lower[certain] = upper[certain] = np.nan
    return SurvivalCurve(time, survival, lower, upper, at_risk, ended, censored)


class LifetimeCounts:
    """Ended lifetimes, counted in bounded memory.

    Lifetimes are integers, in ticks of the clock: exact up to 2048 ticks, and
    to 1 part in 1024 beyond.
    """

    def __init__(self) -> None:
        self._ended = np.zeros(_BINS, dtype=np.int64)

    def add(self, ticks: NDArray[np.int64]) -> None:
        """Count lifetimes of cages that broke, (k,) int64."""
        np.add.at(self._ended, _bin(ticks), 1)

    @property
    def total(self) -> int:
        """Lifetimes counted so far."""
        return int(self._ended.sum())

    def curve(
        self, open_ticks: NDArray[np.int64], tick: float, confidence: float = 0.95
    ) -> SurvivalCurve:
        """Survival, given also the ages of the cages that are still whole.

        Parameters
        ----------
        open_ticks : (k,) int64
            Ages at the end of the record, right-censored.
        tick : float, time
            Length of a tick.
        confidence : float
            Level of the pointwise band.
        """
        censored = np.bincount(_bin(open_ticks), minlength=_BINS)
        used = np.flatnonzero(self._ended + censored)
        return _curve(
            _middle(used) * tick, self._ended[used], censored[used], confidence
        )

    def state(self) -> dict[str, NDArray[np.generic]]:
        """All that is needed to continue, as arrays."""
        used = np.flatnonzero(self._ended)
        return {"bins": used, "ended": self._ended[used]}

    def restore(self, state: Mapping[str, NDArray[np.generic]]) -> None:
        """Continue from what :meth:`state` returned."""
        self._ended[:] = 0
        self._ended[state["bins"].astype(np.int64)] = state["ended"]


def _bin(ticks: NDArray[np.int64]) -> NDArray[np.int64]:
    """Bin of a lifetime: a floating-point number with an 11-bit mantissa."""
    exponent = np.maximum(np.frexp(ticks.astype(np.float64))[1] - _EXACT_BITS, 0)
    octave = np.minimum(exponent, _OCTAVES).astype(np.int64)
    bins = np.minimum(_HALF * octave + (ticks >> octave), _BINS - 1)
    return np.asarray(bins, dtype=np.int64)


def _middle(bins: NDArray[np.int64]) -> NDArray[np.float64]:
    """Lifetime at the middle of a bin, in ticks."""
    octave = np.maximum(bins // _HALF - 1, 0)
    start = (bins - _HALF * octave) << octave
    width = np.int64(1) << octave
    return np.asarray(start + 0.5 * (width - 1), dtype=np.float64)
