"""The command that writes a result file in other forms."""

import sys
from pathlib import Path
from typing import Any

import click

from trajcage.cli.common import result_argument

__all__ = ["command"]


@click.command(name="export")
@result_argument
@click.option(
    "--to",
    "form",
    type=click.Choice(["csv", "extxyz", "npz"]),
    required=True,
    help="CSV, extended XYZ for viewers (needs stored positions), or numpy arrays.",
)
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, dir_okay=False),
    help="File to write; standard output unless given.",
)
@click.option(
    "--field",
    "names",
    multiple=True,
    metavar="NAME",
    help="Write only this field; may be repeated.",
)
@click.option(
    "--observables",
    is_flag=True,
    help="CSV: one line a frame with its means, instead of one for each particle.",
)
@click.option("--start", type=int, help="First stored frame, counted from 0.")
@click.option("--stop", type=int, help="Stored frame to stop before.")
@click.option("--step", type=int, help="Take every so many stored frames.")
@click.option("--overwrite", is_flag=True, help="Replace the output if it exists.")
def command(
    *,
    result: Any,
    form: str,
    output: Path | None,
    names: tuple[str, ...],
    observables: bool,
    start: int | None,
    stop: int | None,
    step: int | None,
    overwrite: bool,
) -> None:
    """Write a result file as CSV, extended XYZ or NPZ.

    \b
      trajcage export cages.h5 --to csv --observables
      trajcage export cages.h5 --to extxyz -o cages.xyz
    """
    from trajcage.errors import ResultFileError, UsageError
    from trajcage.run.exporting import write_csv, write_extxyz, write_npz
    from trajcage.run.inputs import FrameSelection
    from trajcage.store import open_result

    if observables and form != "csv":
        raise UsageError("--observables goes with --to csv; npz holds them anyway")
    if form == "npz" and output is None:
        raise UsageError("--to npz writes a binary file: name it with -o")
    if output is not None and output.exists() and not overwrite:
        raise ResultFileError(
            f"{output} exists; replace it with --overwrite, or choose another name"
        )
    with open_result(result) as opened:
        frames = FrameSelection(start, stop, step).of(opened.frames_complete)
        wanted = names or None
        if form == "npz":
            assert output is not None
            write_npz(opened, output, frames, wanted)
            return
        stream = sys.stdout if output is None else output.open("w", encoding="utf-8")
        try:
            if form == "csv":
                write_csv(opened, stream, frames, wanted, per_particle=not observables)
            else:
                write_extxyz(opened, stream, frames, wanted)
        finally:
            if output is not None:
                stream.close()
