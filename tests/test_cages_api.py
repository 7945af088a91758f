"""The library function for one configuration, and the checks around the kernel."""

import math

import numpy as np
import pytest

import trajcage
from trajcage.analysis.cages import (
    CageOptions,
    default_overlap_tolerance,
    find_overlaps,
    frame_cages,
)
from trajcage.analysis.thermodynamics import (
    CompressibilityStatus,
    compressibility_factor,
    equal_diameter,
)
from trajcage.errors import FrameError, InputError, UsageError
from trajcage.lattices import lattice_sites
from trajcage.model import Box, CageStatus, CageTable, Frame


def fcc(packing_fraction, edge=4):
    """Perfect FCC crystal of unit spheres: positions and row vectors."""
    spacing = trajcage.lattice("fcc", packing_fraction).spacing
    return lattice_sites("fcc", (edge,) * 3, spacing)


def test_every_site_of_a_lattice_has_the_cage_of_the_reference():
    positions, vectors = fcc(0.6)
    table = trajcage.cages(positions, vectors, 0.5)
    reference = trajcage.lattice("fcc", 0.6)
    assert table.closed.all()
    assert table.left_out == 0
    assert np.allclose(table.free_volume, reference.free_volume, rtol=1e-9)
    assert np.allclose(table.free_surface, reference.free_surface, rtol=1e-8)
    assert np.allclose(table.wall_sum, reference.wall_sum, rtol=1e-8)
    assert (table.bounding_neighbors == reference.bounding_neighbors).all()
    assert np.allclose(table.weakest_window, reference.weakest_window)
    assert table.mean_free_volume == pytest.approx(reference.free_volume)


def test_boxes_in_all_notations_agree():
    positions, vectors = fcc(0.55)
    lengths = np.diag(vectors)
    tables = [
        trajcage.cages(positions, box, np.full(len(positions), 0.5))
        for box in (vectors, lengths, [*lengths, 90.0, 90.0, 90.0])
    ]
    for table in tables[1:]:
        assert np.array_equal(table.free_volume, tables[0].free_volume)


def test_threads_do_not_change_a_bit():
    positions, vectors = fcc(0.5)
    shaken = positions + np.random.default_rng(3).uniform(-0.03, 0.03, positions.shape)
    one = trajcage.cages(shaken, vectors, 0.5, windows=True)
    two = trajcage.cages(shaken, vectors, 0.5, windows=True, threads=2)
    assert one.free_volume.tobytes() == two.free_volume.tobytes()
    assert one.walls.areas.tobytes() == two.walls.areas.tobytes()


def test_walls_and_windows_sum_up_to_the_table():
    rng = np.random.default_rng(4)
    positions, vectors = fcc(0.5)
    radii = rng.uniform(0.4, 0.5, len(positions))
    table = trajcage.cages(
        positions + rng.uniform(-0.02, 0.02, positions.shape),
        vectors,
        radii,
        windows=True,
    )
    assert table.closed.all()
    owner = np.repeat(np.arange(len(table)), np.diff(table.walls.offsets))
    contact = radii[owner] + radii[table.walls.neighbors]
    sums = np.bincount(owner, contact * table.walls.areas)
    assert np.allclose(sums, table.wall_sum, rtol=1e-10)
    assert np.allclose(np.bincount(owner, table.walls.areas), table.free_surface)
    assert np.array_equal(np.diff(table.walls.offsets), table.bounding_neighbors)
    largest = np.maximum.reduceat(table.windows.ratios, table.windows.offsets[:-1])
    assert np.allclose(largest, table.weakest_window)


def test_open_edges_leave_the_outer_cages_undecided():
    positions, vectors = fcc(0.6, edge=5)
    table = trajcage.cages(positions + 0.01, vectors, 0.5, periodic="xy")
    counts = table.counts
    assert counts["border"] > 0
    assert counts["closed"] > 0
    assert counts["border"] + counts["closed"] == len(positions)
    reference = trajcage.lattice("fcc", 0.6).free_volume
    assert np.allclose(table.free_volume[table.closed], reference, rtol=1e-8)
    assert np.isnan(table.free_volume[~table.closed]).all()
    assert table.left_out == counts["border"]


def test_an_overlap_costs_its_two_particles_their_cages_only():
    positions, vectors = fcc(0.5)
    positions[0, 0] += 0.3
    table = trajcage.cages(positions, vectors, 0.5)
    hit = np.flatnonzero(table.status == CageStatus.OVERLAP)
    assert 0 in hit
    assert 2 <= len(hit) <= 5
    assert table.closed.sum() == len(positions) - len(hit)


def test_overlaps_name_the_worst_pair_by_id_across_the_boundary():
    box = Box.from_any([5.0, 5.0, 5.0])
    positions = np.array([[0.1, 1.0, 1.0], [4.3, 1.0, 1.0], [2.0, 2.0, 2.0]])
    frame = Frame(positions, np.full(3, 0.5), box, ids=np.array([70, 30, 50]))
    overlaps = find_overlaps(frame, 0.1)
    assert overlaps.count == 1
    assert overlaps.deepest == pytest.approx(0.2)
    assert set(overlaps.pair) == {70, 30}
    assert find_overlaps(frame, 0.3).count == 0
    with pytest.raises(FrameError, match=r"particles (70 and 30|30 and 70) by 0\.2"):
        frame_cages(frame, CageOptions(strict=True))


def test_the_overlap_tolerance_follows_from_the_resolution():
    box = Box.from_any([5.0, 5.0])
    positions = np.array([[1.0, 1.0], [3.0, 3.0]])
    exact = Frame(positions, np.full(2, 0.5), box)
    assert default_overlap_tolerance(exact) == pytest.approx(1e-9)
    coarse = Frame(positions, np.full(2, 0.5), box, resolution=1e-3)
    assert default_overlap_tolerance(coarse) == pytest.approx(2e-3 * math.sqrt(2))


@pytest.mark.parametrize(
    ("positions", "box", "radii", "message"),
    [
        ([[1.0, np.nan, 1.0], [3.0, 3.0, 3.0]], [5, 5, 5], 0.5, "particle 0"),
        ([[1.0, 1.0, 1.0], [1.0, 1.0, 1.0]], [5, 5, 5], 0.5, "particles 0, 1"),
        ([[1.0, 1.0, 1.0], [3.0, 3.0, 3.0]], [5, 5, 5], [0.5, -1.0], "particle 1"),
        ([[0.5, 0.5, 0.5]], [1, 1, 1], 0.6, "another unit"),
        ([[0.5, 0.5]], [1, 1], 0.6, "densest of equal disks"),
        (np.zeros((0, 3)), [1, 1, 1], 0.5, "found none"),
        ([[0.5, 0.5, 0.5]], [1, 1], 0.1, "two edges"),
    ],
)
def test_unusable_configurations_have_one_clear_error(positions, box, radii, message):
    with pytest.raises(InputError, match=message):
        trajcage.cages(positions, box, radii)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"positions": np.zeros((2, 4))}, "positions are an array"),
        ({"radii": [0.1, 0.1, 0.1]}, "one for each of the 2 particles"),
        ({"reach": 0.0}, "reach"),
        ({"overlap_tolerance": -1.0}, "tolerance"),
        ({"threads": 0}, "threads"),
    ],
)
def test_arguments_that_make_no_sense_are_named(change, message):
    given = {"positions": [[1, 1, 1], [3, 3, 3]], "box": [5, 5, 5], "radii": 0.5}
    with pytest.raises(UsageError, match=message):
        trajcage.cages(**(given | change))


def frame_of(positions, vectors, radii=None, **more):
    box = Box.from_any(vectors)
    radii = np.full(len(positions), 0.5) if radii is None else radii
    return Frame(np.asarray(positions, float), radii, box, **more)


def z(frame):
    return compressibility_factor(frame, frame_cages(frame, CageOptions())[0])


@pytest.mark.parametrize("digits", [None, 6])
def test_a_perfect_lattice_has_no_pressure(digits):
    """With fixed neighbors 1 + sigma s_f / (2 d v_f) is half the cell theory's Z - 1."""
    positions, vectors = fcc(0.6)
    resolution = 0.0
    if digits is not None:
        positions, resolution = np.round(positions, digits), 10.0**-digits
    factor, status = z(frame_of(positions, vectors, resolution=resolution))
    assert status is CompressibilityStatus.IDEAL_LATTICE
    assert math.isnan(factor)


def test_a_lattice_of_two_sizes_has_no_pressure_either():
    positions, vectors = lattice_sites("sc", (4, 4, 4), 1.05)
    cell = np.rint(positions / 1.05).astype(int)
    radii = np.where(cell.sum(axis=1) % 2, 0.5, 0.54)
    factor, status = z(frame_of(positions, vectors, radii))
    assert status is CompressibilityStatus.IDEAL_LATTICE
    assert math.isnan(factor)


def test_a_shaken_lattice_has_a_pressure():
    positions, vectors = fcc(0.6)
    rng = np.random.default_rng(5)
    shaken = positions + rng.uniform(-0.01, 0.01, positions.shape)
    factor, status = z(frame_of(shaken, vectors))
    assert status is CompressibilityStatus.MEASURED
    assert factor > 1.0


@pytest.mark.parametrize(("missing", "measured"), [(2, True), (3, False)])
def test_more_than_one_unresolved_cage_in_a_thousand_takes_the_pressure(
    missing, measured
):
    n = 2000
    rng = np.random.default_rng(6)
    status = np.zeros(n, np.uint8)
    status[:missing] = [CageStatus.OPEN, CageStatus.OVERLAP, CageStatus.BORDER][
        :missing
    ]
    volume = np.where(status == CageStatus.CLOSED, rng.uniform(0.5, 1.5, n), np.nan)
    table = CageTable(
        free_volume=volume,
        free_surface=2.0 * volume,
        wall_sum=6.0 * volume,
        status=status,
        bounding_neighbors=np.full(n, 12, np.int32),
        weakest_window=np.full(n, 0.9),
        weakest_window_neighbors=np.zeros((n, 3), np.int64),
    )
    frame = frame_of(rng.uniform(0, 20, (n, 3)), [20.0, 20.0, 20.0])
    factor, why = compressibility_factor(frame, table)
    assert table.left_out == missing
    if measured:
        assert factor == pytest.approx(2.0)  # 1 + 6 / (2 * 3)
        assert why is CompressibilityStatus.MEASURED
    else:
        assert math.isnan(factor)
        assert why is CompressibilityStatus.UNRESOLVED


def test_equal_particles_beside_a_mixture_fill_as_much():
    radii = np.array([0.3, 0.5, 0.7, 0.4])
    frame = frame_of(np.eye(4, 3) * 3, [9.0, 9.0, 9.0], radii)
    volume = np.pi / 6 * equal_diameter(frame) ** 3 * 4
    assert volume / 9.0**3 == pytest.approx(frame.packing_fraction)


# Two particles in a periodic box: the partition function Q = V (V - v_ex) is exact, and
# so is Z = 1 + v_ex / (2 (V - v_ex)), with v_ex the ball (disk) of radius sigma <= L/2.
# The cage of each is all the space that the other leaves: the law of the cages gives
# the same number for any configuration. Derived here.
@pytest.mark.parametrize(
    ("dimensions", "packing_fraction", "factor"),
    [(3, 0.05, 1.125), (3, 0.1, 4.0 / 3.0), (2, 0.3, 1.75)],
)
def test_two_particles_in_a_box_have_the_exact_pressure(
    dimensions, packing_fraction, factor
):
    d = dimensions
    body = np.pi / 6 if d == 3 else np.pi / 4
    edge = (2.0 * body / packing_fraction) ** (1.0 / d)
    rng = np.random.default_rng(7)
    for _ in range(20):
        apart = rng.normal(size=d)
        apart *= rng.uniform(1.0, 0.5 * edge) / np.linalg.norm(apart)
        start = rng.uniform(0.0, edge, d)
        positions = np.array([start, start + apart])
        frame = frame_of(positions, [edge] * d, np.full(2, 0.5))
        table, _ = frame_cages(frame, CageOptions(reach=np.inf))
        assert table.measured.all()
        found, status = compressibility_factor(frame, table)
        assert status is CompressibilityStatus.MEASURED
        assert found == pytest.approx(factor, rel=1e-7)
