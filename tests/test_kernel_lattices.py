"""Cages of noiseless lattices: closed forms, neighbors, thresholds, close packing."""

import math

import numpy as np
import pytest
from kernel_cases import CLOSED, INVALID, OPEN, PLANE, SPACE, block, measure
from scipy.integrate import dblquad
from shapely import Point, box
from shapely.ops import unary_union

from trajcage.lattices import LATTICES, lattice, lattice_sites, thresholds

#: (lattice, phi): v_f / a^d, s_f / a^(d-1) with a the nearest-neighbor distance, from
#: two integrations of our own that agree in all digits: adaptive quadrature with 30
#: digits, and Gauss quadrature over the facets of the limiting polytope.
TABLE = {
    ("square", 0.25): (1.18109193761, 6.28675789966),
    ("square", 0.30): (0.866914944236, 5.43644829251),
    ("square", 0.50): (0.18109193761, 1.93878086789),
    ("square", 0.70): (0.0127717062306, 0.461846633808),
    ("triangular", 0.30): (0.692870835646, 3.65977396354),
    ("triangular", 0.50): (0.239457835767, 1.91730848652),
    ("triangular", 0.72): (0.0417206105265, 0.771792527543),
    ("triangular", 0.90): (5.03398407407e-5, 0.026422042803),
    ("honeycomb", 0.50): (0.0483669263694, 1.16509844485),
    ("sc", 0.30): (0.0508493862321, 1.04134751252),
    ("sc", 0.40): (0.00561246729237, 0.204373710514),
    ("sc", 0.50): (2.885020861e-5, 0.00570421446949),
    ("bcc", 0.45): (0.0167861197409, 0.414858874011),
    ("bcc", 0.60): (0.000491647806152, 0.0364553630025),
    ("fcc", 0.27): (0.159360041287, 1.88987088255),
    ("fcc", 0.40): (0.0397564010623, 0.670949665408),
    ("fcc", 0.545): (0.00540609388811, 0.169709708934),
    ("fcc", 0.64): (0.000615880204519, 0.0392053652799),
    ("fcc", 0.74): (5.728484168e-11, 7.943823059e-7),
    ("hcp", 0.27): (0.159360041287, 1.88987088255),
    ("hcp", 0.494): (0.0120484553763, 0.29311173348),
    ("hcp", 0.70): (3.64564122313e-5, 0.00590550529804),
    ("diamond", 0.31): (0.000433186051886, 0.0445366999169),
}

#: Neighbors that bound a cage: within the first stage and, if there is one, past it.
#: Counted on the exact max-bottleneck path of the vacated lattice.
NEIGHBORS = {
    "square": (4, 8), "triangular": (6, None), "honeycomb": (3, 12), "sc": (6, 26),
    "bcc": (8, 14), "fcc": (12, 18), "hcp": (12, 18), "diamond": (4, None),
}  # fmt: skip


@pytest.mark.parametrize(("name", "phi"), TABLE)
def test_size_against_integrals(name, phi):
    positions, vectors, spacing = block(name, phi, least=3.5)
    d = len(vectors)
    found = measure(positions, vectors, 0.5)
    volume, surface = TABLE[name, phi]
    exact = lattice(name, phi)
    # printed digits of the table; v_f ~ (a - 1)^d loses digits as a - 1 does
    table = 3e-11 if phi < 0.73 else 1e-9
    close = 1e-15 / (spacing - 1) * 10 * d
    ours = (1e-8 if d == 3 else 1e-10) + close
    assert (found.status == CLOSED).all()
    np.testing.assert_allclose(
        found.free_volume, volume * spacing**d, rtol=ours + table + close
    )
    np.testing.assert_allclose(
        found.free_surface, surface * spacing ** (d - 1), rtol=ours + table + close
    )
    if phi >= (exact_growth(name) or 0.0):
        np.testing.assert_allclose(found.free_volume, exact.free_volume, rtol=ours)
        np.testing.assert_allclose(found.free_surface, exact.free_surface, rtol=ours)
    np.testing.assert_allclose(found.wall_sum, found.free_surface, rtol=1e-13)
    np.testing.assert_allclose(found.weakest_window, exact.weakest_window, rtol=1e-12)
    assert (found.bounding_neighbors == exact.bounding_neighbors).all()


def exact_growth(name):
    growth = thresholds(name).growth
    return None if growth is None else growth.value


def test_a_simple_cubic_cage_by_direct_quadrature():
    """v_f = 48 int (r^3 / 3) d Omega over 1/48 of the directions (closed form)."""
    phi = 0.35
    positions, vectors, a = block("sc", phi, least=3.5)

    def integrand(y, x):
        # direction (1, x, y) / n with 0 < y < x < 1 is nearest to the axis (1, 0, 0)
        n = math.sqrt(1 + x * x + y * y)
        cosine = 1 / n
        r = a * cosine - math.sqrt(1 - a * a * (1 - cosine * cosine))
        return r**3 / 3 / n**3

    volume = 48 * dblquad(integrand, 0, 1, 0, lambda x: x, epsabs=1e-14)[0]
    found = measure(positions, vectors, 0.5)
    np.testing.assert_allclose(found.free_volume, volume, rtol=1e-8)


@pytest.mark.parametrize("name", LATTICES)
def test_bounding_neighbors_of_both_stages(name):
    limit = thresholds(name)
    first, second = NEIGHBORS[name]
    top = limit.growth or limit.escape
    for phi in np.linspace(top.value, limit.close_packing.value, 7)[1:-1]:
        found = measure(*block(name, phi, least=4.0)[:2], 0.5)
        assert (found.status == CLOSED).all()
        assert (found.bounding_neighbors == first).all()
    if second is not None:
        for phi in np.linspace(limit.escape.value, limit.growth.value, 5)[1:-1]:
            found = measure(*block(name, phi)[:2], 0.5, subset=np.array([0, 1]))
            assert (found.status[:2] == CLOSED).all()
            assert (found.bounding_neighbors[:2] == second).all()


@pytest.mark.parametrize("phi", [0.27, 0.5, 0.73])
def test_a_cell_of_four_particles_has_the_cages_of_the_crystal(phi):
    spacing = lattice("fcc", phi).spacing
    small = measure(*lattice_sites("fcc", 1, spacing), 0.5)
    large = measure(*lattice_sites("fcc", 3, spacing), 0.5)
    np.testing.assert_allclose(small.free_volume, large.free_volume[0], rtol=1e-8)
    assert (small.bounding_neighbors == large.bounding_neighbors[0]).all()


def test_own_images_are_no_wall():
    """FCC past growth: in a cell of four the second shell moves along."""
    positions, vectors = lattice_sites("fcc", 1, lattice("fcc", 0.2).spacing)
    found = measure(positions, vectors, 0.5)
    assert (found.status == OPEN).all()


@pytest.mark.parametrize("name", LATTICES)
def test_both_sides_of_every_threshold(name):
    """Status and volume one unit of the eighth decimal above and below, and at it."""
    limit = thresholds(name)
    site = np.array([0])
    escape, growth = limit.escape.value, exact_growth(name)
    for mark in (escape, growth, limit.close_packing.value):
        if mark is None:
            continue
        phi = round(mark, 8)
        volumes = []
        for trial in (phi - 1e-8, phi, phi + 1e-8, mark):
            if trial > limit.close_packing.value:
                continue
            positions, vectors, _ = block(name, trial)
            found = measure(positions, vectors, 0.5, subset=site, reach=6.0)
            assert found.status[0] != INVALID
            if trial != mark:
                expected = OPEN if trial < escape else CLOSED
                assert found.status[0] == expected
            if found.status[0] == CLOSED:
                volumes.append(found.free_volume[0])
                if growth is None or trial > growth:
                    exact = lattice(name, trial)
                    digits = 1e-7 + 1e-14 / (exact.spacing - 1 + 1e-16)
                    assert volumes[-1] == pytest.approx(exact.free_volume, rel=digits)
                    if trial < limit.close_packing.value:
                        assert found.bounding_neighbors[0] == NEIGHBORS[name][0]
        if mark == growth:
            # pockets start at no size, but here windows open to some that have one
            jump = max(volumes) / min(volumes) - 1
            assert (jump > 0.01) if name in {"sc", "honeycomb"} else (jump < 1e-5)


@pytest.mark.parametrize(
    ("name", "ratio", "volume"),
    [
        # closed forms for 4 and 8 disks meet where the diagonal disks touch
        ("square", 1 / math.sqrt(2), 2 - math.pi / 2),
    ],
)
def test_where_two_closed_forms_meet(name, ratio, volume):
    for step in (-1e-9, 1e-9):
        positions, vectors = lattice_sites(name, 7, 1.0)
        found = measure(positions, vectors, ratio / 2 * (1 + step))
        np.testing.assert_allclose(found.free_volume, volume, rtol=1e-7)


def test_eight_disks_about_a_square_site():
    """v_f = 4 - 3 pi s^2 + 4 L between s = 1/2 and 1/sqrt 2 (closed form)."""
    for s in np.linspace(0.5, math.sqrt(0.5), 6)[1:-1]:
        lens = 2 * s * s * math.acos(1 / (2 * s)) - math.sqrt(4 * s * s - 1) / 2
        volume = 4 - 3 * math.pi * s * s + 4 * lens
        surface = 6 * math.pi * s - 16 * s * math.acos(1 / (2 * s))
        found = measure(*lattice_sites("square", 7, 1.0), s / 2)
        np.testing.assert_allclose(found.free_volume, volume, rtol=1e-10)
        np.testing.assert_allclose(found.free_surface, surface, rtol=1e-10)
        disks = unary_union(
            [Point(x, y).buffer(s, quad_segs=2000) for x in (-1, 0, 1)
             for y in (-1, 0, 1) if x or y]
        )  # fmt: skip
        hole = box(-1, -1, 1, 1).difference(disks)
        assert hole.area == pytest.approx(volume, rel=1e-5)


@pytest.mark.parametrize("name", LATTICES)
def test_contacts_keep_their_digits(name):
    """v_f -> C delta^d (1 + c1 delta) toward close packing, gaps down to 1e-12."""
    limit = thresholds(name)
    d = limit.dimensions
    for gap in (1e-4, 1e-6, 1e-8, 1e-10, 1e-12):
        found = measure(*lattice_sites(name, 3, 1.0), 0.5 * (1 - gap))
        assert (found.status == CLOSED).all()
        expected = limit.volume_factor.value * gap**d
        expected *= 1 + limit.volume_slope.value * gap
        tolerance = 30 * gap**2 + 1e-14 / gap + 1e-8
        np.testing.assert_allclose(found.free_volume, expected, rtol=tolerance)
        np.testing.assert_allclose(
            found.free_surface, d * expected / gap, rtol=tolerance + gap
        )


@pytest.mark.parametrize("name", [*SPACE, *PLANE])
def test_vacancies_do_not_depend_on_the_order_of_particles(name):
    rng = np.random.default_rng(7)
    limit = thresholds(name)
    for factor in (0.999, 0.9, 0.7):
        phi = factor * limit.close_packing.value
        positions, vectors, _ = block(name, phi, least=4.0)
        positions = positions[rng.random(len(positions)) < 0.9]
        one = measure(positions, vectors, 0.5, reach=3.0)
        order = rng.permutation(len(positions))
        two = measure(positions[order], vectors, 0.5, reach=3.0)
        assert (one.status != INVALID).all()
        np.testing.assert_array_equal(one.status[order], two.status)
        np.testing.assert_allclose(one.free_volume[order], two.free_volume, rtol=1e-7)
        np.testing.assert_array_equal(
            one.bounding_neighbors[order], two.bounding_neighbors
        )


def test_a_vacancy_joins_two_cages():
    """SC with one site empty, windows shut: the cages beside it reach into it."""
    positions, vectors = lattice_sites("sc", 4, 1.0)
    for diameter in (0.99, 0.9):
        found = measure(positions[1:], vectors, diameter / 2)
        whole = measure(positions, vectors, diameter / 2)
        near = np.linalg.norm(
            (positions[1:] + 2.0) % 4.0 - 2.0, axis=1
        ) < 1.01  # fmt: skip
        assert near.sum() == 6
        np.testing.assert_allclose(
            found.free_volume[~near], whole.free_volume[0], rtol=1e-8
        )
        assert np.ptp(found.free_volume[near]) < 1e-8 * found.free_volume[near][0]
        assert (found.free_volume[near] > 1.5 * whole.free_volume[0]).all()
