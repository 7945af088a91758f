"""Cost and memory of the time analysis for a vibrating, hopping crystal.

Prints one table; sizes and seed are fixed. Run: python scripts/bench_fold.py [frames]
"""

import resource
import sys
import time

import numpy as np

from trajcage.analysis.fold import TimeFold
from trajcage.analysis.time_options import TimeOptions
from trajcage.model import Box, Frame

EDGE = 14  # cubic cells along an edge: 10,976 particles
RHO = 1.10  # number density in units of the diameter
SWAPS = 10  # neighbor pairs exchanged each frame


def frames(n_frames: int, n_particles: int, sites: np.ndarray, box: Box):
    """Sites with vibration; a few particles change places with neighbors."""
    rng = np.random.default_rng(7)
    home = np.arange(n_particles)
    radii = np.full(n_particles, 0.5)
    for k in range(n_frames):
        for i in rng.integers(0, n_particles, SWAPS):
            j = (i + 1) % n_particles  # next in the same cubic cell, mostly
            home[i], home[j] = home[j], home[i]
        x = sites[home] + rng.normal(0.0, 0.06, sites.shape)
        yield Frame(box.wrap(x), radii, box, index=k, step=100 * k, time=0.1 * k)


def main() -> None:
    n_frames = int(sys.argv[1]) if len(sys.argv) > 1 else 400
    side = EDGE * (4.0 / RHO) ** (1.0 / 3.0)
    cells = np.indices((EDGE,) * 3).reshape(3, -1).T
    basis = np.array([[0, 0, 0], [0.5, 0.5, 0], [0.5, 0, 0.5], [0, 0.5, 0.5]])
    sites = ((cells[:, None] + basis) * (side / EDGE)).reshape(-1, 3)
    n = len(sites)
    box = Box.from_any([side] * 3)
    rng = np.random.default_rng(3)
    corners = rng.integers(0, n, (n, 3))
    values = {
        "free_volume": rng.random(n),
        "weakest_window": rng.random(n),
        "weakest_window_neighbors": corners,
        "region": np.zeros(n, np.int8),
    }
    fold = TimeFold(TimeOptions(), n, 3, 1.0)
    spent, events = [], 0
    print(f"{n} particles, {SWAPS} exchanges a frame")
    print("frames   mean ms   median ms   worst ms   events   state MB   peak MB")
    for frame in frames(n_frames, n, sites, box):
        begin = time.process_time()
        output = fold.update(frame, values)
        spent.append(1e3 * (time.process_time() - begin))
        events += len(output.rows["events"]["particle"])
        if len(spent) % (n_frames // 4) == 0:
            size = sum(array.nbytes for array in fold.state().values()) / 1e6
            peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e3
            print(
                f"{len(spent):6d} {np.mean(spent):9.1f} {np.median(spent):11.1f} "
                f"{np.max(spent):10.1f} {events:8d} {size:10.1f} {peak:9.0f}"
            )
    begin = time.process_time()
    fold.conclude()
    print(f"conclude: {1e3 * (time.process_time() - begin):.0f} ms")


if __name__ == "__main__":
    main()
