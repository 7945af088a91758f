import dataclasses

import freud
import numpy as np
import pytest
from monte_carlo import MonteCarlo
from packings import bcc, fcc, hcp, triangular
from scipy.spatial.transform import Rotation

from trajcage.analysis.order import (
    OrderOptions,
    fields,
    first_shell_cutoff,
    measure_order,
)
from trajcage.analysis.structure import SHELLS, Structure
from trajcage.errors import UsageError
from trajcage.model import Box, Frame
from trajcage.neighborhood import neighbor_list, steinhardt, voronoi


def as_frame(positions, lengths, **kinds):
    positions = np.asarray(positions)
    radii = np.full(len(positions), 0.5)
    return Frame(positions, radii, Box.from_any(lengths, **kinds))


def measured(frame, **options):
    return measure_order(frame, voronoi(frame), OrderOptions(**options))


def share(result, structure):
    return np.mean(result["structure"] == structure)


def thermal(packing, sweeps=120, seed=1):
    chain = MonteCarlo(packing.positions, packing.lengths, packing.radii, seed)
    chain.equilibrate(sweeps)
    return chain


# Perfect shells: q4, q6, w4, w6 as in Steinhardt, Nelson & Ronchetti, Phys. Rev. B
# 28, 784 (1983) and Mickel et al., J. Chem. Phys. 138, 044501 (2013), to more digits
# from spherical harmonics and Wigner 3j symbols. w4 is undefined where q4 is 0.
GOLDEN = (1 + 5**0.5) / 2
CUBE = np.array(list(np.ndindex(2, 2, 2))) * 2.0 - 1
CROSS = np.concatenate([np.eye(3), -np.eye(3)])
IDEAL = {
    "fcc": (
        [[a, b, 0] for a in (1, -1) for b in (1, -1)]
        + [[a, 0, b] for a in (1, -1) for b in (1, -1)]
        + [[0, a, b] for a in (1, -1) for b in (1, -1)],
        (0.19094065, 0.57452426, -0.15931737, -0.01316060),
    ),
    "hcp": (
        [[np.cos(t), np.sin(t), 0] for t in np.arange(6) * np.pi / 3]
        + [
            [np.cos(t) / 3**0.5, np.sin(t) / 3**0.5, z * (2 / 3) ** 0.5]
            for t in np.pi / 6 + np.arange(3) * 2 * np.pi / 3
            for z in (1, -1)
        ],
        (7 / 72, 0.48476169, 0.13409705, -0.01244196),
    ),
    "bcc 8": (CUBE, (0.50917508, 0.62853936, -0.15931737, 0.01316060)),
    "bcc 14": (
        np.concatenate([CUBE, 2 * CROSS]),
        (0.03636965, 0.51068823, 0.15931737, 0.01316060),
    ),
    "sc": (CROSS, (0.76376262, 0.35355339, 0.15931737, 0.01316060)),
    "diamond": (
        [[1, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]],
        (0.50917508, 0.62853936, -0.15931737, 0.01316060),
    ),
    "icosahedron": (
        [
            np.roll([0, a, b * GOLDEN], k)
            for k in range(3)
            for a in (1, -1)
            for b in (1, -1)
        ],
        (0.0, 0.66332496, None, -0.16975389),
    ),
}


@pytest.mark.parametrize("name", IDEAL)
def test_ideal_shells(name):
    shell, (q4, q6, w4, w6) = IDEAL[name]
    turned = Rotation.from_euler("zyx", [0.3, 1.1, -0.7]).apply(np.array(shell, float))
    frame = as_frame(np.concatenate([[[0, 0, 0]], turned]) + 4, [8.0] * 3)
    pairs = neighbor_list(frame, 1.01 * np.linalg.norm(turned, axis=1).max())
    q, w, _ = steinhardt(frame, pairs, average=False)
    assert q[0] == pytest.approx([q4, q6], abs=1e-6)
    assert w[0, 1] == pytest.approx(w6, abs=1e-6)
    if w4 is not None:
        assert w[0, 0] == pytest.approx(w4, abs=1e-6)


PERFECT = {
    "fcc": (fcc(3, 0.5), Structure.FCC),
    "hcp": (hcp((4, 3, 3), 0.5), Structure.HCP),
    "bcc": (bcc(4, 0.5), Structure.BCC),
}


@pytest.mark.parametrize("name", PERFECT)
@pytest.mark.parametrize("neighbors", ["voronoi", "cutoff"])
def test_perfect_lattices_lie_on_their_references(name, neighbors):
    packing, structure = PERFECT[name]
    result = measured(as_frame(packing.positions, packing.lengths), neighbors=neighbors)
    shell = next(s for s in SHELLS[neighbors] if s.structure == structure)
    found = [result[key] for key in ("qbar4", "qbar6", "wbar4", "wbar6")]
    np.testing.assert_allclose(np.mean(found, axis=1), shell.order, atol=2e-6)
    assert np.ptp(found, axis=1).max() < 2e-5
    assert share(result, structure) == 1.0
    assert (result["solid_bonds"] >= 8).all()


@pytest.mark.parametrize("cells", [(1, 1, 1), (1, 2, 3)])
def test_small_boxes_equal_large_ones(cells):
    # freud alone takes every bond to the nearest image and gets these wrong.
    small, large = bcc(cells, 0.5), bcc(4, 0.5)
    options = {"neighbors": "cutoff", "r_max": 1.1 * large.lengths[0] / 4}
    a = measured(as_frame(small.positions, small.lengths), **options)
    b = measured(as_frame(large.positions, large.lengths), **options)
    for key in ("qbar4", "qbar6", "wbar4", "wbar6"):
        assert a[key] == pytest.approx(b[key][0], abs=1e-5)
    assert (a["solid_bonds"] == 14).all()


def test_order_is_the_same_in_a_turned_and_sheared_box():
    rng = np.random.default_rng(5)
    box = np.array([[6.0, 0, 0], [2.0, 5.5, 0], [-1.0, 2.5, 6.5]])
    positions = rng.random((200, 3)) @ box
    turn = Rotation.from_euler("zyx", [0.3, 1.1, -0.7]).as_matrix()
    sheared = box + np.array([box[0] * 0, box[0], -box[1]])
    a = measured(as_frame(positions, box))
    b = measured(as_frame(positions @ turn + 100.0, sheared @ turn))
    for key in ("qbar4", "qbar6"):
        np.testing.assert_allclose(a[key], b[key], atol=2e-4)


@pytest.mark.parametrize("packing_fraction", [0.56, 0.60, 0.65])
@pytest.mark.parametrize(
    ("lattice", "cells", "structure"),
    [
        (fcc, 5, Structure.FCC),
        (hcp, (6, 4, 4), Structure.HCP),
        (bcc, 7, Structure.BCC),
    ],
)
def test_thermal_crystals_keep_their_names(lattice, cells, structure, packing_fraction):
    # BCC of hard spheres is unstable: short runs only vibrate it.
    sweeps = 40 if lattice is bcc else 120
    chain = thermal(lattice(cells, packing_fraction), sweeps)
    result = measured(as_frame(chain.positions, chain.lengths))
    assert share(result, structure) > 0.98
    assert np.mean(result["solid_bonds"] >= 7) > 0.98


def test_equilibrium_fluid_is_disordered():
    packing = fcc(6, 0.30)
    chain = thermal(packing, 80)
    chain.compress_to(0.45)
    chain.equilibrate(100)
    frame = as_frame(chain.positions, chain.lengths)
    for neighbors in ("voronoi", "cutoff"):
        result = measured(frame, neighbors=neighbors)
        assert share(result, Structure.DISORDERED) > 0.99


@pytest.mark.parametrize("neighbors", ["voronoi", "cutoff"])
def test_solid_bonds_equal_those_of_freud(neighbors):
    # freud counts with its own lists in an orthogonal box, where it can be trusted.
    chain = thermal(fcc(5, 0.50), 60)
    frame = as_frame(chain.positions, chain.lengths)
    r_max = 1.45
    result = measured(frame, neighbors=neighbors, r_max=r_max)
    points = frame.positions - 0.5 * frame.box.lengths
    system = (freud.box.Box(*frame.box.lengths), points.astype(np.float32))
    if neighbors == "voronoi":
        found = freud.locality.Voronoi().compute(system).nlist
        # freud's SolidLiquid weighs all facets alike
        uniform = voronoi(frame)[1]
        uniform = dataclasses.replace(uniform, weights=np.ones_like(uniform.weights))
        result = measure_order(frame, (np.ones(500), uniform), OrderOptions())
    else:
        found = {"r_max": r_max}
    order = freud.order.SolidLiquid(6, 0.7, 7).compute(system, neighbors=found)
    differ = result["solid_bonds"] != order.num_connections
    assert np.ptp(result["solid_bonds"]) > 8
    assert differ.mean() < 0.01  # rounding at the threshold


@pytest.mark.parametrize("lattice", [fcc, hcp, bcc])
def test_vibrating_lattices_within_a_cutoff(lattice):
    # Between 8 and 14 neighbors a first-shell cut-off is ambiguous in BCC.
    packing = lattice(6 if lattice is not hcp else (6, 4, 4), 0.6)
    rng = np.random.default_rng(0)
    noisy = packing.positions + rng.normal(0, 0.05, packing.positions.shape)
    result = measured(as_frame(noisy, packing.lengths), neighbors="cutoff")
    assert share(result, Structure[lattice.__name__.upper()]) > 0.98


def test_simple_cubic_is_another_solid():
    positions = np.array(list(np.ndindex(6, 6, 6))) * 1.0
    rng = np.random.default_rng(0)
    noisy = positions + rng.normal(0, 0.03, positions.shape)
    result = measured(as_frame(noisy, [6.0] * 3))
    assert share(result, Structure.OTHER) > 0.98


@pytest.mark.parametrize(
    ("basis", "second"),
    [
        ([[0, 0, 0]], 2**0.5),
        (np.array([[0, 0, 0], [0, 2, 2], [2, 0, 2], [2, 2, 0],
                   [1, 1, 1], [1, 3, 3], [3, 1, 3], [3, 3, 1]]) / 4, (8 / 3) ** 0.5),
    ],
)  # fmt: skip
def test_first_shell_when_the_second_is_as_high(basis, second):
    # Simple cubic: 6 at 1, 12 at sqrt(2); diamond: 4 at 1, 12 at sqrt(8/3).
    cells = np.array(list(np.ndindex(5, 5, 5)))
    positions = (cells[:, None] + np.array(basis)).reshape(-1, 3)
    nearest = 1.0 if len(basis) == 1 else 3**0.5 / 4
    cutoff = first_shell_cutoff(as_frame(positions, [5.0] * 3))
    assert 1.05 < cutoff / nearest < second - 0.05


def test_first_shell_lies_between_the_shells():
    packing = fcc(5, 0.6)
    nearest = packing.lengths[0] / 5 / 2**0.5
    frame = as_frame(packing.positions, packing.lengths)
    assert first_shell_cutoff(frame) / nearest == pytest.approx(1.207, abs=0.03)
    chain = thermal(packing)
    thermal_frame = as_frame(chain.positions, chain.lengths)
    assert 1.15 < first_shell_cutoff(thermal_frame) / nearest < 1.35


def plane(kind, noise, m=16):
    rng = np.random.default_rng(3)
    if kind == "square":
        positions = np.array(list(np.ndindex(m, m))) * 1.0
        lengths = np.array([m, m]) * 1.0
    else:
        positions, lengths, _ = triangular((m, 9), 0.8)
    return as_frame(positions + rng.normal(0, noise, positions.shape), lengths)


def test_psi_of_perfect_planes():
    # |psi_6| is 1 on the triangular and 0 on the square lattice, |psi_4| the reverse.
    hexagonal = measured(plane("triangular", 0.0))
    np.testing.assert_allclose(hexagonal["psi6"], 1.0, atol=1e-5)
    np.testing.assert_allclose(hexagonal["psi4"], 0.0, atol=1e-5)
    quadratic = measured(plane("square", 0.0))
    np.testing.assert_allclose(quadratic["psi4"], 1.0, atol=1e-5)
    np.testing.assert_allclose(quadratic["psi6"], 0.0, atol=1e-5)


@pytest.mark.parametrize("kind", ["triangular", "square"])
def test_vibrating_planes(kind):
    result = measured(plane(kind, 0.05))
    assert share(result, Structure[kind.upper()]) > 0.98


def test_disk_crystal_and_fluid():
    solid = thermal(triangular((20, 12), 0.76), 150)
    result = measured(as_frame(solid.positions, solid.lengths))
    assert share(result, Structure.TRIANGULAR) > 0.95
    fluid = thermal(triangular((20, 12), 0.50), 200)
    result = measured(as_frame(fluid.positions, fluid.lengths))
    assert share(result, Structure.DISORDERED) > 0.95


@pytest.mark.parametrize("neighbors", ["voronoi", "cutoff"])
def test_open_edges_leave_order_unknown_next_to_them(neighbors):
    packing = fcc(6, 0.6)
    whole = as_frame(packing.positions + 0.1, packing.lengths)
    slab = as_frame(packing.positions + 0.1, packing.lengths, periodic="xy")
    expected = measured(whole, neighbors=neighbors)
    result = measured(slab, neighbors=neighbors)
    unknown = result["structure"] == Structure.UNKNOWN
    assert 0.2 < unknown.mean() < 0.8
    assert (result["solid_bonds"][unknown] == -1).all()
    for key in ("qbar4", "qbar6", "wbar4", "wbar6"):
        np.testing.assert_array_equal(np.isnan(result[key]), unknown)
        np.testing.assert_allclose(
            result[key][~unknown], expected[key][~unknown], atol=2e-5
        )


@pytest.mark.parametrize("dimensions", [2, 3])
def test_results_are_the_declared_fields(dimensions):
    packing = triangular(5, 0.6) if dimensions == 2 else fcc(3, 0.5)
    frame = as_frame(packing.positions, packing.lengths)
    result = measured(frame)
    declared = fields(dimensions)
    assert set(result) == {field.name for field in declared}
    for field in declared:
        value = np.asarray(result[field.name])
        assert value.dtype == field.dtype
        assert value.shape == ((frame.n_particles,) if field.per_particle else ())


def test_unknown_neighbor_rule_is_refused():
    with pytest.raises(UsageError, match="voronoi"):
        OrderOptions(neighbors="nearest")
