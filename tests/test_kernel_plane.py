"""Cages of disks against unions of polygons."""

import itertools

import numpy as np
import pytest
from kernel_cases import (
    CLOSED,
    OPEN,
    WRAPPED,
    contact_factor,
    measure,
    spread_points,
)
from shapely import Point, box
from shapely.ops import unary_union

SEGMENTS = 32  # of a quarter circle


def free_region(points, vectors, radii, i, half, segments=SEGMENTS):
    """Free part of a square window about particle i that contains it, or None."""
    span = int(np.ceil(2 * half / np.linalg.svd(vectors)[1].min())) + 2
    turns = np.array(list(itertools.product(range(-span, span + 1), repeat=2)))
    shifts = turns @ vectors
    disks = []
    for j in range(len(points)):
        if j == i:
            continue
        reach = radii[i] + radii[j]
        for x, y in points[j] - points[i] + shifts:
            if max(abs(x), abs(y)) < half + reach:
                disks.append(Point(x, y).buffer(reach, quad_segs=segments))
    window = box(-half, -half, half, half)
    region = window.difference(unary_union(disks))
    for part in getattr(region, "geoms", [region]):
        if part.contains(Point(0, 0)):
            closed = not part.intersects(window.exterior)
            return part, closed
    return None, False


def random_state(rng):
    """A few disks in a tilted periodic box, one radius or two."""
    n = int(rng.integers(6, 22))
    vectors = np.array([[1.0, 0.0], [rng.uniform(-0.5, 0.5), rng.uniform(0.7, 1.4)]])
    points = spread_points(rng, n, vectors, trials=int(rng.choice([5, 30])))
    ratio = rng.choice([1.0, 0.7, 0.4])
    radii = np.where(rng.random(n) < 0.5, 1.0, ratio)
    radii *= contact_factor(points, vectors, radii) * rng.uniform(0.75, 0.999)
    return points, vectors, radii


@pytest.mark.parametrize("seed", range(4))
def test_area_and_length_of_random_states(seed):
    """Two hundred states in all; the polygons are inside the disks, by (pi/4m)^2/6."""
    rng = np.random.default_rng([10, seed])
    checked = 0
    for _ in range(50):
        points, vectors, radii = random_state(rng)
        found = measure(points, vectors, radii, reach=2.0)
        for i in rng.permutation(len(radii))[:2]:
            if found.status[i] != CLOSED:
                continue
            part, closed = free_region(points, vectors, radii, i, 2.0)
            assert closed
            # each polygon lacks this share of its disk's area, of its wall's length
            flat = (np.pi / 2 / SEGMENTS) ** 2
            sagitta = flat / 8 * 2 * radii.max()
            excess = part.area - found.free_volume[i]
            assert -1e-12 <= excess < 1.2 * sagitta * part.length + 1e-12
            # corners move along flat crossings, so lengths agree less well
            assert part.length == pytest.approx(found.free_surface[i], rel=0.02)
            checked += 1
    assert checked > 20


def test_sizes_converge_with_the_polygons():
    """The errors fall fourfold when the polygons have twice the sides."""
    rng = np.random.default_rng(3)
    excess = []
    points, vectors, radii = random_state(rng)
    while measure(points, vectors, radii, reach=2.0).status[0] != CLOSED:
        points, vectors, radii = random_state(rng)
    found = measure(points, vectors, radii, reach=2.0)
    for segments in (100, 200, 400):
        part, _ = free_region(points, vectors, radii, 0, 2.0, segments)
        excess.append(
            [part.area - found.free_volume[0], part.length - found.free_surface[0]]
        )
    excess = np.abs(np.array(excess))
    assert (excess[:-1] > 3 * excess[1:]).all()
    assert excess[-1].max() < 1e-4 * found.free_volume[0]


def test_open_cages_reach_further_than_the_reach():
    rng = np.random.default_rng(4)
    seen = {CLOSED: 0, OPEN: 0}
    for _ in range(25):
        points, vectors, radii = random_state(rng)
        found = measure(points, vectors, radii, reach=1.0)
        for i in range(4):
            part, _ = free_region(points, vectors, radii, i, 1.5, 12)
            extent = np.linalg.norm(np.array(part.exterior.coords), axis=1).max()
            if abs(extent - 1.0) > 0.02:
                assert found.status[i] == (OPEN if extent > 1.0 else CLOSED)
                seen[int(found.status[i])] += 1
    assert min(seen.values()) > 20


def test_a_region_that_wraps_around_the_box():
    """Area of the wrapped component from a window of one period."""
    rng = np.random.default_rng(5)
    checked = 0
    while checked < 6:
        n = int(rng.integers(2, 6))
        vectors = np.diag(rng.uniform(1.0, 1.5, 2))
        points = spread_points(rng, n, vectors)
        radii = np.full(n, 0.5) * contact_factor(points, vectors, np.full(n, 0.5))
        radii *= rng.uniform(0.4, 0.8)
        found = measure(points, vectors, radii, reach=np.inf)
        shifts = np.array(list(itertools.product((-1, 0, 1), repeat=2))) @ vectors
        whole = box(0, 0, *np.diag(vectors))
        for i in np.nonzero(found.status == WRAPPED)[0]:
            disks = [
                Point(*(points[j] + shift)).buffer(radii[i] + radii[j], quad_segs=100)
                for j in range(n)
                if j != i
                for shift in shifts
            ]
            free = whole.difference(unary_union(disks))
            # all free space, unless some of it is cut off from the rest
            apart = 1e-4 * whole.area  # (pi / 400)^2 / 6 of the disks
            if getattr(free, "geoms", None) is None:
                assert found.free_volume[i] == pytest.approx(free.area, abs=apart)
                checked += 1
            assert found.free_volume[i] < free.area + apart
