"""Radical Voronoi cells against Qhull, freud, closed forms and laws of tessellations."""

import freud
import numpy as np
import pytest
from scipy.optimize import linprog
from scipy.spatial import ConvexHull, HalfspaceIntersection, Voronoi

from trajcage.kernel import radical_cells
from trajcage.kernel.codes import BORDER, CLOSED, INVALID
from trajcage.lattices import lattice_sites
from trajcage.model import Box, Frame
from trajcage.neighborhood import radical_voronoi, voronoi

SHEARED = np.array([[9.0, 0.0, 0.0], [13.0, 8.0, 0.0], [-6.0, 10.0, 10.0]])
BOXES = {
    "cubic": np.diag([9.0, 9.0, 9.0]),
    "sheared": SHEARED,
    "turned": SHEARED @ np.linalg.qr(np.random.default_rng(4).normal(size=(3, 3)))[0],
    "plate": np.diag([14.0, 11.0, 1.5]),
    "plane": np.diag([9.0, 8.0]),
    "oblique": np.array([[9.0, 0.0], [13.0, 8.0]]),
}
RADII = {"equal": (0.5, 0.5), "unequal": (0.3, 0.6), "buried": (0.1, 1.6)}


def tessellate(positions, vectors, radii, *, periodic=None, origin=None, **options):
    d = len(vectors)
    return radical_cells(
        np.asarray(positions, dtype=float),
        np.asarray(vectors, dtype=float),
        np.zeros(d) if origin is None else np.asarray(origin),
        np.ones(d, bool) if periodic is None else np.asarray(periodic),
        np.broadcast_to(np.asarray(radii, dtype=float), len(positions)),
        **options,
    )


def random_particles(vectors, n, kind="unequal", seed=0):
    rng = np.random.default_rng(seed)
    return rng.random((n, len(vectors))) @ vectors, rng.uniform(*RADII[kind], n)


def owners(cells):
    return np.repeat(np.arange(len(cells.volumes)), np.diff(cells.offsets))


def images(positions, radii, vectors, reach=1):
    """Particles, then all their images; owner of each, radius of each."""
    d = len(vectors)
    turns = np.array(list(np.ndindex(*(2 * reach + 1,) * d))) - reach
    turns = turns[np.argsort(np.abs(turns).sum(axis=1), kind="stable")]
    points = np.concatenate([positions + t @ vectors for t in turns])
    owner = np.tile(np.arange(len(positions)), len(turns))
    return points, owner, radii[owner]


def half_spaces(points, radii, i):
    """Rows (normal, offset) of the cell of point i: normal . x + offset <= 0."""
    others = np.arange(len(points)) != i
    x = points[others] - points[i]
    b = np.einsum("ij,ij->i", x, x) + radii[i] ** 2 - radii[others] ** 2
    length = np.linalg.norm(x, axis=1)
    return np.column_stack([x / length[:, None], -b / (2 * length)]), others


def polytope(rows):
    """Vertices of {x : normal . x + offset <= 0}, None if empty (Qhull)."""
    d = rows.shape[1] - 1
    depth = linprog(
        np.append(np.zeros(d), -1.0),
        A_ub=np.column_stack([rows[:, :d], np.ones(len(rows))]),
        b_ub=-rows[:, d],
        bounds=[(None, None)] * d + [(None, 10.0)],
    )
    if depth.x[d] < 1e-10:
        return None
    return HalfspaceIntersection(rows, depth.x[:d]).intersections


@pytest.mark.parametrize("kind", RADII)
@pytest.mark.parametrize("name", BOXES)
def test_cells_fill_the_box_and_share_their_facets(name, kind):
    vectors = BOXES[name]
    d = len(vectors)
    positions, radii = random_particles(vectors, 700, kind)
    cells = tessellate(positions, vectors, radii)
    assert np.all(cells.status == CLOSED)
    volume = abs(np.linalg.det(vectors))
    assert cells.volumes.sum() == pytest.approx(volume, rel=1e-12)
    i, j, v = owners(cells), cells.neighbors, cells.vectors
    # i -> j is the same facet as j -> i
    forth = np.lexsort(np.column_stack([i, j, np.round(v, 9) + 0.0]).T)
    back = np.lexsort(np.column_stack([j, i, np.round(-v, 9) + 0.0]).T)
    np.testing.assert_array_equal(i[forth], j[back])
    np.testing.assert_allclose(v[forth], -v[back], atol=1e-12)
    np.testing.assert_allclose(cells.areas[forth], cells.areas[back], atol=1e-12)
    # outward facets of a closed cell sum to zero; pyramids fill it
    length = np.linalg.norm(v, axis=1)
    for axis in range(d):
        flow = np.bincount(i, cells.areas * v[:, axis] / length, minlength=700)
        np.testing.assert_allclose(flow, 0.0, atol=1e-9)
    height = (length**2 + radii[i] ** 2 - radii[j] ** 2) / (2 * length)
    filled = np.bincount(i, cells.areas * height / d, minlength=700)
    np.testing.assert_allclose(filled, cells.volumes, atol=1e-9)
    if kind == "buried":
        assert np.any(cells.volumes == 0.0)
        # a particle outside its own cell has a neighbor whose plane is behind it
        assert np.any(height < 0.0)


@pytest.mark.parametrize("kind", RADII)
@pytest.mark.parametrize("name", ["cubic", "turned", "plane"])
def test_cells_equal_qhull_half_space_intersections(name, kind):
    vectors = BOXES[name] / 2
    d = len(vectors)
    positions, radii = random_particles(vectors, 16, kind, seed=1)
    radii /= 2
    cells = tessellate(positions, vectors, radii)
    points, owner, r = images(positions, radii, vectors, reach=2)
    for i in range(16):
        rows, others = half_spaces(points, r, i)
        corners = polytope(rows)
        if corners is None:
            assert cells.volumes[i] == pytest.approx(0.0, abs=1e-12)
            assert cells.offsets[i] == cells.offsets[i + 1]
            continue
        assert cells.volumes[i] == pytest.approx(ConvexHull(corners).volume, rel=1e-9)
        on = np.abs(rows[:, :d] @ corners.T + rows[:, d:]) < 1e-8
        expected = {}
        for k in np.flatnonzero(on.sum(axis=1) >= d):
            face = corners[on[k]]
            basis = np.linalg.svd(rows[k : k + 1, :d])[2][1:]
            flat = (face - face[0]) @ basis.T
            area = (
                np.ptp(flat) if d == 2 else ConvexHull(flat, qhull_options="QJ").volume
            )
            image = np.flatnonzero(others)[k]
            expected[owner[image], *np.round(points[image] - points[i], 6)] = area
        row = slice(cells.offsets[i], cells.offsets[i + 1])
        found = dict(
            zip(
                map(
                    tuple,
                    np.column_stack(
                        [cells.neighbors[row], np.round(cells.vectors[row], 6)]
                    ),
                ),
                cells.areas[row],
                strict=True,
            )
        )
        for key in expected.keys() | found.keys():
            assert found.get(key, 0.0) == pytest.approx(
                expected.get(key, 0.0), abs=1e-7
            )


def test_neighbors_equal_the_convex_hull_of_the_lifted_points():
    # Power diagram and lower hull of (x, |x|^2 - r^2) are dual: F. Aurenhammer,
    # SIAM J. Comput. 16, 78 (1987).
    vectors = BOXES["cubic"]
    positions, radii = random_particles(vectors, 60, seed=5)
    cells = tessellate(positions, vectors, radii)
    points, owner, r = images(positions, radii, vectors)
    lifted = np.column_stack([points, np.einsum("ij,ij->i", points, points) - r**2])
    hull = ConvexHull(lifted)
    lower = hull.simplices[hull.equations[:, 3] < 0]
    pairs = {
        (simplex[a], simplex[b])
        for simplex in lower
        for a in range(4)
        for b in range(4)
    }
    expected = {
        (i, owner[j], *np.round(points[j] - points[i], 6) + 0.0)
        for i, j in pairs
        if i < 60 and i != j
    }
    table = np.column_stack(
        [owners(cells), cells.neighbors, np.round(cells.vectors, 6) + 0.0]
    )
    assert {tuple(row) for row in table} == expected


@pytest.mark.parametrize("name", ["cubic", "sheared", "plane"])
def test_equal_radii_equal_the_voronoi_cells_of_qhull(name):
    vectors = BOXES[name]
    n = 100
    positions, radii = random_particles(vectors, n, "equal", seed=2)
    cells = tessellate(positions, vectors, radii)
    diagram = Voronoi(images(positions, radii, vectors, reach=2)[0])
    for i in range(n):
        corners = diagram.vertices[diagram.regions[diagram.point_region[i]]]
        assert cells.volumes[i] == pytest.approx(ConvexHull(corners).volume, rel=1e-10)
    ridges = np.bincount(diagram.ridge_points.ravel())[:n]
    np.testing.assert_array_equal(np.diff(cells.offsets), ridges)


@pytest.mark.parametrize("d", [2, 3])
def test_equal_radii_equal_freud(d):
    # freud works in single precision
    n, side = 2000, 10.0
    positions, radii = random_particles(np.eye(d) * side, n, "equal", seed=3)
    cells = tessellate(positions, np.eye(d) * side, radii)
    box = freud.box.Box(side, side, 0.0 if d == 2 else side, is2D=d == 2)
    points = np.zeros((n, 3), np.float32)
    points[:, :d] = positions - side / 2
    reference = freud.locality.Voronoi().compute((box, points))
    np.testing.assert_allclose(cells.volumes, reference.volumes, rtol=2e-5)
    # it leaves out a few small facets that Qhull and this kernel have
    key = owners(cells) * n + cells.neighbors
    order = np.argsort(key)
    pairs = reference.nlist
    wanted = pairs.query_point_indices.astype(np.int64) * n + pairs.point_indices
    at = order[np.searchsorted(key, wanted, sorter=order)]
    np.testing.assert_array_equal(key[at], wanted)
    np.testing.assert_allclose(cells.areas[at], pairs.weights, rtol=1e-4, atol=1e-5)
    left_out = np.setdiff1d(np.arange(len(key)), at)
    assert cells.areas[left_out].sum() < 1e-4 * cells.areas.sum()


def test_poisson_cells_have_the_mean_number_of_facets():
    # 2 + 48 pi^2 / 35 = 15.535, J. L. Meijering, Philips Res. Rep. 8, 270 (1953);
    # mean surface 5.8209 and volume variance 0.179 at unit intensity, E. N. Gilbert,
    # Ann. Math. Stat. 33, 958 (1962); in the plane 6 and 4 and 0.280 (from memory).
    n = 20_000
    for d, facets, surface, variance in (
        (3, 2 + 48 * np.pi**2 / 35, 5.820872595, 0.1790),
        (2, 6.0, 4.0, 0.2802),
    ):
        vectors = np.eye(d) * n ** (1 / d)
        positions, radii = random_particles(vectors, n, "equal", seed=7)
        cells = tessellate(positions, vectors, radii)
        counts = np.diff(cells.offsets)
        assert counts.mean() == pytest.approx(facets, abs=4 * counts.std() / n**0.5)
        areas = np.bincount(owners(cells), cells.areas)
        assert areas.mean() == pytest.approx(surface, abs=4 * areas.std() / n**0.5)
        squares = (cells.volumes - 1.0) ** 2
        assert squares.mean() == pytest.approx(variance, abs=4 * squares.std() / n**0.5)


# Faces of the perfect cells: common knowledge of crystallography (from memory);
# areas for nearest neighbors at distance 1 follow from plane geometry.
@pytest.mark.parametrize(
    ("name", "areas"),
    [
        ("sc", [1.0] * 6),
        ("bcc", [1 / 6] * 6 + [3**0.5 / 4] * 8),
        ("fcc", [2**0.5 / 4] * 12),
        ("hcp", [2**0.5 / 4] * 12),
        ("diamond", None),
        ("triangular", [3**-0.5] * 6),
        ("square", [1.0] * 4),
        ("honeycomb", [3**0.5] * 3),
    ],
)
@pytest.mark.parametrize("shift", [0.0, 0.1234])
def test_perfect_lattices_have_the_facets_of_their_cells(name, areas, shift):
    spacing = 1.1
    positions, vectors = lattice_sites(name, 3, spacing)
    cells = tessellate(positions + shift, vectors, 0.5)
    n, d = positions.shape
    volume = np.linalg.det(vectors) / n
    np.testing.assert_allclose(cells.volumes, volume, rtol=1e-13)
    found = cells.areas.reshape(n, -1)
    if areas is None:
        # the triakis truncated tetrahedron: 4 large faces and 12 small ones
        assert found.shape[1] == 16
        large = np.sort(found, axis=1)[:, 12:]
        small = np.sort(found, axis=1)[:, :12]
        assert np.ptp(large) < 1e-12
        assert np.ptp(small) < 1e-12
        assert large.min() > 2 * small.max()
    else:
        expected = np.tile(np.array(areas) * spacing ** (d - 1), (n, 1))
        np.testing.assert_allclose(np.sort(found, axis=1), expected, rtol=1e-12)


@pytest.mark.parametrize("d", [2, 3])
def test_two_sizes_on_a_rock_salt_lattice(d):
    # Small cells are cubes that reach to the planes of equal power; large ones fill
    # the rest and meet each other across the edges of these cubes.
    large, small = 0.6, 0.4
    sites = np.array(list(np.ndindex(*(6,) * d)))
    is_small = sites.sum(axis=1) % 2 == 1
    cells = tessellate(sites, np.eye(d) * 6.0, np.where(is_small, small, large))
    edge = 1.0 + small**2 - large**2
    np.testing.assert_allclose(cells.volumes[is_small], edge**d, rtol=1e-13)
    np.testing.assert_allclose(cells.volumes[~is_small], 2.0 - edge**d, rtol=1e-13)
    facets = np.diff(cells.offsets)
    assert np.unique(facets[is_small]).tolist() == [2 * d]
    assert np.unique(facets[~is_small]).tolist() == [8 if d == 2 else 18]


@pytest.mark.parametrize("n", [1, 2, 4])
@pytest.mark.parametrize("name", BOXES)
def test_a_few_particles_neighbor_their_own_images(name, n):
    vectors = BOXES[name]
    positions, radii = random_particles(vectors, n, seed=n)
    cells = tessellate(positions, vectors, radii)
    assert cells.volumes.sum() == pytest.approx(abs(np.linalg.det(vectors)), rel=1e-12)
    points, _, r = images(positions, radii, vectors, reach=4)
    for i in range(n):
        corners = polytope(half_spaces(points, r, i)[0])
        assert cells.volumes[i] == pytest.approx(ConvexHull(corners).volume, rel=1e-9)
    if n == 1:
        assert set(cells.neighbors) == {0}
        assert len(cells.neighbors) % 2 == 0


def test_open_edges_make_exactly_the_cells_border_that_outsiders_can_change():
    # Recomputed with Qhull: a vertex of the cell whose ball of largest power reaches
    # beyond an open edge could be cut by a particle of the largest radius there.
    for vectors, periodic, n in (
        (np.diag([6.0, 5.0, 4.0]), (False, False, False), 150),
        (np.array([[6.0, 0, 0], [1, 5, 0], [1, 1, 4]]), (False, False, False), 150),
        (np.diag([5.0, 6.0]), (False, False), 60),
    ):
        d = len(vectors)
        origin = np.arange(1.0, 1.0 + d)
        positions, radii = random_particles(vectors, n, seed=9)
        positions += origin
        cells = tessellate(positions, vectors, radii, periodic=periodic, origin=origin)
        walls = np.column_stack(
            [np.vstack([np.eye(d), -np.eye(d)]), -np.full(2 * d, 99)]
        )
        inverse = np.linalg.inv(vectors)
        heights = 1 / np.linalg.norm(inverse, axis=0)
        for i in range(n):
            rows = np.vstack([half_spaces(positions, radii, i)[0], walls])
            corners = polytope(rows)
            if corners is None:
                assert cells.volumes[i] == 0.0
                continue
            ball = np.sqrt(
                np.einsum("ij,ij->i", corners, corners)
                + radii.max() ** 2
                - radii[i] ** 2
            )
            f = (corners + positions[i] - origin) @ inverse
            depth = np.minimum(f, 1 - f) * heights
            certain = np.all(depth >= ball[:, None])
            assert cells.status[i] == (CLOSED if certain else BORDER)
            if certain:
                volume = ConvexHull(corners).volume
                assert cells.volumes[i] == pytest.approx(volume, rel=1e-9)
            else:
                assert np.isnan(cells.volumes[i])
        assert 0.02 * n < np.sum(cells.status == CLOSED) < 0.9 * n


@pytest.mark.parametrize(
    ("vectors", "periodic"),
    [
        (np.diag([9.0, 8.0, 7.0]), (True, False, True)),
        (np.diag([9.0, 8.0]), (True, False)),
    ],
)
def test_particles_beyond_open_edges_leave_certain_cells_alone(vectors, periodic):
    d = len(vectors)
    positions, radii = random_particles(vectors, 500 if d == 3 else 80, seed=11)
    known = tessellate(positions, vectors, radii, periodic=periodic)
    certain = known.status == CLOSED
    assert 0.05 < certain.mean() < 0.95
    grid = (np.indices((30,) * (d - 1)).reshape(d - 1, -1).T + 0.5) / 30
    sheets = [np.insert(grid, 1, f, axis=1) @ vectors for f in (-1e-3, 1.0 + 1e-3)]
    beyond = np.concatenate(sheets)
    crowd = tessellate(
        np.concatenate([positions, beyond]),
        np.where(np.arange(d) == 1, 1.25, 1.0)[:, None] * vectors,
        np.concatenate([radii, np.full(len(beyond), radii.max())]),
        origin=-np.eye(d)[1],
    )
    inner = crowd.volumes[: len(positions)]
    np.testing.assert_allclose(inner[certain], known.volumes[certain], rtol=1e-12)


def test_an_open_box_without_enough_particles_has_only_border_cells():
    positions, radii = random_particles(np.eye(3) * 5, 4)
    cells = tessellate(positions, np.eye(3) * 5, radii, periodic=(False,) * 3)
    assert np.all(cells.status == BORDER)
    assert len(cells.neighbors) == 0
    assert cells.offsets.tolist() == [0] * 5


def test_a_buried_particle_has_an_empty_cell():
    positions = np.array([[5.0, 5.0, 5.0], [5.1, 5.0, 5.0], [2.0, 2.0, 2.0]])
    cells = tessellate(positions, np.eye(3) * 10, [2.0, 0.1, 1.0])
    assert cells.status.tolist() == [CLOSED] * 3
    assert cells.volumes[1] == 0.0
    assert 1 not in cells.neighbors
    # also where both centers are the same
    positions[1] = positions[0]
    assert tessellate(positions, np.eye(3) * 10, [2.0, 0.1, 1.0]).volumes[1] == 0.0


def test_a_particle_outside_its_own_cell_is_right():
    # Two spheres at distance 1 with r^2 = 4 and 1: the plane lies at 2 from the
    # larger one, beyond the smaller one; far images bound the rest.
    cells = tessellate([[5.0, 5, 5], [6.0, 5, 5]], np.eye(3) * 20, [2.0, 1.0])
    # planes along x: 2 between them, and (19^2 + 1 - 4) / 38 across the box
    behind = (19.0**2 + 1.0 - 4.0) / (2 * 19.0)
    expected = 20.0**2 * (1.0 + behind - 2.0)
    assert cells.volumes[1] == pytest.approx(expected, rel=1e-13)


def test_equal_particles_on_the_same_point_are_invalid():
    positions, radii = random_particles(BOXES["cubic"], 100, "equal")
    positions[3] = positions[70]
    cells = tessellate(positions, BOXES["cubic"], radii)
    assert np.flatnonzero(cells.status == INVALID).tolist() == [3, 70]
    assert np.flatnonzero(np.isnan(cells.volumes)).tolist() == [3, 70]


@pytest.mark.parametrize("unit", [1e-6, 1e9])
def test_cells_do_not_depend_on_the_unit_of_length(unit):
    positions, radii = random_particles(SHEARED, 300)
    cells = tessellate(positions, SHEARED, radii)
    scaled = tessellate(positions * unit, SHEARED * unit, radii * unit)
    np.testing.assert_allclose(scaled.volumes / unit**3, cells.volumes, rtol=1e-11)
    np.testing.assert_array_equal(np.diff(scaled.offsets), np.diff(cells.offsets))


def test_threads_give_the_same_bits():
    positions, radii = random_particles(SHEARED, 500, "buried")
    one = tessellate(positions, SHEARED, radii)
    for threads in (2, 3):
        for a, b in zip(
            one, tessellate(positions, SHEARED, radii, threads=threads), strict=True
        ):
            np.testing.assert_array_equal(a, b)


def test_one_large_sphere_among_many_small_ones():
    # more facets than there is room for at first, and a shell far beyond the first
    rng = np.random.default_rng(13)
    side = 16.0
    positions = rng.random((4000, 3)) * side
    center = np.full(3, side / 2)
    outside = np.linalg.norm(positions - center, axis=1) > 5.0
    positions = np.vstack([center, positions[outside]])
    radii = np.append(4.7, np.full(len(positions) - 1, 0.3))
    cells = tessellate(positions, np.eye(3) * side, radii)
    assert cells.volumes.sum() == pytest.approx(side**3, rel=1e-12)
    assert cells.offsets[1] > 250
    assert cells.volumes[0] > 4 / 3 * np.pi * 4.7**3


def test_a_droplet_in_a_large_box_fills_it():
    rng = np.random.default_rng(17)
    positions = 50.0 + rng.random((400, 3)) * 5.0
    cells = tessellate(positions, np.eye(3) * 100.0, rng.uniform(0.2, 0.4, 400))
    assert np.all(cells.status == CLOSED)
    assert cells.volumes.sum() == pytest.approx(1e6, rel=1e-12)


@pytest.mark.parametrize("periodic", ["xyz", "xy"])
def test_frames_of_equal_particles_have_equal_voronoi_and_radical_cells(periodic):
    box = Box.from_any(SHEARED, periodic=periodic, origin=[1.0, 2.0, 3.0])
    positions, radii = random_particles(SHEARED, 400, "equal")
    frame = Frame(positions + box.origin, radii, box)
    volumes, neighbors = radical_voronoi(frame)
    expected, facets = voronoi(frame)
    np.testing.assert_allclose(volumes, expected, rtol=1e-4)
    known = np.isfinite(volumes)
    assert np.all(neighbors.counts[~known] == 0)
    pyramids = neighbors.weights * neighbors.distances / 6
    filled = np.bincount(neighbors.particles, pyramids, minlength=400)
    np.testing.assert_allclose(filled[known], volumes[known], rtol=1e-9)
    surface = np.bincount(facets.particles, facets.weights, minlength=400)
    ours = np.bincount(neighbors.particles, neighbors.weights, minlength=400)
    np.testing.assert_allclose(ours[known], surface[known], rtol=1e-2)


def test_radical_cells_of_a_packing_hold_their_spheres():
    # Planes of equal power pass between spheres that do not overlap.
    rng = np.random.default_rng(21)
    box = Box.from_any([12.0, 12.0, 12.0])
    sites = np.array(list(np.ndindex(6, 6, 6))) * 2.0 + rng.uniform(0.0, 0.6, (216, 3))
    radii = rng.uniform(0.2, 0.7, 216)
    volumes, neighbors = radical_voronoi(Frame(sites, radii, box))
    i, j = neighbors.particles, neighbors.neighbors
    gap = neighbors.distances - radii[i] - radii[j]
    assert gap.min() > 0.0
    height = neighbors.distances**2 + radii[i] ** 2 - radii[j] ** 2
    assert np.all(height / (2 * neighbors.distances) > radii[i])
    assert volumes.sum() == pytest.approx(box.volume, rel=1e-12)
    assert np.all(volumes > 4 / 3 * np.pi * radii**3)
