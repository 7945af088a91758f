"""The command that rescues what is left of a damaged result file."""

from pathlib import Path

import click

from trajcage.cli.common import result_argument
from trajcage.cli.verbosity import say, verbosity_options

__all__ = ["command"]


@click.command(name="salvage")
@result_argument
@click.argument("target", type=click.Path(path_type=Path), metavar="TARGET")
@verbosity_options
def command(*, result: Path, target: Path) -> None:
    """Copy the complete frames of a damaged file to TARGET, a new file.

    FILE is only read: one that was truncated, or copied while it was written. A file
    that was merely killed needs no salvage: it opens, and measure --resume goes on.
    """
    from trajcage.store import open_result, salvage

    frames = salvage(result, target)
    with open_result(target) as copy:
        resumable = copy.resumable
    told = "continue it with trajcage measure --resume"
    if not resumable:
        told = (
            f"the state of the time analysis is lost: trajcage merge {target} -o NEW "
            "makes a file from these frames that can be resumed"
        )
    say(f"{frames} complete frames in {target}; {told}")
