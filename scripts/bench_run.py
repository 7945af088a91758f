"""Cost of a whole run beside reading and freud alone, and what more workers bring.

Usage: OMP_NUM_THREADS=1 python scripts/bench_run.py [n_cells] [n_frames]

Frames of a hard-sphere crystal at packing fraction 0.58 (4 n_cells^3 particles, 20,000 for
17; 40 of them unless given) are written as GSD and measured by one process and by two.
freud alone: a neighbor query within 1.5 diameters, the Voronoi tessellation and Steinhardt
with the same order parameters as trajcage (q and normalized w of degrees 4 and 6, averaged
over the neighbors, weighted by facets; solid bonds, structure and all else is built on
them), on one thread. Times are processor times, which other work on the machine disturbs
less; the gain from two workers is a ratio of wall-clock times and needs two idle cores. It
is given for the time after the first third of the frames, and for the whole run with the
start of the processes. A run feeds as many workers as its parent, which folds and writes,
can keep up with.
"""

import sys
import tempfile
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path
from typing import Any

import freud
import gsd.hoomd
import numpy as np
from monte_carlo import MonteCarlo
from packings import fcc

import trajcage
from trajcage.neighborhood import set_threads
from trajcage.readers import InputOptions, open_trajectory
from trajcage.run import frames
from trajcage.run.fold import RunFold
from trajcage.store import ResultWriter

_STAGES = {
    "possible_contacts": "touching pairs",
    "frame_cages": "cages",
    "tessellate": "cells and Voronoi neighbors",
    "measure_order": "order",
    "order_neighbors": "order",
    "measure_contacts": "contacts, rattlers",
    "measure_thermodynamics": "thermodynamics",
}


def write_sample(path: Path, n_cells: int, n_frames: int) -> None:
    packing = fcc(n_cells, 0.58)
    chain = MonteCarlo(packing.positions, packing.lengths, packing.radii, 1)
    chain.equilibrate(40)
    with gsd.hoomd.open(path, "w") as file:
        for k in range(n_frames):
            chain.run(5)
            frame = gsd.hoomd.Frame()
            frame.configuration.step = k
            frame.configuration.box = [*chain.lengths, 0, 0, 0]
            frame.particles.N = chain.n_particles
            frame.particles.position = chain.positions - 0.5 * chain.lengths
            file.append(frame)


def timed(clock: Counter[str], name: str, function: Callable[..., Any]) -> Any:
    """Count the processor time of a function."""

    def wrapper(*args: Any, **kwargs: Any) -> Any:
        start = time.process_time()
        try:
            return function(*args, **kwargs)
        finally:
            clock[name] += time.process_time() - start

    return wrapper


def alone(path: Path, clock: Counter[str]) -> None:
    """Read and let freud work on every frame."""
    with open_trajectory(InputOptions(path, diameter=1.0)) as trajectory:
        read = timed(clock, "reading", trajectory.frame)
        for index in range(trajectory.n_frames):
            frame = read(index)
            box = freud.box.Box(*frame.box.lengths)
            system = (box, (frame.positions).astype(np.float32))
            query = freud.locality.AABBQuery(*system)
            options = {"r_max": 1.5, "exclude_ii": True}
            pairs = timed(
                clock,
                "freud neighbor query",
                lambda q=query, s=system, o=options: q.query(s[1], o).toNeighborList(),
            )
            pairs()
            tessellation = freud.locality.Voronoi()
            timed(clock, "freud Voronoi", tessellation.compute)(system)
            steinhardt = freud.order.Steinhardt(
                [4, 6], average=True, wl=True, weighted=True, wl_normalize=True
            )
            timed(clock, "freud Steinhardt", steinhardt.compute)(
                system, neighbors=tessellation.nlist
            )


def measure(path: Path, workers: int, n_frames: int) -> tuple[float, float, float]:
    """Measure all frames.

    Returns wall-clock and processor time a frame after the first third, and the
    wall-clock time of the whole run.
    """
    marks: list[tuple[float, float]] = []

    def mark(*_: int) -> None:
        marks.append((time.perf_counter(), time.process_time()))

    mark()
    output = path.with_name(f"{workers}.h5")
    trajcage.measure(
        path, output=output, diameter=1.0, workers=workers, progress=mark
    ).close()
    mark()
    third = n_frames // 3  # marks[0] is the start, marks[k] after k frames
    wall, processor = (b - a for a, b in zip(marks[third], marks[-1], strict=True))
    count = n_frames - third
    return wall / count, processor / count, marks[-1][0] - marks[0][0]


def main() -> None:
    n_cells = int(sys.argv[1]) if len(sys.argv) > 1 else 17
    n_frames = int(sys.argv[2]) if len(sys.argv) > 2 else 40
    set_threads(1)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "crystal.gsd"
        write_sample(path, n_cells, n_frames)
        parts: Counter[str] = Counter()
        alone(path, parts)
        trajcage.measure(path, output=path.with_name("0.h5"), diameter=1.0, stop=1)
        two_wall, parent, two_whole = measure(
            path, 2, n_frames
        )  # before the clocks are built in
        stages: Counter[str] = Counter()
        for name, stage in _STAGES.items():
            setattr(frames, name, timed(stages, stage, getattr(frames, name)))
        for owner, name, stage in (
            (RunFold, "update", "fold"),
            (RunFold, "conclude", "conclusions at commits"),
            (RunFold, "state", "state at commits"),
            (ResultWriter, "append", "writing"),
            (ResultWriter, "flush", "writing"),
            (ResultWriter, "finish", "writing"),
        ):
            setattr(owner, name, timed(stages, stage, getattr(owner, name)))
        one_wall, one, one_whole = measure(path, 1, n_frames)
        size = path.with_name("1.h5").stat().st_size

    print(f"{4 * n_cells**3} particles, {n_frames} frames; ms of one core per frame")
    for name, seconds in parts.items():
        print(f"  {name:32s} {seconds / n_frames * 1e3:8.1f}")
    together = sum(parts.values()) / n_frames
    print(f"  {'sum':32s} {together * 1e3:8.1f}")
    print(f"the whole measurement by one process: {one * 1e3:.1f}")
    for name, seconds in stages.most_common():
        print(f"  {name:32s} {seconds / n_frames * 1e3:8.1f}")
    print(f"ratio to reading and freud alone: {one / together:.2f}")
    worker = one - parent
    print(f"parent with two workers: {parent * 1e3:.1f}")
    print(f"workers that one writer can feed: about {worker / parent:.0f}")
    print(
        f"two workers against one, wall-clock: {one_wall / two_wall:.2f} times as fast; "
        f"the whole run with the start of processes: {one_whole / two_whole:.2f}"
    )
    print(f"{size / n_frames / 4 / n_cells**3:.0f} bytes a particle and frame")


if __name__ == "__main__":
    main()
