"""Errors of time means from correlated series: blocking, online and offline.

Flyvbjerg & Petersen, J. Chem. Phys. 91, 461 (1989): neighboring values are
averaged in pairs again and again until the blocks are independent. The block
length is chosen by the rule of Lee et al., Phys. Rev. E 83, 066706 (2011): the
shortest blocks of length B with B^3 > 2 n (s_B / s_1)^4, where s_B is the naive
error of the mean of the blocks.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from trajcage.errors import UsageError

__all__ = ["BlockMoments", "MeanEstimate", "mean_estimate"]

_LEVELS = 32  # blocks of up to 2^31 values
_FEWEST_BLOCKS = 4  # with fewer, the error itself is uncertain by half and more


@dataclass(frozen=True)
class MeanEstimate:
    """A time mean with its blocking error.

    Parameters
    ----------
    mean : float
        Mean of the finite values; NaN without any.
    error : float
        Standard error of the mean; NaN with fewer than two values, and a lower
        bound unless `converged`.
    n_values, n_missing : int
        Values that entered, and values left out because they are not finite.
    block_length, n_blocks : int
        Block length at which the error was read off, and how many blocks.
    converged : bool
        Whether the blocks are long enough to be independent.
    reason : str
        Why the error is missing or only a lower bound; empty otherwise.
    """

    mean: float
    error: float
    n_values: int
    n_missing: int
    block_length: int
    n_blocks: int
    converged: bool
    reason: str

    @property
    def error_of_error(self) -> float:
        """Standard error of `error`, for independent normal blocks."""
        if self.n_blocks < 2:
            return np.nan
        return float(self.error / np.sqrt(2.0 * (self.n_blocks - 1)))


def mean_estimate(series: ArrayLike) -> MeanEstimate:
    """Mean and blocking error of one series in time order.

    Parameters
    ----------
    series : (n,) array_like
        Equally spaced values. Values that are not finite are left out and
        counted; the series is then taken as if it were gapless.

    Returns
    -------
    MeanEstimate

    Raises
    ------
    UsageError
        If the series does not have one dimension.

    Notes
    -----
    Flyvbjerg & Petersen, J. Chem. Phys. 91, 461 (1989).
    """
    values = np.asarray(series, dtype=np.float64)
    if values.ndim != 1:
        raise UsageError(
            f"a time mean needs a series with one dimension, got shape {values.shape}"
        )
    finite = values[np.isfinite(values)]
    n_missing = len(values) - len(finite)
    mean = float(finite.mean()) if len(finite) else np.nan
    counts, squared_errors = [], []
    blocks = finite
    while len(blocks) >= 2:
        counts.append(len(blocks))
        squared_errors.append(float(blocks.var()) / (len(blocks) - 1))
        paired = blocks[: len(blocks) // 2 * 2]
        blocks = 0.5 * (paired[0::2] + paired[1::2])
    return _choose(mean, len(finite), n_missing, counts, squared_errors)


def _choose(
    mean: float,
    n_values: int,
    n_missing: int,
    counts: list[int],
    squared_errors: list[float],
) -> MeanEstimate:
    """Read the error off the shortest blocks that are long enough."""
    if not counts:
        reason = f"{n_values} values: an error needs at least two"
        return MeanEstimate(
            mean, np.nan, n_values, n_missing, 1, n_values, False, reason
        )
    if not np.isfinite(squared_errors).all():
        reason = "the mean does not exist for every value of the series"
        return MeanEstimate(
            mean, np.nan, n_values, n_missing, 1, n_values, False, reason
        )
    # Equal values leave only the rounding of the mean behind.
    rounding = (1e-15 * mean) ** 2
    usable = [
        level for level, n in enumerate(counts) if n >= _FEWEST_BLOCKS or level == 0
    ]
    for level in usable:
        growth = squared_errors[level] / max(squared_errors[0], 1e-300)
        if counts[level] < _FEWEST_BLOCKS:
            break
        if squared_errors[0] <= rounding or 8.0**level > 2.0 * n_values * growth**2:
            error = float(np.sqrt(squared_errors[level]))
            return MeanEstimate(
                mean, error, n_values, n_missing, 2**level, counts[level], True, ""
            )
    level = max(usable, key=lambda k: squared_errors[k])
    reason = (
        f"{n_values} values are too few to find independent blocks: the error is a "
        "lower bound"
    )
    return MeanEstimate(
        mean,
        float(np.sqrt(squared_errors[level])),
        n_values,
        n_missing,
        2**level,
        counts[level],
        False,
        reason,
    )


class BlockMoments:
    """Means, covariances and blocking errors of many series, one value at a time.

    Holds a fixed amount of memory whatever the length of the series.

    Parameters
    ----------
    n_rows : int
        Number of independent series.
    n_values : int
        Components of each value; their covariances are kept, so that errors of
        smooth functions of their means follow (see :meth:`estimate`).
    """

    def __init__(self, n_rows: int, n_values: int) -> None:
        self._counts = np.zeros((n_rows, _LEVELS), dtype=np.int64)
        self._means = np.zeros((n_rows, _LEVELS, n_values))
        self._comoments = np.zeros((n_rows, _LEVELS, n_values, n_values))
        self._waiting = np.zeros((n_rows, _LEVELS, n_values))

    def add(self, row: int, value: NDArray[np.float64]) -> None:
        """Append one value, (n_values,) float64, to the series `row`."""
        block = value
        for level in range(_LEVELS):
            self._counts[row, level] += 1
            count = self._counts[row, level]
            before = block - self._means[row, level]
            self._means[row, level] += before / count
            after = block - self._means[row, level]
            self._comoments[row, level] += np.outer(before, after)
            if count % 2:
                self._waiting[row, level] = block
                return
            block = 0.5 * (self._waiting[row, level] + block)

    def count(self, row: int) -> int:
        """Values in the series `row`."""
        return int(self._counts[row, 0])

    def mean(self, row: int) -> NDArray[np.float64]:
        """Means of the series `row`, (n_values,) float64; NaN if it is empty."""
        if self._counts[row, 0] == 0:
            return np.full(self._means.shape[-1], np.nan)
        return np.array(self._means[row, 0])

    def estimate(
        self, row: int, value: float, gradient: NDArray[np.float64]
    ) -> MeanEstimate:
        """Error of a function of the means of the series `row`.

        Parameters
        ----------
        row : int
            Which series.
        value : float
            The function at the means; passed through.
        gradient : (n_values,) float64
            Its derivatives there: errors are propagated to first order.
        """
        counts, squared_errors = [], []
        used = np.flatnonzero(gradient)  # the others may be NaN
        slope = gradient[used]
        for level in range(_LEVELS):
            count = self._counts[row, level]
            if count < 2:
                break
            comoments = self._comoments[row, level][np.ix_(used, used)]
            variance = max(float(slope @ comoments @ slope) / int(count), 0.0)
            counts.append(int(count))
            squared_errors.append(variance / (int(count) - 1))
        return _choose(value, self.count(row), 0, counts, squared_errors)

    def state(self) -> dict[str, NDArray[np.generic]]:
        """All that is needed to continue, as arrays: levels with a block in them."""
        used = int(np.count_nonzero(self._counts.any(axis=0)))
        return {
            "counts": self._counts[:, :used].copy(),
            "means": self._means[:, :used].copy(),
            "comoments": self._comoments[:, :used].copy(),
            "waiting": self._waiting[:, :used].copy(),
        }

    def restore(self, state: Mapping[str, NDArray[np.generic]]) -> None:
        """Continue from what :meth:`state` returned."""
        for array, name in (
            (self._counts, "counts"),
            (self._means, "means"),
            (self._comoments, "comoments"),
            (self._waiting, "waiting"),
        ):
            array[:] = 0
            array[:, : state[name].shape[1]] = state[name]
