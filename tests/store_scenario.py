"""A small deterministic run for the tests of the result file."""

import os
import sys
import time
from pathlib import Path

import numpy as np

from trajcage.model import Box, CageStatus, Field, FrameRecord
from trajcage.store import ArraySpec, ResultWriter, TableSpec

N_PARTICLES = 40
STATUS = tuple(s.name.lower() for s in CageStatus)
FIELDS = (
    Field("free_volume", "Volume of the cage.", "length+3"),
    Field("cage_status", "Whether the cage is known.", dtype="u1", codes=STATUS),
    Field("bounding_neighbors", "Particles in the wall.", dtype="i4"),
    Field("packing_fraction", "Packing fraction.", per_particle=False),
    Field("ring", "A small vector.", "length+2 time-1", per_particle=False, shape=(3,)),
)
TABLES = (
    TableSpec(
        "/trajcage/events",
        (
            Field("particle", "Particle index.", dtype="i8"),
            Field("time", "Time of the event.", "time"),
        ),
        (Field("neighbors_lost", "Particles lost.", dtype="i8"),),
        "Cage-breaking events.",
    ),
    TableSpec("/trajcage/regions/clusters", (Field("size", "Size.", dtype="i8"),)),
)
ARRAYS = (
    ArraySpec("/trajcage/histograms/free_volume", "Counts.", dtype="i8"),
    ArraySpec("/trajcage/correlations/overlap", "Overlap Q.", shape=(5, 2)),
    ArraySpec("/trajcage/lifetime", "Mean lifetime.", "time", shape=()),
    ArraySpec(
        "/trajcage/lattice_reference/names",
        "Names.",
        dtype="S8",
        values=np.array([b"sc", b"fcc"]),
    ),
)
OPTIONS = {"diameter": 1.0, "reach": 4.0, "skip": []}


def record(k: int, dimensions: int = 3, positions: bool = False) -> FrameRecord:
    rng = np.random.default_rng(k)
    n = N_PARTICLES
    values = {
        "free_volume": np.where(rng.random(n) < 0.1, np.nan, rng.random(n)),
        "cage_status": rng.integers(0, 5, n),
        "bounding_neighbors": rng.integers(0, 30, n),
        "packing_fraction": rng.random(),
        "ring": rng.random(3),
    }
    if positions:
        values["position"] = 10.0 * rng.random((n, dimensions))
    edges = np.diag([10.0, 11.0, 12.0][:dimensions] + rng.random(dimensions))
    edges[1, 0] = 0.5
    box = Box(edges, np.full(dimensions, -1.0), (True,) * dimensions)
    return FrameRecord(3 * k, 100 + 10 * k, 0.5 * k, box, values)


def rows(k: int) -> dict[str, dict[str, np.ndarray]]:
    rng = np.random.default_rng(1000 + k)
    counts = rng.integers(0, 4, rng.integers(0, 3))
    events = {
        "particle": rng.integers(0, N_PARTICLES, len(counts)),
        "time": rng.random(len(counts)),
        "neighbors_lost": rng.integers(0, N_PARTICLES, counts.sum()),
        "neighbors_lost_offsets": np.concatenate([[0], np.cumsum(counts)]),
    }
    return {"events": events, "regions/clusters": {"size": np.arange(k % 3)}}


class Fold:
    """Running sums of a growing size: what a run must carry across frames."""

    def __init__(self, state: dict[str, np.ndarray] | None = None) -> None:
        state = state or {"sum": np.zeros(N_PARTICLES), "times": np.zeros(0)}
        self.sum, self.times = state["sum"].copy(), state["times"].copy()

    def add(self, frame: FrameRecord) -> dict[str, np.ndarray]:
        self.sum += np.nan_to_num(frame.values["free_volume"])
        self.times = np.append(self.times, frame.time)
        return {"sum": self.sum, "times": self.times}

    def arrays(self) -> dict[str, object]:
        return {
            "histograms/free_volume": np.histogram(self.sum, 7)[0],
            "correlations/overlap": np.outer(np.arange(5.0), [1.0, self.sum.sum()]),
            "lifetime": self.times.sum(),
        }


def create(path: Path, **changes: object) -> ResultWriter:
    n = N_PARTICLES
    given = {
        "fields": FIELDS,
        "n_particles": n,
        "dimensions": 3,
        "periodic": (True, True, True),
        "ids": np.arange(n) + 7,
        "species": np.arange(n, dtype=np.int32) % 2,
        "type_names": ["A", "B"],
        "radii": np.full(n, 0.5),
        "tables": TABLES,
        "arrays": ARRAYS,
        "parameters": {"options": OPTIONS, "command": "trajcage measure"},
    }
    return ResultWriter.create(path, **(given | changes))


def resume(path: Path, **changes: object) -> ResultWriter:
    given = {"options": OPTIONS, "fields": FIELDS, "tables": TABLES, "arrays": ARRAYS}
    return ResultWriter.resume(path, **(given | changes))


def run(path: Path, n_frames: int, flush_every: int = 1) -> None:
    """Create the file or go on with it, to the end."""
    if path.exists():
        writer = resume(path, flush_every=flush_every)
    else:
        writer = create(path, flush_every=flush_every)
    with writer:
        fold = Fold(writer.state)
        for k in range(writer.frames_complete, n_frames):
            frame = record(k)
            time.sleep(float(os.environ.get("STORE_SCENARIO_PAUSE", "0")))
            writer.append(frame, rows(k), state=fold.add(frame))
            if k % 5 == 4:
                writer.flush(arrays=fold.arrays(), summary={"frames": k})
        last = {"regions/clusters": {"size": [99]}}
        writer.finish(arrays=fold.arrays(), summary={"frames": n_frames}, rows=last)


if __name__ == "__main__":
    run(Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3]))
