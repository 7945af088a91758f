"""Whole paths of particles: where they split into cages, and how large those are."""

from collections import deque
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike, NDArray

from trajcage.errors import InputError, UsageError

__all__ = ["PathSplits", "hop_indicator", "msd_crossover", "split_paths"]

# Local slope of log MSD over log lag below which particles count as caged.
_CAGED_SLOPE = 0.5


def hop_indicator(paths: ArrayLike, half_window: int) -> NDArray[np.float64]:
    """p_hop of whole paths, for all frames that have both half windows.

    Parameters
    ----------
    paths : (T, n, d) array_like, length
        Continuous positions.
    half_window : int
        Frames before, and frames from the given one on.

    Returns
    -------
    (T, n) float64, length^2
        NaN on the first `half_window` and the last `half_window` - 1 frames.
    """
    r = _checked(paths)
    if half_window < 1:
        raise UsageError(
            f"expected a half window of 1 frame or more, got {half_window}"
        )
    p_hop = np.full(r.shape[:2], np.nan)
    for t in range(half_window, len(r) - half_window + 1):
        a, b = r[t - half_window : t], r[t : t + half_window]
        from_b = np.mean(np.sum((a - b.mean(axis=0)) ** 2, axis=-1), axis=0)
        from_a = np.mean(np.sum((b - a.mean(axis=0)) ** 2, axis=-1), axis=0)
        p_hop[t] = np.sqrt(from_b * from_a)
    return p_hop


@dataclass(frozen=True, eq=False)
class PathSplits:
    """Jumps found by splitting paths; one entry for each, ordered by particle, time.

    Parameters
    ----------
    particle : (k,) int64
        Index along the second axis of the paths.
    frame : (k,) int64
        First frame after the jump, an index along the first axis.
    significance : (k,) float64, length^2
        p(t_c) of the split that found the jump.
    displacement : (k, d) float64, length
        Mean position in the cage after the jump minus that in the cage before.
    caging_length : float, length
        The caging length that was used.
    """

    particle: NDArray[np.int64]
    frame: NDArray[np.int64]
    significance: NDArray[np.float64]
    displacement: NDArray[np.float64]
    caging_length: float


def split_paths(paths: ArrayLike, caging_length: float | None = None) -> PathSplits:
    """Split paths into cages, again and again at the most significant change.

    A path of T frames cut before frame t_c, at the fraction x = t_c / T, has

        p(t_c) = sqrt(x (1 - x)) sqrt( <d_1^2>_2 <d_2^2>_1 ),

    with d_k the distance from the center of part k. It is split where p is
    largest, and the parts in turn, as long as p exceeds the square of the caging
    length.

    Parameters
    ----------
    paths : (T, n, d) array_like, length
        Continuous positions of a chosen set of particles.
    caging_length : float, optional, length
        Typical size of a cage; from the crossover of the mean squared displacement
        of these paths unless given.

    Returns
    -------
    PathSplits

    Raises
    ------
    InputError
        If no caging length is given and the paths show no caging.

    Notes
    -----
    Candelier, Dauchot & Biroli, Phys. Rev. Lett. 102, 088001 (2009).
    """
    r = _checked(paths)
    if caging_length is None:
        lags, msd = _path_msd(r)
        crossover, reason = msd_crossover(lags, msd)
        if np.isnan(crossover):
            raise InputError(f"no caging length: {reason}; give caging_length")
        caging_length = float(np.sqrt(crossover))
    elif not caging_length > 0.0:
        raise UsageError(f"expected a positive caging length, got {caging_length}")
    particle, frame, significance, displacement = [], [], [], []
    for i in range(r.shape[1]):
        path = np.ascontiguousarray(r[:, i])
        splits = sorted(_split(path, caging_length**2))
        edges = [0, *(cut for cut, _ in splits), len(path)]
        centers = [path[a:b].mean(axis=0) for a, b in pairwise(edges)]
        for k, (cut, p) in enumerate(splits):
            particle.append(i)
            frame.append(cut)
            significance.append(p)
            displacement.append(centers[k + 1] - centers[k])
    return PathSplits(
        np.array(particle, dtype=np.int64),
        np.array(frame, dtype=np.int64),
        np.array(significance, dtype=np.float64),
        np.array(displacement, dtype=np.float64).reshape(-1, r.shape[2]),
        caging_length,
    )


def msd_crossover(lags: ArrayLike, msd: ArrayLike) -> tuple[float, str]:
    """Mean squared displacement where it crosses over from cage to escape.

    The crossover is the flattest place of the log-log curve.

    Parameters
    ----------
    lags : (m,) array_like
        Positive lags in ascending order, best logarithmic.
    msd : (m,) array_like, length^2
        Mean squared displacement; NaN where unknown.

    Returns
    -------
    value : float, length^2
        NaN if there is no plateau: the local slope stays above 1/2.
    reason : str
        Why there is no value; empty otherwise.
    """
    t, y = np.asarray(lags, dtype=np.float64), np.asarray(msd, dtype=np.float64)
    usable = np.isfinite(y) & (y > 0.0) & (t > 0.0)
    t, y = t[usable], y[usable]
    if len(t) < 3:
        return np.nan, f"{len(t)} lags with a mean squared displacement, 3 are needed"
    slope = np.gradient(np.log(y), np.log(t))
    flattest = int(np.argmin(slope))
    if slope[flattest] > _CAGED_SLOPE:
        return np.nan, (
            "the mean squared displacement shows no plateau (smallest log-log slope "
            f"{slope[flattest]:.2f}, caged below {_CAGED_SLOPE})"
        )
    return float(y[flattest]), ""


def _checked(paths: ArrayLike) -> NDArray[np.float64]:
    r = np.asarray(paths, dtype=np.float64)
    if r.ndim != 3 or len(r) < 2:
        raise UsageError(
            f"expected paths as an array [frame, particle, axis] with at least two "
            f"frames, got shape {r.shape}"
        )
    if not np.isfinite(r).all():
        frame, particle, _ = np.argwhere(~np.isfinite(r))[0]
        raise InputError(
            f"expected finite positions, found NaN or infinity at frame {frame}, "
            f"particle {particle}; leave that particle out"
        )
    return r


def _path_msd(r: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Mean squared displacement at up to four lags an octave, all time origins."""
    longest = max(len(r) // 2, 1)
    octaves = np.arange(0.0, np.log2(longest) + 1e-9, 0.25)
    lags = np.unique(np.rint(2.0**octaves).astype(np.int64))
    msd = [np.mean(np.sum((r[lag:] - r[:-lag]) ** 2, axis=-1)) for lag in lags]
    return lags, np.array(msd)


def _split(path: NDArray[np.float64], limit: float) -> list[tuple[int, float]]:
    """Cuts of one path and their significance, in no particular order."""
    splits = []
    parts = deque([(0, len(path))])
    while parts:
        start, stop = parts.pop()
        if stop - start < 2:
            continue
        cut, p = _best_cut(path[start:stop])
        if p > limit:
            splits.append((start + cut, p))
            parts.extend([(start, start + cut), (start + cut, stop)])
    return splits


def _best_cut(path: NDArray[np.float64]) -> tuple[int, float]:
    """Most significant cut of a path and its p."""
    r = path - path.mean(axis=0)
    n = len(r)
    size = np.arange(1, n)
    sums = np.cumsum(r, axis=0)
    squares = np.cumsum(np.sum(r * r, axis=1))
    first = sums[:-1] / size[:, None]
    second = (sums[-1] - sums[:-1]) / (n - size)[:, None]
    apart = np.sum((second - first) ** 2, axis=1)
    spread_1 = squares[:-1] / size - np.sum(first**2, axis=1)
    spread_2 = (squares[-1] - squares[:-1]) / (n - size) - np.sum(second**2, axis=1)
    from_1 = np.maximum(spread_2, 0.0) + apart
    from_2 = np.maximum(spread_1, 0.0) + apart
    p = np.sqrt(size / n * (1.0 - size / n)) * np.sqrt(from_1 * from_2)
    best = int(np.argmax(p))
    return int(size[best]), float(p[best])
