"""What a run would understand of an input, without measuring it."""

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path

from trajcage.analysis.cages import (
    DENSEST_PACKING,
    CageOptions,
    Overlaps,
    check_packing,
    find_overlaps,
)
from trajcage.neighborhood import check_distinct
from trajcage.readers import InputDescription, open_trajectory
from trajcage.run.inputs import Diameter, input_options

__all__ = ["Inspection", "inspect"]


@dataclass(frozen=True)
class Inspection:
    """An input as a run would take it; values are those of the first frame.

    Parameters
    ----------
    input : InputDescription
        Files, particles, box, radii, clock, and where each comes from.
    packing_fraction : float
        Volume (area in 2D) of the particles over that of the box.
    mean_gap : float, length
        Surface distance of neighbors if all were spread evenly: the scale that the
        resolution of the coordinates has to stay well below.
    overlap_tolerance : float, length
        Overlap depth up to which particles touch.
    overlaps : int
        Pairs that overlap by more.
    deepest_overlap : float, length
        Depth of the deepest overlap, 0 if none.
    deepest_overlap_ids : tuple of int
        Ids of that pair, -1 if none.
    notes : tuple of str
        What the user should know.
    """

    input: InputDescription
    packing_fraction: float
    mean_gap: float
    overlap_tolerance: float
    overlaps: int
    deepest_overlap: float
    deepest_overlap_ids: tuple[int, int]
    notes: tuple[str, ...]

    def record(self) -> dict[str, object]:
        """All of it as one flat mapping, ready for JSON."""
        own = asdict(self)
        flat = own.pop("input")
        flat.pop("notes")
        return {**flat, **own}


def inspect(
    topology: str | Path,
    trajectory: str | Path | None = None,
    *,
    diameter: Diameter | None = None,
    box: str | Sequence[float] | Sequence[Sequence[float]] | None = None,
    dimensions: int | None = None,
    periodic: str | None = None,
    dt: float | None = None,
    time_unit: str | None = None,
    overlap_tolerance: float | None = None,
) -> Inspection:
    """Tell what is understood of an input, and refuse what makes no sense.

    Parameters
    ----------
    topology, trajectory, diameter, box, dimensions, periodic, dt, time_unit
        As in :func:`trajcage.measure`.
    overlap_tolerance : float, length, optional
        As there.

    Raises
    ------
    InputError
        If the first frame cannot be used; the message says why.
    UsageError
        If an option makes no sense.
    """
    options = input_options(
        topology,
        trajectory,
        diameter=diameter,
        box=box,
        dimensions=dimensions,
        periodic=periodic,
        dt=dt,
        time_unit=time_unit,
    )
    with open_trajectory(options) as opened:
        description = opened.describe()
        frame = opened.frame(0)
    check_distinct(frame)
    warning = check_packing(frame)
    tolerance = CageOptions(overlap_tolerance=overlap_tolerance).tolerance(frame)
    overlaps = find_overlaps(frame, tolerance)
    phi, d = frame.packing_fraction, frame.dimensions
    gap = frame.mean_diameter * ((DENSEST_PACKING[d] / phi) ** (1.0 / d) - 1.0)
    notes = [*description.notes, warning, *_advice(description, phi, gap, overlaps)]
    return Inspection(
        input=description,
        packing_fraction=phi,
        mean_gap=gap,
        overlap_tolerance=tolerance,
        overlaps=overlaps.count,
        deepest_overlap=overlaps.deepest,
        deepest_overlap_ids=overlaps.pair,
        notes=tuple(note for note in notes if note),
    )


def _advice(
    description: InputDescription, phi: float, gap: float, overlaps: Overlaps
) -> list[str]:
    notes = []
    if phi < 0.01:
        notes.append(
            f"the packing fraction {phi:.3g} is very low: if that is not meant, the "
            "diameter and the box are in different units"
        )
    if overlaps.count:
        notes.append(
            f"{overlaps.count} pairs overlap by more than the tolerance; their particles "
            "get no cage, unless the tolerance is raised or the diameter corrected"
        )
    if gap > 0.0 and description.resolution > 0.01 * gap:
        notes.append(
            f"the coordinates are stored in steps of {description.resolution:.3g}, which "
            f"is not small beside the gaps between particles, {gap:.3g}: free volumes "
            "and the pressure suffer; save more digits"
        )
    return notes
