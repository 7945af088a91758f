"""Boxes with open edges: nothing is known beyond them, so nothing is claimed."""

import itertools

import monte_carlo
import numpy as np
import pytest
from kernel_cases import BORDER, CLOSED, OPEN, OVERLAP, measure


def fluid(d):
    n, phi = (250, 0.45) if d == 3 else (150, 0.65)
    run = monte_carlo.random_fluid(n, phi, 0.5, seed=6, dimensions=d, sweeps=40)
    return run.positions % run.lengths, run.lengths


@pytest.mark.parametrize("d", [2, 3])
def test_closed_cages_are_those_of_the_periodic_box(d):
    positions, lengths = fluid(d)
    whole = measure(positions, lengths, 0.5, reach=3.0)
    for flags in itertools.product([False, True], repeat=d):
        part = measure(positions, lengths, 0.5, np.array(flags), reach=3.0)
        both = (whole.status == CLOSED) & (part.status == CLOSED)
        np.testing.assert_allclose(
            whole.free_volume[both], part.free_volume[both], rtol=1e-10
        )
        np.testing.assert_array_equal(
            whole.bounding_neighbors[both], part.bounding_neighbors[both]
        )
        assert not ((part.status == CLOSED) & (whole.status != CLOSED)).any()
        lost = (whole.status == CLOSED) & (part.status != CLOSED)
        assert set(part.status[lost]) <= {BORDER}
        assert lost.any() != all(flags)
        # whoever is far from all open edges is not lost
        edges = np.minimum(positions, lengths - positions)
        edges[:, np.array(flags)] = np.inf
        inner = (edges.min(axis=1) > 2.6) & (whole.status == CLOSED)
        assert (part.status[inner] == CLOSED).mean() > 0.95


@pytest.mark.parametrize("d", [2, 3])
def test_border_has_no_numbers(d):
    positions, lengths = fluid(d)
    found = measure(positions, lengths, 0.5, False, reach=3.0, windows=True)
    border = found.status == BORDER
    assert border.any()
    for numbers in (
        found.free_volume, found.free_surface, found.wall_sum, found.weakest_window,
    ):  # fmt: skip
        assert np.isnan(numbers[border]).all()
    assert (found.bounding_neighbors[border] == -1).all()
    assert (found.weakest_window_neighbors[border] == -1).all()
    assert (np.diff(found.wall.offsets)[border] == 0).all()
    assert (np.diff(found.windows.offsets)[border] == 0).all()


@pytest.mark.parametrize("d", [2, 3])
def test_whatever_lies_outside_changes_no_closed_cage(d):
    """Spheres no larger than the largest, anywhere beyond the open edges."""
    positions, lengths = fluid(d)
    rng = np.random.default_rng(12)
    for flags in (np.zeros(d, bool), np.arange(d) > 0):
        known = measure(positions, lengths, 0.5, flags, reach=3.0)
        for _ in range(12):
            outside = rng.uniform(-1.5, 1.5, (800, d)) * lengths + lengths / 2
            beyond = (outside < 0) | (outside > lengths)
            outside = outside[(beyond & ~flags).any(axis=1)]
            # a larger box around all, the periodic edges as they are
            box = np.where(flags, lengths, 6 * lengths)
            origin = np.where(flags, 0.0, -2.5 * lengths)
            found = measure(
                np.vstack([positions, outside]), box, 0.5, flags, origin, reach=3.0,
                subset=np.arange(len(positions)),
            )  # fmt: skip
            closed = known.status == CLOSED
            assert closed.sum() > 5
            same = found.status[: len(positions)][closed]
            assert (same == CLOSED).all()
            np.testing.assert_allclose(
                found.free_volume[: len(positions)][closed],
                known.free_volume[closed],
                rtol=1e-9,
            )


@pytest.mark.parametrize("d", [2, 3])
def test_open_edges_hold_without_neighbors(d):
    """One particle, and two, in a box that is all border."""
    center = np.full((1, d), 2.0)
    assert measure(center, 4.0, 0.5, False).status[0] == BORDER
    pair = np.vstack([center, center + 1.1])
    assert (measure(pair, 4.0, 0.5, False).status == BORDER).all()
    assert (measure(pair, 400.0, 0.5, False, -200.0, reach=4.0).status == OPEN).all()
    deep = np.vstack([center, center + 0.2])
    assert (measure(deep, 4.0, 0.5, False).status == OVERLAP).all()


@pytest.mark.parametrize("d", [2, 3])
def test_open_and_border_do_not_depend_on_what_is_met_first(d):
    """Sparse gases, where voids meet open edges and leave the reach at once.

    A cage that is not closed is border exactly if the particle is closer to an open
    edge than the reach and the largest sum of radii; whatever lies outside then, an
    open cage stays open.
    """
    rng = np.random.default_rng(17)
    n, phi = (250, 0.2) if d == 3 else (150, 0.3)
    seen = set()
    for trial in range(6):
        run = monte_carlo.random_fluid(n, phi, 0.5, seed=trial, dimensions=d, sweeps=10)
        positions = run.positions % run.lengths
        flags = np.array([[False] * d, [True] + [False] * (d - 1)][trial % 2])
        for reach in (1.2, 2.0, 3.0):
            found = measure(positions, run.lengths, 0.5, flags, reach=reach)
            edges = np.minimum(positions, run.lengths - positions)
            edges[:, flags] = np.inf
            near = edges.min(axis=1) < reach + 1.0
            loose = found.status != CLOSED
            np.testing.assert_array_equal(found.status[loose & near], BORDER)
            np.testing.assert_array_equal(found.status[loose & ~near], OPEN)
            seen |= set(found.status)
            order = rng.permutation(n)
            again = measure(positions[order], run.lengths, 0.5, flags, reach=reach)
            np.testing.assert_array_equal(again.status, found.status[order])
            # the periodic box is one of the surroundings
            whole = measure(positions, run.lengths, 0.5, reach=reach)
            same = (found.status == OPEN) | (found.status == CLOSED)
            np.testing.assert_array_equal(whole.status[same], found.status[same])
    assert seen == {CLOSED, OPEN, BORDER}
