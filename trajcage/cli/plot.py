"""The command that draws figures."""

from pathlib import Path
from typing import Any

import click

from trajcage.cli.common import NearChoice, result_argument
from trajcage.cli.verbosity import say, verbosity_options

__all__ = ["FIGURES", "command"]

#: Names of the figures, told without loading what draws them.
FIGURES = (
    "free-volume",
    "lattices",
    "pressure",
    "windows",
    "slice",
    "regions",
    "survival",
    "correlations",
    "rattlers",
)


@click.command(name="plot")
@result_argument
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, file_okay=False),
    required=True,
    metavar="DIR",
    help="Directory to write to; made if it is not there.",
)
@click.option(
    "--only",
    "names",
    type=NearChoice(FIGURES),
    multiple=True,
    metavar="NAME",
    help="Draw only this figure; may be repeated.",
)
@click.option(
    "--frame",
    type=int,
    metavar="F",
    help="Frame of the slice, as numbered in the trajectory from 0.  [default: the last]",
)
@click.option(
    "--format",
    "form",
    type=NearChoice(["png", "svg", "pdf"]),
    default="png",
    show_default=True,
    help="File format.",
)
@click.option("--overwrite", is_flag=True, help="Replace figures that are there.")
@verbosity_options
def command(
    *,
    result: Any,
    output: Path,
    names: tuple[str, ...],
    frame: int | None,
    form: str,
    overwrite: bool,
) -> None:
    """Draw the figures of a result file.

    The figures are free-volume, lattices, pressure, windows, slice (of stored
    positions), regions, survival, correlations and rattlers. One without data is left
    out, and the reason is told.

    \b
      trajcage plot cages.h5 -o figures
      trajcage plot cages.h5 -o figures --only slice --frame 12 --overwrite
    """
    from trajcage.errors import ResultFileError
    from trajcage.plots import write_figures
    from trajcage.store import open_result

    with open_result(result) as opened:
        paths, figures = write_figures(
            opened, output, names, frame=frame, form=form, overwrite=overwrite
        )
    for path in paths.values():
        say(f"wrote {path}")
    left_out = [f"{name}: {reason}" for name, reason in figures.missing.items()]
    if not paths:
        raise ResultFileError(f"no figure can be drawn. {'. '.join(left_out)}")
    for line in left_out:
        say(f"left out {line}")
