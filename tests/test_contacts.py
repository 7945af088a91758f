import numpy as np
import pytest
from jammed_packings import jammed_packing
from monte_carlo import MonteCarlo
from packings import binary, fcc, hcp, polydisperse, triangular
from scipy.optimize import linprog

from trajcage.analysis.contacts import (
    UNKNOWN,
    ContactOptions,
    fields,
    measure_contacts,
)
from trajcage.errors import FrameError, UsageError
from trajcage.kernel.halfspace import loose
from trajcage.model import Box, Frame


def as_frame(positions, lengths, radii=0.5, **kinds):
    positions = np.asarray(positions, dtype=np.float64)
    radii = np.broadcast_to(radii, len(positions)).astype(np.float64)
    return Frame(positions, radii, Box.from_any(lengths, **kinds))


def unit(vectors):
    vectors = np.asarray(vectors, dtype=np.float64)
    return vectors / np.linalg.norm(vectors, axis=1, keepdims=True)


def held(directions):
    """Whether a sphere with fixed neighbors in these directions is held."""
    m = len(directions)
    offsets = np.array([0] + [m] * (m + 1))
    fixed = np.arange(m + 1) > 0
    gaps = np.zeros(m)
    return not loose(offsets, np.arange(1, m + 1), directions, gaps, 1.0, fixed)[0]


def fits_a_half_space(directions):
    """Whether n.u >= 0 for all u has a solution n != 0, by linear programming."""
    d = directions.shape[1]
    best = [
        linprog(sign * axis, A_ub=-directions, b_ub=np.zeros(len(directions)),
                bounds=[(-1, 1)] * d).fun
        for axis in np.eye(d)
        for sign in (1, -1)
    ]  # fmt: skip
    return min(best) < -1e-7


@pytest.mark.parametrize("dimensions", [2, 3])
def test_half_space_test_equals_linear_programming(dimensions):
    rng = np.random.default_rng(dimensions)
    verdicts = []
    for _ in range(60):
        count = rng.integers(1, 9)
        directions = unit(rng.normal(size=(count, dimensions)))
        verdicts.append(held(directions))
        assert verdicts[-1] != fits_a_half_space(directions)
    assert 0.1 < np.mean(verdicts) < 0.9


TRIPOD = unit([[1, 0, 1], [-1, 3**0.5, 2], [-1, -(3**0.5), 2]])


@pytest.mark.parametrize(
    ("directions", "expected"),
    [
        ([[1, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]], True),  # tetrahedron
        ([*TRIPOD, [0, 0, 1]], False),  # d+1 contacts, all above a plane
        ([*TRIPOD, [0, 0, -1]], True),
        ([[1, 0, 0], [-1, 0, 0], [0, 1, 0], [0, -1, 0]], False),  # all in a plane
        ([[1, 0, 0], [-1, 0, 0], [0, 1, 0], [0, -1, 0], [0, 0, 1]], False),  # closed
        ([[1, 0, 0], [-1, 0, 0], [0, 1, 0], [0, -1, 0], [1, 1, 1], [0, 1, -1]], True),
        ([[1, 0, 0], [-1, 0, 0], [1, 0, 0], [-1, 0, 0], [1, 0, 0]], False),  # a line
        ([[1, 0], [-1, 0], [0, 1]], False),
        ([[1, 0], [-1, 0], [0, 1], [0, -1]], True),
        ([[1, 0], [-1, 3**0.5], [-1, -(3**0.5)]], True),
        ([[1, 0], [-1, 0], [1, 0]], False),
    ],
)
def test_half_space_by_hand(directions, expected):
    rng = np.random.default_rng(0)
    directions = unit(directions)
    turn = np.linalg.qr(rng.normal(size=(directions.shape[1],) * 2))[0]
    for vectors in (directions, directions @ turn, directions[::-1].copy()):
        assert held(np.ascontiguousarray(vectors)) == expected


def cage_of_two(positions, **options):
    return measure_contacts(as_frame(positions, [9.0, 9.0]), ContactOptions(**options))


def test_disk_in_a_half_plane_of_contacts_is_a_rattler():
    # Three contacts above the middle disk: enough by number, not by direction.
    angles = np.radians([30, 90, 150])
    around = np.column_stack([np.cos(angles), np.sin(angles)])
    result = cage_of_two(np.concatenate([[[0.0, 0.0]], around]) + 4.5, tolerance=1e-9)
    assert result["contacts"].tolist()[0] == 3
    assert result["rattler"][0] == 1


def test_rattlers_are_removed_recursively():
    # A strip of the square lattice that wraps around x and has free surfaces: the
    # outer rows rest on a closed half-plane. The inner rows hold on to four contacts
    # and lose them row by row.
    strip = as_frame(np.array(list(np.ndindex(10, 7))) + 0.5, [10.0, 12.0])
    result = measure_contacts(strip, ContactOptions(tolerance=1e-9))
    assert np.bincount(result["contacts"]).tolist() == [0, 0, 0, 20, 50]
    assert held(unit([[1, 0], [-1, 0], [0, 1], [0, -1]]))
    assert (result["rattler"] == 1).all()
    # Without surfaces the square lattice holds itself.
    full = as_frame(np.array(list(np.ndindex(10, 12))) + 0.5, [10.0, 12.0])
    result = measure_contacts(full, ContactOptions(tolerance=1e-9))
    assert (result["rattler"] == 0).all()
    assert result["backbone_coordination"] == pytest.approx(4.0)


def test_a_rattler_takes_those_along_that_hang_on_it():
    # A honeycomb holds each disk by exactly d + 1 contacts, so one defect in a strand
    # of contacts unravels everything; in the triangular lattice it stays alone.
    cell = np.array([[0, 0], [0, 1], [3**0.5 / 2, 1.5], [3**0.5 / 2, 2.5]])
    shift = np.array(list(np.ndindex(6, 4))) * [3**0.5, 3.0]
    positions = (shift[:, None] + cell).reshape(-1, 2)
    lengths = [6 * 3**0.5, 12.0]
    options = ContactOptions(tolerance=1e-9)
    whole = measure_contacts(as_frame(positions, lengths), options)
    assert (whole["contacts"] == 3).all()
    assert (whole["rattler"] == 0).all()
    broken = measure_contacts(as_frame(positions[1:], lengths), options)
    assert (broken["rattler"] == 1).all()
    assert np.isnan(broken["backbone_coordination"])

    packing = triangular((12, 8), np.pi / 12**0.5 * (1 - 1e-12))
    vacancy = as_frame(packing.positions[1:], packing.lengths)
    result = measure_contacts(vacancy, options)
    assert (result["rattler"] == 0).all()
    assert np.bincount(result["contacts"])[5:].tolist() == [6, 185]


@pytest.mark.parametrize("lattice", [fcc, hcp])
def test_close_packed_crystal(lattice):
    cells = 4 if lattice is fcc else (5, 3, 3)
    packing = lattice(cells, 2**0.5 * np.pi / 6 * (1 - 1e-12))
    result = measure_contacts(
        as_frame(packing.positions, packing.lengths), ContactOptions(tolerance=1e-8)
    )
    assert (result["contacts"] == 12).all()
    assert result["rattler_fraction"] == result["rattler_plateau"] == 0.0
    n = len(packing.positions)
    # 2 d (1 - 1/N') + 2/N' contacts: d (N' - 1) + 1 pairs.
    assert result["isostatic_coordination"] * n / 2 == pytest.approx(3 * (n - 1) + 1)


def test_a_caged_particle_in_a_crystal_is_the_only_rattler():
    packing = fcc(4, 2**0.5 * np.pi / 6 * (1 - 1e-12))
    radii = packing.radii.copy()
    radii[17] = 0.3
    result = measure_contacts(
        as_frame(packing.positions, packing.lengths, radii), ContactOptions()
    )
    assert np.flatnonzero(result["rattler"]).tolist() == [17]
    assert result["rattler_plateau"] == pytest.approx(1 / 256)
    first, last = result["rattler_plateau_range"]
    assert first <= 1e-10
    assert last >= 1e-2


def test_unequal_disks_touch_at_the_sum_of_their_radii():
    positions = [[2.0, 2.0], [3.5, 2.0], [6.0, 2.0], [6.0, 4.5]]
    frame = as_frame(positions, [20.0, 20.0], [0.5, 1.0, 1.5, 1.0])
    result = measure_contacts(frame, ContactOptions(tolerance=1e-9))
    assert result["contacts"].tolist() == [1, 2, 2, 1]


@pytest.fixture(scope="module", params=["disks", "spheres"])
def jammed(request):
    if request.param == "disks":
        return jammed_packing(60, seed=4, radii=binary(60, 1.4), dimensions=2)
    return jammed_packing(48, seed=1, radii=polydisperse(48, 0.1))


def as_packed(jammed, digits=15):
    packing = jammed.packing
    return as_frame(np.round(packing.positions, digits), packing.lengths, packing.radii)


def test_jammed_packing_is_isostatic(jammed):
    # d (N' - 1) + 1 contacts hold N' particles in a periodic box: exactly isostatic,
    # as the packings of Atkinson, Stillinger & Torquato, Phys. Rev. E 88, 062208 (2013).
    frame = as_packed(jammed)
    result = measure_contacts(frame, ContactOptions())
    np.testing.assert_array_equal(result["rattler"] == 1, jammed.rattlers)
    backbone = np.count_nonzero(~jammed.rattlers)
    pairs = result["backbone_coordination"] * backbone / 2
    assert pairs == pytest.approx(frame.dimensions * (backbone - 1) + 1)
    assert pairs == pytest.approx(len(jammed.contacts))
    assert result["backbone_coordination"] == pytest.approx(
        result["isostatic_coordination"]
    )
    assert result["rattler_plateau"] == pytest.approx(jammed.rattlers.mean())
    first, last = result["rattler_plateau_range"]
    assert first <= 10 * max(jammed.largest_gap, 1e-12)
    assert last >= 10 ** (np.floor(2 * np.log10(jammed.next_gap)) / 2)


def test_rounded_coordinates_shorten_the_plateau(jammed):
    frame = as_packed(jammed, digits=6)
    result = measure_contacts(frame, ContactOptions(tolerance=1e-5))
    np.testing.assert_array_equal(result["rattler"] == 1, jammed.rattlers)
    first, _ = result["rattler_plateau_range"]
    assert 1e-8 < first < 1e-5
    assert result["rattler_fraction_curve"][0] == 1.0


def test_thermal_configurations_have_no_plateau():
    packing = fcc(5, 0.6)
    chain = MonteCarlo(packing.positions, packing.lengths, packing.radii, 1)
    chain.equilibrate(60)
    result = measure_contacts(
        as_frame(chain.positions, chain.lengths), ContactOptions()
    )
    assert np.isnan(result["rattler_plateau"])
    assert np.isnan(result["rattler_plateau_range"]).all()
    curve = result["rattler_fraction_curve"]
    assert (np.diff(curve) <= 0).all()
    assert curve[0] == 1.0
    assert curve[-1] < 0.9


def test_curve_holds_the_chosen_tolerance():
    packing = fcc(5, 0.6)
    chain = MonteCarlo(packing.positions, packing.lengths, packing.radii, 1)
    chain.equilibrate(60)
    frame = as_frame(chain.positions, chain.lengths)
    options = ContactOptions(tolerance=0.1, tolerances=(0.05, 0.1, 0.15))
    result = measure_contacts(frame, options)
    assert result["rattler_fraction"] == result["rattler_fraction_curve"][1]
    assert result["rattler_fraction"] == np.mean(result["rattler"] == 1)


def test_particles_at_an_open_edge_are_not_judged():
    packing = fcc(5, 2**0.5 * np.pi / 6 * (1 - 1e-12))
    frame = as_frame(packing.positions + 0.3, packing.lengths, periodic="xy")
    result = measure_contacts(frame, ContactOptions(tolerance=1e-8))
    edge = result["rattler"] == UNKNOWN
    height = frame.positions[:, 2]
    np.testing.assert_array_equal(
        edge, (height < 1.0) | (height > packing.lengths[2] - 1.0)
    )
    assert result["rattler_unknown"] == edge.sum() > 0
    assert result["rattler_fraction"] == 0.0
    assert result["backbone_coordination"] == pytest.approx(12.0)


def test_tolerance_follows_the_resolution_of_the_coordinates():
    packing = fcc(2, 0.5)
    box = Box.from_any(packing.lengths)
    coarse = Frame(packing.positions, packing.radii, box, resolution=1e-4)
    assert measure_contacts(coarse, ContactOptions())["contact_tolerance"] == 4e-4
    fine = Frame(packing.positions, packing.radii, box, resolution=1e-12)
    assert measure_contacts(fine, ContactOptions())["contact_tolerance"] == 1e-6


def test_results_are_the_declared_fields():
    packing = fcc(2, 0.5)
    options = ContactOptions(tolerances=(1e-3, 1e-2))
    result = measure_contacts(as_frame(packing.positions, packing.lengths), options)
    declared = fields(options)
    assert set(result) == {field.name for field in declared}
    for field in declared:
        value = np.asarray(result[field.name])
        assert value.dtype == field.dtype
        assert value.shape == ((32,) if field.per_particle else field.shape)


def test_coincident_centers_are_refused():
    positions = [[1.0, 1.0], [1.0, 1.0], [3.0, 3.0]]
    with pytest.raises(FrameError, match="particles 0, 1"):
        measure_contacts(as_frame(positions, [9.0, 9.0]), ContactOptions())


@pytest.mark.parametrize(
    "options", [{"tolerance": 0.0}, {"tolerance": 2.0}, {"tolerances": (0.1, 0.01)}]
)
def test_tolerances_without_meaning_are_refused(options):
    with pytest.raises(UsageError, match="tolerance"):
        ContactOptions(**options)
