"""The Monte Carlo that makes test configurations, against exact and published laws."""

import math

import numpy as np
import pytest
from monte_carlo import (
    MonteCarlo,
    bcc,
    binary,
    compressibility_factor,
    fcc,
    hcp,
    polydisperse,
    random_fluid,
    triangular,
)
from scipy.spatial import cKDTree
from scipy.stats import kstest


def kolafa_labik_malijevsky(phi):
    """Z of the hard-sphere fluid: Kolafa, Labik, Malijevsky 2004, PCCP 6, 2335."""
    x = phi / (1 - phi)
    powers = {
        0: 1, 1: 4, 2: 6, 3: 2.3647684, 4: -0.8698551, 5: 1.1062803, 6: -1.1014221,
        7: 0.66605866, 8: -0.03633431, 10: -0.20965164, 14: 0.10555569, 22: -0.00872380,
    }  # fmt: skip
    return sum(c * x**k for k, c in powers.items())


def hall_solid(phi):
    """Z of the FCC hard-sphere crystal: Hall 1972, J Chem Phys 57, 2252."""
    compactness = phi / (math.sqrt(2) * math.pi / 6)
    g = 4 * (1 - compactness)
    powers = [2.557696, 0.1253077, 0.1762393, -1.053308, 2.818621, -2.921934, 1.118413]
    return 3 / (1 / compactness - 1) + sum(c * g**k for k, c in enumerate(powers))


def boublik_mansoori(phi, diameters):
    """Z of a hard-sphere mixture: Boublik 1970, J Chem Phys 53, 471; Mansoori et al.

    1971, J Chem Phys 54, 1523 (formula from memory, gives Carnahan-Starling when all
    diameters are equal).
    """
    m = [np.mean(diameters**k) * phi / np.mean(diameters**3) for k in range(4)]
    u = 1 - m[3]
    total = m[0] / u + 3 * m[1] * m[2] / u**2 + (3 - m[3]) * m[2] ** 3 / u**3
    return total / m[0]


@pytest.mark.parametrize(
    ("builder", "phi", "neighbors", "distance"),
    [
        # sigma / a at these packing fractions from the close-packed ones, textbook:
        # FCC and HCP sqrt(2) pi / 6, BCC sqrt(3) pi / 8, triangular pi / (2 sqrt(3))
        (fcc, 0.545, 12, (math.sqrt(2) * math.pi / 6 / 0.545) ** (1 / 3)),
        (hcp, 0.60, 12, (math.sqrt(2) * math.pi / 6 / 0.60) ** (1 / 3)),
        (bcc, 0.60, 8, (math.sqrt(3) * math.pi / 8 / 0.60) ** (1 / 3)),
        (triangular, 0.72, 6, (math.pi / (2 * math.sqrt(3)) / 0.72) ** (1 / 2)),
    ],
)
def test_lattices_have_their_neighbors_at_their_distance(
    builder, phi, neighbors, distance
):
    crystal = builder(4, phi)
    simulation = MonteCarlo(*crystal, seed=1)
    assert simulation.packing_fraction == pytest.approx(phi, rel=1e-12)
    tree = cKDTree(crystal.positions, boxsize=crystal.lengths)
    found, _ = tree.query(crystal.positions, k=neighbors + 2)
    np.testing.assert_allclose(found[:, 1 : neighbors + 1], distance, rtol=1e-9)
    assert (found[:, neighbors + 1] > 1.1 * distance).all()
    assert 1 < simulation.smallest_ratio() <= distance * (1 + 1e-12)


@pytest.mark.parametrize("dimensions", [2, 3])
def test_two_particles_fill_the_free_part_of_the_box_uniformly(dimensions):
    """N = 2: exact, all separations outside the excluded ball are equally likely."""
    start = np.array([[0.0] * dimensions, [1.2] * dimensions])
    simulation = MonteCarlo(start, [2.5] * dimensions, 0.5, seed=3)
    simulation.step = 0.8
    distances = np.empty(20_000)
    for sample in range(len(distances)):
        simulation.run(5)
        apart = np.subtract(*simulation.positions)
        apart -= 2.5 * np.rint(apart / 2.5)
        distances[sample] = np.linalg.norm(apart)
    assert distances.min() >= 1.0
    inside = distances[distances < 1.25]
    scaled = (inside**dimensions - 1) / (1.25**dimensions - 1)
    assert kstest(scaled, "uniform").pvalue > 1e-3
    ball = math.pi if dimensions == 2 else 4 * math.pi / 3
    share = ball * (1.25**dimensions - 1) / (2.5**dimensions - ball)
    error = math.sqrt(share * (1 - share) / len(distances))
    assert len(inside) / len(distances) == pytest.approx(share, abs=5 * error)


def test_fluid_pressure_is_the_published_one():
    simulation = random_fluid(400, 0.40, seed=5, sweeps=1000)
    z, error = compressibility_factor(simulation, 1000)
    assert error < 0.06
    # finite size: about 1/N of Z - 1
    assert z == pytest.approx(kolafa_labik_malijevsky(0.40), abs=4 * error + 0.02)


def test_room_to_the_first_overlap_gives_the_same_pressure():
    """Exact for N to infinity: the smallest gap is exponential, rate d N (Z - 1).

    Eppenga and Frenkel 1984, Mol Phys 52, 1303 (method; citation from memory).
    """
    simulation = random_fluid(256, 0.40, seed=6, sweeps=1000)
    gaps = np.empty(3000)
    for sample in range(len(gaps)):
        simulation.run(3)
        gaps[sample] = simulation.smallest_ratio() - 1
    assert gaps.min() >= 0
    expected = 3 * 256 * (kolafa_labik_malijevsky(0.40) - 1)
    assert 1 / gaps.mean() == pytest.approx(expected, rel=4 / math.sqrt(3000) + 0.01)


def test_crystal_pressure_is_the_published_one():
    simulation = MonteCarlo(*fcc(4, 0.58), seed=7)
    simulation.equilibrate(1000)
    z, error = compressibility_factor(simulation, 1000, upper=1.05)
    assert error < 0.2
    assert z == pytest.approx(hall_solid(0.58), abs=4 * error + 0.06)


def test_mixture_pressure_is_the_published_one():
    radii = binary(400, 1.4)
    simulation = random_fluid(400, 0.40, radii, seed=8, sweeps=500, swap_fraction=0.1)
    simulation.run(100, swap_fraction=0.1)
    assert simulation.swap_acceptance > 0.01
    z, error = compressibility_factor(simulation, 1000)
    assert error < 0.06
    expected = boublik_mansoori(0.40, 2 * radii)
    assert z == pytest.approx(expected, abs=4 * error + 0.02)


def test_disk_pressure_is_the_published_one():
    """Li et al. 2022, J Chem Phys 157, 234111: N = 72, box 1 : sqrt(3)/2."""
    simulation = random_fluid(
        72, 0.67, seed=9, dimensions=2, shape=[1, math.sqrt(3) / 2], sweeps=5000
    )
    assert simulation.lengths[1] / simulation.lengths[0] == pytest.approx(0.75**0.5)
    z, error = compressibility_factor(simulation, 8000, interval=10)
    pressure = z * 0.67 / (math.pi / 4)
    assert error < 0.15
    assert pressure == pytest.approx(7.98553, abs=4 * error * 0.67 / (math.pi / 4))


def test_same_seed_same_chain_however_it_is_cut():
    chains = [MonteCarlo(*fcc(3, 0.50), seed=11) for _ in range(2)]
    chains[0].run(20)
    chains[1].run(8)
    chains[1].run(12)
    assert np.array_equal(chains[0].unwrapped, chains[1].unwrapped)
    other = MonteCarlo(*fcc(3, 0.50), seed=12)
    other.run(20)
    assert not np.array_equal(chains[0].unwrapped, other.unwrapped)


def test_a_fluid_is_made_the_same_way_twice():
    radii = polydisperse(60, 0.1)
    first, second = (
        random_fluid(60, 0.5, radii, seed=3, sweeps=20, swap_fraction=0.1)
        for _ in range(2)
    )
    assert np.array_equal(first.unwrapped, second.unwrapped)
    assert np.array_equal(first.radii, second.radii)


def test_run_keeps_the_step_and_the_cells():
    radii = polydisperse(200, 0.1)
    simulation = random_fluid(200, 0.45, radii, seed=13, sweeps=100)
    step = simulation.step
    before = simulation.unwrapped
    simulation.run(500, swap_fraction=0.2)
    assert simulation.step == step
    assert 0.1 < simulation.acceptance < 0.6
    # the cell list and the k-d tree see the same closest pair, and no overlap
    ratios = simulation.pair_ratios(1.1)
    assert simulation.smallest_ratio() == pytest.approx(ratios.min(), rel=1e-12)
    assert ratios.min() >= 1
    wrapped = simulation.unwrapped - simulation.positions
    np.testing.assert_allclose(wrapped, simulation.images * simulation.lengths)
    assert np.abs(simulation.unwrapped - before).max() < simulation.lengths.min() / 2
    assert np.abs(simulation.positions - before).max() > simulation.lengths.min() / 2
    np.testing.assert_allclose(np.sort(simulation.radii), radii)


def test_frozen_particles_stay():
    simulation = MonteCarlo(*fcc(3, 0.40), seed=14)
    before = simulation.positions
    simulation.freeze([0, 5, 17])
    simulation.run(50)
    moved = (simulation.positions != before).any(axis=1)
    assert np.flatnonzero(~moved).tolist() == [0, 5, 17]


def test_compression_reaches_the_density_and_stops_at_jamming():
    simulation = random_fluid(60, 0.55, polydisperse(60, 0.1), seed=15, sweeps=10)
    assert simulation.packing_fraction == pytest.approx(0.55, rel=1e-12)
    assert simulation.smallest_ratio() >= 1
    with pytest.raises(RuntimeError, match="stuck"):
        simulation.compress_to(0.80, sweeps=1)
    assert simulation.smallest_ratio() >= 1
    assert 0.58 < simulation.packing_fraction < 0.72


def test_radii_have_the_spread_asked_for():
    radii = polydisperse(1000, 0.08)
    assert radii.mean() == pytest.approx(0.5)
    assert radii.std() / radii.mean() == pytest.approx(0.08)
    mixed = binary(10, 1.4, large_fraction=0.3)
    assert np.count_nonzero(mixed == 0.5 * 1.4) == 3
    assert np.count_nonzero(mixed == 0.5) == 7


def test_impossible_starts_are_refused():
    with pytest.raises(ValueError, match="do not overlap"):
        MonteCarlo([[0, 0, 0], [0.9, 0, 0]], [4, 4, 4], 0.5, seed=0)
    with pytest.raises(ValueError, match="two diameters"):
        MonteCarlo([[0, 0, 0]], [4, 4, 1.9], 0.5, seed=0)
    with pytest.raises(ValueError, match="lengths"):
        MonteCarlo([[0, 0, 0]], [4, 4], 0.5, seed=0)
