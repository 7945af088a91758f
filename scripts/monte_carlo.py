"""Hard-sphere and hard-disk Monte Carlo: the source of test and sample configurations.

Local translations of single particles (Metropolis et al. 1953, J Chem Phys 21, 1087)
in a periodic orthorhombic box, optional exchanges of the radii of two particles, and
compression in small steps of box and positions. Particles are picked at random, so every
move obeys detailed balance; the step length changes only in `equilibrate` and
`compress_to`, never in `run`.

Radii are what the caller gives and never change by compression: the box does.
Nothing here is used by the package itself.
"""

import math
from collections.abc import Sequence

import numpy as np
from monte_carlo_kernel import (
    link_cells,
    neighbor_cells,
    resolve_overlaps,
    smallest_ratio,
    sweep,
    wrap,
)
from numpy.typing import ArrayLike, NDArray
from packings import (
    Packing,
    bcc,
    binary,
    fcc,
    hcp,
    polydisperse,
    solid_volume,
    triangular,
)
from scipy.spatial import cKDTree

__all__ = [
    "MonteCarlo",
    "Packing",
    "bcc",
    "binary",
    "compressibility_factor",
    "fcc",
    "hcp",
    "polydisperse",
    "random_fluid",
    "triangular",
]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


class MonteCarlo:
    """A box of hard spheres (d = 3) or disks (d = 2) and its Markov chain.

    Parameters
    ----------
    positions : (n, d) array_like, length
        Centers; wrapped into [0, lengths).
    lengths : (d,) array_like, length
        Edges of the periodic box, each at least twice the largest diameter.
    radii : float or (n,) array_like, length
    seed : int
        Seed of the generator; the same seed and calls give the same chain.

    Raises
    ------
    ValueError
        If shapes disagree, the box is too small or particles overlap.
    """

    def __init__(
        self, positions: ArrayLike, lengths: ArrayLike, radii: ArrayLike, seed: int
    ) -> None:
        points = np.array(positions, dtype=np.float64, ndmin=2)
        self.n_particles, self.dimensions = points.shape
        self.lengths: Floats = np.array(lengths, dtype=np.float64)
        self.radii: Floats = np.broadcast_to(
            np.asarray(radii, dtype=np.float64), self.n_particles
        ).copy()
        if self.dimensions not in {2, 3} or self.lengths.shape != (self.dimensions,):
            raise ValueError(
                f"expected (n, d) positions and (d,) lengths with d = 2 or 3, got"
                f" {points.shape} and {self.lengths.shape}"
            )
        self._rng = np.random.default_rng(seed)
        self._images = np.zeros(points.shape, dtype=np.int64)
        self._positions = points
        wrap(self._positions, self._images, self.lengths)
        self._images[:] = 0
        self._mobile: Integers = np.arange(self.n_particles)
        self._shape: Integers = np.zeros(self.dimensions, dtype=np.int64)
        self._next: Integers = np.empty(self.n_particles, dtype=np.int64)
        self._link_cells()
        self.step = 0.1 * float(self.radii.mean())
        self.sweeps = 0
        self._tally = np.zeros(4, dtype=np.int64)
        if self.smallest_ratio() < 1.0:
            raise ValueError(
                "expected particles that do not overlap, got a pair at"
                f" {self.smallest_ratio():.6g} of its contact distance"
            )

    @property
    def positions(self) -> Floats:
        """Centers wrapped into [0, lengths), (n, d): a copy."""
        return self._positions.copy()

    @property
    def images(self) -> Integers:
        """Box crossings of every particle since the clock started, (n, d): a copy."""
        return self._images.copy()

    @property
    def unwrapped(self) -> Floats:
        """Continuous centers, (n, d)."""
        return self._positions + self._images * self.lengths

    @property
    def packing_fraction(self) -> float:
        """Volume (area) of the particles over that of the box."""
        return solid_volume(self.radii, self.dimensions) / math.prod(self.lengths)

    @property
    def acceptance(self) -> float:
        """Accepted share of the translations since the last change of the step."""
        return float(self._tally[1] / max(self._tally[0], 1))

    @property
    def swap_acceptance(self) -> float:
        """Accepted share of the radius exchanges since the last change of the step."""
        return float(self._tally[3] / max(self._tally[2], 1))

    def start_clock(self) -> None:
        """Count sweeps and box crossings from here."""
        self.sweeps = 0
        self._images[:] = 0

    def freeze(self, particles: ArrayLike = ()) -> None:
        """Let these particles stay where they are, and all others move.

        Parameters
        ----------
        particles : (m,) array_like of int
            Indices; the default sets all free.
        """
        held = np.asarray(particles, dtype=np.int64)
        self._mobile = np.setdiff1d(np.arange(self.n_particles), held)

    def run(self, sweeps: int, *, swap_fraction: float = 0.0) -> None:
        """Sample the canonical ensemble with the step as it is.

        Parameters
        ----------
        sweeps : int
            Trial moves for each mobile particle, on average.
        swap_fraction : float
            Share of the trials that exchange two radii instead of moving.
        """
        self._tally += sweep(
            self._rng, sweeps, self.step, swap_fraction, self._mobile,
            self._positions, self._images, self.radii, self.lengths,
            self._heads, self._next, self._shape, self._neighbors,
        )  # fmt: skip
        self.sweeps += sweeps

    def equilibrate(
        self, sweeps: int, *, acceptance: float = 0.3, swap_fraction: float = 0.0
    ) -> None:
        """Run while steering the step to an acceptance: not for measurements."""
        done = 0
        while done < sweeps:
            chunk = min(25, sweeps - done)
            self._tally[:] = 0
            self.run(chunk, swap_fraction=swap_fraction)
            done += chunk
            scale = min(max(self.acceptance / acceptance, 0.8), 1.25)
            self.step = min(self.step * scale, 0.5 * float(self.lengths.min()))
        self._tally[:] = 0

    def smallest_ratio(self) -> float:
        """Smallest distance over contact distance of all pairs.

        Box and positions can shrink by this factor before the first overlap. In a
        dilute box the value is only a lower bound: the reach of the cell list.
        """
        # pairs further apart than a cell is wide are not looked at
        reach = float((self.lengths / self._shape).min() / (2 * self.radii.max()))
        return float(
            smallest_ratio(
                reach, self._positions, self.radii, self.lengths,
                self._heads, self._next, self._shape, self._neighbors,
            )
        )  # fmt: skip

    def pair_ratios(self, upper: float) -> Floats:
        """Distance over contact distance of all pairs closer than `upper` contacts."""
        tree = cKDTree(self._positions, boxsize=self.lengths)
        pairs = tree.query_pairs(2 * upper * self.radii.max(), output_type="ndarray")
        apart = self._positions[pairs[:, 0]] - self._positions[pairs[:, 1]]
        apart -= self.lengths * np.rint(apart / self.lengths)
        ratios = np.linalg.norm(apart, axis=1) / self.radii[pairs].sum(axis=1)
        return np.asarray(ratios[ratios < upper], dtype=np.float64)

    def compress_to(
        self, packing_fraction: float, *, sweeps: int = 10, swap_fraction: float = 0.0
    ) -> None:
        """Rescale box and positions to a packing fraction.

        Upward in small steps: after each one, particles that overlap are moved to
        a free place nearby, or the step is taken back and halved.

        Parameters
        ----------
        packing_fraction : float
            Target; a lower one than the present is reached at once.
        sweeps : int
            Sweeps between two steps: more is slower compression.
        swap_fraction : float
            As in `run`.

        Raises
        ------
        RuntimeError
            If steps of 1e-7 in length still overlap: the packing is jammed.
        """
        growth = 1e-3
        while True:
            wanted = (packing_fraction / self.packing_fraction) ** (1 / self.dimensions)
            if self._shrink(min(wanted, 1.0 + growth)):
                if wanted <= 1.0 + growth:
                    return
                growth = min(1.5 * growth, 0.01)
            else:
                growth *= 0.5
            if growth < 1e-7:
                raise RuntimeError(
                    f"compression to {packing_fraction} is stuck at"
                    f" {self.packing_fraction:.6f}"
                )
            self.equilibrate(sweeps, swap_fraction=swap_fraction)

    def _shrink(self, factor: float) -> bool:
        before = self.lengths, self.positions, self.images
        self._rescale(self.lengths / factor, self._positions / factor, self._images)
        if resolve_overlaps(
            self._rng, 50, self.step, self._mobile,
            self._positions, self._images, self.radii, self.lengths,
            self._heads, self._next, self._shape, self._neighbors,
        ):  # fmt: skip
            return True
        self._rescale(*before)
        return False

    def _rescale(self, lengths: Floats, positions: Floats, images: Integers) -> None:
        self.lengths, self._positions, self._images = lengths, positions, images
        wrap(self._positions, self._images, self.lengths)
        self._link_cells()

    def _link_cells(self) -> None:
        width = 2.0 * float(self.radii.max())
        if self.lengths.min() < 2 * width:
            raise ValueError(
                f"expected box lengths of at least two diameters ({2 * width:.6g}),"
                f" got {self.lengths}"
            )
        # a cell is never thinner than the largest contact distance
        shape = np.minimum(self.lengths / width, 64).astype(np.int64)
        if not np.array_equal(shape, self._shape):
            self._shape = shape
            self._neighbors = neighbor_cells(shape)
            self._heads = np.empty(len(self._neighbors), dtype=np.int64)
        link_cells(self._positions, self.lengths, self._shape, self._heads, self._next)


def compressibility_factor(
    simulation: MonteCarlo,
    samples: int,
    *,
    interval: int = 5,
    upper: float = 1.06,
    blocks: int = 10,
) -> tuple[float, float]:
    """Measure Z = beta P / rho from pairs near contact (virial theorem).

    With n(x) dx the mean number of pairs at x to x + dx times their contact distance,
    Z = 1 + n(1+) / (d N), for any mixture. n(1+) is extrapolated from [1, upper] by a
    parabola through its logarithm.

    Parameters
    ----------
    simulation : MonteCarlo
        An equilibrated system; it runs on.
    samples, interval : int
        Configurations, and sweeps from one to the next.
    upper : float
        End of the range of the fit: a few mean gaps.
    blocks : int
        Independent fits that give the standard error.

    Returns
    -------
    tuple of float
        Z and its standard error.
    """
    edges = np.linspace(1.0, upper, 21)
    centers = 0.5 * (edges[1:] + edges[:-1])
    values = np.empty(blocks)
    per_block = samples // blocks
    for block in range(blocks):
        counts = np.zeros(len(centers))
        for _ in range(per_block):
            simulation.run(interval)
            counts += np.histogram(simulation.pair_ratios(upper), edges)[0]
        if counts.min() < 20:
            raise ValueError(f"too few pairs near contact in a block: {counts.min():g}")
        density = counts / (per_block * np.diff(edges))
        fit = np.polyfit(centers - 1.0, np.log(density), 2, w=np.sqrt(counts))
        contacts = math.exp(fit[-1])
        values[block] = 1.0 + contacts / simulation.dimensions / simulation.n_particles
    return float(values.mean()), float(values.std(ddof=1) / math.sqrt(blocks))


def random_fluid(
    n: int,
    packing_fraction: float,
    radii: ArrayLike = 0.5,
    *,
    seed: int,
    dimensions: int = 3,
    shape: Sequence[float] | None = None,
    sweeps: int = 2000,
    swap_fraction: float = 0.0,
) -> MonteCarlo:
    """Make a disordered system: melt a dilute lattice, compress, equilibrate.

    Parameters
    ----------
    n : int
    packing_fraction : float
        A monodisperse fluid stays one up to about 0.49 (disks: 0.70); a
        polydisperse one may go deep into the glass.
    radii : float or (n,) array_like
        Dealt out to the sites in random order, which is kept as particle order.
    seed : int
    dimensions : int
    shape : sequence of float, optional
        Ratios of the box edges; cubic (square) by default.
    sweeps : int
        Sweeps of equilibration at the target.
    swap_fraction : float
        As in `MonteCarlo.run`, used in compression and equilibration.
    """
    rng = np.random.default_rng(seed)
    sizes = rng.permutation(np.broadcast_to(np.asarray(radii, dtype=np.float64), n))
    edges = np.ones(dimensions) if shape is None else np.array(shape, dtype=np.float64)
    edges /= math.prod(edges) ** (1 / dimensions)
    grid = np.ceil(edges * n ** (1 / dimensions) - 1e-9).astype(np.int64)
    # the start: a fluid's density, and room between the largest particles
    volume = solid_volume(sizes, dimensions) / min(0.42, packing_fraction)
    side = volume ** (1 / dimensions)
    side *= max(1.0, 2.1 * sizes.max() / (side * edges / grid).min())
    sites = np.indices(tuple(grid)).reshape(dimensions, -1).T + 0.5
    chosen = rng.permutation(len(sites))[:n]
    lengths = side * edges
    simulation = MonteCarlo(sites[chosen] / grid * lengths, lengths, sizes, seed)
    simulation.equilibrate(300, swap_fraction=swap_fraction)
    simulation.compress_to(packing_fraction, swap_fraction=swap_fraction)
    simulation.equilibrate(sweeps, swap_fraction=swap_fraction)
    return simulation
