"""Cages of random states against the slow reference, and laws that hold for any state."""

import functools

import monte_carlo
import numpy as np
import pytest
from cage_reference import cloud_around, reference_cage
from kernel_cases import CLOSED, OVERLAP, bits, contact_factor, measure, spread_points
from scipy.optimize import brentq
from scipy.spatial.transform import Rotation

#: name: particles, packing fraction, radii, dimensions, cages to sample
STATES = {
    "spheres": (160, 0.40, 0.5, 3, 14),
    "loose spheres": (160, 0.30, 0.5, 3, 10),
    "polydisperse spheres": (160, 0.48, ("polydisperse", 0.15), 3, 14),
    "spheres 1:3": (160, 0.42, ("binary", 3.0), 3, 10),
    "disks": (90, 0.55, 0.5, 2, 14),
    "loose disks": (90, 0.40, 0.5, 2, 8),
    "disks 1:1.4": (90, 0.60, ("binary", 1.4), 2, 14),
}


@functools.cache
def state(name):
    """Positions, box rows and radii of a short run."""
    n, phi, radii, d, _ = STATES[name]
    if isinstance(radii, tuple):
        radii = getattr(monte_carlo, radii[0])(n, radii[1])
    run = monte_carlo.random_fluid(n, phi, radii, seed=4, dimensions=d, sweeps=60)
    return run.positions, np.diag(run.lengths), run.radii


@functools.cache
def cages(name):
    return measure(*state(name), windows=True, reach=6.0)


def reference(name, i, radius=4.0):
    positions, vectors, radii = state(name)
    everywhere = np.ones(len(vectors), bool)
    for size in radius * 1.4 ** np.arange(4):
        found = reference_cage(
            cloud_around(positions, vectors, everywhere, radii, i, size)
        )
        if found.closed:
            return found
    raise AssertionError(f"the reference finds no end of the cage of particle {i}")


def rows(table, i):
    return slice(*table.offsets[i : i + 2])


def matched(first, second):
    """Pair up two lists of points; the order that sorts the second like the first."""
    apart = np.linalg.norm(first[:, None] - second[None], axis=-1)
    order = apart.argmin(axis=1)
    assert len(first) == len(second) == len(set(order))
    assert apart.min(axis=1).max() < 1e-7
    return order


@pytest.mark.parametrize("name", STATES)
def test_walls_and_corners_against_the_triangulation(name):
    found = cages(name)
    closed = np.nonzero(found.status == CLOSED)[0]
    assert len(closed) > 10
    for i in closed[:40]:
        slow = reference(name, i)
        patches = rows(found.wall, i)
        seen = np.concatenate([slow.walls, slow.inner])
        order = [
            np.linalg.norm(slow.cloud.centers[seen] - v, axis=1).argmin()
            for v in found.wall.vectors[patches]
        ]
        assert set(slow.walls) <= set(seen[order])
        np.testing.assert_allclose(
            slow.cloud.centers[seen[order]], found.wall.vectors[patches], atol=1e-9
        )
        np.testing.assert_array_equal(
            slow.cloud.owners[seen[order]], found.wall.neighbors[patches]
        )
        if len(slow.inner) == 0:
            assert len(slow.walls) == found.bounding_neighbors[i]
        # corners and the particles of the windows before them
        shut = rows(found.windows, i)
        order = matched(found.windows.corners[shut], slow.corners)
        np.testing.assert_array_equal(
            np.sort(slow.cloud.owners[slow.windows[order]], axis=1),
            np.sort(found.windows.neighbors[shut], axis=1),
        )


@pytest.mark.parametrize("name", STATES)
def test_sizes_against_sampling(name):
    found = cages(name)
    rng = np.random.default_rng(8)
    closed = np.nonzero(found.status == CLOSED)[0]
    deviations = []
    for i in closed[: STATES[name][-1]]:
        slow = reference(name, i)
        volume, error = slow.sample_volume(rng, 8000)
        deviations.append((found.free_volume[i] - volume) / error)
        areas = slow.sample_patches(rng, 800)
        for area, vector in zip(
            found.wall.areas[rows(found.wall, i)],
            found.wall.vectors[rows(found.wall, i)],
            strict=True,
        ):
            k = np.linalg.norm(slow.cloud.centers - vector, axis=1).argmin()
            sampled, error = areas.pop(int(k))
            deviations.append((area - sampled) / error)
        # what is left has no piece of the wall
        assert all(hits == 0 for hits, _ in areas.values())
    deviations = np.array(deviations)
    assert np.abs(deviations).max() < 5.0
    # and they are spread as errors are: mean square 1
    assert np.mean(deviations**2) == pytest.approx(1.0, abs=0.4)


@pytest.mark.parametrize("name", STATES)
def test_volume_falls_as_the_wall_sum_when_radii_grow(name):
    positions, vectors, radii = state(name)
    found = cages(name)
    step = 1e-6
    more = measure(positions, vectors, radii * (1 + step), reach=6.0)
    less = measure(positions, vectors, radii * (1 - step), reach=6.0)
    same = (found.status == CLOSED) & (more.status == CLOSED) & (less.status == CLOSED)
    same &= more.bounding_neighbors == less.bounding_neighbors
    assert same.sum() > 0.8 * (found.status == CLOSED).sum()
    slope = (more.free_volume - less.free_volume)[same] / (2 * step)
    # the second difference bounds the error of the first
    bend = np.abs(more.free_volume + less.free_volume - 2 * found.free_volume)[same]
    np.testing.assert_array_less(
        np.abs(slope + found.wall_sum[same]),
        1e-6 * found.wall_sum[same] + 10 * bend / step,
    )
    assert np.median(np.abs(slope / found.wall_sum[same] + 1)) < 1e-7


@pytest.mark.parametrize("name", STATES)
def test_parts_sum_to_the_whole(name):
    found = cages(name)
    _, _, radii = state(name)
    d = found.wall.vectors.shape[1]
    for i in np.nonzero(found.status == CLOSED)[0]:
        part = rows(found.wall, i)
        areas, reach = (
            found.wall.areas[part],
            radii[i] + radii[found.wall.neighbors[part]],
        )
        assert areas.sum() == pytest.approx(found.free_surface[i], rel=1e-9)
        assert (reach * areas).sum() == pytest.approx(found.wall_sum[i], rel=1e-9)
        assert len(areas) == found.bounding_neighbors[i]
        # isoperimetric inequality
        ball = {2: np.pi, 3: 4 * np.pi / 3}[d]
        least = d * ball ** (1 / d) * found.free_volume[i] ** ((d - 1) / d)
        assert found.free_surface[i] > least
        # corners lie on the spheres of their windows
        ratios = found.windows.ratios[rows(found.windows, i)]
        assert ratios.max() == found.weakest_window[i]
        assert (ratios < 1).all()


def same_cages(one, two, order=None, tolerance=1e-10):
    """Assert equal answers, with particle order[k] of the first as k of the second."""
    order = slice(None) if order is None else order
    np.testing.assert_array_equal(one.status[order], two.status)
    np.testing.assert_array_equal(one.bounding_neighbors[order], two.bounding_neighbors)
    for name in ("free_volume", "free_surface", "wall_sum", "weakest_window"):
        np.testing.assert_allclose(
            getattr(one, name)[order], getattr(two, name), rtol=tolerance
        )


@pytest.mark.parametrize("name", STATES)
def test_invariance(name):
    positions, vectors, radii = state(name)
    n, d = positions.shape
    one = measure(positions, vectors, radii, reach=6.0)
    rng = np.random.default_rng(5)
    order = rng.permutation(n)
    same_cages(one, measure(positions[order], vectors, radii[order], reach=6.0), order)
    shift = rng.uniform(-50, 50, d)
    same_cages(one, measure(positions + shift, vectors, radii, reach=6.0))
    same_cages(one, measure(positions + shift, vectors, radii, origin=shift, reach=6.0))
    turn = Rotation.random(random_state=3).as_matrix()
    if d == 2:
        turn = np.array([[np.cos(1), np.sin(1)], [-np.sin(1), np.cos(1)]])
    same_cages(one, measure(positions @ turn, vectors @ turn, radii, reach=6.0))
    # another cell of the same lattice of images
    other = vectors.copy()
    other[1] += 2 * vectors[0]
    same_cages(one, measure(positions, other, radii, reach=6.0))


@pytest.mark.parametrize("name", ["polydisperse spheres", "disks 1:1.4"])
def test_scaling_by_powers_of_two_changes_no_digit(name):
    positions, vectors, radii = state(name)
    d = len(vectors)
    one = cages(name)
    for exponent in (-20, -3, 9):
        factor = 2.0**exponent
        two = measure(
            positions * factor, vectors * factor, radii * factor, reach=6.0 * factor
        )
        np.testing.assert_array_equal(one.free_volume * factor**d, two.free_volume)
        np.testing.assert_array_equal(
            one.free_surface * factor ** (d - 1), two.free_surface
        )
        np.testing.assert_array_equal(one.wall_sum * factor**d, two.wall_sum)
        np.testing.assert_array_equal(one.weakest_window, two.weakest_window)
        np.testing.assert_array_equal(one.status, two.status)


@pytest.mark.parametrize("name", ["spheres", "disks"])
@pytest.mark.parametrize("unit", [1e-6, 2.54e-9, 1e8])
def test_any_unit_of_length(name, unit):
    positions, vectors, radii = state(name)
    d = len(vectors)
    one = cages(name)
    two = measure(positions * unit, vectors * unit, radii * unit, reach=6.0 * unit)
    np.testing.assert_array_equal(one.status, two.status)
    np.testing.assert_allclose(one.free_volume, two.free_volume / unit**d, rtol=1e-10)
    np.testing.assert_allclose(
        one.free_surface, two.free_surface / unit ** (d - 1), rtol=1e-10
    )


@pytest.mark.parametrize("name", ["spheres", "polydisperse spheres", "disks 1:1.4"])
def test_only_bounding_neighbors_matter(name):
    positions, vectors, radii = state(name)
    found = cages(name)
    rng = np.random.default_rng(6)
    closed = np.nonzero(found.status == CLOSED)[0]
    for i in closed[:10]:
        keep = np.zeros(len(radii), bool)
        keep[found.wall.neighbors[rows(found.wall, i)]] = True
        keep[i] = True
        keep |= rng.random(len(radii)) < rng.choice([0.0, 0.5])
        two = measure(positions[keep], vectors, radii[keep], reach=6.0)
        at = np.nonzero(np.nonzero(keep)[0] == i)[0][0]
        assert two.status[at] == CLOSED
        assert two.free_volume[at] == pytest.approx(found.free_volume[i], rel=1e-10)
        assert two.bounding_neighbors[at] == found.bounding_neighbors[i]


@pytest.mark.parametrize("name", ["spheres", "spheres 1:3", "disks 1:1.4"])
def test_windows_just_shut_when_their_spheres_are_scaled(name):
    """Find the scale by bisection on the free part of the window's plane."""
    positions, vectors, radii = state(name)
    found = cages(name)
    inverse = np.linalg.inv(vectors)
    for i in np.nonzero(found.status == CLOSED)[0][:25]:
        shut = rows(found.windows, i)
        for corner, who, ratio in zip(
            found.windows.corners[shut],
            found.windows.neighbors[shut],
            found.windows.ratios[shut],
            strict=True,
        ):
            # the images that meet in the corner
            apart = positions[who] - positions[i]
            reach = radii[who] + radii[i]
            for turn in (np.round((corner - apart) @ inverse),):
                apart = apart + turn @ vectors
            assert np.allclose(np.linalg.norm(corner - apart, axis=1), reach)
            if np.ptp(reach) < 1e-12:
                assert ratio == pytest.approx(circumradius(apart) / reach[0], rel=1e-9)

            def power(scale, apart=apart, reach=reach):
                """Least power on the flat of centers where all are equal."""
                edges = apart[1:] - apart[0]
                weights = (scale * reach) ** 2
                right = (np.sum(edges**2, axis=1) - weights[1:] + weights[0]) / 2
                foot = np.linalg.lstsq(edges, right, rcond=None)[0]
                return foot @ foot - weights[0]

            assert power(ratio * (1 - 1e-9)) > 0 > power(ratio * (1 + 1e-9))
            assert brentq(power, 0.9 * ratio, 1.1 * ratio, xtol=1e-14) == pytest.approx(
                ratio, rel=1e-9
            )


def circumradius(points):
    if len(points) == 2:
        return np.linalg.norm(points[1] - points[0]) / 2
    a, b, c = (np.linalg.norm(points[k] - points[k - 1]) for k in range(3))
    area = np.sqrt((a + b + c) * (b + c - a) * (c + a - b) * (a + b - c)) / 4
    return a * b * c / (4 * area)


@pytest.mark.parametrize("name", ["spheres", "disks 1:1.4"])
def test_threads_change_no_bit(name):
    positions, vectors, radii = state(name)
    one = measure(positions, vectors, radii, windows=True, threads=1)
    for threads in (2, 3):
        many = measure(positions, vectors, radii, windows=True, threads=threads)
        assert bits(many) == bits(one)


def test_subset_measures_only_these():
    positions, vectors, radii = state("spheres")
    all_ = cages("spheres")
    subset = np.array([3, 17, 50])
    some = measure(positions, vectors, radii, reach=6.0, subset=subset)
    np.testing.assert_allclose(
        some.free_volume[subset], all_.free_volume[subset], rtol=1e-10
    )
    rest = np.setdiff1d(np.arange(len(radii)), subset)
    assert np.isnan(some.free_volume[rest]).all()
    assert (some.bounding_neighbors[rest] == -1).all()


@pytest.mark.parametrize("d", [2, 3])
def test_overlaps_against_all_pairs(d):
    rng = np.random.default_rng(11)
    for _ in range(20):
        vectors = np.diag(rng.uniform(1, 2, d))
        vectors[1, 0] = rng.uniform(-0.4, 0.4)
        points = spread_points(rng, 14, vectors, trials=3)
        radii = rng.uniform(0.3, 1.0, 14)
        radii *= contact_factor(points, vectors, radii) * 1.4
        found = measure(points, vectors, radii, reach=6 * radii.max())
        for i in range(14):
            cloud = cloud_around(
                points, vectors, np.ones(d, bool), radii, i, 2.01 * radii.max()
            )
            gaps = np.linalg.norm(cloud.centers, axis=1) - cloud.reaches
            assert (found.status[i] == OVERLAP) == (gaps.min(initial=1.0) < 0)
            # an overlap within the tolerance counts as a contact
            if gaps.min(initial=1.0) < 0:
                deepest = -gaps.min()
                for factor, expected in ((1.001, False), (0.999, True)):
                    again = measure(
                        points, vectors, radii, reach=6 * radii.max(),
                        overlap_tolerance=deepest * factor, subset=np.array([i]),
                    )  # fmt: skip
                    assert (again.status[i] == OVERLAP) == expected
