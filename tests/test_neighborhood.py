import subprocess
import sys

import numpy as np
import pytest
from MDAnalysis.lib.distances import self_capped_distance
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import Voronoi

from trajcage.errors import FrameError, UsageError
from trajcage.model import Box, Frame
from trajcage.neighborhood import (
    check_distinct,
    connected_groups,
    neighbor_list,
    voronoi,
)

TRICLINIC = Box.from_any([10, 12, 14, 80, 75, 60])
# The same shape, turned out of the axes and mirrored: any row vectors will do.
TURN = np.linalg.qr(np.random.default_rng(4).normal(size=(3, 3)))[0]
BOXES = {
    "cubic": Box.from_any([9.0, 9.0, 9.0]),
    "triclinic": TRICLINIC,
    "turned": Box.from_any(TRICLINIC.vectors @ TURN),
    "sheared": Box.from_any([[9.0, 0, 0], [17.0, 8.0, 0], [-6.0, 12.0, 10.0]]),
    "slab": Box.from_any([9.0, 8.0, 7.0], periodic="xy", origin=[3.0, -2.0, 5.0]),
    "open": Box.from_any([9.0, 8.0, 7.0], periodic="none"),
    "plane": Box.from_any([9.0, 8.0]),
    "oblique": Box.from_any([[9.0, 0.0], [4.0, 8.0]]),
    "strip": Box.from_any([9.0, 8.0], periodic="x"),
}


def random_frame(box, n=150, seed=0):
    rng = np.random.default_rng(seed)
    positions = box.origin + rng.random((n, box.dimensions)) @ box.vectors
    return Frame(positions, rng.uniform(0.3, 0.6, n), box)


def every_image(box, positions, r_max):
    """All pairs i, j, vector up to r_max by trying all images, in float64."""
    reach = [
        int(np.ceil(r_max / h)) + 1 if p else 0
        for h, p in zip(box.heights, box.periodic, strict=True)
    ]
    wrapped = box.wrap(positions)
    found = []
    for turn in np.ndindex(*(2 * m + 1 for m in reach)):
        shift = (np.array(turn) - reach) @ box.vectors
        v = wrapped[None, :] + shift - wrapped[:, None]
        i, j = np.nonzero(np.einsum("ijk,ijk->ij", v, v) <= r_max**2)
        found += [(a, b, *v[a, b]) for a, b in zip(i, j, strict=True) if a != b]
    return np.array(found).reshape(-1, 2 + box.dimensions)


def rows(neighbors):
    return np.column_stack(
        [neighbors.particles, neighbors.neighbors, neighbors.vectors]
    )


def in_order(table):
    return table[np.lexsort(np.round(table, 6).T)]


@pytest.mark.parametrize("name", BOXES)
@pytest.mark.parametrize("r_max", [1.7, 6.5, 13.0])
def test_pairs_equal_brute_force_over_images(name, r_max):
    frame = random_frame(BOXES[name], n=40)
    found = rows(neighbor_list(frame, r_max))
    expected = every_image(frame.box, frame.positions, r_max)
    assert len(found) == len(expected) > 0
    np.testing.assert_allclose(in_order(found), in_order(expected), atol=1e-12)


def test_pair_counts_in_a_tilted_box_equal_mdanalysis():
    # freud given these six numbers or these row vectors finds about 3 % more.
    frame = random_frame(TRICLINIC, n=400, seed=3)
    dimensions = np.array([10, 12, 14, 80, 75, 60], dtype=np.float32)
    pairs = self_capped_distance(
        frame.positions.astype(np.float32), 3.0, box=dimensions, return_distances=False
    )
    assert len(neighbor_list(frame, 3.0).neighbors) == 2 * len(pairs)


def test_both_directions_are_exact_opposites():
    neighbors = neighbor_list(random_frame(BOXES["sheared"]), 4.0)
    forth = rows(neighbors)
    back = np.column_stack(
        [neighbors.neighbors, neighbors.particles, -neighbors.vectors]
    )
    np.testing.assert_array_equal(forth[np.lexsort(forth.T)], back[np.lexsort(back.T)])


def test_cutoff_is_decided_in_double_precision():
    # 1 and 1 + 1e-12 are the same number in freud; only one is within 1.
    spaced = np.array([[0.5, 0.5, 0.5], [1.5, 0.5, 0.5], [0.5, 1.5 + 1e-12, 0.5]])
    far = Box.from_any([1000.0] * 3)
    neighbors = neighbor_list(Frame(spaced, np.full(3, 0.5), far), 1.0)
    assert neighbors.counts.tolist() == [1, 1, 0]


def test_pair_rule_depends_on_both_radii():
    positions = np.array([[1.0, 5.0], [2.5, 5.0], [4.2, 5.0]])
    frame = Frame(positions, np.array([0.5, 1.0, 0.5]), Box.from_any([20.0, 20.0]))
    touching = neighbor_list(frame, lambda a, b: 1.05 * (a + b))
    assert rows(touching)[:, :2].tolist() == [[0, 1], [1, 0]]


@pytest.mark.parametrize("scale", [1e-9, 1.0, 1e9])
def test_pairs_and_cells_do_not_depend_on_the_unit_of_length(scale):
    # freud's tessellation calls centers closer than an absolute 1e-5 duplicates.
    box = TRICLINIC
    frame = random_frame(box)
    scaled = Frame(
        frame.positions * scale, frame.radii, Box.from_any(box.vectors * scale)
    )
    assert len(neighbor_list(scaled, 3.0 * scale).neighbors) == len(
        neighbor_list(frame, 3.0).neighbors
    )
    volumes, _ = voronoi(scaled)
    np.testing.assert_allclose(volumes / scale**3, voronoi(frame)[0], rtol=1e-4)


def test_positions_outside_the_box_are_the_same_configuration():
    frame = random_frame(TRICLINIC)
    turns = np.random.default_rng(1).integers(-3, 4, frame.positions.shape)
    moved = Frame(frame.positions + turns @ frame.box.vectors, frame.radii, frame.box)
    assert len(neighbor_list(moved, 3.0).neighbors) == len(
        neighbor_list(frame, 3.0).neighbors
    )
    np.testing.assert_allclose(voronoi(moved)[0], voronoi(frame)[0], rtol=1e-4)


@pytest.mark.parametrize("r_max", [0.0, -1.0, np.nan, np.inf])
def test_a_cutoff_without_meaning_is_refused(r_max):
    with pytest.raises(UsageError, match="cut-off"):
        neighbor_list(random_frame(TRICLINIC), r_max)


def scipy_cells(box, positions):
    """Cell volumes and pairs by Qhull in float64 from explicit images."""
    wrapped = box.wrap(positions)
    turns = [
        np.array(t) - [1 if p else 0 for p in box.periodic]
        for t in np.ndindex(*(3 if p else 1 for p in box.periodic))
    ]
    turns.sort(key=lambda t: np.abs(t).sum())
    n = len(positions)
    diagram = Voronoi(np.concatenate([wrapped + t @ box.vectors for t in turns]))
    pairs = {(a, b % n) for a, b in diagram.ridge_points if a < n}
    pairs |= {(b, a % n) for a, b in diagram.ridge_points if b < n}
    return diagram, pairs


@pytest.mark.parametrize("name", ["cubic", "triclinic", "turned", "plane", "oblique"])
def test_voronoi_equals_qhull(name):
    from scipy.spatial import ConvexHull

    frame = random_frame(BOXES[name], n=120)
    volumes, neighbors = voronoi(frame)
    diagram, pairs = scipy_cells(frame.box, frame.positions)
    expected = [
        ConvexHull(diagram.vertices[diagram.regions[diagram.point_region[i]]]).volume
        for i in range(120)
    ]
    np.testing.assert_allclose(volumes, expected, rtol=2e-5)
    assert volumes.sum() == pytest.approx(frame.box.volume, rel=1e-6)
    large = neighbors.weights > 1e-3
    found = set(
        zip(neighbors.particles[large], neighbors.neighbors[large], strict=True)
    )
    assert found <= pairs
    # The facets of a cell at half the neighbor distance fill its volume.
    pyramid = neighbors.weights * neighbors.distances / (2 * frame.dimensions)
    filled = np.bincount(neighbors.particles, weights=pyramid)
    np.testing.assert_allclose(filled, volumes, rtol=2e-5)


def test_voronoi_of_a_strongly_sheared_box_equals_the_reduced_box():
    box = BOXES["sheared"]
    frame = random_frame(box, n=300)
    a, b, c = box.vectors
    b = b - 2 * a
    c = c - b
    reduced = Frame(frame.positions, frame.radii, Box.from_any(np.array([a, b, c])))
    np.testing.assert_allclose(voronoi(frame)[0], voronoi(reduced)[0], rtol=1e-4)


@pytest.mark.parametrize("name", ["slab", "open", "strip"])
def test_open_edges_flag_the_cells_that_outsiders_can_change(name):
    box = BOXES[name]
    inner = random_frame(box, n=300)
    volumes, _ = voronoi(inner)
    certain = np.isfinite(volumes)
    assert 0.05 * 300 < certain.sum() < 300
    # Crowd the outside of the open faces: certain cells must stay, others change.
    rng = np.random.default_rng(2)
    open_axes = ~np.array(box.periodic)
    sheets, sizes = [], (400,) if box.dimensions == 2 else (30, 30)
    for axis in np.flatnonzero(open_axes):
        for side in (-1e-3, 1.0 + 1e-3):
            sheet = (np.indices(sizes).reshape(len(sizes), -1).T + 0.5) / sizes
            sheet += rng.uniform(-0.1, 0.1, sheet.shape) / sizes
            sheets.append(np.insert(sheet, axis, side, axis=1))
    where = np.concatenate(sheets)
    grown = np.where(open_axes, 1.8, 1.0)
    outer_box = Box(
        box.vectors * grown[:, None],
        box.origin - np.where(open_axes, 0.4, 0.0) @ box.vectors,
        box.periodic,
    )
    crowd = np.concatenate([inner.positions, box.origin + where @ box.vectors])
    crowded, _ = voronoi(Frame(crowd, np.ones(len(crowd)), outer_box))
    np.testing.assert_allclose(crowded[:300][certain], volumes[certain], atol=1e-5)
    plain, _ = voronoi(Frame(inner.positions, inner.radii, outer_box))
    changed = ~(np.abs(crowded[:300] - plain[:300]) < 1e-5)
    assert changed[~certain].mean() > 0.9


def test_poisson_voronoi_statistics():
    # Mean faces 2 + 48 pi^2 / 35 = 15.535 (Meijering 1953) and volume variance
    # 0.179 (Gilbert 1962) of the Poisson-Voronoi tessellation at unit intensity.
    n = 10_000
    rng = np.random.default_rng(7)
    box = Box.from_any([n ** (1 / 3)] * 3)
    volumes, neighbors = voronoi(
        Frame(rng.random((n, 3)) @ box.vectors, np.full(n, 0.5), box)
    )
    assert volumes.mean() == pytest.approx(1.0, rel=1e-6)
    faces = neighbors.counts
    assert faces.mean() == pytest.approx(15.535, abs=4 * faces.std() / n**0.5)
    squares = (volumes - 1.0) ** 2
    assert squares.mean() == pytest.approx(0.179, abs=4 * squares.std() / n**0.5)


def test_duplicates_are_named_before_freud_ends_the_process():
    frame = random_frame(TRICLINIC)
    positions = frame.positions.copy()
    positions[17] = positions[101] + TRICLINIC.vectors[1] + 3e-6
    doubled = Frame(
        positions, frame.radii, frame.box, index=4, ids=np.arange(150) + 1000
    )
    for refuses in (check_distinct, voronoi):
        with pytest.raises(FrameError, match=r"frame 4.*particles 1017, 1101"):
            refuses(doubled)


def test_pairs_just_beyond_the_duplicate_limit_survive_freud():
    # In another process, because freud would end this one.
    code = (
        "import numpy as np\n"
        "from trajcage.model import Box, Frame\n"
        "from trajcage.neighborhood import voronoi\n"
        "rng = np.random.default_rng(0)\n"
        "for n, L, d in ((1000, 10.0, 1.1e-4), (1000, 1e-6, 1.1e-11), (8, 5e3, 0.3)):\n"
        "    x = rng.random((n, 3)) * L\n"
        "    x[1] = x[0] + [d, 0, 0]\n"
        "    voronoi(Frame(x, np.ones(n), Box.from_any([L] * 3)))\n"
        "print('alive')\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=False
    )
    assert done.stdout.strip() == "alive", done.stdout + done.stderr


@pytest.mark.parametrize("n", range(1, 9))
@pytest.mark.parametrize("name", ["cubic", "triclinic", "sheared", "plane", "oblique"])
def test_cells_of_a_few_particles_close(n, name):
    # Here freud's list holds a particle's own images and pairs more than once; the
    # vectors must point to the right ones, or the facets do not fill the cells.
    frame = random_frame(BOXES[name], n=n, seed=n)
    volumes, neighbors = voronoi(frame)
    assert volumes.sum() == pytest.approx(frame.box.volume, rel=1e-5)
    pyramids = neighbors.weights * neighbors.distances / (2 * frame.dimensions)
    filled = np.bincount(neighbors.particles, weights=pyramids)
    np.testing.assert_allclose(filled, volumes, rtol=1e-5)
    # The outward facets of a closed cell sum to zero.
    normal = neighbors.vectors / neighbors.distances[:, None]
    for axis in normal.T:
        total = np.bincount(neighbors.particles, neighbors.weights * axis)
        np.testing.assert_allclose(total, 0.0, atol=1e-4)


def test_positions_that_are_not_finite_never_reach_freud():
    # freud tessellates NaN silently, to cells that sum to four times the box.
    frame = random_frame(TRICLINIC)
    positions = frame.positions.copy()
    positions[[3, 5], 1] = np.nan
    with pytest.raises(FrameError, match="particles 3, 5"):
        Frame(positions, frame.radii, frame.box)


def test_a_single_particle_neighbors_its_own_images():
    box = Box.from_any([2.0, 2.0, 2.0])
    frame = Frame(np.array([[0.3, 0.4, 0.5]]), np.array([0.5]), box)
    volumes, neighbors = voronoi(frame)
    assert volumes.tolist() == pytest.approx([8.0])
    assert neighbors.weights.sum() == pytest.approx(24.0)  # faces of a cube of side 2
    assert len(neighbor_list(frame, 2.0).neighbors) == 0
    assert len(neighbor_list(frame, 2.0, self_images=True).neighbors) == 6


@pytest.mark.parametrize(("name", "reach"), [("triclinic", 1.6), ("plane", 0.8)])
def test_groups_are_those_of_a_general_library(name, reach):
    # scipy.sparse.csgraph.connected_components on the same bonds
    frame = random_frame(BOXES[name])
    near = neighbor_list(frame, reach)
    chosen = np.random.default_rng(8).random((150, 150)) < 0.4
    linked = (chosen | chosen.T)[near.particles, near.neighbors]
    ends = (near.particles[linked], near.neighbors[linked])
    bonds = coo_array((np.ones(linked.sum()), ends), shape=(150, 150))
    n_groups, other = connected_components(bonds, directed=False)
    group = connected_groups(near, linked)
    assert 10 < n_groups < 140
    assert len(set(zip(group, other, strict=True))) == n_groups == group.max() + 1
    sizes = np.bincount(group)
    assert np.all(np.diff(sizes) <= 0)
    assert sizes[0] > 1
