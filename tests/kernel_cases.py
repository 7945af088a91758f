"""What the tests of the cage kernel have in common: calls and configurations."""

import itertools
import math

import numpy as np

from trajcage.kernel import measure_cages
from trajcage.lattices import LATTICES, lattice_sites

SPACE = [name for name in LATTICES if LATTICES[name].dimensions == 3]
PLANE = [name for name in LATTICES if LATTICES[name].dimensions == 2]
CLOSED, OPEN, BORDER, OVERLAP, INVALID, WRAPPED = range(6)


def measure(positions, vectors, radii, periodic=True, origin=0.0, **options):
    """Call the kernel; one number stands for equal radii, edges or a corner."""
    n, d = positions.shape
    return measure_cages(
        np.asarray(positions, float),
        np.asarray(vectors, float) * np.eye(d) if np.ndim(vectors) < 2 else vectors,
        np.broadcast_to(np.asarray(origin, float), d).copy(),
        np.broadcast_to(periodic, d).copy(),
        np.broadcast_to(np.asarray(radii, float), n).copy(),
        **options,
    )


def block(name, phi, least=7.0):
    """Noiseless periodic block of a lattice of unit spheres, at least so wide."""
    entry = LATTICES[name]
    spacing = (entry.close_packing.value / phi) ** (1 / entry.dimensions)
    repeats = tuple(math.ceil(least / edge) for edge in entry.cell)
    positions, vectors = lattice_sites(name, repeats, spacing)
    return positions, vectors, spacing


def contact_factor(positions, vectors, radii, periodic=True):
    """Factor on the radii at which the first pair touches, own images left out."""
    d = len(vectors)
    heights = 1 / np.linalg.norm(np.linalg.inv(vectors), axis=0)
    fractions = positions @ np.linalg.inv(vectors)
    wrapped = (fractions - np.where(periodic, np.floor(fractions), 0.0)) @ vectors
    # images that can be closer than half the box
    turns = [range(-math.ceil(0.5 * np.linalg.norm(vectors, axis=1).sum() / h) - 1,
                   math.ceil(0.5 * np.linalg.norm(vectors, axis=1).sum() / h) + 2)
             if p else range(1)
             for h, p in zip(heights, np.broadcast_to(periodic, d), strict=True)]  # fmt: skip
    shifts = np.array(list(itertools.product(*turns))) @ vectors
    apart = wrapped[:, None, None] + shifts - wrapped[None, :, None]
    distances = np.linalg.norm(apart, axis=-1).min(axis=-1)
    np.fill_diagonal(distances, np.inf)
    return float((distances / (radii[:, None] + radii)).min())


def spread_points(rng, n, vectors, trials=10):
    """Random points in a periodic box, each the best of several candidates."""
    d = len(vectors)
    shifts = np.array(list(itertools.product([-1, 0, 1], repeat=d))) @ vectors
    points = rng.random((1, d)) @ vectors
    for _ in range(n - 1):
        trial = rng.random((trials, d)) @ vectors
        apart = trial[:, None, None] + shifts - points[None, :, None]
        distance = np.linalg.norm(apart, axis=-1).min(axis=(1, 2))
        points = np.vstack([points, trial[[distance.argmax()]]])
    return points


def bits(cages):
    """All numbers of an answer as bytes, to compare exactly."""
    flat = [np.ascontiguousarray(part).tobytes() for part in cages[:7]]
    for rows in (cages.wall, cages.windows):
        if rows is not None:
            flat += [np.ascontiguousarray(part).tobytes() for part in rows]
    return flat
