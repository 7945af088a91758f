"""Trajectories made up for the tests of the time analysis."""

import numpy as np

from trajcage.analysis.fold import TimeFold
from trajcage.analysis.time_options import TimeOptions
from trajcage.model import Box, Frame


def triangular(rows: int, spacing: float) -> tuple[np.ndarray, Box]:
    """Triangular lattice of 2 rows^2 particles in a periodic rectangle."""
    cell = spacing * np.array([1.0, np.sqrt(3.0)])
    corners = np.indices((rows, rows)).reshape(2, -1).T
    sites = (corners[:, None] + np.array([[0.0, 0.0], [0.5, 0.5]])) * cell
    return sites.reshape(-1, 2), Box.from_any(cell * rows)


def fcc(edge: int, spacing: float) -> tuple[np.ndarray, Box]:
    """Face-centered cubic lattice of 4 edge^3 particles, nearest at `spacing`."""
    side = spacing * np.sqrt(2.0)
    corners = np.indices((edge,) * 3).reshape(3, -1).T
    basis = np.array([[0, 0, 0], [0.5, 0.5, 0], [0.5, 0, 0.5], [0, 0.5, 0.5]])
    sites = (corners[:, None] + basis) * side
    return sites.reshape(-1, 3), Box.from_any([side * edge] * 3)


def vibration(rng: np.random.Generator, shape: tuple[int, ...], size: float):
    """Displacements uniform in a ball of radius `size`."""
    steps = rng.normal(size=shape)
    steps /= np.linalg.norm(steps, axis=-1, keepdims=True)
    return steps * size * rng.random((*shape[:-1], 1)) ** (1.0 / shape[-1])


def frames(paths: np.ndarray, box: Box, *, wrap: bool = True, dt: float = 1.0):
    """Frames with unit diameters from positions (T, n, d)."""
    for k, positions in enumerate(np.asarray(paths, dtype=float)):
        inside = box.wrap(positions) if wrap else positions
        radii = np.full(len(inside), 0.5)
        yield Frame(inside, radii, box, index=k, step=10 * k, time=dt * k)


def run(paths: np.ndarray, box: Box, options: TimeOptions, values=None, **how):
    """Fold a whole trajectory: the fold, its outputs, events and jumps."""
    n, d = paths.shape[1:]
    fold = TimeFold(options, n, d, 1.0)
    outputs = [fold.update(f, values or {}) for f in frames(paths, box, **how)]
    return fold, outputs, collect(outputs, "events"), collect(outputs, "jumps")


def collect(outputs, table: str) -> dict[str, np.ndarray]:
    """All rows of a growing table, offsets of ragged columns included."""
    parts = [output.rows[table] for output in outputs]
    whole = {}
    for name in parts[0]:
        if name.endswith("_offsets"):
            counts = np.concatenate([np.diff(part[name]) for part in parts])
            whole[name] = np.concatenate(([0], np.cumsum(counts)))
        else:
            whole[name] = np.concatenate([part[name] for part in parts])
    return whole
