"""Cost and memory of the ordered fold beside the measurement of a frame.

Usage: OMP_NUM_THREADS=1 python scripts/bench_fold.py [n_frames] [edge]

A vibrating crystal of hard spheres (4 edge^3 particles) in which some neighbors change
places on every frame. The fold, which runs in one process, takes in frame after frame; the
measurement of a frame, which any number of processes share, is timed on three of them. Times
are processor times. At the start of a record time origins stand closer, which shows.
"""

import resource
import sys
import time
from collections.abc import Iterator
from dataclasses import replace

import numpy as np

from trajcage.analysis.cages import CageOptions, frame_cages
from trajcage.model import Box, Frame
from trajcage.neighborhood import set_threads
from trajcage.run.fold import RunFold
from trajcage.run.frames import measure_frame
from trajcage.run.settings import RunSettings

RHO = 1.10  # number density in units of the diameter
VIBRATION = 0.04  # no spheres overlap
SWAPS = 10  # neighbor pairs exchanged each frame


def frames(n_frames: int, edge: int) -> Iterator[Frame]:
    """Sites with vibration; a few particles change places with neighbors."""
    side = edge * (4.0 / RHO) ** (1.0 / 3.0)
    cells = np.indices((edge,) * 3).reshape(3, -1).T
    basis = np.array([[0, 0, 0], [0.5, 0.5, 0], [0.5, 0, 0.5], [0, 0.5, 0.5]])
    sites = ((cells[:, None] + basis) * (side / edge)).reshape(-1, 3)
    n, box = len(sites), Box.from_any([side] * 3)
    rng = np.random.default_rng(7)
    home, radii = np.arange(n), np.full(n, 0.5)
    for k in range(n_frames):
        for i in rng.integers(0, n, SWAPS):
            j = (i + 1) % n  # next in the same cubic cell, mostly
            home[i], home[j] = home[j], home[i]
        step = rng.normal(size=sites.shape)
        step *= VIBRATION * rng.random((n, 1)) / np.linalg.norm(step, axis=1)[:, None]
        x = box.wrap(sites[home] + step)
        yield Frame(x, radii, box, index=k, step=100 * k, time=0.1 * k)


def main() -> None:
    n_frames = int(sys.argv[1]) if len(sys.argv) > 1 else 256
    edge = int(sys.argv[2]) if len(sys.argv) > 2 else 14
    set_threads(1)
    settings = RunSettings()
    given = list(frames(3, edge))
    measured = measure_frame(given[0], settings)  # compiles, if need be
    start = time.process_time()
    for frame in given:
        frame_cages(frame, CageOptions(), windows=False)
    cages = (time.process_time() - start) / len(given)
    start = time.process_time()
    for frame in given:
        measured = measure_frame(frame, settings)
    geometry = (time.process_time() - start) / len(given)
    n = given[0].n_particles
    print(f"{n} particles, {SWAPS} exchanges a frame")
    print(
        f"measuring a frame: {1e3 * geometry:.0f} ms, its cages alone {1e3 * cages:.0f} ms"
    )
    fold = RunFold(settings, given[0], [])
    events, before = 0, 0
    spent: list[float] = []
    print("frames   fold: mean ms   worst ms   of measuring   events   state   peak MB")
    for frame in frames(n_frames, edge):
        begin = time.process_time()
        # what was measured on one frame stands for all of them
        _, rows = fold.update(replace(measured, frame=frame))
        spent.append(time.process_time() - begin)
        events += len(rows["events"]["particle"])
        if len(spent) % max(n_frames // 4, 1) == 0:
            latest = spent[before:]
            before = len(spent)
            size = sum(array.nbytes for array in fold.state().values()) / n
            peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e3
            print(
                f"{before:6d} {1e3 * np.mean(latest):15.1f} {1e3 * np.max(latest):10.1f} "
                f"{100 * np.mean(latest) / geometry:12.1f} % {events:8d} "
                f"{size:5.0f} B {peak:9.0f}"
            )
    begin = time.process_time()
    state = fold.state()
    between = time.process_time()
    fold.conclude()
    print(
        f"state of {len(state)} arrays (bytes a particle above): "
        f"{1e3 * (between - begin):.0f} ms; "
        f"conclusions: {1e3 * (time.process_time() - between):.0f} ms"
    )


if __name__ == "__main__":
    main()
