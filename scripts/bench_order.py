"""Cost of order, regions and rattlers beside freud's own time for the same order.

Usage: OMP_NUM_THREADS=1 python scripts/bench_order.py [n_cells]

freud alone: its Voronoi tessellation, Steinhardt (averaged q and w of degrees 4 and 6)
and SolidLiquid, on orthogonal boxes and one thread. trajcage: the same and all that is
built on it: duplicates refused, float64 vectors, structure, regions, the table of
connected regions, contacts, rattlers and their curve over 23 tolerances. Times are processor
times, which other work on the machine disturbs less.
"""

import sys
import time
from collections.abc import Callable

import freud
import numpy as np
from monte_carlo import MonteCarlo
from packings import fcc

from trajcage.analysis.contacts import ContactOptions, measure_contacts
from trajcage.analysis.order import OrderOptions, measure_order
from trajcage.analysis.regions import RegionOptions, find_regions, measure_regions
from trajcage.model import Box, Frame
from trajcage.neighborhood import neighbor_list, set_threads, voronoi


def best_of(task: Callable[[], object], repeats: int = 3) -> float:
    times = []
    for _ in range(repeats):
        start = time.process_time()
        task()
        times.append(time.process_time() - start)
    return min(times)


def freud_alone(frame: Frame, *, solid_liquid: bool) -> None:
    box = freud.box.Box(*frame.box.lengths)
    points = (frame.positions - 0.5 * frame.box.lengths).astype(np.float32)
    system = (box, points)
    tessellation = freud.locality.Voronoi().compute(system)
    steinhardt = freud.order.Steinhardt(
        [4, 6], average=True, wl=True, weighted=True, wl_normalize=True
    )
    steinhardt.compute(system, neighbors=tessellation.nlist)
    if solid_liquid:
        order = freud.order.SolidLiquid(6, 0.7, 7)
        order.compute(system, neighbors=tessellation.nlist)


def trajcage_order(frame: Frame) -> None:
    measure_order(frame, voronoi(frame), OrderOptions())


def trajcage_regions(frame: Frame) -> Callable[[], object]:
    cells = voronoi(frame)
    structure = measure_order(frame, cells, OrderOptions())["structure"]
    status = np.zeros(frame.n_particles, dtype=np.uint8)
    value = np.ones(frame.n_particles)

    def task() -> None:
        found = measure_regions(structure, status, None, cells[1])
        find_regions(
            frame, found["region"], cells[1], value, value, value, RegionOptions()
        )

    return task


def main() -> None:
    n_cells = int(sys.argv[1]) if len(sys.argv) > 1 else 14
    set_threads(1)
    for packing_fraction in (0.45, 0.60):
        packing = fcc(n_cells, 0.30 if packing_fraction < 0.5 else packing_fraction)
        chain = MonteCarlo(packing.positions, packing.lengths, packing.radii, 1)
        chain.equilibrate(40)
        chain.compress_to(packing_fraction)
        chain.equilibrate(20)
        frame = Frame(chain.positions, chain.radii, Box.from_any(chain.lengths))
        alone = best_of(lambda: freud_alone(frame, solid_liquid=True))  # noqa: B023
        less = best_of(lambda: freud_alone(frame, solid_liquid=False))  # noqa: B023
        parts = {
            "cells and order": lambda: trajcage_order(frame),  # noqa: B023
            "regions": trajcage_regions(frame),
            "contacts, rattlers": lambda: measure_contacts(frame, ContactOptions()),  # noqa: B023
        }
        times = {name: best_of(task) for name, task in parts.items()}
        n = frame.n_particles
        print(f"{n} particles, packing fraction {packing_fraction}")
        print(f"  freud alone          {alone * 1e3:8.1f} ms")
        for name, seconds in times.items():
            print(f"  {name:20s} {seconds * 1e3:8.1f} ms")
        print(f"  ratio                {sum(times.values()) / alone:8.2f}")
        print(f"  without SolidLiquid  {sum(times.values()) / less:8.2f}")
        for r_max in (1.5, 2.5):
            seconds = best_of(lambda: neighbor_list(frame, r_max))  # noqa: B023
            print(f"  pairs within {r_max}     {seconds * 1e3:8.1f} ms")


if __name__ == "__main__":
    main()
