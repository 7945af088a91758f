"""Time the cage kernel beside freud's Voronoi and beside what one would write by hand.

    python scripts/bench_kernel.py [particles ...]     (10,000 unless given)

All figures come from one run on one core in processor time of the thread, so
that the ratios hold on a busy machine. The frames are equilibrated hard-sphere
fluids and crystals (scripts/monte_carlo.py), tiled for the larger sizes.
Ratios are times over that of the cages.

Sampling: hit-or-miss with scipy's cKDTree at 1 % error of a mean cage.

Delaunay: gudhi's weighted alpha complex of the same points, without filtration
values: the regular triangulation alone, without images across the box. It is a lower
bound for every way to cages that starts from a triangulation of the frame, and
measures none. Only if gudhi is installed (pip install gudhi; parts of it are GPL, so it
is no dependency).
"""

import os
import subprocess
import sys
import tempfile
import time
import warnings

os.environ.setdefault("OMP_NUM_THREADS", "1")

import freud
import numpy as np
from monte_carlo import MonteCarlo, fcc, random_fluid
from scipy.spatial import cKDTree

from trajcage.kernel import measure_cages, radical_cells

try:
    import gudhi
except ImportError:
    gudhi = None

REPEATS = 5
START = """
import time
begin = time.perf_counter()
import numpy as np
from trajcage.kernel import measure_cages
p = np.indices((4, 4, 4)).reshape(3, -1).T * 1.05
measure_cages(p, np.eye(3) * 4.2, np.zeros(3), np.ones(3, bool), np.full(64, 0.5))
print(time.perf_counter() - begin)
"""


def frames(n_particles):
    """Yield name, positions and box length of dense states of unit spheres."""
    for packing_fraction in (0.45, 0.49):
        fluid = random_fluid(1372, packing_fraction, 0.5, seed=5, sweeps=300)
        yield f"fluid {packing_fraction}", *tile(fluid, n_particles)
    for packing_fraction in (0.55, 0.60):
        crystal = MonteCarlo(*fcc(7, packing_fraction), seed=6)
        crystal.equilibrate(300)
        yield f"crystal {packing_fraction}", *tile(crystal, n_particles)


def tile(simulation, n_particles):
    """Repeat an equilibrated box until it holds about so many particles."""
    copies = max(1, round((n_particles / simulation.n_particles) ** (1 / 3)))
    length = simulation.lengths[0]
    shifts = np.stack(np.meshgrid(*[np.arange(copies)] * 3, indexing="ij"), -1)
    shifts = shifts.reshape(-1, 1, 3) * length
    return (simulation.positions + shifts).reshape(-1, 3), length * copies


def best(work):
    """Return the shortest processor time of some calls."""
    times = []
    for _ in range(REPEATS):
        begin = time.thread_time()
        work()
        times.append(time.thread_time() - begin)
    return min(times)


def sampling_time(positions, length, cages):
    """Time per particle of hit-or-miss sampling at 1 % error of one cage."""
    tree = cKDTree(positions, boxsize=length)
    chosen = np.arange(0, len(positions), max(1, len(positions) // 20))
    random = np.random.default_rng(0)
    begin = time.thread_time()
    for i in chosen:
        # a cube of the cage's own size, which nobody knows beforehand: in favor of
        # sampling, like the connected pieces it takes for one cage
        half = 1.2 * cages.free_volume[i] ** (1 / 3)
        hit = cages.free_volume[i] / (2 * half) ** 3
        samples = int((1 - hit) / hit * 1e4)
        points = positions[i] + random.uniform(-half, half, (samples, 3))
        near = np.array(tree.query_ball_point(positions[i], 2.0))
        near = near[near != i]
        offsets = positions[near] - positions[i]
        offsets -= length * np.round(offsets / length)
        distances, _ = cKDTree(offsets).query(points - positions[i])
        np.count_nonzero(distances > 1.0)
    return (time.thread_time() - begin) / len(chosen)


def triangulation_time(points):
    """Time per particle of the regular triangulation, NaN without gudhi."""
    if gudhi is None:
        return float("nan")
    weights = np.ones(len(points))

    def triangulate():
        gudhi.AlphaComplex(
            points=points, weights=weights, precision="fast"
        ).create_simplex_tree(default_filtration_value=True)

    return best(triangulate) / len(points)


def start_times():
    """Return the time to a first result without and with compiled code at hand."""
    with tempfile.TemporaryDirectory() as cache:
        environment = {**os.environ, "NUMBA_CACHE_DIR": cache}
        runs = [
            subprocess.run(
                [sys.executable, "-c", START],
                env=environment, check=True, capture_output=True, text=True,
            )
            for _ in range(2)
        ]  # fmt: skip
    return [float(run.stdout) for run in runs]


def main():
    warnings.simplefilter("ignore")
    freud.parallel.set_num_threads(1)
    cold, warm = start_times()
    print(
        f"first closed cages: {cold:.1f} s with compilation, {warm:.2f} s from the cache"
    )
    if gudhi is None:
        print("gudhi is not installed: no triangulation to compare with")
    header = (
        f"{'frame':14s} {'particles':>9s} {'cages':>8s} {'freud':>8s} {'ratio':>6s} "
        f"{'radical':>8s} {'ratio':>6s} {'Delaunay':>8s} {'ratio':>6s} "
        f"{'sampling':>9s} {'ratio':>7s}"
    )
    print(header + "      (microseconds a particle)")
    for size in [int(word) for word in sys.argv[1:]] or [10_000]:
        for name, positions, length in frames(size):
            n = len(positions)
            arguments = (
                positions, np.eye(3) * length, np.zeros(3), np.ones(3, bool),
                np.full(n, 0.5),
            )  # fmt: skip
            cages = measure_cages(*arguments)
            ours = best(lambda a=arguments: measure_cages(*a)) / n
            cells = best(lambda a=arguments: radical_cells(*a)) / n
            box = freud.box.Box.cube(length)
            points = np.mod(positions, length).astype(np.float32) - np.float32(
                length / 2
            )
            voronoi = (
                best(lambda b=box, p=points: freud.locality.Voronoi().compute((b, p)))
                / n
            )
            sampled = sampling_time(np.mod(positions, length), length, cages)
            delaunay = triangulation_time(np.mod(positions, length))
            print(
                f"{name:14s} {n:9d} {ours * 1e6:8.2f} {voronoi * 1e6:8.2f} "
                f"{voronoi / ours:6.2f} {cells * 1e6:8.2f} {cells / ours:6.2f} "
                f"{delaunay * 1e6:8.2f} {delaunay / ours:6.2f} {sampled * 1e6:9.0f} "
                f"{sampled / ours:7.0f}",
                flush=True,
            )


if __name__ == "__main__":
    main()
