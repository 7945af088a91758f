"""The command that draws the cage of one particle."""

from pathlib import Path
from typing import Any

import click

from trajcage.cli.common import input_options
from trajcage.cli.verbosity import say, verbosity_options

__all__ = ["command"]


@click.command(name="cage", short_help="Draw the cage of one particle.")
@input_options
@click.option(
    "--particle", type=int, required=True, metavar="ID", help="Id of the particle."
)
@click.option(
    "--frame",
    type=int,
    default=0,
    show_default=True,
    help="Frame of the trajectory, counted from 0.",
)
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, dir_okay=False),
    required=True,
    help="File to write: .html to turn it around (disks: to zoom), .ply for a mesh "
    "(spheres only), .png, .svg or .pdf for a picture.",
)
@click.option(
    "--fineness",
    type=float,
    default=12.0,
    show_default=True,
    help="How much smaller than the cage of a sphere its triangles are; the arcs of "
    "that of a disk are exact.",
)
@click.option(
    "--overlap-tolerance",
    type=float,
    metavar="LENGTH",
    help="As for trajcage measure; that of the run for a result file.",
)
@click.option("--overwrite", is_flag=True, help="Replace the output if it exists.")
@verbosity_options
def command(
    *,
    particle: int,
    frame: int,
    output: Path,
    fineness: float,
    overwrite: bool,
    topology: Path,
    trajectory: Path | None,
    **given: Any,
) -> None:
    """Draw the curved wall of one cage, its bounding neighbors and weakest window.

    TOPOLOGY is a result file that was measured with --store-positions, or a trajectory
    as for trajcage measure.

    \b
      trajcage cage cages.h5 --particle 17 --frame 3 -o cage.html
    """
    from trajcage.analysis.cage_mesh import mesh_cage
    from trajcage.analysis.cage_outline import outline_cage
    from trajcage.plots import write_cage
    from trajcage.run.single_frame import single_frame

    found, options = single_frame(topology, trajectory, frame=frame, **given)
    cage = (
        outline_cage(found, particle, options)
        if found.dimensions == 2
        else mesh_cage(found, particle, options, fineness=fineness)
    )
    source = f"{(trajectory or topology).name}, frame {frame}, time {found.time:.6g}"
    write_cage(cage, output, source, overwrite=overwrite)
    say(
        f"wrote {output}: free volume {cage.free_volume:.6g}, "
        f"{len(cage.neighbors)} bounding neighbors"
    )
