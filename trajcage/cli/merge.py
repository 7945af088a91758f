"""The command that makes one result file of several."""

import shlex
import sys
from contextlib import ExitStack
from pathlib import Path

import click

from trajcage.cli.progress import progress_bar
from trajcage.cli.verbosity import note, say, verbosity_options

__all__ = ["command"]

_FILE = click.Path(path_type=Path)


@click.command(name="merge")
@click.argument("parts", type=_FILE, nargs=-1, required=True, metavar="PART...")
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, dir_okay=False),
    required=True,
    help="Merged result file to write.",
)
@click.option(
    "--topology", type=_FILE, help="The input, if it is not where the parts say."
)
@click.option("--trajectory", type=_FILE, help="The trajectory that goes with it.")
@click.option("--overwrite", is_flag=True, help="Replace the output if it exists.")
@verbosity_options
def command(
    *,
    parts: tuple[Path, ...],
    output: Path,
    topology: Path | None,
    trajectory: Path | None,
    overwrite: bool,
) -> None:
    """Put parts of one trajectory, measured apart, into one result file.

    The parts follow each other without a gap and were measured with the same options.
    The merged file is the one that a single run over all frames writes. What needs
    several frames is measured anew: keep the trajectory, or use --store-positions.

    \b
      trajcage measure melt.gsd --stop 500 -o a.h5
      trajcage measure melt.gsd --start 500 -o b.h5
      trajcage merge a.h5 b.h5 -o cages.h5
    """
    from trajcage.errors import UsageError
    from trajcage.run import merge

    if trajectory is not None and topology is None:
        raise UsageError("--trajectory goes with --topology")

    with ExitStack() as stack:
        result = merge(
            parts,
            output=output,
            topology=topology,
            trajectory=trajectory,
            overwrite=overwrite,
            progress=progress_bar(stack),
            notify=note,
            command_line=shlex.join(["trajcage", *sys.argv[1:]]),
        )
    with result:
        done, n = result.frames_complete, result.n_particles
    say(
        f"{done} frames of {n} particles from {len(parts)} parts in {output}; "
        f"next: trajcage summary {output}"
    )
