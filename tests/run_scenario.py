"""Small inputs and comparisons for the tests of runs and commands."""

from pathlib import Path

import gsd.hoomd
import h5py
import numpy as np

SAMPLES = Path(__file__).parents[1] / "sample-data"
FLUID = (SAMPLES / "batch7-fluid.gro", SAMPLES / "batch7-fluid.xtc")
CRYSTAL = SAMPLES / "batch7-crystal.gsd"
GLASS = SAMPLES / "batch9-glass.lammpstrj"
MONOLAYER = SAMPLES / "batch7-monolayer.gsd"

EDGE = 5.0


def shaken(seed: int = 1) -> np.ndarray:
    """27 particles near the sites of a simple cubic lattice of spacing 5/3."""
    sites = (np.indices((3, 3, 3)).reshape(3, -1).T + 0.5) * EDGE / 3 - EDGE / 2
    rng = np.random.default_rng(seed)
    return sites + rng.uniform(-0.15, 0.15, sites.shape)


def write_gsd(path, frames, *, diameter=1.3, edge=EDGE) -> Path:
    """Positions (n, 3) of each frame, ten steps apart."""
    with gsd.hoomd.open(path, "w") as file:
        for k, positions in enumerate(frames):
            frame = gsd.hoomd.Frame()
            frame.configuration.step = 10 * k
            frame.configuration.box = [edge, edge, edge, 0, 0, 0]
            frame.particles.N = len(positions)
            frame.particles.position = positions
            if diameter is not None:
                frame.particles.diameter = np.full(len(positions), diameter)
            file.append(frame)
    return Path(path)


def contents(path) -> dict[str, np.ndarray]:
    """All datasets but the record of how the file was written."""
    found = {}
    skipped = ("trajcage/commit", "trajcage/state", "parameters")

    def visit(name, item):
        if isinstance(item, h5py.Dataset) and not name.startswith(skipped):
            found[name] = item[()]

    with h5py.File(path, "r") as file:
        file.visititems(visit)
    return found


def assert_same(path, other) -> None:
    """Equal bit for bit, dataset by dataset."""
    a, b = contents(path), contents(other)
    assert a.keys() == b.keys()
    assert [n for n in a if a[n].tobytes() != b[n].tobytes()] == []
