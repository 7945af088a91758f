"""Laws of cages on states that hypothesis makes up, and repaired faults."""

import monte_carlo
import numpy as np
import pytest
from cage_reference import cloud_around, reference_cage
from hypothesis import given, settings
from hypothesis import strategies as st
from kernel_cases import (
    CLOSED,
    INVALID,
    OPEN,
    OVERLAP,
    WRAPPED,
    contact_factor,
    measure,
    spread_points,
)

from trajcage.lattices import lattice_sites


@st.composite
def states(draw):
    """Random points in a triclinic box, radii up to 5 : 1, any density that fits."""
    d = draw(st.sampled_from([2, 3]))
    n = draw(st.integers(5, 30))
    rng = np.random.default_rng(draw(st.integers(0, 2**32)))
    vectors = np.diag(rng.uniform(1.0, 2.0, d))
    vectors[np.tril_indices(d, -1)] = rng.uniform(-0.6, 0.6, d * (d - 1) // 2)
    points = spread_points(rng, n, vectors, trials=draw(st.sampled_from([1, 10, 100])))
    ratio = draw(st.sampled_from([1.0, 1.4, 5.0]))
    radii = rng.uniform(1 / ratio, 1.0, n)
    radii *= contact_factor(points, vectors, radii)
    # from half the contact distance up to 1e-9 before contact
    radii *= 1 - draw(st.sampled_from([1e-9, 1e-3, 0.05, 0.2, 0.5]))
    # beyond a density of 0.05 regions end soon enough
    volume = abs(np.linalg.det(vectors)) * 0.05
    ball = {2: np.pi, 3: 4 * np.pi / 3}[d] * np.sum(radii**d)
    if ball < volume:
        points = points[: n // 2 + 2]
        radii = radii[: n // 2 + 2]
    return points, vectors, radii, rng


@settings(deadline=None, max_examples=60, derandomize=True)
@given(states())
def test_laws(state):
    points, vectors, radii, rng = state
    n, d = points.shape
    reach = 5.0 * radii.max()
    found = measure(points, vectors, radii, reach=reach, windows=True)
    assert set(found.status) <= {CLOSED, OPEN}
    closed = found.status == CLOSED
    for numbers in (found.free_volume, found.free_surface, found.wall_sum):
        assert (numbers[closed] > 0).all()
        assert np.isnan(numbers[~closed]).all()
    order = rng.permutation(n)
    shift = rng.uniform(-9, 9, d)
    again = measure(points[order] + shift, vectors, radii[order], reach=reach)
    np.testing.assert_array_equal(found.status[order], again.status)
    thin = found.free_volume / found.free_surface / radii.max()
    rounding = 1e-10 + 1e-13 / np.nan_to_num(thin, nan=1.0)
    error = np.abs(found.free_volume[order] / again.free_volume - 1)
    assert (error < rounding[order])[closed[order]].all()
    for i in np.nonzero(closed)[0]:
        rows = slice(*found.wall.offsets[i : i + 2])
        areas = found.wall.areas[rows]
        assert areas.min() > 0
        assert areas.sum() == pytest.approx(found.free_surface[i], rel=1e-8)
        whole = {2: 2 * np.pi, 3: 4 * np.pi}[d]
        reaches = radii[i] + radii[found.wall.neighbors[rows]]
        assert (areas <= whole * reaches ** (d - 1) * (1 + 1e-9)).all()
        # the farthest point of a cage is a corner: it lies within the reach
        corners = found.windows.corners[slice(*found.windows.offsets[i : i + 2])]
        apart = np.linalg.norm(corners, axis=1)
        assert (
            found.windows.ratios[slice(*found.windows.offsets[i : i + 2])] <= 1
        ).all()
        # in a box around the corners
        size = np.prod(corners.max(axis=0) - corners.min(axis=0))
        assert found.free_volume[i] <= size * (1 + 1e-9)
        assert apart.max() <= reach * (1 + 1e-9)


@settings(deadline=None, max_examples=40, derandomize=True)
@given(states())
def test_triangulation(state):
    """Status, walls and corners of a few cages against the slow reference."""
    points, vectors, radii, _ = state
    n, d = points.shape
    size = 8.0 * radii.max()
    found = measure(points, vectors, radii, reach=2.5 * radii.max(), windows=True)
    everywhere = np.ones(d, bool)
    for i in range(min(n, 3)):
        slow = reference_cage(cloud_around(points, vectors, everywhere, radii, i, size))
        if not slow.closed:
            continue
        if found.status[i] != CLOSED:
            # the reference has no reach: the cage must stick out of it
            extent = np.linalg.norm(slow.corners, axis=1).max()
            assert extent > 2.5 * radii.max() * (1 - 1e-9)
            continue
        rows = slice(*found.windows.offsets[i : i + 2])
        assert len(found.windows.corners[rows]) == len(slow.corners)
        apart = found.windows.corners[rows][:, None] - slow.corners
        closest = np.linalg.norm(apart, axis=-1).min(axis=1)
        # a corner of spheres that barely meet moves along with rounding
        assert np.median(closest) < 1e-9 * size
        assert closest.max() < 1e-4 * size
        walls = found.wall.vectors[slice(*found.wall.offsets[i : i + 2])]
        assert len(slow.walls) <= len(walls) <= len(slow.walls) + len(slow.inner)


@settings(deadline=None, max_examples=20, derandomize=True)
@given(states())
def test_without_end(state):
    """reach = inf resolves every particle, and closed cages stay what they are."""
    points, vectors, radii, _ = state
    points, radii = points[:6], radii[:6]
    radii = radii * 0.999  # room for the shear
    found = measure(points, vectors, radii, reach=np.inf)
    assert set(found.status) <= {CLOSED, WRAPPED}
    assert (found.free_volume > 0).all()
    wrapped = found.status == WRAPPED
    assert (found.free_volume[wrapped] < abs(np.linalg.det(vectors))).all()
    near = measure(points, vectors, radii, reach=4 * radii.max())
    both = near.status == CLOSED
    assert (found.status[both] == CLOSED).all()
    thin = near.free_volume / near.free_surface / radii.max()
    rounding = 1e-8 + 1e-10 / thin[both]
    error = np.abs(found.free_volume[both] / near.free_volume[both] - 1)
    assert (error < rounding).all()


@settings(deadline=None, max_examples=30, derandomize=True)
@given(states(), st.floats(1.05, 1.6))
def test_overlaps(state, factor):
    """Exactly the particles of overlapping pairs are marked."""
    points, vectors, radii, _ = state
    radii = radii * factor
    n, d = points.shape
    found = measure(points, vectors, radii, reach=3 * radii.max())
    for i in range(n):
        cloud = cloud_around(
            points, vectors, np.ones(d, bool), radii, i, 2.01 * radii.max()
        )
        gaps = np.linalg.norm(cloud.centers, axis=1) - cloud.reaches
        assert (found.status[i] == OVERLAP) == (gaps.min(initial=1.0) < 0)


def test_a_dilute_fluid_has_no_invalid_cage():
    """The way up to the first vertex meets spheres collected on the way."""
    for seed, phi in ((1, 0.2), (2, 0.15), (3, 0.25)):
        run = monte_carlo.random_fluid(150, phi, 0.5, seed=seed, sweeps=100)
        found = measure(run.positions, run.lengths, 0.5, reach=4.0)
        assert set(found.status) <= {CLOSED, OPEN}
    for seed in range(4):
        run = monte_carlo.random_fluid(
            100, 0.25, 0.5, seed=seed, dimensions=2, sweeps=100
        )
        found = measure(run.positions, run.lengths, 0.5, reach=4.0)
        assert set(found.status) <= {CLOSED, OPEN}


@pytest.mark.parametrize("d", [2, 3])
def test_a_cage_is_open_when_a_corner_lies_beyond_the_reach(d):
    """The farthest point of a cage is a corner, whichever way it was found."""
    rng = np.random.default_rng(14)
    decided = 0
    fill = (0.8, 0.95) if d == 2 else (0.96, 0.999)
    for _ in range(25):
        vectors = np.eye(d)
        points = spread_points(rng, 14, vectors, trials=30)
        radii = np.full(14, 0.5)
        radii *= contact_factor(points, vectors, radii) * rng.uniform(*fill)
        far = measure(points, vectors, radii, reach=12 * radii[0], windows=True)
        for i in np.nonzero(far.status == CLOSED)[0]:
            rows = slice(*far.windows.offsets[i : i + 2])
            extent = np.linalg.norm(far.windows.corners[rows], axis=1).max()
            for factor, expected in ((1 + 1e-6, CLOSED), (1 - 1e-6, OPEN)):
                found = measure(
                    points, vectors, radii, reach=factor * extent,
                    subset=np.array([i]),
                )  # fmt: skip
                assert found.status[i] == expected
                decided += 1
    assert decided > 60


@pytest.mark.parametrize("name", ["fcc", "sc"])
def test_square_windows_with_noise(name):
    """Four spheres of a square window: no circle of theirs is part of the wall."""
    edge = 1.0577 if name == "sc" else 1.3255
    positions, vectors = lattice_sites(name, 4 if name == "sc" else (3, 2, 2), edge)
    rng = np.random.default_rng(2)
    exact = measure(positions, vectors, 0.5)
    for noise in (1e-13, 1e-12, 1e-11):
        for _ in range(12):
            moved = positions + noise * rng.uniform(-1, 1, positions.shape)
            moved = moved[rng.permutation(len(moved))]
            turned = moved[:, ::-1] * [-1, 1, 1]
            found = measure(turned, vectors[::-1, ::-1], 0.5)
            assert (found.status != INVALID).all()
            np.testing.assert_allclose(
                found.free_volume, exact.free_volume[0], rtol=1e-7
            )
            np.testing.assert_allclose(
                found.free_surface, exact.free_surface[0], rtol=1e-7
            )


@pytest.mark.parametrize("d", [2, 3])
def test_particles_outside_a_tilted_box(d):
    """Unwrapped positions: any image of a particle stands for all."""
    rng = np.random.default_rng(15)
    for _ in range(8):
        vectors = np.diag(rng.uniform(1.0, 2.0, d))
        vectors[np.tril_indices(d, -1)] = rng.uniform(-0.6, 0.6, d * (d - 1) // 2)
        points = spread_points(rng, 12, vectors, trials=30)
        radii = rng.uniform(0.7, 1.0, 12)
        radii *= contact_factor(points, vectors, radii) * 0.97
        one = measure(points, vectors, radii, reach=6 * radii.max())
        # out along one edge only, along some, along all
        for turns in (np.eye(d)[1], np.eye(d)[0], rng.integers(-3, 4, (12, d))):
            two = measure(
                points + turns @ vectors, vectors, radii, reach=6 * radii.max()
            )
            np.testing.assert_array_equal(one.status, two.status)
            np.testing.assert_allclose(one.free_volume, two.free_volume, rtol=1e-9)
