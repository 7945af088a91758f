"""The command that tells what is understood of an input."""

from typing import TYPE_CHECKING, Any

import click

from trajcage.cli.common import input_options, json_option, print_json, table
from trajcage.cli.verbosity import note, verbosity_options

if TYPE_CHECKING:
    from trajcage.run import Inspection

__all__ = ["command"]


@click.command(name="inspect")
@input_options
@click.option(
    "--overlap-tolerance",
    type=float,
    metavar="LENGTH",
    help="Overlaps up to this depth count as contacts. From the resolution of the "
    "coordinates unless given.",
)
@json_option
@verbosity_options
def command(*, as_json: bool, **given: Any) -> None:
    """Tell what is understood of an input, and refuse what makes no sense.

    \b
      trajcage inspect melt.gsd
      trajcage inspect start.gro run.xtc --diameter 1.62
    """
    from trajcage.run import inspect

    found = inspect(**given)
    if as_json:
        print_json(found.record())
        return
    click.echo(table(_rows(found), align="left"))
    for text in found.notes:
        note(text)


def _rows(found: "Inspection") -> list[tuple[str, ...]]:
    told = found.input
    types = ", ".join(f"{n} {name}" for name, n in told.species.items())
    edges = " x ".join(f"{length:.6g}" for length in told.box_lengths)
    axes = [a for a, p in zip("xyz", told.periodic, strict=False) if p]
    small, large = 2.0 * told.radius_min, 2.0 * told.radius_max
    diameter = f"{small:.6g}" if small == large else f"{small:.6g} to {large:.6g}"
    last = "unreadable"
    if told.last_step is not None:
        last = f"step {told.last_step}, time {told.last_time:.6g}"
    overlaps = f"{found.overlaps} pairs deeper than {found.overlap_tolerance:.3g}"
    if found.deepest_overlap > 0.0:
        first, second = found.deepest_overlap_ids
        overlaps += (
            f"; the deepest is {found.deepest_overlap:.3g}, particles {first} and "
            f"{second}"
        )
    resolution = (
        f"{told.resolution:.3g}, with gaps of about {found.mean_gap:.3g} between "
        "neighbors"
    )
    return [
        ("files", ", ".join(told.files)),
        ("format", told.format),
        ("particles", f"{told.n_particles} ({types})"),
        ("dimensions", f"{told.dimensions}. {told.dimensions_source}"),
        ("box", f"{edges}. {told.box_source}"),
        ("periodic", f"{', '.join(axes) or 'none'}. {told.periodic_source}"),
        ("diameter", f"{diameter}. {told.radii_source}"),
        ("packing_fraction", f"{found.packing_fraction:.6g}"),
        ("frames", str(told.n_frames)),
        ("first frame", f"step {told.first_step}, time {told.first_time:.6g}"),
        ("last frame", last),
        ("time_unit", f"{told.time_unit}. {told.time_source}"),
        ("resolution", resolution),
        ("overlaps", overlaps),
    ]
