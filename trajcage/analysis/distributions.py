"""Distribution of the free volume over all frames, as counts in fixed bins."""

import math
from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.state import State
from trajcage.model import CageTable
from trajcage.store import ArraySpec

__all__ = ["FreeVolumeDistribution", "distribution_arrays"]

# From the cages of jammed packings to those of dilute fluids, in diameters^d.
_LOWEST, _HIGHEST, _BINS_PER_DECADE = -24, 3, 20
_N_BINS = (_HIGHEST - _LOWEST) * _BINS_PER_DECADE

_WHERE = "/trajcage/histograms/free_volume"


def _edges(unit: float) -> NDArray[np.float64]:
    exponents = _LOWEST + np.arange(_N_BINS + 1) / _BINS_PER_DECADE
    return np.asarray(10.0**exponents * unit, dtype=np.float64)


def distribution_arrays(dimensions: int, mean_diameter: float) -> tuple[ArraySpec, ...]:
    """Declare the histogram for the result file.

    Parameters
    ----------
    dimensions : int
        2 or 3.
    mean_diameter : float, length
        Its power d is the unit in which the bins are the same for all runs.
    """
    edges = _edges(mean_diameter**dimensions)
    return (
        ArraySpec(
            f"{_WHERE}/edges",
            "Edges of the bins of the free volume, 20 a decade of its ratio to the "
            "mean diameter to the power d",
            f"length+{dimensions}",
            shape=(len(edges),),
            values=edges,
        ),
        ArraySpec(
            f"{_WHERE}/counts",
            "Closed cages in each bin, over all frames",
            dtype="i8",
            shape=(_N_BINS,),
        ),
        ArraySpec(
            f"{_WHERE}/below",
            "Closed cages smaller than the first edge",
            dtype="i8",
            shape=(),
        ),
        ArraySpec(
            f"{_WHERE}/above",
            "Closed cages larger than the last edge",
            dtype="i8",
            shape=(),
        ),
        ArraySpec(
            f"{_WHERE}/left_out",
            "Particles without a closed cage, over all frames",
            dtype="i8",
            shape=(),
        ),
    )


class FreeVolumeDistribution:
    """Histogram and moments of the free volume, frame by frame.

    Parameters
    ----------
    dimensions : int
        2 or 3.
    mean_diameter : float, length
        Scale of the bins.
    """

    def __init__(self, dimensions: int, mean_diameter: float) -> None:
        self._unit = mean_diameter**dimensions
        self._edges = _edges(self._unit)
        self._counts = np.zeros(_N_BINS + 2, dtype=np.int64)  # ends: below and above
        self._left_out = 0
        self._sums = np.zeros(5)  # powers 1 to 4 of v / unit, and ln(v / unit)

    def update(self, table: CageTable) -> None:
        """Add the cages of the next frame."""
        volumes = table.free_volume[table.closed]
        places = np.searchsorted(self._edges, volumes, side="right")
        self._counts += np.bincount(places, minlength=_N_BINS + 2)
        self._left_out += table.left_out
        x = volumes / self._unit
        with np.errstate(divide="ignore"):
            parts = [*(np.sum(x**k) for k in range(1, 5)), np.sum(np.log(x))]
        self._sums += np.array(parts)

    def arrays(self) -> dict[str, NDArray[np.generic]]:
        """Contents of the arrays that change, by their names in the file."""
        prefix = _WHERE.removeprefix("/trajcage/")
        return {
            f"{prefix}/counts": self._counts[1:-1].copy(),
            f"{prefix}/below": np.array(self._counts[0]),
            f"{prefix}/above": np.array(self._counts[-1]),
            f"{prefix}/left_out": np.array(self._left_out),
        }

    def summary(self) -> dict[str, float | int]:
        """Moments over all frames; volumes in mean diameters^d."""
        n = int(self._counts.sum())
        if n == 0:
            return {"n_values": 0, "left_out": self._left_out}
        first, second, third, fourth, logarithm = (self._sums / n).tolist()
        variance = max(second - first**2, 0.0)
        third_central = third - 3 * first * second + 2 * first**3
        fourth_central = (
            fourth - 4 * first * third + 6 * first**2 * second - 3 * first**4
        )
        wide = variance > 1e-10 * first**2  # else only rounding is left
        return {
            "mean": first,
            "geometric_mean": math.exp(logarithm),
            "standard_deviation": math.sqrt(variance),
            "skewness": third_central / variance**1.5 if wide else math.nan,
            "kurtosis_excess": fourth_central / variance**2 - 3 if wide else math.nan,
            "n_values": n,
            "left_out": self._left_out,
        }

    def state(self) -> State:
        """All that is needed to continue, as arrays."""
        return {
            "counts": self._counts.copy(),
            "left_out": np.array(self._left_out),
            "sums": self._sums.copy(),
        }

    def restore(self, state: Mapping[str, NDArray[np.generic]]) -> None:
        """Continue from what :meth:`state` returned."""
        self._counts = np.array(state["counts"], dtype=np.int64)
        self._left_out = int(state["left_out"])
        self._sums = np.array(state["sums"], dtype=np.float64)
