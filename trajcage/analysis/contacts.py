"""Contacts, rattlers and the backbone of jammed packings."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import UsageError
from trajcage.kernel.halfspace import loose
from trajcage.model import Field, Frame, NeighborList
from trajcage.neighborhood import check_distinct, neighbor_list

__all__ = ["ContactOptions", "fields", "measure_contacts", "possible_contacts"]

#: Value of `rattler` for particles that may touch others beyond an open edge.
UNKNOWN = 2


@dataclass(frozen=True)
class ContactOptions:
    """How contacts are told from gaps.

    Parameters
    ----------
    tolerance : float, optional
        Largest gap of a contact, in units of the sum of the two radii. Unless
        given, 1e-6 or four times the resolution of the coordinates, whichever
        is more: usual for packings compressed to reduced pressures beyond 1e8
        (common practice), too small for anything softer.
    tolerances : tuple of float
        Growing grid on which the rattler fraction is stored as a curve; one
        value each half decade from 1e-12 to 0.1 unless given.
    plateau_change : float
        Largest spread of the rattler fraction over a plateau of this curve.
    plateau_decades : float
        Shortest plateau that counts, in decades of the tolerance.
    """

    tolerance: float | None = None
    tolerances: tuple[float, ...] = tuple(10.0 ** (k / 2) for k in range(-24, -1))
    plateau_change: float = 0.005
    plateau_decades: float = 1.5

    def __post_init__(self) -> None:
        grid = np.array(self.tolerances)
        if len(grid) == 0 or grid[0] <= 0.0 or np.any(np.diff(grid) <= 0.0):
            raise UsageError(
                f"expected positive, growing contact tolerances, got {self.tolerances}"
            )
        if self.tolerance is not None and not 0.0 < self.tolerance < 1.0:
            raise UsageError(
                "expected a contact tolerance between 0 and 1 (in diameters), got "
                f"{self.tolerance}"
            )


def fields(options: ContactOptions) -> tuple[Field, ...]:
    """Declare what :func:`measure_contacts` returns."""
    grid = len(options.tolerances)
    return (
        Field(
            "contacts",
            "Number of neighbors with a gap up to contact_tolerance; it depends on "
            "the tolerance unless rattler_plateau is defined",
            dtype="i4",
        ),
        Field(
            "rattler",
            "1 if the particle is not held: fewer than d+1 contacts, or all within "
            "a closed half-space, rattlers removed recursively; 0 if held; 2 if it "
            "may touch particles beyond an open edge of the data",
            dtype="u1",
        ),
        Field(
            "contact_tolerance",
            "Largest gap of a contact in units of the sum of the two radii",
            per_particle=False,
        ),
        Field(
            "rattler_fraction",
            "Rattlers among the particles that could be judged, at contact_tolerance",
            per_particle=False,
        ),
        Field(
            "rattler_unknown",
            "Particles left out of the rattler fractions, next to an open edge",
            dtype="i8",
            per_particle=False,
        ),
        Field(
            "rattler_fraction_curve",
            "Rattler fraction for each tolerance of the grid in the parameters",
            shape=(grid,),
            per_particle=False,
        ),
        Field(
            "rattler_plateau",
            "Median rattler fraction over the widest range of tolerances in which "
            "it is constant; NaN if there is none, as in thermal configurations: "
            "contacts and rattlers then depend on the tolerance",
            per_particle=False,
        ),
        Field(
            "rattler_plateau_range",
            "First and last tolerance of the plateau; NaN if there is none",
            shape=(2,),
            per_particle=False,
        ),
        Field(
            "backbone_coordination",
            "Mean number of contacts among the particles that are not rattlers",
            per_particle=False,
        ),
        Field(
            "isostatic_coordination",
            "Mean number of contacts that just makes a periodic backbone of N' "
            "particles rigid, 2 d (1 - 1/N') + 2/N'",
            per_particle=False,
        ),
    )


def possible_contacts(frame: Frame, options: ContactOptions) -> NeighborList:
    """Find all pairs that touch at some tolerance.

    Parameters
    ----------
    frame : Frame
        The configuration; radii may differ.
    options : ContactOptions
        Tolerances.
    """
    reach = max(_tolerance(frame, options), *options.tolerances)
    return neighbor_list(frame, lambda a, b: (1.0 + reach) * (a + b))


def measure_contacts(
    frame: Frame, options: ContactOptions, near: NeighborList | None = None
) -> dict[str, NDArray[np.generic] | float | int]:
    """Count contacts and find the particles that are not held by them.

    Parameters
    ----------
    frame : Frame
        The configuration; radii may differ.
    options : ContactOptions
        Tolerances.
    near : NeighborList, optional
        The pairs of :func:`possible_contacts`; searched unless given.

    Returns
    -------
    dict
        One entry for each of :func:`fields`.

    Raises
    ------
    FrameError
        If two centers coincide.

    Notes
    -----
    Local jamming: Torquato & Stillinger, J. Phys. Chem. B 105, 11849 (2001);
    recursive removal and isostatic counting as in Atkinson, Stillinger &
    Torquato, Phys. Rev. E 88, 062208 (2013). Citations from memory.
    """
    d = frame.dimensions
    tolerance = _tolerance(frame, options)
    near = near or possible_contacts(frame, options)
    distances = near.distances
    if not distances.all():
        check_distinct(frame)  # names the coincident centers
    sums = frame.radii[near.particles] + frame.radii[near.neighbors]
    gaps = distances / sums - 1.0
    directions = near.vectors / distances[:, None]
    unknown = _near_open_edge(frame)
    judged = int(np.count_nonzero(~unknown))

    def rattlers(limit: float) -> NDArray[np.bool_]:
        return np.asarray(
            loose(near.offsets, near.neighbors, directions, gaps, limit, unknown)
        )

    def fraction(removed: NDArray[np.bool_]) -> float:
        return float(np.count_nonzero(removed) / judged) if judged else np.nan

    curve = np.empty(len(options.tolerances))
    counts = np.searchsorted(np.sort(gaps), options.tolerances, side="right")
    for k, limit in enumerate(options.tolerances):
        same = k > 0 and counts[k] == counts[k - 1]
        curve[k] = curve[k - 1] if same else fraction(rattlers(limit))
    value, first, last = _plateau(curve, options)
    removed = rattlers(tolerance)
    touching = gaps <= tolerance
    contacts = np.bincount(near.particles[touching], minlength=frame.n_particles)
    backbone = int(np.count_nonzero(~removed & ~unknown))
    return {
        "contacts": contacts.astype(np.int32),
        "rattler": np.where(unknown, UNKNOWN, removed).astype(np.uint8),
        "contact_tolerance": tolerance,
        "rattler_fraction": fraction(removed),
        "rattler_unknown": frame.n_particles - judged,
        "rattler_fraction_curve": curve,
        "rattler_plateau": value,
        "rattler_plateau_range": np.array([first, last]),
        "backbone_coordination": _coordination(near, touching, removed, unknown),
        "isostatic_coordination": (
            2.0 * d * (1.0 - 1.0 / backbone) + 2.0 / backbone if backbone else np.nan
        ),
    }


def _tolerance(frame: Frame, options: ContactOptions) -> float:
    if options.tolerance is not None:
        return options.tolerance
    return max(1e-6, 4.0 * frame.resolution / frame.mean_diameter)


def _near_open_edge(frame: Frame) -> NDArray[np.bool_]:
    """Particles that an unseen particle of the largest radius could touch."""
    is_open = np.logical_not(frame.box.periodic)
    fractional = frame.box.fractional(frame.positions)[:, is_open]
    depth = np.minimum(fractional, 1.0 - fractional) * frame.box.heights[is_open]
    reach = frame.radii + frame.radii.max()
    return np.asarray(np.any(depth < reach[:, None], axis=1))


def _coordination(
    near: NeighborList,
    touching: NDArray[np.bool_],
    removed: NDArray[np.bool_],
    unknown: NDArray[np.bool_],
) -> float:
    """Mean number of contacts of the judged backbone with all of the backbone."""
    counted = ~removed & ~unknown
    both = touching & counted[near.particles] & ~removed[near.neighbors]
    size = np.count_nonzero(counted)
    return float(np.count_nonzero(both) / size) if size else float("nan")


def _plateau(
    curve: NDArray[np.float64], options: ContactOptions
) -> tuple[float, float, float]:
    """Value and ends of the widest flat stretch below 1, NaN if too short."""
    grid = np.array(options.tolerances)
    best, first, last = options.plateau_decades * (1.0 - 1e-9), np.nan, np.nan
    value = np.nan
    for start in np.flatnonzero(curve < 1.0):
        spread = np.maximum.accumulate(curve[start:]) - np.minimum.accumulate(
            curve[start:]
        )
        stop = start + np.count_nonzero(spread <= options.plateau_change) - 1
        width = float(np.log10(grid[stop] / grid[start]))
        if width >= best:
            best, first, last = width, float(grid[start]), float(grid[stop])
            value = float(np.median(curve[start : stop + 1]))
    return value, first, last
