"""The command that writes a result file in other forms."""

import sys
from pathlib import Path
from typing import Any, TextIO

import click

from trajcage.cli.common import NearChoice, result_argument
from trajcage.cli.verbosity import say, verbosity_options

__all__ = ["command"]


@click.command(name="export")
@result_argument
@click.option(
    "--to",
    "form",
    type=NearChoice(["csv", "parquet", "extxyz", "npz"]),
    required=True,
    help="CSV; Parquet for data frames (needs pyarrow, the extra trajcage[parquet]); "
    "extended XYZ for viewers (needs stored positions); numpy arrays.",
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
    help="CSV, Parquet: one line a frame with its means, instead of one for each "
    "particle.",
)
@click.option("--start", type=int, help="First stored frame, counted from 0.")
@click.option("--stop", type=int, help="Stored frame to stop before.")
@click.option("--step", type=int, help="Take every so many stored frames.")
@click.option("--overwrite", is_flag=True, help="Replace the output if it exists.")
@verbosity_options
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
    """Write a result file as CSV, Parquet, extended XYZ or NPZ.

    \b
      trajcage export cages.h5 --to csv --observables
      trajcage export cages.h5 --to parquet --field free_volume -o cages.parquet
      trajcage export cages.h5 --to extxyz -o cages.xyz
    """
    from trajcage.errors import UsageError
    from trajcage.run.exporting import new_file, write_csv, write_extxyz, write_npz
    from trajcage.run.inputs import FrameSelection
    from trajcage.run.parquet import write_parquet
    from trajcage.store import open_result

    if observables and form not in {"csv", "parquet"}:
        raise UsageError(
            "--observables goes with --to csv and --to parquet; npz holds them anyway"
        )
    if form in {"npz", "parquet"} and output is None:
        raise UsageError(f"--to {form} writes a binary file: name it with -o")
    wanted = names or None
    with open_result(result) as opened:
        frames = FrameSelection(start, stop, step).of(opened.frames_complete)

        def write_text(stream: TextIO) -> None:
            if form == "csv":
                write_csv(opened, stream, frames, wanted, per_particle=not observables)
            else:
                write_extxyz(opened, stream, frames, wanted)

        if output is None:
            write_text(sys.stdout)
            return
        with new_file(output, overwrite=overwrite) as path:
            if form == "parquet":
                write_parquet(
                    opened, path, frames, wanted, per_particle=not observables
                )
            elif form == "npz":
                with path.open("wb") as binary:
                    write_npz(opened, binary, frames, wanted)
            else:
                with path.open("w", encoding="utf-8") as text:
                    write_text(text)
    say(f"wrote {output}: {len(frames)} frames of {opened.n_particles} particles")
