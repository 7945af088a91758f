"""Jammed packings by sequential linear programming.

Usage: python scripts/jammed_packings.py [FILE]

makes the packings in tests/jammed_packings.npz, half a minute of processor time for each
of 256 spheres.

Torquato and Jiao 2010, Phys Rev E 82, 061302: from a dense fluid, find the small
displacements that allow the largest growth, take them, repeat. The box keeps its shape
here. For displacements u the squared distance of a pair is
|r|^2 + 2 r.(u_j - u_i) + |u_j - u_i|^2; without the last term, which only helps, the
condition that no pair overlaps after growth by sqrt(t) is linear in u and t. So every
step is free of overlaps, and at the end all gaps close down to rounding.
"""

import math
import sys
from pathlib import Path
from typing import NamedTuple

import numpy as np
from monte_carlo import MonteCarlo, random_fluid
from numpy.typing import ArrayLike, NDArray
from packings import Packing, binary
from scipy.optimize import linprog
from scipy.sparse import coo_array
from scipy.spatial import cKDTree

__all__ = ["JammedPacking", "jam", "jammed_packing"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


class JammedPacking(NamedTuple):
    """A jammed configuration and what is known about it.

    Attributes
    ----------
    packing : Packing
        Positions, box lengths and radii.
    contacts : (m, 2) ndarray of int
        Pairs of backbone particles in contact.
    rattlers : (n,) ndarray of bool
        Particles that are not part of the backbone; they sit anywhere in their cages.
    largest_gap : float
        Largest gap of a contact, in contact distances: 1e-10 unless asked otherwise.
    next_gap : float
        Smallest gap of a backbone pair that is not a contact: the plateau of the
        contact count reaches from `largest_gap` to `next_gap`.
    """

    packing: Packing
    contacts: Integers
    rattlers: NDArray[np.bool_]
    largest_gap: float
    next_gap: float


def jammed_packing(
    n: int,
    *,
    seed: int,
    radii: ArrayLike = 0.5,
    dimensions: int = 3,
    start: float | None = None,
) -> JammedPacking:
    """Jam a dense fluid of spheres (from 0.50) or disks (from 0.65).

    Parameters
    ----------
    n : int
    seed : int
    radii : float or (n,) array_like
    dimensions : int
    start : float, optional
        Packing fraction of the fluid, if another one is wanted.

    Returns
    -------
    JammedPacking
    """
    if start is None:
        start = 0.50 if dimensions == 3 else 0.65
    fluid = random_fluid(
        n, start, radii, seed=seed, dimensions=dimensions, sweeps=20, swap_fraction=0.1
    )
    return jam(fluid, seed=seed)


def jam(
    fluid: MonteCarlo, *, seed: int, gap: float = 1e-10, tolerance: float = 1e-8
) -> JammedPacking:
    """Compress a configuration until no displacement allows any growth.

    Parameters
    ----------
    fluid : MonteCarlo
        The start; left as it is.
    seed : int
        For the final places of the rattlers.
    gap : float
        Final expansion of the jammed box, so that contacts are open by this much
        and the packing has no overlap by rounding.
    tolerance : float
        Gap in contact distances up to which a pair is in contact.

    Raises
    ------
    RuntimeError
        If the linear program fails or 500 steps are not enough.
    """
    positions, lengths, radii = fluid.positions, fluid.lengths, fluid.radii
    reach = 0.1  # largest displacement, in radii of the smallest particle
    for _ in range(500):
        positions, growth = _step(positions, lengths, radii, reach)
        positions, lengths = positions / growth, lengths / growth
        # slow, far from jammed: go on; slow because the reach holds it back: go further
        if growth - 1.0 < 1e-6 * reach:
            reach *= 0.25
        elif growth - 1.0 > 1e-3 * reach:
            reach = min(2.0 * reach, 0.1)
        if reach < 1e-13:
            break
    else:
        raise RuntimeError(f"not jammed after 500 steps: growth {growth - 1:.3g}")
    positions, lengths = (1 + gap) * positions, (1 + gap) * lengths
    pairs, apart = _pairs(positions, lengths, radii, 0.1)
    gaps = np.linalg.norm(apart, axis=1) / radii[pairs].sum(axis=1) - 1.0
    rattlers = _rattlers(pairs[gaps <= tolerance], len(positions), lengths.size)
    # linear programming leaves rattlers in corners of their cages: let them move
    simulation = MonteCarlo(positions, lengths, radii, seed)
    simulation.freeze(np.flatnonzero(~rattlers))
    if rattlers.any():
        simulation.equilibrate(2000)
    backbone = ~rattlers[pairs].any(axis=1)
    touching = backbone & (gaps <= tolerance)
    return JammedPacking(
        Packing(simulation.positions, lengths, radii),
        pairs[touching],
        rattlers,
        float(gaps[touching].max()),
        float(gaps[backbone & ~touching].min()),
    )


def _step(
    positions: Floats, lengths: Floats, radii: Floats, reach: float
) -> tuple[Floats, float]:
    """Return displaced positions and the linear growth that they allow."""
    n, d = positions.shape
    limit = reach * radii.min()
    # a pair further apart cannot meet: both approach by sqrt(d) limit and both grow
    pairs, apart = _pairs(positions, lengths, radii, (0.5 + math.sqrt(d)) * reach)
    contact = radii[pairs].sum(axis=1)
    ratio = np.linalg.norm(apart, axis=1) / contact
    # unknowns: displacements / limit, then (t - 1) / reach; all of order one, so
    # that the absolute tolerances of the solver shrink with the steps
    rows = np.repeat(np.arange(len(pairs)), 2 * d + 1)
    first = pairs[:, :1] * d + np.arange(d)
    second = pairs[:, 1:] * d + np.arange(d)
    columns = np.hstack([first, second, np.full((len(pairs), 1), n * d)])
    slope = 2 * limit / reach * apart / contact[:, None] ** 2
    values = np.hstack([-slope, slope, np.ones((len(pairs), 1))])
    matrix = coo_array(
        (values.ravel(), (rows, columns.ravel())), shape=(len(pairs), n * d + 1)
    )
    goal = np.zeros(n * d + 1)
    goal[-1] = -1.0
    result = linprog(
        goal,
        A_ub=matrix.tocsr(),
        b_ub=(ratio - 1) * (ratio + 1) / reach,
        bounds=[(-1.0, 1.0)] * (n * d) + [(0.0, 1.0)],
        method="highs",
        options={"primal_feasibility_tolerance": 1e-10},
    )
    if result.status != 0:
        raise RuntimeError(f"the linear program failed: {result.message}")
    moved = positions + limit * result.x[:-1].reshape(n, d)
    pairs, apart = _pairs(moved, lengths, radii, 0.5)
    ratios = np.linalg.norm(apart, axis=1) / radii[pairs].sum(axis=1)
    return moved, float(ratios.min())


def _pairs(
    positions: Floats, lengths: Floats, radii: Floats, gap: float
) -> tuple[Integers, Floats]:
    """Find pairs with at most this gap in contact distances, and x_i - x_j."""
    points = positions % lengths
    points[points >= lengths] = 0.0
    tree = cKDTree(points, boxsize=lengths)
    pairs = tree.query_pairs(2 * (1 + gap) * radii.max(), output_type="ndarray")
    apart = points[pairs[:, 0]] - points[pairs[:, 1]]
    apart -= lengths * np.rint(apart / lengths)
    near = np.linalg.norm(apart, axis=1) <= (1 + gap) * radii[pairs].sum(axis=1)
    return pairs[near], apart[near]


def _rattlers(pairs: Integers, n: int, d: int) -> NDArray[np.bool_]:
    """Particles with fewer than d + 1 contacts, removed until none is left."""
    loose = np.zeros(n, dtype=bool)
    while True:
        held = pairs[~loose[pairs].any(axis=1)]
        fewer = np.bincount(held.ravel(), minlength=n) < d + 1
        if (fewer == loose).all():
            return loose
        loose = fewer


def main() -> None:
    target = Path(__file__).parents[1] / "tests" / "jammed_packings.npz"
    if len(sys.argv) > 1:
        target = Path(sys.argv[1])
    arrays: dict[str, NDArray[np.float64]] = {}
    for name, dimensions, radii, count in (
        ("disks", 2, binary(256, 1.4), 8),
        ("spheres", 3, np.full(256, 0.5), 6),
    ):
        made = [
            jammed_packing(256, seed=seed, radii=radii, dimensions=dimensions).packing
            for seed in range(1, count + 1)
        ]
        for part in Packing._fields:
            arrays[f"{name}_{part}"] = np.array([getattr(one, part) for one in made])
    np.savez_compressed(target, **arrays)


if __name__ == "__main__":
    main()
