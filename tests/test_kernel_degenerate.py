"""Input that is degenerate: cospherical shells, rounded lattices, islands, contacts."""

import itertools
import math

import numpy as np
import pytest
from cage_reference import cloud_around, reference_cage
from kernel_cases import CLOSED, INVALID, OPEN, block, measure
from scipy.optimize import brentq, linprog
from scipy.spatial.transform import Rotation

from trajcage.lattices import LATTICES, lattice_sites, thresholds

GOLDEN = (1 + math.sqrt(5)) / 2


def cyclic(points):
    return np.vstack([np.roll(points, k, axis=1) for k in range(3)])


SIGNS = np.array(list(itertools.product([-1, 1], repeat=2)), float)
CUBE = np.array(list(itertools.product([-1, 1], repeat=3)), float)
#: Corners of solids, cospherical about the center.
SHELLS = {
    "octahedron": cyclic(np.array([[0, 0, 1.0], [0, 0, -1.0]])),
    "cube": CUBE,
    "cuboctahedron": cyclic(np.column_stack([np.zeros(4), SIGNS])),
    "icosahedron": cyclic(np.column_stack([np.zeros(4), SIGNS * [1, GOLDEN]])),
    "dodecahedron": np.vstack(
        [CUBE, cyclic(np.column_stack([np.zeros(4), SIGNS * [1 / GOLDEN, GOLDEN]]))]
    ),
    "ring": np.array([[math.cos(t), math.sin(t)] for t in np.arange(8) * math.pi / 4]),
}


def shell(name, size=1.0):
    """Directions from a center to the corners of a solid, center last."""
    corners = SHELLS[name] / np.linalg.norm(SHELLS[name], axis=1)[:, None]
    return np.vstack([corners * size, np.zeros((1, corners.shape[1]))])


def in_large_box(points, radii, **options):
    """Measure the last particle far from all borders."""
    n = len(points)
    found = measure(
        points, 40.0, radii, False, -20.0, subset=np.array([n - 1]), **options
    )
    return {
        "status": found.status[-1],
        "volume": found.free_volume[-1],
        "surface": found.free_surface[-1],
        "wall_sum": found.wall_sum[-1],
        "bounding": found.bounding_neighbors[-1],
        "wall": found.wall,
    }


def opens_at(name):
    """Exclusion radius at which the widest window of the shell opens (bisection)."""
    points = shell(name)

    def shut(reach):
        found = in_large_box(points, reach / 2, reach=4.0)
        return 1.0 if found["status"] == CLOSED else -1.0

    return brentq(shut, 0.2, 0.9999, xtol=1e-11)


@pytest.mark.parametrize(
    ("name", "circumradius"),
    [
        # circumradius of the faces over that of the solid (elementary geometry)
        ("octahedron", math.sqrt(2 / 3)),
        ("cube", math.sqrt(2 / 3)),
        ("cuboctahedron", 1 / math.sqrt(2)),
        ("icosahedron", math.sqrt(1 - (5 + 2 * math.sqrt(5)) / 15)),
        ("dodecahedron", math.sqrt(1 - (5 + 2 * math.sqrt(5)) / 15)),
        ("ring", math.sin(math.pi / 8)),
    ],
)
def test_windows_open_at_the_circumradius_of_the_faces(name, circumradius):
    """To 1e-9 by bisection with the kernel itself."""
    assert opens_at(name) == pytest.approx(circumradius, abs=1e-9)


@pytest.mark.parametrize("name", SHELLS)
def test_shells_under_rotation_order_and_noise(name):
    """Cospherical neighbors at half the way from shut windows to contact."""
    rng = np.random.default_rng(3)
    reach = 0.5 * (1 + opens_at(name))
    points = shell(name)
    d = points.shape[1]
    exact = in_large_box(points, reach / 2)
    assert exact["status"] == CLOSED
    assert exact["bounding"] == len(points) - 1
    assert exact["wall_sum"] == pytest.approx(reach * exact["surface"], rel=1e-12)
    for noise in (0.0, 1e-14, 1e-12, 1e-10, 1e-8, 1e-6, 1e-4):
        for _ in range(5):
            turn = np.eye(d)
            if d == 3:
                turn = Rotation.random(random_state=rng).as_matrix()
            moved = points @ turn
            moved[:-1] += noise * rng.uniform(-1, 1, moved[:-1].shape)
            moved[:-1] = moved[:-1][rng.permutation(len(moved) - 1)]
            found = in_large_box(moved, reach / 2)
            assert found["status"] == CLOSED
            assert found["bounding"] == exact["bounding"]
            slope = exact["surface"] / exact["volume"]
            tolerance = 1e-8 + 4 * noise * slope
            assert found["volume"] == pytest.approx(exact["volume"], rel=tolerance)


@pytest.mark.parametrize("name", LATTICES)
@pytest.mark.parametrize("decimals", range(5, 13))
def test_rounded_positions_with_vacancies(name, decimals):
    """As text files hold them: never invalid, whatever the order of particles."""
    rng = np.random.default_rng(decimals)
    limit = thresholds(name)
    close = limit.close_packing.value
    for phi in (0.93 * close, 0.5 * (limit.escape.value + close)):
        positions, vectors, _ = block(name, phi, least=4.0)
        exact = measure(positions, vectors, 0.5, reach=3.0)
        rounded = np.round(positions + rng.uniform(0, 1, len(vectors)), decimals)
        found = measure(rounded, vectors, 0.5, reach=3.0)
        slope = exact.free_surface[0] / exact.free_volume[0]
        np.testing.assert_array_equal(found.status, exact.status)
        np.testing.assert_allclose(
            found.free_volume, exact.free_volume,
            rtol=1e-8 + 10 * 10.0**-decimals * slope,
        )  # fmt: skip
        # every fifth particle taken out
        keep = rng.random(len(positions)) < 0.8
        order = rng.permutation(keep.sum())
        one = measure(rounded[keep], vectors, 0.5, reach=3.0)
        two = measure(rounded[keep][order], vectors, 0.5, reach=3.0)
        assert (one.status != INVALID).all()
        np.testing.assert_array_equal(one.status[order], two.status)
        np.testing.assert_allclose(one.free_volume[order], two.free_volume, rtol=1e-7)


@pytest.mark.parametrize("name", LATTICES)
def test_volume_is_continuous_in_noise(name):
    rng = np.random.default_rng(5)
    limit = thresholds(name)
    low = limit.growth or limit.escape
    phi = 0.5 * (low.value + limit.close_packing.value)
    positions, vectors, _ = block(name, phi, least=4.0)
    exact = measure(positions, vectors, 0.5)
    push = rng.uniform(-1, 1, positions.shape)
    slope = exact.free_surface[0] / exact.free_volume[0]
    for noise in 10.0 ** np.arange(-14, -3):
        found = measure(positions + noise * push, vectors, 0.5)
        assert (found.status == CLOSED).all()
        np.testing.assert_allclose(
            found.free_volume, exact.free_volume, rtol=1e-8 + 4 * noise * slope
        )
        np.testing.assert_array_equal(
            found.bounding_neighbors, exact.bounding_neighbors
        )


@pytest.mark.parametrize(
    ("name", "ratio", "before", "after"),
    [
        ("square", 1 / math.sqrt(2), 4, 8), ("honeycomb", math.sqrt(3) / 2, 3, 12),
        ("sc", math.sqrt(2 / 3), 6, 26), ("bcc", math.sqrt(3) / 2, 8, 14),
        ("fcc", 1 / math.sqrt(2), 12, 18), ("hcp", 1 / math.sqrt(2), 12, 18),
    ],
)  # fmt: skip
def test_growth_threshold_by_bisection(name, ratio, before, after):
    """Where the windows get other corners; closed form, and as the catalog has it.

    Most pockets start at no size and with no wall, so the particles at the corners of
    the windows tell of them first.
    """
    repeats = tuple(math.ceil(5.0 / edge) for edge in LATTICES[name].cell)
    positions, vectors = lattice_sites(name, repeats, 1.0)

    def corners(diameter):
        found = measure(
            positions, vectors, diameter / 2, subset=np.array([0]), windows=True
        )
        assert found.status[0] == CLOSED
        return len(np.unique(found.windows.neighbors))

    assert corners(0.99 * ratio) == after
    # within the shifts that break ties, 1e-10, the pockets open one after another
    found = brentq(
        lambda s: 0.5 - (corners(s) > before), 0.99 * ratio, 1.01 * ratio, xtol=1e-12
    )
    assert found == pytest.approx(ratio, abs=1e-9)
    packing_fraction = LATTICES[name].close_packing.value * found ** len(vectors)
    assert packing_fraction == pytest.approx(thresholds(name).growth.value, abs=1e-9)


@pytest.mark.parametrize(
    ("name", "ratio"),
    [
        ("fcc", 1 / math.sqrt(3)), ("hcp", 1 / math.sqrt(3)), ("sc", 1 / math.sqrt(2)),
        ("bcc", math.sqrt(6) / 4), ("diamond", 2 * math.sqrt(2) / 3), ("square", 0.5),
        ("triangular", 0.5), ("honeycomb", 0.5),
    ],
)  # fmt: skip
def test_escape_threshold_by_bisection(name, ratio):
    """Windows open at the circumradius of their corners (closed form)."""
    repeats = tuple(math.ceil(6.0 / edge) for edge in LATTICES[name].cell)
    positions, vectors = lattice_sites(name, repeats, 1.0)

    def shut(diameter):
        found = measure(
            positions, vectors, diameter / 2, subset=np.array([0]), reach=4.0
        )
        assert found.status[0] in (OPEN, CLOSED)
        return 1.0 if found.status[0] == CLOSED else -1.0

    found = brentq(shut, 0.98 * ratio, 1.02 * ratio, xtol=1e-12)
    assert found == pytest.approx(ratio, abs=1e-9)
    packing_fraction = LATTICES[name].close_packing.value * found ** len(vectors)
    assert packing_fraction == pytest.approx(thresholds(name).escape.value, abs=1e-9)


# Islands: a wide closed shell of many large spheres with small ones inside.


def cave(d, island_centers, island_reaches, seed=0):
    """A closed cage with islands; exclusion radii of the islands as given."""
    count = 80 if d == 3 else 24
    k = np.arange(count) + 0.5
    if d == 3:
        height = 1 - 2 * k / count
        around = math.pi * (1 + math.sqrt(5)) * k
        wide = np.sqrt(1 - height**2)
        wall = np.column_stack([wide * np.cos(around), wide * np.sin(around), height])
    else:
        wall = np.column_stack(
            [np.cos(2 * np.pi * k / count), np.sin(2 * np.pi * k / count)]
        )
    points = np.vstack([4 * wall, np.asarray(island_centers, float).reshape(-1, d)])
    own = 0.01
    radii = np.concatenate(
        [np.full(count, 1.5), np.asarray(island_reaches) - own, [own]]
    )
    # the particle itself, in free space beside the islands
    rng = np.random.default_rng(seed)
    while True:
        place = rng.uniform(-2, 2, d)
        gaps = np.linalg.norm(points - place, axis=1) - radii[:-1] - own
        if gaps.min() > 1e-3:
            break
    return np.vstack([points, place]), radii


def ball(d, r):
    return 4 * math.pi / 3 * r**3 if d == 3 else math.pi * r * r


def sphere(d, r):
    return 4 * math.pi * r * r if d == 3 else 2 * math.pi * r


@pytest.mark.parametrize("d", [2, 3])
def test_islands(d):
    """Spheres that touch nothing take their volume out and add their surface."""
    empty = in_large_box(*cave(d, np.zeros((0, d)), []))
    assert empty["status"] == CLOSED
    rng = np.random.default_rng(2)
    for trial in range(6):
        centers = [rng.uniform(-1, 1, d) * 0.3]
        reaches = [0.3 + 0.4 * rng.random()]
        if trial % 2:
            centers.append(centers[0] + np.eye(d)[trial % d] * (reaches[0] + 0.5))
            reaches.append(0.3)
        points, radii = cave(d, centers, reaches, trial)
        found = in_large_box(points, radii)
        volume = empty["volume"] - sum(ball(d, r) for r in reaches)
        assert found["volume"] == pytest.approx(volume, rel=1e-9)
        surface = empty["surface"] + sum(sphere(d, r) for r in reaches)
        assert found["surface"] == pytest.approx(surface, rel=1e-9)
        assert found["bounding"] == empty["bounding"] + len(reaches)
        weighted = sum(r * sphere(d, r) for r in reaches)
        assert found["wall_sum"] - empty["wall_sum"] == pytest.approx(
            weighted, rel=1e-8
        )


def lens(d, r1, r2, apart):
    """Volume shared by two balls and surface of both inside the other."""
    h1 = r1 - (apart**2 + r1**2 - r2**2) / (2 * apart)
    h2 = r2 - (apart**2 + r2**2 - r1**2) / (2 * apart)
    if d == 3:
        volume = math.pi * (h1**2 * (3 * r1 - h1) + h2**2 * (3 * r2 - h2)) / 3
        return volume, 2 * math.pi * (r1 * h1 + r2 * h2)
    a1, a2 = math.acos(1 - h1 / r1), math.acos(1 - h2 / r2)
    area = r1**2 * (a1 - math.sin(2 * a1) / 2) + r2**2 * (a2 - math.sin(2 * a2) / 2)
    return area, 2 * (r1 * a1 + r2 * a2)


@pytest.mark.parametrize("d", [2, 3])
def test_two_islands_that_overlap_meet_in_a_full_circle(d):
    empty = in_large_box(*cave(d, np.zeros((0, d)), []))
    rng = np.random.default_rng(4)
    for trial in range(8):
        r1, r2 = rng.uniform(0.3, 0.6, 2)
        apart = rng.uniform(abs(r1 - r2) + 0.02, r1 + r2 - 0.02)
        axis = rng.normal(size=d)
        axis /= np.linalg.norm(axis)
        points, radii = cave(
            d, [-0.5 * apart * axis, 0.5 * apart * axis], [r1, r2], trial
        )
        found = in_large_box(points, radii)
        shared, hidden = lens(d, r1, r2, apart)
        volume = empty["volume"] - ball(d, r1) - ball(d, r2) + shared
        assert found["volume"] == pytest.approx(volume, rel=1e-9)
        surface = empty["surface"] + sphere(d, r1) + sphere(d, r2) - hidden
        assert found["surface"] == pytest.approx(surface, rel=1e-9)
        assert found["bounding"] == empty["bounding"] + 2


@pytest.mark.parametrize("d", [2, 3])
def test_a_chain_of_islands(d):
    """Two circles on the middle sphere: three loops of walls on one chain."""
    empty = in_large_box(*cave(d, np.zeros((0, d)), []))
    step = np.eye(d)[0] * 0.7
    points, radii = cave(d, [-step, 0 * step, step], [0.4, 0.5, 0.45], 3)
    found = in_large_box(points, radii)
    left, hidden_left = lens(d, 0.4, 0.5, 0.7)
    right, hidden_right = lens(d, 0.5, 0.45, 0.7)
    volume = (
        empty["volume"] - ball(d, 0.4) - ball(d, 0.5) - ball(d, 0.45) + left + right
    )
    surface = empty["surface"] + sphere(d, 0.4) + sphere(d, 0.5) + sphere(d, 0.45)
    surface -= hidden_left + hidden_right
    assert found["volume"] == pytest.approx(volume, rel=1e-9)
    assert found["surface"] == pytest.approx(surface, rel=1e-9)


@pytest.mark.parametrize("d", [2, 3])
def test_hidden_spheres_change_nothing(d):
    """One inside another, concentric or not, or touching it from inside."""
    points, radii = cave(d, [np.zeros(d)], [0.6], 1)
    plain = in_large_box(points, radii)
    for offset in (0.0, 1e-9, 0.1, 0.29, 0.3):
        center = np.eye(d)[0] * offset
        inner, sizes = cave(d, [np.zeros(d), center], [0.6, 0.3], 1)
        found = in_large_box(inner, sizes)
        assert found["volume"] == pytest.approx(plain["volume"], rel=1e-9)
        assert found["surface"] == pytest.approx(plain["surface"], rel=1e-9)
        if offset < 0.3:
            assert found["bounding"] == plain["bounding"]
    # two spheres in one place
    twice, sizes = cave(d, [np.zeros(d)] * 2, [0.6, 0.6], 1)
    found = in_large_box(twice, sizes)
    assert found["volume"] == pytest.approx(plain["volume"], rel=1e-9)
    assert found["surface"] == pytest.approx(plain["surface"], rel=1e-9)


def test_walls_with_holes_and_clusters_against_sampling():
    """Random islands that overlap each other and the wall: several loops a sphere."""
    rng = np.random.default_rng(8)
    deviations = []
    for trial in range(8):
        d = 3 if trial < 5 else 2
        centers = rng.uniform(-1.9, 1.9, (9, d))
        reaches = rng.uniform(0.2, 0.7, 9)
        points, radii = cave(d, centers, reaches, trial)
        found = in_large_box(points, radii, windows=True)
        # specks all around, or the triangulation ends at the shell
        specks = rng.normal(size=(60, d))
        specks *= 9.0 / np.linalg.norm(specks, axis=1)[:, None]
        cloud = cloud_around(
            np.vstack([specks, points]), np.eye(d) * 40, np.zeros(d, bool),
            np.concatenate([np.full(60, 0.01), radii]), 59 + len(points), 30.0,
        )  # fmt: skip
        slow = reference_cage(cloud)
        assert found["status"] == (CLOSED if slow.closed else OPEN)
        if not slow.closed:
            continue
        volume, error = slow.sample_volume(rng, 6000)
        deviations.append((found["volume"] - volume) / error)
        sampled = slow.sample_patches(rng, 800)
        for area, vector in zip(
            found["wall"].areas, found["wall"].vectors, strict=True
        ):
            k = np.linalg.norm(slow.cloud.centers - vector, axis=1).argmin()
            share, error = sampled.pop(int(k))
            deviations.append((area - share) / error)
        assert all(share == 0 for share, _ in sampled.values())
    assert len(deviations) > 200
    assert np.abs(deviations).max() < 5.0
    assert np.mean(np.square(deviations)) == pytest.approx(1.0, abs=0.3)


@pytest.mark.parametrize("name", ["cuboctahedron", "dodecahedron", "icosahedron"])
def test_a_particle_held_by_exact_contacts_is_closed_without_room(name):
    """Contacts hold a particle if weights > 0 balance them in all directions.

    That is the first-order condition for strict jamming of one particle (Torquato,
    Donev & Stillinger, Int. J. Solids Struct. 40, 7143 (2003), from memory); whether
    there are such weights a linear program decides. Without them there is a way out.
    """
    rng = np.random.default_rng(11)
    directions = shell(name)[:-1]
    n_held = 0
    for _ in range(30):
        n = int(rng.integers(6, 10))
        contacts = directions[rng.choice(len(directions), n, replace=False)]
        balance = linprog(
            np.zeros(n), A_eq=contacts.T, b_eq=np.zeros(3), bounds=[(1.0, None)] * n
        )
        held = balance.status == 0 and np.linalg.matrix_rank(contacts) == 3
        if not held:
            # strictly out, away from every contact?
            out = linprog(
                [0.0, 0.0, 0.0, -1.0],
                A_ub=np.column_stack([contacts, np.ones(n)]),
                b_ub=np.zeros(n),
                bounds=[(-1.0, 1.0)] * 3 + [(0.0, 1.0)],
            )
            if out.x[3] < 1e-6:
                continue
        points = np.vstack([contacts, np.zeros((1, 3))]) + rng.choice([0.0, 3.7])
        cage = in_large_box(points, 0.5, reach=1.5, overlap_tolerance=1e-12)
        n_held += held
        assert cage["status"] == (CLOSED if held else OPEN)
        if held:
            # rounded contacts leave gaps of 1e-15, a flat one its square root
            assert 0.0 <= cage["volume"] < 1e-20
            assert cage["bounding"] >= 4
    assert 5 < n_held < 30
