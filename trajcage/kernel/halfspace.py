"""Which spheres are held by their contacts: a half-space test and recursive removal.

A sphere is locally held when no closed half-space contains all directions of
its contacts, that is when the origin lies strictly inside their convex hull.
"""

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel.jit import compiled, helper

__all__ = ["loose"]

# Sine of the angle below which a direction counts as lying in a plane: well above
# the rounding of float64, well below anything a measured packing can resolve.
_FLAT = 1e-9


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
        Unit vectors from particle to neighbor, d = 2 or 3.
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
    n, d = len(fixed), directions.shape[1]
    removed, waiting = np.zeros(n, np.bool_), np.ones(n, np.bool_)
    touching = np.empty((np.diff(offsets).max(initial=0), d))
    stack = np.arange(n, dtype=np.int64)
    _unravel(
        offsets, neighbors, directions, gaps, float(tolerance), fixed,
        removed, waiting, stack, touching,
    )  # fmt: skip
    return removed


@compiled
def _unravel(  # type: ignore[no-untyped-def]
    offsets, neighbors, directions, gaps, tolerance, fixed,
    removed, waiting, stack, touching,
):  # fmt: skip
    """Work off a stack of particles to look at, starting with all of them."""
    d = directions.shape[1]
    top = len(stack)
    while top > 0:
        top -= 1
        i = stack[top]
        waiting[i] = False
        if fixed[i] or removed[i]:
            continue
        m = 0
        for k in range(offsets[i], offsets[i + 1]):
            if gaps[k] <= tolerance and not removed[neighbors[k]]:
                for axis in range(d):
                    touching[m, axis] = directions[k, axis]
                m += 1
        if m > d and (_held_2d(touching, m) if d == 2 else _held_3d(touching, m)):
            continue
        removed[i] = True
        for k in range(offsets[i], offsets[i + 1]):
            j = neighbors[k]
            if gaps[k] <= tolerance and not (removed[j] or waiting[j]):
                waiting[j] = True
                stack[top] = j
                top += 1


# A cone of normals n with n.u >= 0 for all directions u has an edge on which d - 1 of
# the constraints are tight. So only normals to one direction (2D) or to two (3D) have
# to be tried; if no two are independent, all lie on a line and hold nothing.


@helper
def _held_2d(u, m):  # type: ignore[no-untyped-def]
    """Whether the first m unit vectors fit into no closed half-plane."""
    for i in range(m):
        above, below = False, False
        for k in range(m):
            s = u[i, 0] * u[k, 1] - u[i, 1] * u[k, 0]
            above |= s > _FLAT
            below |= s < -_FLAT
        if not (above and below):
            return False
    return True


@helper
def _held_3d(u, m):  # type: ignore[no-untyped-def]
    """Whether the first m unit vectors fit into no closed half-space."""
    independent = False
    for i in range(m):
        for j in range(i):
            a = u[i, 1] * u[j, 2] - u[i, 2] * u[j, 1]
            b = u[i, 2] * u[j, 0] - u[i, 0] * u[j, 2]
            c = u[i, 0] * u[j, 1] - u[i, 1] * u[j, 0]
            flat = _FLAT * np.sqrt(a * a + b * b + c * c)
            if flat <= _FLAT * _FLAT:
                continue
            independent = True
            above, below = False, False
            for k in range(m):
                s = a * u[k, 0] + b * u[k, 1] + c * u[k, 2]
                above |= s > flat
                below |= s < -flat
                if above and below:
                    break
            if not (above and below):
                return False
    return independent
