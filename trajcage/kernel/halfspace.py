"""Which spheres are held by their contacts: a half-space test and recursive removal.

A sphere is locally held when no closed half-space contains all directions of
its contacts, that is when the origin lies strictly inside their convex hull.
"""

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.jit import compiled

__all__ = ["held", "loose"]

# Sine of the angle below which a direction counts as lying in a plane: well above
# the rounding of float64, well below anything a measured packing can resolve.
_FLAT = 1e-9


@compiled
def held(directions: NDArray[np.float64]) -> bool:
    """Whether unit vectors fit into no closed half-space (half-plane in 2D).

    Parameters
    ----------
    directions : (m, d) float64
        Unit vectors, d = 2 or 3.

    Notes
    -----
    A cone of normals n with n.u >= 0 for all u has an edge on which two of the
    constraints are tight (one in 2D), so only normals to pairs of the vectors
    have to be tried.
    """
    m, d = directions.shape
    if m <= d:
        return False
    independent = False
    if d == 2:
        for i in range(m):
            a, b = -directions[i, 1], directions[i, 0]
            above, below = False, False
            for k in range(m):
                s = a * directions[k, 0] + b * directions[k, 1]
                above |= s > _FLAT
                below |= s < -_FLAT
            independent |= above or below
            if not (above and below):
                return False
        return independent
    for i in range(m):
        for j in range(i):
            a = (
                directions[i, 1] * directions[j, 2]
                - directions[i, 2] * directions[j, 1]
            )
            b = (
                directions[i, 2] * directions[j, 0]
                - directions[i, 0] * directions[j, 2]
            )
            c = (
                directions[i, 0] * directions[j, 1]
                - directions[i, 1] * directions[j, 0]
            )
            size = np.sqrt(a * a + b * b + c * c)
            if size <= _FLAT:
                continue
            independent = True
            above, below = False, False
            for k in range(m):
                s = a * directions[k, 0] + b * directions[k, 1] + c * directions[k, 2]
                above |= s > _FLAT * size
                below |= s < -_FLAT * size
                if above and below:
                    break
            if not (above and below):
                return False
    return independent


@compiled
def loose(
    offsets: NDArray[np.int64],
    neighbors: NDArray[np.int64],
    directions: NDArray[np.float64],
    gaps: NDArray[np.float64],
    tolerance: float,
    fixed: NDArray[np.bool_],
) -> NDArray[np.bool_]:
    """Remove spheres that are not held by the remaining ones until all are.

    The outcome does not depend on the order of removal, because a sphere that
    is not held stays so when others go.

    Parameters
    ----------
    offsets, neighbors : (n + 1,), (m,) int64
        Possible contacts in compressed rows, i-j and j-i.
    directions : (m, d) float64
        Unit vectors from particle to neighbor.
    gaps : (m,) float64
        A contact has a gap up to the tolerance.
    tolerance : float
        In the unit of the gaps.
    fixed : (n,) bool
        Spheres that are held by something else and stay.

    Returns
    -------
    (n,) bool
        The spheres removed.
    """
    n = len(offsets) - 1
    d = directions.shape[1]
    removed = np.zeros(n, dtype=np.bool_)
    waiting = np.ones(n, dtype=np.bool_)
    stack = np.arange(n - 1, -1, -1)
    top = n
    widest = 0
    for i in range(n):
        widest = max(widest, offsets[i + 1] - offsets[i])
    touching = np.empty((widest, d))
    while top > 0:
        top -= 1
        i = stack[top]
        waiting[i] = False
        if fixed[i] or removed[i]:
            continue
        m = 0
        for k in range(offsets[i], offsets[i + 1]):
            if gaps[k] <= tolerance and not removed[neighbors[k]]:
                touching[m] = directions[k]
                m += 1
        if held(touching[:m]):
            continue
        removed[i] = True
        for k in range(offsets[i], offsets[i + 1]):
            j = neighbors[k]
            if gaps[k] <= tolerance and not (removed[j] or waiting[j]):
                waiting[j] = True
                stack[top] = j
                top += 1
    return removed
