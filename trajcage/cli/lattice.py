"""The command that shows the cages of ideal lattices."""

from typing import TYPE_CHECKING

import click

from trajcage.cli.common import json_option, print_json, table
from trajcage.cli.verbosity import verbosity_options
from trajcage.wording import MISSING, number

if TYPE_CHECKING:
    from trajcage.lattices import LatticeReference, LatticeThresholds

__all__ = ["LATTICE_NAMES", "command"]

#: Told without loading the lattices.
LATTICE_NAMES = (
    "square",
    "triangular",
    "honeycomb",
    "sc",
    "bcc",
    "fcc",
    "hcp",
    "diamond",
)


@click.command(name="lattice")
@click.argument(
    "names",
    nargs=-1,
    metavar="[NAME]...",
    shell_complete=lambda _ctx, _param, begun: [
        name for name in LATTICE_NAMES if name.startswith(begun)
    ],
)
@click.option(
    "--packing-fraction",
    "packing_fractions",
    type=float,
    multiple=True,
    metavar="PHI",
    help="Show the cage at this packing fraction; may be repeated.",
)
@json_option
@verbosity_options
def command(
    *, names: tuple[str, ...], packing_fractions: tuple[float, ...], as_json: bool
) -> None:
    """Show the cage of a particle on ideal lattices, all others held at their sites.

    NAME is square, triangular, honeycomb, sc, bcc, fcc, hcp or diamond. Without one all
    are shown; without a packing fraction the ones at which the cages change are shown.
    Lengths are in particle diameters.

    \b
      trajcage lattice
      trajcage lattice fcc hcp --packing-fraction 0.545 --packing-fraction 0.6
    """
    from trajcage.errors import UsageError
    from trajcage.lattices import LATTICES, lattice, thresholds

    for name in names:
        if name.replace(".", "", 1).isdecimal():
            raise UsageError(f"{name} is no lattice; write --packing-fraction {name}")

    if not packing_fractions:
        limits = [thresholds(name) for name in names or LATTICES]
        if as_json:
            print_json(limits[0] if len(names) == 1 else limits)
        else:
            click.echo(_threshold_table(limits))
        return
    found = [
        lattice(name, phi)
        for name in names or LATTICES
        for phi in packing_fractions
        if names or phi <= LATTICES[name].close_packing.value
    ]
    if as_json:
        print_json(found[0] if len(names) == len(found) == 1 else found)
    else:
        click.echo("\n\n".join(map(_reference_text, found)))


def _threshold_table(limits: "list[LatticeThresholds]") -> str:
    rows = []
    for entry in limits:
        growth = entry.growth
        rows.append(
            (
                entry.name,
                str(entry.dimensions),
                number(entry.close_packing.value, 10),
                entry.close_packing.expression,
                MISSING if growth is None else number(growth.value, 10),
                "" if growth is None else growth.expression,
                number(entry.escape.value, 10),
                entry.escape.expression,
            )
        )
    header = (
        "lattice",
        "dimensions",
        "close_packing",
        "",
        "growth",
        "",
        "escape",
        "",
    )
    legend = (
        "packing fractions; below growth further shells bound the cage, below escape "
        "the particle leaves"
    )
    return f"{table(rows, header, align='left')}\n{legend}"


def _reference_text(found: "LatticeReference") -> str:
    rows = [
        ("lattice", found.name),
        ("packing_fraction", number(found.packing_fraction, 10)),
        ("close_packing", number(found.close_packing, 10)),
        ("spacing", number(found.spacing, 10)),
        ("cell_volume", number(found.cell_volume, 10)),
        ("status", found.status.name.lower()),
        ("free_volume", number(found.free_volume, 10)),
        ("free_surface", number(found.free_surface, 10)),
        ("wall_sum", number(found.wall_sum, 10)),
        ("bounding_neighbors", str(found.bounding_neighbors)),
        ("weakest_window", number(found.weakest_window, 10)),
        (
            "compressibility_factor",
            f"{found.compressibility_factor:.10g} (cell theory)",
        ),
    ]
    for window in found.windows:
        told = (
            f"{window.multiplicity} of {window.corners} corners, opening_ratio "
            f"{window.opening_ratio:.6g}: {window.description}"
        )
        rows.append(("window", told))
    return table(rows, align="left")
