"""Jammed packings against the laws of isostatic ones."""

import math

import numpy as np
import pytest
from jammed_packings import jam, jammed_packing
from monte_carlo import MonteCarlo, binary, random_fluid

N = 50


@pytest.fixture(scope="module", params=[2, 3])
def jammed(request):
    radii = binary(N, 1.4) if request.param == 2 else 0.5
    return jammed_packing(N, seed=21, radii=radii, dimensions=request.param)


def contact_directions(jammed):
    positions, lengths, _ = jammed.packing
    first, second = jammed.contacts.T
    apart = positions[first] - positions[second]
    apart -= lengths * np.rint(apart / lengths)
    return apart / np.linalg.norm(apart, axis=1)[:, None]


def test_contacts_are_closed_and_nothing_overlaps(jammed):
    simulation = MonteCarlo(*jammed.packing, seed=0)
    assert 1.0 < simulation.smallest_ratio() < 1 + 2e-10
    assert 0.9e-10 < jammed.largest_gap < 1.1e-10
    # the contact count has a plateau of several decades (Torquato and Jiao 2010)
    assert jammed.next_gap > 1e3 * jammed.largest_gap


def test_the_backbone_is_isostatic(jammed):
    """Degrees of freedom: d N' - d translations + 1 for the box (Maxwell count)."""
    dimensions = jammed.packing.lengths.size
    n_backbone = np.count_nonzero(~jammed.rattlers)
    assert len(jammed.contacts) == dimensions * (n_backbone - 1) + 1
    contacts = np.bincount(jammed.contacts.ravel(), minlength=N)
    assert (contacts[jammed.rattlers] == 0).all()
    assert (contacts[~jammed.rattlers] >= dimensions + 1).all()


def test_contact_forces_balance_and_all_push(jammed):
    """Jammed: one set of forces, all repulsive, balances every particle."""
    n, dimensions = jammed.packing.positions.shape
    directions = contact_directions(jammed)
    balance = np.zeros((n, dimensions, len(directions)))
    for k, (i, j) in enumerate(jammed.contacts):
        balance[i, :, k] = directions[k]
        balance[j, :, k] = -directions[k]
    _, singular, right = np.linalg.svd(balance.reshape(n * dimensions, -1))
    assert singular[len(directions) - 1] < 1e-6 < singular[len(directions) - 2]
    forces = right[len(directions) - 1]
    assert (forces * np.sign(forces.sum()) > 0).all()


def test_packing_fraction_is_that_of_random_close_packing(jammed):
    """0.64 and 0.84 for many particles: O'Hern et al. 2003, PRE 68, 011306.

    From memory; a small packing differs by a few hundredths.
    """
    _, lengths, radii = jammed.packing
    if lengths.size == 3:
        fraction = 4 * math.pi / 3 * (radii**3).sum() / lengths.prod()
        assert 0.60 < fraction < 0.67
    else:
        fraction = math.pi * (radii**2).sum() / lengths.prod()
        assert 0.81 < fraction < 0.87
    assert jammed.rattlers.mean() < 0.2


def test_jamming_leaves_the_fluid_alone():
    fluid = random_fluid(
        30, 0.65, binary(30, 1.4), seed=22, dimensions=2, sweeps=20, swap_fraction=0.1
    )
    before, lengths = fluid.positions, fluid.lengths.copy()
    packing, *_ = jam(fluid, seed=1)
    assert np.array_equal(fluid.positions, before)
    assert np.array_equal(fluid.lengths, lengths)
    assert (packing.lengths < lengths).all()
    np.testing.assert_array_equal(packing.radii, fluid.radii)
