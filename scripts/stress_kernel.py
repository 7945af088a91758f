"""Throw random and degenerate configurations at the cage kernel and count the answers.

Every configuration is measured twice, the second time with particles in another order
and axes exchanged and mirrored: another order of all decisions, the same geometry. An
answer is explained if

- ``overlap``: a brute-force search finds the overlap;
- ``border``: the particle is closer to an open edge than the reach and the largest sum
  of radii; ``open``: it is not;
- ``open``, ``closed``: both measurements agree, a closed cage has a positive volume and
  obeys the isoperimetric inequality, and its patches add up to its wall.

Where a tie is exact but for rounding, either side of it is an answer, and the two
measurements may differ: a window of opening ratio 1 (counted as ``window ties``), or
particles that touch, one of which may hold the other in no room at all (``touching``).

Run: python scripts/stress_kernel.py [configurations] [seed]
"""

import itertools
import math
import sys
import time
from collections import Counter
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trajcage.kernel import measure_cages
from trajcage.lattices import LATTICES, lattice_sites, thresholds
from trajcage.model import CageStatus

Floats = NDArray[np.float64]

#: Relative difference of two volumes of one cage that broken ties explain.
SAME_VOLUME = 1e-6
#: Rounding of distances, in units of the box: what a thinner cage is, nobody can tell.
ROUNDING = 1e-15
#: A window this close to the opening ratio 1 is a tie.
WINDOW_TIE = 1e-9


class Configuration(NamedTuple):
    positions: Floats
    vectors: Floats
    periodic: NDArray[np.bool_]
    radii: Floats


class Finding(NamedTuple):
    """What is wrong with one particle of one configuration."""

    what: str
    particle: int
    values: str


def random_box(rng: np.random.Generator, d: int) -> Floats:
    """Edges with ratios up to 2.5, tilted in three of four cases."""
    vectors = np.diag(rng.uniform(1.0, 2.5, d))
    if rng.random() < 0.75:
        for row, column in itertools.combinations(range(d), 2):
            vectors[column, row] = rng.uniform(-0.5, 0.5) * vectors[row, row]
    return vectors


def random_radii(rng: np.random.Generator, n: int) -> Floats:
    ratio = rng.choice([1.0, 1.4, rng.uniform(1.0, 5.0)])
    if rng.random() < 0.5:
        return np.where(rng.random(n) < rng.random(), 1.0, 1.0 / ratio)
    return rng.uniform(1.0 / ratio, 1.0, n)


def contact_factor(positions: Floats, vectors: Floats, radii: Floats) -> float:
    """Factor on the radii at which the first pair touches, images within one box."""
    d = len(vectors)
    shifts = np.array(list(itertools.product([-1, 0, 1], repeat=d))) @ vectors
    apart = positions[:, None, None] + shifts - positions[None, :, None]
    distances = np.linalg.norm(apart, axis=-1).min(axis=-1)
    sums = radii[:, None] + radii
    # an own image is no neighbor
    np.fill_diagonal(distances, np.inf)
    return float((distances / sums).min())


def loose(rng: np.random.Generator, d: int) -> Configuration:
    """Random points, well spread or not; radii from dilute to overlapping."""
    n = int(rng.integers(8, 41))
    vectors = random_box(rng, d)
    spread = int(rng.choice([1, 10, 100]))
    shifts = np.array(list(itertools.product([-1, 0, 1], repeat=d))) @ vectors
    points = rng.random((1, d)) @ vectors
    for _ in range(n - 1):
        # the best of several candidates lies furthest from the others
        trial = rng.random((spread, d)) @ vectors
        apart = trial[:, None, None] + shifts - points[None, :, None]
        distance = np.linalg.norm(apart, axis=-1).min(axis=(1, 2))
        points = np.vstack([points, trial[[distance.argmax()]]])
    radii = random_radii(rng, n)
    radii *= contact_factor(points, vectors, radii)
    radii *= rng.choice([1.0 - 1e-12, 0.999, rng.uniform(0.5, 1.0), 1.2, 1.5])
    return Configuration(points, vectors, np.ones(d, bool), radii)


def lattice_like(rng: np.random.Generator, d: int) -> Configuration:
    """A lattice at, about and between its thresholds; noise from none to 1e-2."""
    name = str(rng.choice([k for k in LATTICES if LATTICES[k].dimensions == d]))
    limit = thresholds(name)
    marks = [limit.escape.value, limit.close_packing.value]
    if limit.growth is not None:
        marks.append(limit.growth.value)
    phi = float(rng.choice([*marks, rng.uniform(0.9 * marks[0], marks[1])]))
    phi *= 1.0 + float(rng.choice([0.0, 1e-12, 1e-8, 1e-4]) * rng.choice([-1, 1]))
    spacing = (limit.close_packing.value / min(phi, marks[1])) ** (1 / d)
    shape = rng.integers(1, 4, d)
    while len(lattice_sites(name, tuple(shape), 1.0)[0]) < 8:
        shape[rng.integers(d)] += 1
    positions, vectors = lattice_sites(name, tuple(map(int, shape)), spacing)
    noise = float(rng.choice([0.0, 0.0, 1e-15, 1e-12, 1e-9, 1e-6, 1e-2]))
    positions = positions + noise * rng.uniform(-1, 1, positions.shape)
    radii = np.full(len(positions), 0.5)
    if rng.random() < 0.3:
        radii = np.where(
            rng.random(len(radii)) < 0.5, 0.5, 0.5 * rng.choice([0.5, 0.9])
        )
    if rng.random() < 0.3:
        keep = rng.random(len(radii)) < 0.9
        positions, radii = positions[keep], radii[keep]
    return Configuration(positions, vectors, np.ones(d, bool), radii)


def on_a_grid(rng: np.random.Generator, d: int) -> Configuration:
    """Points of a small cubic grid: many cospherical, coplanar, collinear ones."""
    edges = rng.integers(2, 6, d)
    sites = np.indices(tuple(edges)).reshape(d, -1).T.astype(float)
    n = min(int(rng.integers(8, 41)), len(sites))
    positions = sites[rng.choice(len(sites), n, replace=False)]
    radii = rng.choice([0.25, 0.375, 0.4375, 0.5 - 2.0**-40], n)
    if rng.random() < 0.5:
        radii[:] = radii[0]
    return Configuration(
        positions, np.diag(edges.astype(float)), np.ones(d, bool), radii
    )


def in_a_plane(rng: np.random.Generator, d: int) -> Configuration:
    """All centers on one plane or line of the box."""
    n = int(rng.integers(8, 20))
    vectors = np.diag(np.full(d, float(rng.choice([3.0, 6.0]))))
    positions = rng.random((n, d)) @ vectors
    positions[:, 0] = 0.5
    if rng.random() < 0.3:
        positions[:, 1 : d - 1] = 0.5
    radii = random_radii(rng, n)
    radii *= contact_factor(positions, vectors, radii) * rng.uniform(0.5, 1.0)
    return Configuration(positions, vectors, np.ones(d, bool), radii)


def shell(rng: np.random.Generator, d: int) -> Configuration:
    """Centers on a sphere about one particle, with others inside, in a large box."""
    n = int(rng.integers(8, 40))
    if d == 3 and rng.random() < 0.7:
        g = (1 + math.sqrt(5)) / 2
        solids = [
            [(0, a, b * g) for a in (-1, 1) for b in (-1, 1)],
            [(0, a, b) for a in (-1, 1) for b in (-1, 1)],
            [(0, 0, 1), (0, 0, -1)],
            [*itertools.product([-1, 1], repeat=3)],
            [(0, a / g, b * g) for a in (-1, 1) for b in (-1, 1)],
        ]
        which = int(rng.integers(5))
        directions = np.array(solids[which], float)
        if which != 3:
            directions = np.vstack([np.roll(directions, k, axis=1) for k in range(3)])
        if which == 4:
            directions = np.vstack([directions, solids[3]])
    else:
        directions = rng.normal(size=(n, d))
    directions /= np.linalg.norm(directions, axis=1)[:, None]
    size = float(rng.choice([1.0, 1.5, 2.5]))
    points = [directions * size, np.zeros((1, d))]
    islands = int(rng.integers(0, 4))
    points.append(rng.uniform(-0.4, 0.4, (islands, d)) * size)
    positions = np.vstack(points) + 4.0
    positions += rng.choice([0.0, 1e-14, 1e-10, 1e-6]) * rng.normal(
        size=positions.shape
    )
    radii = np.full(len(positions), 0.5 - 1e-12)
    radii[len(directions) :] = rng.choice([0.5 - 1e-12, 0.05, 0.3], islands + 1)
    radii[: len(directions)] *= rng.choice([1.0, 0.9, rng.uniform(0.5, 2.0)])
    return Configuration(positions, np.diag(np.full(d, 8.0)), np.zeros(d, bool), radii)


FAMILIES = {
    "loose": (loose, 0.55),
    "lattice-like": (lattice_like, 0.2),
    "on a grid": (on_a_grid, 0.1),
    "in a plane": (in_a_plane, 0.05),
    "shell": (shell, 0.1),
}


def configuration(seed: int, number: int, d: int) -> tuple[str, Configuration]:
    """Configuration of that number of that run: the same on every machine."""
    rng = np.random.default_rng([seed, number])
    names = list(FAMILIES)
    name = str(rng.choice(names, p=[FAMILIES[k][1] for k in names]))
    made = FAMILIES[name][0](rng, d)
    if rng.random() < 0.15:
        made = made._replace(periodic=rng.random(d) < 0.5)
    return name, made


def smallest_gaps(made: Configuration) -> Floats:
    """Distance of each center from the exclusion spheres of the others, (n,)."""
    width = 2.0 * made.radii.max()
    heights = 1.0 / np.linalg.norm(np.linalg.inv(made.vectors), axis=0)
    turns = np.where(made.periodic, np.ceil(width / heights + 1.0), 0).astype(int)
    ranges = [range(-t, t + 1) for t in turns]
    shifts = np.array(list(itertools.product(*ranges))) @ made.vectors
    apart = made.positions[:, None, None] + shifts - made.positions[None, :, None]
    gaps = (
        np.linalg.norm(apart, axis=-1).min(axis=-1) - made.radii[:, None] - made.radii
    )
    np.fill_diagonal(gaps, np.inf)
    return np.asarray(gaps.min(axis=1))


def edge_room(made: Configuration, reach: float) -> Floats:
    """Distance from what may matter within the reach to the open edges, (n,)."""
    inverse = np.linalg.inv(made.vectors)
    fractions = made.positions @ inverse
    heights = 1.0 / np.linalg.norm(inverse, axis=0)
    apart = np.minimum(fractions, 1.0 - fractions) * heights
    apart[:, made.periodic] = np.inf
    return np.asarray(apart.min(axis=1) - reach - made.radii - made.radii.max())


def examine(made: Configuration, seed: int) -> tuple[Counter[str], list[Finding]]:
    """Measure twice; return statuses and everything that is not explained."""
    d = made.positions.shape[1]
    rng = np.random.default_rng(seed)
    reach = 2.0 * float(made.radii.max()) * float(rng.choice([2.0, 3.0, 3.0, 5.0]))
    rounding = ROUNDING * float(
        np.abs(made.vectors).max() + np.abs(made.positions).max()
    )
    first = measure_cages(*_arguments(made), reach=reach, windows=True)
    order = rng.permutation(len(made.radii))
    axes = rng.permutation(d)
    signs = rng.choice([-1.0, 1.0], d)
    other = Configuration(
        (made.positions * signs)[order][:, axes],
        (made.vectors * signs)[axes][:, axes],
        made.periodic[axes],
        made.radii[order],
    )
    second = measure_cages(*_arguments(other), reach=reach)
    back = np.empty_like(order)
    back[order] = np.arange(len(order))
    gaps = smallest_gaps(made)
    room = edge_room(made, reach)
    counts: Counter[str] = Counter()
    findings = []
    assert first.wall is not None
    for i, code in enumerate(first.status):
        status = CageStatus(code)
        twin = CageStatus(second.status[back[i]])
        counts[status.name.lower()] += 1
        complaint = ""
        volume, surface = first.free_volume[i], first.free_surface[i]
        windows = first.weakest_window[i], second.weakest_window[back[i]]
        touching = abs(gaps[i]) < 10 * rounding
        if status is CageStatus.INVALID:
            complaint = "invalid"
        elif not touching and (status is CageStatus.OVERLAP) != (gaps[i] < 0.0):
            complaint = f"overlap not as found ({status.name})"
        elif status is CageStatus.BORDER and room[i] > 10 * rounding:
            complaint = "border far from the edges"
        elif status is CageStatus.OPEN and room[i] < -10 * rounding:
            complaint = "open next to an edge"
        elif abs(room[i]) < 10 * rounding and {status, twin} == {
            CageStatus.OPEN, CageStatus.BORDER,
        }:  # fmt: skip
            pass
        elif status is not twin:
            complaint = f"{status.name.lower()}, then {twin.name.lower()}"
        elif status is CageStatus.CLOSED:
            again = second.free_volume[back[i]]
            rows = slice(*first.wall.offsets[i : i + 2])
            patches = first.wall.areas[rows]
            ball = math.pi ** (d / 2) / math.gamma(d / 2 + 1)
            smallest = d * ball ** (1 / d) * abs(volume) ** ((d - 1) / d)
            thickness = d * abs(volume) / surface if surface > 0 else 0.0
            if thickness < 10 * rounding:
                counts["thin"] += 1
            elif not (volume > 0 and math.isfinite(surface)):
                complaint = "closed without volume"
            elif abs(again / volume - 1) > SAME_VOLUME + 10 * rounding / thickness:
                complaint = "two volumes"
            elif surface < smallest * (1 - 1e-9):
                complaint = "isoperimetric inequality broken"
            elif abs(patches.sum() - surface) > 1e-9 * surface or patches.min() <= 0:
                complaint = "patches are not the wall"
            elif len(patches) != first.bounding_neighbors[i]:
                complaint = "patches are not the bounding neighbors"
        if complaint == "two volumes" or (complaint and status is not twin):
            if np.nanmax([*windows, 0.0]) > 1 - WINDOW_TIE:
                counts["window ties"] += 1
                continue
            if touching:
                counts["touching"] += 1
                continue
        if complaint:
            findings.append(
                Finding(
                    complaint, i,
                    f"{volume:.17g} {second.free_volume[back[i]]:.17g} {surface:.9g}",
                )
            )  # fmt: skip
    return counts, findings


def _arguments(
    made: Configuration,
) -> tuple[Floats, Floats, Floats, NDArray[np.bool_], Floats]:
    origin = np.zeros(len(made.vectors))
    return made.positions, made.vectors, origin, made.periodic, made.radii


def main() -> None:
    total = int(sys.argv[1]) if len(sys.argv) > 1 else 1000
    seed = int(sys.argv[2]) if len(sys.argv) > 2 else 0
    d = int(sys.argv[3]) if len(sys.argv) > 3 else 3
    counts = {name: Counter[str]() for name in FAMILIES}
    complaints: Counter[tuple[str, str]] = Counter()
    spent = dict.fromkeys(FAMILIES, 0.0)
    slowest = (0.0, -1)
    shown: Counter[str] = Counter()
    for number in range(total):
        name, made = configuration(seed, number, d)
        begin = time.perf_counter()
        found, findings = examine(made, number)
        took = time.perf_counter() - begin
        spent[name] += took
        slowest = max(slowest, (took, number))
        counts[name] += found
        counts[name]["configurations"] += 1
        for finding in findings:
            complaints[name, finding.what] += 1
            shown[finding.what] += 1
            if shown[finding.what] <= 10:
                print(f"{name} {seed} {number}: {finding}", flush=True)
        if number % 5000 == 4999:
            print(f"# {number + 1} configurations", flush=True)
    columns = [
        "configurations",
        *(status.name.lower() for status in CageStatus),
        "thin",
        "window ties",
        "touching",
    ]
    print(f"{'':14}" + "".join(f"{column:>15}" for column in columns) + "  ms each")
    for name, row in counts.items():
        cost = 1e3 * spent[name] / max(row["configurations"], 1)
        print(f"{name:14}" + "".join(f"{row[c]:15}" for c in columns) + f"{cost:9.2f}")
    print(f"slowest: number {slowest[1]}, {slowest[0]:.3f} s")
    for (name, what), count in sorted(complaints.items()):
        print(f"not explained: {name}: {what}: {count} particles")


if __name__ == "__main__":
    main()
