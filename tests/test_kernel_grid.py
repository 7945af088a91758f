"""Particles outside the box and boxes in any orientation."""

import numpy as np
import pytest

from trajcage.kernel import measure_cages, radical_cells
from trajcage.lattices import lattice_sites


def periodic(measure, positions, vectors, radius):
    d = len(vectors)
    return measure(
        np.ascontiguousarray(positions),
        np.ascontiguousarray(vectors),
        np.zeros(d),
        np.ones(d, bool),
        np.full(len(positions), radius),
    )


@pytest.mark.parametrize("shift", [0.05, 7.3])
def test_turned_box_with_particles_outside(shift):
    """A wrapped particle moves by whole edge vectors, not by some components."""
    positions, vectors = lattice_sites("fcc", 4, 1.0)
    turn, _ = np.linalg.qr(np.random.default_rng(1).normal(size=(3, 3)))
    turned = vectors @ turn
    away = positions @ turn + shift * turned.sum(axis=0) / 4.0
    expected = periodic(measure_cages, positions, vectors, 0.45)
    found = periodic(measure_cages, away, turned, 0.45)
    assert (found.status == 0).all()
    np.testing.assert_allclose(found.free_volume, expected.free_volume, rtol=1e-10)
    cells = periodic(radical_cells, away, turned, 0.45)
    np.testing.assert_allclose(cells.volumes, 0.5**0.5, rtol=1e-12)


def test_tilted_box_wrapped_or_not():
    random = np.random.default_rng(0)
    vectors = np.array([[9.0, 0.0, 0.0], [3.0, 8.0, 0.0], [1.0, 2.0, 7.0]])
    positions, _ = lattice_sites("sc", 7, 1.0)
    inside = (positions + 0.02 * random.normal(size=positions.shape)) / 7.0 @ vectors
    outside = inside + random.integers(-1, 2, inside.shape) @ vectors
    first = periodic(measure_cages, inside, vectors, 0.4)
    second = periodic(measure_cages, outside, vectors, 0.4)
    assert (first.status == second.status).all()
    assert (first.status == 0).any()
    np.testing.assert_allclose(first.free_volume, second.free_volume, rtol=1e-9)
