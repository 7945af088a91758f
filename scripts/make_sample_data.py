"""Make the files of sample-data from fixed seeds: python scripts/make_sample_data.py.

Takes a few minutes on one core. Lengths are micrometers; time counts Monte Carlo
sweeps. What each file shows is told in sample-data/README.md.
"""

import argparse
import csv
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import gsd.hoomd
import MDAnalysis
import numpy as np
from monte_carlo import MonteCarlo, fcc, polydisperse, random_fluid

DIAMETER = 1.62
FOLDER = Path(__file__).parents[1] / "sample-data"


def crystal(folder: Path) -> None:
    """Batch 7, settled and pressed: FCC at 0.58."""
    sites = fcc(6, 0.58)
    simulation = MonteCarlo(
        DIAMETER * sites.positions, DIAMETER * sites.lengths, 0.5 * DIAMETER, seed=701
    )
    simulation.equilibrate(3000)
    frames = advance(simulation, 20, 500)
    write_gsd(folder / "batch7-crystal.gsd", frames)


def fluid(folder: Path) -> None:
    """Batch 7, stirred: an equilibrium fluid at 0.45."""
    n_particles, n_frames, interval = 1372, 60, 500
    simulation = random_fluid(n_particles, 0.45, 0.5 * DIAMETER, seed=702, sweeps=5000)
    positions = np.array(
        [frame.positions for frame in advance(simulation, n_frames, interval)]
    )
    stem = folder / "batch7-fluid"
    # written by hand: MDAnalysis divides the box by ten whatever the units, and the
    # format allows more digits than its usual three
    with Path(f"{stem}.gro").open("w", encoding="ascii") as target:
        target.write(f"Batch 7, fluid, micrometers\n{n_particles:5d}\n")
        target.writelines(
            f"    1B7       S{number:5d}{x:10.5f}{y:10.5f}{z:10.5f}\n"
            for number, (x, y, z) in enumerate(positions[0], start=1)
        )
        target.write("".join(f"{length:10.5f}" for length in simulation.lengths) + "\n")
    universe = MDAnalysis.Universe.empty(n_particles, trajectory=True)
    universe.load_new(
        positions, dt=interval, dimensions=[*simulation.lengths, 90, 90, 90]
    )
    # five decimals: with six, coordinates above 2**24 steps may be stored wrong
    with MDAnalysis.Writer(
        f"{stem}.xtc", n_particles, convert_units=False, precision=5
    ) as writer:
        for _ in universe.trajectory:
            writer.write(universe.atoms)


def crystallite(folder: Path) -> None:
    """Batch 7, resting: an FCC seed in a fluid, 0.52 over all."""
    sites = fcc(10, 0.44)
    positions, lengths = DIAMETER * sites.positions, DIAMETER * sites.lengths
    reach = np.linalg.norm(positions - 0.5 * lengths, axis=1)
    seed = np.argsort(reach, kind="stable")[:603]
    simulation = MonteCarlo(positions, lengths, 0.5 * DIAMETER, seed=703)
    # hold the seed, melt the rest where only the fluid is stable, then press both
    simulation.freeze(seed)
    simulation.equilibrate(2000)
    simulation.compress_to(0.52)
    simulation.equilibrate(500)
    simulation.freeze()
    simulation.equilibrate(300)
    write_gsd(folder / "batch7-crystallite.gsd", advance(simulation, 5, 200))
    scale = float((simulation.lengths / lengths).mean())
    with (folder / "batch7-crystallite-seed.csv").open("w", newline="") as target:
        writer = csv.writer(target, lineterminator="\n")
        writer.writerow(["particle", "start_distance_from_center_um"])
        for particle in np.sort(seed):
            writer.writerow([particle, f"{scale * reach[particle]:.4f}"])


def glass(folder: Path) -> None:
    """Batch 9, ten percent spread: a quenched glass at 0.58, some cages break."""
    radii = np.round(DIAMETER * polydisperse(1000, 0.10), 8)
    simulation = random_fluid(1000, 0.58, radii, seed=901, sweeps=0)
    simulation.equilibrate(500, acceptance=0.15)
    with (folder / "batch9-glass.lammpstrj").open("w", encoding="ascii") as target:
        for frame in advance(simulation, 60, 2000):
            bounds = "".join(f"0.0 {length:.12f}\n" for length in frame.lengths)
            target.write(
                f"ITEM: TIMESTEP\n{frame.sweeps}\n"
                f"ITEM: NUMBER OF ATOMS\n{frame.n_particles}\n"
                f"ITEM: BOX BOUNDS pp pp pp\n{bounds}"
                "ITEM: ATOMS id type x y z radius ix iy iz\n"
            )
            rows = zip(frame.positions, frame.radii, frame.images, strict=True)
            for number, ((x, y, z), radius, (ix, iy, iz)) in enumerate(rows, start=1):
                target.write(
                    f"{number} 1 {x:.8f} {y:.8f} {z:.8f} {radius:.8f} {ix} {iy} {iz}\n"
                )


def monolayer(folder: Path) -> None:
    """Batch 7 under glass: disks at 0.69, just below the hexatic."""
    simulation = random_fluid(
        1024, 0.69, 0.5 * DIAMETER, seed=704, dimensions=2, sweeps=30_000
    )
    write_gsd(folder / "batch7-monolayer.gsd", advance(simulation, 20, 2000))


def advance(
    simulation: MonteCarlo, n_frames: int, interval: int
) -> Iterator[MonteCarlo]:
    """Give the state at sweep 0, interval, 2 interval ... of the production run."""
    simulation.start_clock()
    for frame in range(n_frames):
        if frame:
            simulation.run(interval)
        yield simulation


def write_gsd(path: Path, frames: Iterator[MonteCarlo]) -> None:
    """Write centered positions and diameters; disks get dimensions = 2 and z = 0."""
    with gsd.hoomd.open(path, "w") as target:
        for simulation in frames:
            n_particles, dimensions = simulation.n_particles, simulation.dimensions
            positions = np.zeros((n_particles, 3))
            positions[:, :dimensions] = simulation.positions - 0.5 * simulation.lengths
            box = np.array([1.0, 1.0, 1.0, 0.0, 0.0, 0.0])
            box[:dimensions] = simulation.lengths
            frame = gsd.hoomd.Frame()
            frame.configuration.step = simulation.sweeps
            frame.configuration.dimensions = dimensions
            frame.configuration.box = box
            frame.particles.N = n_particles
            frame.particles.types = ["S"]
            frame.particles.typeid = np.zeros(n_particles, dtype=np.uint32)
            frame.particles.position = positions
            frame.particles.diameter = 2 * simulation.radii
            target.append(frame)


MAKERS: dict[str, Callable[[Path], None]] = {
    "crystal": crystal,
    "fluid": fluid,
    "crystallite": crystallite,
    "glass": glass,
    "monolayer": monolayer,
}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("samples", nargs="*", metavar="NAME", help=", ".join(MAKERS))
    parser.add_argument("--folder", type=Path, default=FOLDER)
    options = parser.parse_args()
    if unknown := set(options.samples) - set(MAKERS):
        parser.error(f"expected names from {', '.join(MAKERS)}, got {unknown}")
    options.folder.mkdir(exist_ok=True)
    for name in options.samples or MAKERS:
        start = time.perf_counter()
        MAKERS[name](options.folder)
        print(f"{name}: {time.perf_counter() - start:.0f} s")


if __name__ == "__main__":
    main()
