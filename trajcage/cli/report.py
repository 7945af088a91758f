"""The command that writes everything to one page."""

from pathlib import Path
from typing import Any

import click

from trajcage.cli.common import result_argument
from trajcage.cli.verbosity import say, verbosity_options

__all__ = ["command"]


@click.command(name="report")
@result_argument
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, dir_okay=False),
    required=True,
    help="HTML file to write.",
)
@click.option(
    "--frame",
    type=int,
    metavar="F",
    help="Frame of the slice, as numbered in the trajectory from 0.  [default: the last]",
)
@click.option("--overwrite", is_flag=True, help="Replace the page if it exists.")
@verbosity_options
def command(*, result: Any, output: Path, frame: int | None, overwrite: bool) -> None:
    """Write a result file as one HTML page: warnings, numbers, figures, options.

    The page holds all it shows and loads nothing; open it in any browser.

    \b
      trajcage report cages.h5 -o report.html
    """
    from trajcage.plots import write_report
    from trajcage.store import open_result

    with open_result(result) as opened:
        figures = write_report(opened, output, frame=frame, overwrite=overwrite)
    say(f"wrote {output} with {len(figures.drawn)} figures")
    for name, reason in figures.missing.items():
        say(f"left out {name}: {reason}")
