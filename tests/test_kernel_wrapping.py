"""Regions that wrap around the periodic box: reach = inf."""

import math

import monte_carlo
import numpy as np
import pytest
from kernel_cases import CLOSED, OPEN, WRAPPED, bits, measure
from scipy.spatial import cKDTree

from trajcage.lattices import lattice_sites

BALL = {2: math.pi, 3: 4 * math.pi / 3}


def two_particles(rng, lengths, d):
    """Random pair of unit spheres without overlap in a periodic box."""
    while True:
        points = rng.random((2, d)) * lengths
        apart = points[1] - points[0]
        apart -= lengths * np.round(apart / lengths)
        if np.linalg.norm(apart) >= 1:
            return points


@pytest.mark.parametrize("d", [2, 3])
def test_two_particles_in_a_box(d):
    """v_f = V - v_ex and so Z = 1 + v_ex / 2(V - v_ex), for every configuration.

    Exact for box edges of at least two diameters (derived from Q = V (V - v_ex));
    in cubes Z = 1 + 2 phi / (1 - 4 phi), in squares 1 + phi / (1 - 2 phi).
    """
    rng = np.random.default_rng(1)
    for phi in (0.01, 0.05, 0.1, 0.13) if d == 3 else (0.05, 0.2, 0.3, 0.39):
        edge = (2 * BALL[d] / 2**d / phi) ** (1 / d)
        for shape in (np.ones(d), rng.uniform(1.0, 2.0, d)):
            lengths = edge * shape
            for _ in range(6):
                points = two_particles(rng, lengths, d)
                found = measure(points, lengths, 0.5, reach=math.inf)
                assert (found.status == WRAPPED).all()
                volume = np.prod(lengths) - BALL[d]
                np.testing.assert_allclose(found.free_volume, volume, rtol=1e-9)
                np.testing.assert_allclose(found.free_surface, d * BALL[d], rtol=1e-9)
                np.testing.assert_allclose(found.wall_sum, d * BALL[d], rtol=1e-9)
                assert (found.bounding_neighbors == 1).all()
                z = 1 + np.mean(found.wall_sum / found.free_volume) / (2 * d)
                exact = {2: 1 + phi / (1 - 2 * phi), 3: 1 + 2 * phi / (1 - 4 * phi)}[d]
                if shape[0] == 1:
                    assert z == pytest.approx(exact, rel=1e-9)


@pytest.mark.parametrize("d", [2, 3])
def test_one_particle_alone_has_the_whole_box(d):
    """Own images move along: nothing is in the way."""
    found = measure(np.full((1, d), 0.3), 1.7, 0.5, reach=math.inf)
    assert found.status[0] == WRAPPED
    assert found.free_volume[0] == pytest.approx(1.7**d, rel=1e-14)
    assert found.free_surface[0] == 0
    assert found.wall_sum[0] == 0
    assert found.bounding_neighbors[0] == 0
    assert measure(np.full((1, d), 0.3), 1.7, 0.5).status[0] == OPEN


@pytest.mark.parametrize(("d", "n", "phi"), [(3, 40, 0.1), (3, 60, 0.2), (2, 40, 0.2)])
def test_a_gas_against_sampling(d, n, phi):
    """In a gas the free space hangs together, but for pockets that walks miss."""
    run = monte_carlo.random_fluid(n, phi, 0.5, seed=2, dimensions=d, sweeps=50)
    positions, lengths = run.positions % run.lengths, run.lengths
    found = measure(positions, lengths, 0.5, reach=math.inf)
    rng = np.random.default_rng(9)
    deviations = []
    for i in np.nonzero(found.status == WRAPPED)[0][:8]:
        others = np.delete(positions, i, axis=0)
        tree = cKDTree(others, boxsize=lengths)
        points = rng.random((40000, d)) * lengths
        free = tree.query(points)[0] > 1
        # a pocket is a cage of another place: it does not hold particle i
        pockets = pocket_volume(positions, lengths, i, points[free][:15])
        share = free.mean()
        error = math.sqrt(share * (1 - share) / len(points)) * np.prod(lengths)
        volume = share * np.prod(lengths) - pockets
        deviations.append((found.free_volume[i] - volume) / error)
    assert len(deviations) > 5
    assert np.abs(deviations).max() < 4.5


def pocket_volume(positions, lengths, i, places):
    """Volume of the closed cages that particle i would have at other places."""
    pockets = {}
    for place in places:
        moved = positions.copy()
        moved[i] = place
        cage = measure(moved, lengths, 0.5, reach=math.inf, subset=np.array([i]))
        if cage.status[i] == CLOSED:
            pockets[round(float(cage.free_volume[i]), 9)] = float(cage.free_volume[i])
    return sum(pockets.values())


@pytest.mark.parametrize(("d", "n", "phi"), [(3, 30, 0.12), (2, 30, 0.25)])
def test_a_region_is_the_same_from_each_of_its_places(d, n, phi):
    run = monte_carlo.random_fluid(n, phi, 0.5, seed=3, dimensions=d, sweeps=50)
    positions, lengths = run.positions, run.lengths
    found = measure(positions, lengths, 0.5, reach=math.inf, windows=True)
    i = int(np.nonzero(found.status == WRAPPED)[0][0])
    tree = cKDTree(np.delete(positions % lengths, i, axis=0), boxsize=lengths)
    places = np.random.default_rng(6).random((200, d)) * lengths
    places = places[tree.query(places)[0] > 1.0][:12]
    volumes = []
    for place in places:
        moved = positions.copy()
        moved[i] = place
        again = measure(moved, lengths, 0.5, reach=math.inf, subset=np.array([i]))
        if again.status[i] == WRAPPED:
            volumes.append(again.free_volume[i])
    assert len(volumes) > 6
    np.testing.assert_allclose(volumes, found.free_volume[i], rtol=1e-8)
    # and it shrinks by the wall sum when radii grow
    step = 1e-6
    more = measure(positions, lengths, 0.5 * (1 + step), reach=math.inf,
                   overlap_tolerance=1e-5)  # fmt: skip
    less = measure(positions, lengths, 0.5 * (1 - step), reach=math.inf)
    slope = (more.free_volume - less.free_volume) / (2 * step)
    same = (found.status == more.status) & (found.status == less.status)
    assert same.sum() > 20
    # a shear of 1e-11 makes the region generic: rounding of the difference
    np.testing.assert_allclose(slope[same] / found.wall_sum[same], -1, atol=3e-5)
    # patches: each sphere once
    for k in np.nonzero(found.status == WRAPPED)[0]:
        part = slice(*found.wall.offsets[k : k + 2])
        assert len(set(found.wall.neighbors[part])) == len(found.wall.neighbors[part])
        assert found.wall.areas[part].sum() == pytest.approx(
            found.free_surface[k], rel=1e-8
        )
        assert found.wall.areas[part].max() <= d * BALL[d] * (1 + 1e-9)


def test_closed_cages_are_the_same_with_and_without_end():
    run = monte_carlo.random_fluid(120, 0.3, 0.5, seed=1, sweeps=50)
    one = measure(run.positions, run.lengths, 0.5)
    two = measure(run.positions, run.lengths, 0.5, reach=math.inf)
    assert set(two.status) <= {CLOSED, WRAPPED}
    both = (one.status == CLOSED) & (two.status == CLOSED)
    assert (both == (one.status == CLOSED)).all()
    np.testing.assert_allclose(one.free_volume[both], two.free_volume[both], rtol=1e-8)
    three = measure(run.positions, run.lengths, 0.5, reach=math.inf, threads=3)
    assert bits(three) == bits(two)


def test_lattices_past_their_escape():
    """Free space of a lattice with one site empty, from its packing fraction."""
    # spheres of diameter s < a / sqrt 3 of SC: no exclusion spheres of radius s
    # overlap unless s > a / 2, so below that V - (n - 1) (4 pi / 3) s^3 is free
    for name, d in (("sc", 3), ("square", 2)):
        positions, vectors = lattice_sites(name, 3, 1.0)
        n = len(positions)
        for s in (0.3, 0.45, 0.499):
            found = measure(positions, vectors, s / 2, reach=math.inf)
            assert (found.status == WRAPPED).all()
            np.testing.assert_allclose(
                found.free_volume, n - (n - 1) * BALL[d] * s**d, rtol=1e-8
            )
            np.testing.assert_allclose(
                found.free_surface, (n - 1) * d * BALL[d] * s ** (d - 1), rtol=1e-8
            )
            assert (found.bounding_neighbors == n - 1).all()
    # neighbors overlap in lenses of height 2 s - 1 each
    for s in (0.55, 0.6):
        positions, vectors = lattice_sites("sc", 3, 1.0)
        lens = math.pi * (4 * s + 1) * (2 * s - 1) ** 2 / 12
        found = measure(positions, vectors, s / 2, reach=math.inf)
        # 81 pairs, six of which the vacancy lacks
        volume = 27 - 26 * BALL[3] * s**3 + 75 * lens
        np.testing.assert_allclose(found.free_volume, volume, rtol=1e-8)


def test_ties_of_a_lattice_with_a_vacancy_end():
    """Squares whose four spheres all but meet in one point, their vertices anywhere."""
    sites = np.delete(list(np.ndindex(2, 2, 2)), 4, axis=0)  # not (1, 0, 0)
    noise = [[-180, -922, -361], [581, 130, 0], [525, 0, -455], [695, 0, 0]]
    noise += [[0, -903, 0], [0, 0, 921], [0, 0, 0]]
    positions = np.sqrt(2.0) * sites + 1e-15 * np.array(noise)
    found = measure(positions, math.sqrt(8.0), 0.5, reach=math.inf)
    assert (found.status == WRAPPED).all()
    # twelve bonds between neighbors are left, or fourteen beside the vacancy
    beside = np.abs(sites - [1, 0, 0]).sum(axis=1) == 1
    lens = math.pi * (4 + math.sqrt(2.0)) * (2 - math.sqrt(2.0)) ** 2 / 12
    volume = 8.0**1.5 - 6 * BALL[3] + lens * np.where(beside, 14, 12)
    np.testing.assert_allclose(found.free_volume, volume, rtol=1e-8)
