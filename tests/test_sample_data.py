"""The sample files are what sample-data/README.md says, read by gsd and MDAnalysis."""

import csv
import math
from pathlib import Path

import freud
import gsd.hoomd
import MDAnalysis
import numpy as np
import pytest
from scipy.spatial import cKDTree

FOLDER = Path(__file__).parents[1] / "sample-data"
DIAMETER = 1.62


def worst_overlap(positions, lengths, radii):
    """Largest overlap of two particles, negative if all are apart."""
    points = np.asarray(positions, dtype=np.float64) % lengths
    points[points >= lengths] = 0.0
    tree = cKDTree(points, boxsize=lengths)
    pairs = tree.query_pairs(2.05 * radii.max(), output_type="ndarray")
    apart = points[pairs[:, 0]] - points[pairs[:, 1]]
    apart -= lengths * np.rint(apart / lengths)
    return (radii[pairs].sum(axis=1) - np.linalg.norm(apart, axis=1)).max()


def read_gsd(name):
    with gsd.hoomd.open(FOLDER / name) as trajectory:
        return list(trajectory)


def read_dump():
    """All frames in full precision: step, lengths and the numbered columns."""
    text = (FOLDER / "batch9-glass.lammpstrj").read_text(encoding="ascii")
    frames = []
    for block in text.split("ITEM: TIMESTEP\n")[1:]:
        lines = block.splitlines()
        assert lines[3] == "ITEM: BOX BOUNDS pp pp pp"
        assert lines[7] == "ITEM: ATOMS id type x y z radius ix iy iz"
        lengths = np.array([float(line.split()[1]) for line in lines[4:7]])
        frames.append((int(lines[0]), lengths, np.loadtxt(lines[8:])))
    return frames


@pytest.fixture(scope="module")
def dump():
    return read_dump()


def solid(frame):
    """Solid by bond order: 7 bonds above 0.7 (Filion et al. 2010, from memory)."""
    order = freud.order.SolidLiquid(l=6, q_threshold=0.7, solid_threshold=7)
    order.compute(frame, neighbors={"r_max": 1.45 * DIAMETER})
    return order.num_connections >= 7


def test_the_folder_is_small_and_complete():
    files = [path for path in FOLDER.iterdir() if not path.name.startswith(".")]
    assert {path.name for path in files} == {
        "README.md",
        "batch7-crystal.gsd",
        "batch7-crystallite-seed.csv",
        "batch7-crystallite.gsd",
        "batch7-fluid.gro",
        "batch7-fluid.xtc",
        "batch7-monolayer.gsd",
        "batch9-glass.lammpstrj",
    }
    assert sum(path.stat().st_size for path in files) < 10_000_000


@pytest.mark.parametrize(
    ("name", "n_particles", "n_frames", "interval", "phi", "dimensions", "resolution"),
    [
        ("batch7-crystal.gsd", 864, 20, 500, 0.58, 3, 1e-6),
        ("batch7-crystallite.gsd", 4000, 5, 200, 0.52, 3, 1e-6),
        ("batch7-monolayer.gsd", 1024, 20, 2000, 0.69, 2, 2e-6),
    ],
)
def test_gsd_files(name, n_particles, n_frames, interval, phi, dimensions, resolution):
    frames = read_gsd(name)
    assert [frame.configuration.step for frame in frames] == list(
        range(0, n_frames * interval, interval)
    )
    volume = math.pi / 4 if dimensions == 2 else math.pi / 6
    for frame in frames:
        assert frame.configuration.dimensions == dimensions
        assert n_particles == frame.particles.N
        diameters = frame.particles.diameter.astype(np.float64)
        np.testing.assert_allclose(diameters, DIAMETER, rtol=1e-7)
        lengths = frame.configuration.box[:dimensions].astype(np.float64)
        assert (frame.configuration.box[3:] == 0).all()
        found = volume * (diameters**dimensions).sum() / lengths.prod()
        assert found == pytest.approx(phi, rel=1e-6)
        positions = frame.particles.position[:, :dimensions]
        assert (frame.particles.position[:, dimensions:] == 0).all()
        assert (np.abs(positions) <= 0.5 * lengths * (1 + 1e-6)).all()
        overlap = worst_overlap(positions, lengths, diameters / 2)
        # a thermal dense system has pairs near contact
        assert -0.01 < overlap < 2 * math.sqrt(3) * resolution
    moved = frames[-1].particles.position - frames[0].particles.position
    assert (moved[:, :dimensions] != 0).any(axis=1).all()


def test_the_crystal_stays_on_its_lattice():
    for frame in read_gsd("batch7-crystal.gsd")[::19]:
        assert solid(frame).all()


def test_the_seed_is_the_crystal_in_the_fluid():
    with (FOLDER / "batch7-crystallite-seed.csv").open(newline="") as source:
        rows = list(csv.DictReader(source))
    seed = np.array([int(row["particle"]) for row in rows])
    distance = np.array([float(row["start_distance_from_center_um"]) for row in rows])
    assert len(seed) == len(set(seed.tolist())) == 603
    frames = read_gsd("batch7-crystallite.gsd")
    inside = np.zeros(4000, dtype=bool)
    inside[seed] = True
    for frame in frames:
        ordered = solid(frame)
        assert ordered[inside].mean() > 0.8
        assert ordered[~inside].mean() < 0.06
    # the seed has not yet moved away from where it was put: frame by frame distance
    now = np.linalg.norm(frames[0].particles.position[seed], axis=1)
    core = distance < 0.6 * distance.max()
    np.testing.assert_allclose(now[core], distance[core], atol=0.5 * DIAMETER)
    # number of particles in a ball of this radius at the density of the crystal
    assert distance.max() == pytest.approx(
        0.5 * DIAMETER * (603 / 0.52) ** (1 / 3), rel=0.03
    )


def test_the_fluid_frames():
    universe = MDAnalysis.Universe(
        FOLDER / "batch7-fluid.gro",
        FOLDER / "batch7-fluid.xtc",
        convert_units=False,
        refresh_offsets=True,
    )
    assert len(universe.atoms) == 1372
    assert len(universe.trajectory) == 60
    radii = np.full(1372, DIAMETER / 2)
    for index, frame in enumerate(universe.trajectory):
        assert frame.time == 500 * index
        lengths = frame.dimensions[:3].astype(np.float64)
        assert 1372 * math.pi / 6 * DIAMETER**3 / lengths.prod() == pytest.approx(
            0.45, rel=1e-6
        )
        assert frame.positions.min() > -1e-5
        assert (frame.positions < lengths + 1e-5).all()
        overlap = worst_overlap(frame.positions, lengths, radii)
        assert -0.01 < overlap < 2 * math.sqrt(3) * 5e-6
        assert solid((freud.Box(*lengths), frame.positions)).mean() < 0.01
    topology = MDAnalysis.Universe(FOLDER / "batch7-fluid.gro", convert_units=False)
    np.testing.assert_allclose(topology.dimensions[:3], lengths, atol=1e-5)
    first = universe.trajectory[0].positions
    np.testing.assert_allclose(topology.atoms.positions, first, atol=1.2e-5)


def test_the_glass_frames(dump):
    assert [step for step, _, _ in dump] == list(range(0, 120_000, 2000))
    radii = dump[0][2][:, 5]
    assert 2 * radii.mean() == pytest.approx(DIAMETER, rel=1e-6)
    assert radii.std() / radii.mean() == pytest.approx(0.10, rel=1e-6)
    unwrapped = []
    for _, lengths, columns in dump:
        assert (columns[:, 0] == np.arange(1, 1001)).all()
        assert (columns[:, 5] == radii).all()
        solid_volume = 4 * math.pi / 3 * (radii**3).sum()
        assert solid_volume / lengths.prod() == pytest.approx(0.58, rel=1e-8)
        overlap = worst_overlap(columns[:, 2:5], lengths, radii)
        assert -0.01 < overlap < 2 * math.sqrt(3) * 5e-9
        unwrapped.append(columns[:, 2:5] + columns[:, 6:9] * lengths)
    assert (dump[0][2][:, 6:9] == 0).all()
    # the image flags make every path continuous
    assert np.abs(np.diff(unwrapped, axis=0)).max() < 0.25 * dump[0][1].min()


def test_most_cages_of_the_glass_hold_and_some_break(dump):
    """Bonded below 1.35, broken above 1.6: as in Yamamoto and Onuki 1998 (habit)."""
    radii = dump[0][2][:, 5]
    ratios = []
    pairs = None
    for _, lengths, columns in (dump[0], dump[-1]):
        if pairs is None:
            tree = cKDTree(columns[:, 2:5] % lengths, boxsize=lengths)
            pairs = tree.query_pairs(2.7 * radii.max(), output_type="ndarray")
        apart = columns[pairs[:, 0], 2:5] - columns[pairs[:, 1], 2:5]
        apart -= lengths * np.rint(apart / lengths)
        ratios.append(np.linalg.norm(apart, axis=1) / radii[pairs].sum(axis=1))
    bonded = ratios[0] < 1.35
    lost = bonded & (ratios[1] > 1.6)
    neighbors = np.bincount(pairs[bonded].ravel(), minlength=1000)
    gone = np.bincount(pairs[lost].ravel(), minlength=1000)
    assert np.count_nonzero(2 * gone >= neighbors) == 39


@pytest.mark.filterwarnings("ignore:Guessed all Masses")
def test_mdanalysis_reads_the_glass():
    universe = MDAnalysis.Universe(
        FOLDER / "batch9-glass.lammpstrj",
        format="LAMMPSDUMP",
        convert_units=False,
        dt=1.0,
    )
    assert len(universe.atoms) == 1000
    assert len(universe.trajectory) == 60
