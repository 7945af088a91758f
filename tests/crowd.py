"""A small dense crowd, quick to measure, for tests that run it many times."""

import numpy as np
import run_scenario as scenario

DIAMETER = 1.5


def crowd(n_frames: int, seed: int = 3) -> list[np.ndarray]:
    """27 particles that shake about simple cubic sites, one row of which slides."""
    rng = np.random.default_rng(seed)
    sites = (np.indices((3, 3, 3)).reshape(3, -1).T + 0.5) * scenario.EDGE / 3
    frames = []
    for k in range(n_frames):
        positions = sites + rng.uniform(-0.05, 0.05, sites.shape)
        positions[3:6, 2] += 0.1 * k  # a row slides along itself: neighbors change
        frames.append((positions % scenario.EDGE) - scenario.EDGE / 2)
    return frames


def write(path, n_frames: int, **options):
    """Write a GSD file of the crowd."""
    return scenario.write_gsd(path, crowd(n_frames), diameter=DIAMETER, **options)
