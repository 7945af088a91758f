import numpy as np
import pytest
from monte_carlo import MonteCarlo
from packings import fcc
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from trajcage.analysis.order import OrderOptions, measure_order
from trajcage.analysis.regions import (
    FIELDS,
    Region,
    RegionOptions,
    RegionTable,
    find_regions,
    measure_regions,
)
from trajcage.analysis.structure import Structure
from trajcage.analysis.tracking import RegionTracker
from trajcage.model import Box, CageStatus, Frame
from trajcage.neighborhood import neighbor_list, voronoi

ALL = RegionOptions(smallest=1)


def as_frame(positions, lengths, **kinds):
    positions = np.asarray(positions, dtype=np.float64)
    radii = np.full(len(positions), 0.5)
    return Frame(positions, radii, Box.from_any(lengths, **kinds))


def chain_of(n):
    """Particles in a row, each neighbor of the next."""
    frame = as_frame(np.column_stack([np.arange(n), np.full(n, 5.0)]), [1.0 * n, 10.0])
    return frame, neighbor_list(frame, 1.1)


def table(frame, region, neighbors, options=ALL, **values):
    n = frame.n_particles
    names = ("free_volume", "packing_fraction", "weakest_window")
    arrays = [values.get(name, np.full(n, np.nan)) for name in names]
    return find_regions(frame, np.asarray(region), neighbors, *arrays, options)


def test_regions_by_definition():
    cases = [
        # structure, cage status, broken; region with and without cage breaking
        (Structure.FCC, CageStatus.CLOSED, False, Region.CRYSTAL, Region.CRYSTAL),
        (Structure.OTHER, CageStatus.OPEN, True, Region.CRYSTAL, Region.CRYSTAL),
        (Structure.UNDECIDED, CageStatus.OVERLAP, False, Region.CRYSTAL, Region.CRYSTAL),
        (Structure.DISORDERED, CageStatus.CLOSED, False, Region.GLASS, Region.GLASS),
        (Structure.DISORDERED, CageStatus.CLOSED, True, Region.FLUID, Region.GLASS),
        (Structure.DISORDERED, CageStatus.OPEN, False, Region.FLUID, Region.FLUID),
        (Structure.DISORDERED, CageStatus.BORDER, False, Region.UNKNOWN, Region.UNKNOWN),
        (Structure.DISORDERED, CageStatus.OVERLAP, True, Region.UNKNOWN, Region.UNKNOWN),
        (Structure.UNKNOWN, CageStatus.CLOSED, False, Region.UNKNOWN, Region.UNKNOWN),
    ]  # fmt: skip
    structure, status, broken, with_breaking, without = (
        np.array(column) for column in zip(*cases, strict=True)
    )
    _, neighbors = chain_of(len(cases))
    known = measure_regions(structure, status, broken, neighbors)
    assert known["region"].tolist() == with_breaking.tolist()
    assert known["glass_needs_unbroken"] == 1
    plain = measure_regions(structure, status, None, neighbors)
    assert plain["region"].tolist() == without.tolist()
    assert plain["glass_needs_unbroken"] == 0
    assert known["region_unknown"] == 3
    assert known["crystal_fraction"] == pytest.approx(3 / 6)
    assert known["glass_fraction"] == pytest.approx(1 / 6)
    assert known["fluid_fraction"] == pytest.approx(2 / 6)
    # Only the crystal particle beside a glass particle; the first one's neighbor
    # around the chain is unknown.
    assert known["interface"].tolist() == [0, 0, 1, 0, 0, 0, 0, 0, 0]


def test_results_are_the_declared_fields():
    _, neighbors = chain_of(4)
    result = measure_regions(
        np.zeros(4, np.uint8), np.zeros(4, np.uint8), None, neighbors
    )
    assert set(result) == {field.name for field in FIELDS}
    for field in FIELDS:
        value = np.asarray(result[field.name])
        assert value.dtype == field.dtype
        assert value.shape == ((4,) if field.per_particle else ())


def test_a_frame_without_known_regions_has_no_fractions():
    _, neighbors = chain_of(3)
    unknown = np.full(3, Structure.UNKNOWN, dtype=np.uint8)
    result = measure_regions(unknown, np.zeros(3, np.uint8), None, neighbors)
    assert np.isnan(result["crystal_fraction"])
    assert result["region_unknown"] == 3


def test_connected_regions_equal_scipy():
    rng = np.random.default_rng(0)
    frame = as_frame(rng.random((800, 3)) * 9, [9.0] * 3)
    neighbors = neighbor_list(frame, 1.2)
    region = rng.integers(0, 4, 800).astype(np.uint8)
    found = table(frame, region, neighbors)
    i, j = neighbors.particles, neighbors.neighbors
    same = region[i] == region[j]
    graph = coo_array((np.ones(same.sum()), (i[same], j[same])), shape=(800, 800))
    count, expected = connected_components(graph)
    known = region != Region.UNKNOWN
    pairs = np.unique(np.stack([found.label[known], expected[known]]), axis=1)
    n_known = len(np.unique(expected[known]))
    assert pairs.shape[1] == len(found.size) == n_known < count
    assert (found.label[~known] == -1).all()
    np.testing.assert_array_equal(found.size, np.bincount(found.label[known]))
    assert (np.diff(found.size) <= 0).all()
    np.testing.assert_array_equal(found.kind[found.label[known]], region[known])
    few = table(frame, region, neighbors, RegionOptions(smallest=5))
    np.testing.assert_array_equal(few.size, found.size[found.size >= 5])


def test_means_leave_out_what_is_not_finite_and_say_so():
    frame, neighbors = chain_of(10)
    region = np.array([2] * 4 + [0] * 6, dtype=np.uint8)
    volumes = np.array([1.0, 3.0, np.nan, np.nan] + [np.nan] * 6)
    found = table(frame, region, neighbors, free_volume=volumes)
    assert found.kind.tolist() == [Region.FLUID, Region.CRYSTAL]
    assert found.free_volume.tolist() == pytest.approx([np.nan, 2.0], nan_ok=True)
    assert found.n_free_volume.tolist() == [0, 2]


@pytest.mark.parametrize(
    "box", [np.diag([9.0, 8.0, 7.0]), [[9, 0, 0], [4, 8, 0], [-3, 2, 7]]]
)
def test_center_of_a_region_across_the_edges(box):  # fmt: skip
    rng = np.random.default_rng(1)
    box = np.array(box, dtype=np.float64)
    ball = rng.normal(0, 0.7, (400, 3))
    middle = np.array([0.1, 0.2, -0.1])
    frame = as_frame(middle + ball, box)
    found = table(frame, np.zeros(400, np.uint8), neighbor_list(frame, 2.0))
    away = frame.box.minimum_image(found.center - frame.positions.mean(axis=0))
    np.testing.assert_allclose(away, 0.0, atol=1e-9)
    assert np.all(frame.box.fractional(found.center) >= 0)
    assert np.all(frame.box.fractional(found.center) < 1)


def test_a_region_that_winds_around_an_edge_has_no_center_there():
    frame, neighbors = chain_of(12)
    found = table(frame, np.zeros(12, np.uint8), neighbors)
    assert np.isnan(found.center[0, 0])
    assert found.center[0, 1] == pytest.approx(5.0)


def test_center_along_an_open_edge_is_the_plain_mean():
    positions = [[0.2, 1.0], [0.6, 2.0], [1.0, 9.0]]
    frame = as_frame(positions, [5.0, 10.0], periodic="x")
    found = table(frame, np.zeros(3, np.uint8), neighbor_list(frame, 8.0))
    assert found.center[0] == pytest.approx([0.6, 4.0])


def crystallite(seed=0, radius=5.0, sweeps=400):
    """A ball of FCC crystal that was held while all around it melted."""
    rng = np.random.default_rng(seed)
    packing = fcc(10, 0.55)
    middle = packing.lengths / 2
    inside = np.linalg.norm(packing.positions - middle, axis=1) < radius
    outside = np.flatnonzero(~inside)
    drop = rng.choice(outside, int(0.22 * len(outside)), replace=False)
    keep = np.setdiff1d(np.arange(len(inside)), drop)
    chain = MonteCarlo(
        packing.positions[keep], packing.lengths, packing.radii[keep], seed
    )
    chain.freeze(np.flatnonzero(inside[keep]))
    chain.equilibrate(sweeps)
    chain.freeze()
    chain.run(15)
    return as_frame(chain.positions, chain.lengths), inside[keep], radius


def test_crystallite_in_a_fluid_is_found():
    frame, inside, radius = crystallite()
    cells = voronoi(frame)
    order = measure_order(frame, cells, OrderOptions())
    closed = np.zeros(frame.n_particles, dtype=np.uint8)
    result = measure_regions(order["structure"], closed, None, cells[1])
    apart = frame.positions - frame.box.vectors.diagonal() / 2
    distance = np.linalg.norm(apart, axis=1)
    away = np.abs(distance - radius) > 1.0  # off the surface layer
    crystal = result["region"] == Region.CRYSTAL
    hits = np.count_nonzero(crystal & inside & away)
    assert np.count_nonzero(inside & away) > 150
    assert hits / np.count_nonzero(crystal & away) > 0.95
    assert hits / np.count_nonzero(inside & away) > 0.95
    fcc_share = np.mean(order["structure"][inside & away] == Structure.FCC)
    assert fcc_share > 0.9
    # It is one region, near the middle, and its interface is its surface.
    found = table(frame, result["region"], cells[1], RegionOptions(smallest=30))
    assert np.count_nonzero(found.kind == Region.CRYSTAL) == 1
    center = found.center[found.kind == Region.CRYSTAL][0]
    assert np.linalg.norm(center - frame.box.vectors.diagonal() / 2) < 0.5
    interface = result["interface"] == 1
    assert np.median(distance[interface]) == pytest.approx(radius, abs=1.0)


def labeled(label, kind):
    label, kind = np.array(label), np.array(kind, dtype=np.uint8)
    k = len(kind)
    size = np.bincount(label[label >= 0], minlength=k)
    blank, none = np.full(k, np.nan), np.zeros(k, np.int64)
    return RegionTable(
        label, kind, size, np.zeros((k, 3)), blank, blank, blank, none, none, none
    )


def test_ids_follow_the_largest_overlap():
    ids = np.arange(10)
    tracker = RegionTracker()
    first = labeled([0, 0, 0, 0, 0, 0, 1, 1, 1, -1], [2, 0])
    assert tracker.update(ids, first).tolist() == [0, 1]
    # Region 0 splits in 4 and 2; the rows of the table come in another order.
    split = labeled([1, 1, 0, 0, 0, 0, 2, 2, 2, -1], [2, 2, 0])
    assert tracker.update(ids, split).tolist() == [0, 2, 1]
    # They merge again: the larger contribution stays, the other id is gone for good.
    merged = labeled([1, 1, 1, 1, 1, 1, 0, 0, 0, 0], [0, 2])
    assert tracker.update(ids, merged).tolist() == [1, 0]
    # A region of another kind at the same place is another region.
    frozen = labeled([0, 0, 0, 0, 0, 0, 1, 1, 1, 1], [2, 2])
    assert tracker.update(ids, frozen).tolist() == [0, 3]


def test_ids_follow_particles_not_rows():
    tracker = RegionTracker()
    tracker.update(np.array([7, 3, 9, 1]), labeled([0, 0, 1, 1], [2, 2]))
    # Particle 3 was lost and 4 is new; the order changed.
    result = tracker.update(np.array([1, 4, 9, 7]), labeled([0, 0, 0, 1], [2, 2]))
    assert result.tolist() == [1, 0]


def test_an_interrupted_tracker_goes_on_as_if_nothing_happened():
    rng = np.random.default_rng(3)
    tables = [
        labeled(rng.integers(-1, 4, 60), rng.choice([0, 1, 2], 4)) for _ in range(12)
    ]
    ids = np.arange(60)
    whole, tracker = RegionTracker(), RegionTracker()
    for frame in tables:
        expected = whole.update(ids, frame)
        resumed = RegionTracker()
        resumed.restore({k: v.copy() for k, v in tracker.state().items()})
        tracker = resumed
        np.testing.assert_array_equal(tracker.update(ids, frame), expected)
    assert whole.state().keys() == tracker.state().keys()
    assert expected.max() > 4
