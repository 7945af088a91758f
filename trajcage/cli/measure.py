"""The command that does the main job."""

import math
import shlex
import sys
import time
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import click
from click.core import ParameterSource

from trajcage.cli.common import NearChoice, input_options
from trajcage.cli.configured import configuration_options, recorded_inputs, settings
from trajcage.cli.progress import progress_bar
from trajcage.cli.verbosity import note, say, verbosity_options

__all__ = ["command"]

_SKIPPABLE = ("cells", "order", "rattlers", "regions", "time")


class _Reach(click.ParamType[float]):
    """A length, or ``box`` for the whole periodic box."""

    name = "length"

    def convert(
        self,
        value: Any,
        param: click.Parameter | None,
        ctx: click.Context | None,
    ) -> float:
        """Return the length, infinite for the whole box."""
        if value == "box":
            return math.inf
        try:
            length = float(value)
        except ValueError:
            length = math.nan
        if not length > 0.0:
            self.fail(f"expected a positive length or 'box', got {value!r}", param, ctx)
        return length


@click.command(name="measure", short_help="Measure a trajectory.")
@input_options
@configuration_options
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, dir_okay=False),
    required=True,
    help="Result file to write (HDF5).",
)
@click.option("--start", type=int, help="First frame, counted from 0.")
@click.option("--stop", type=int, help="Frame to stop before.")
@click.option("--step", type=int, help="Take every so many frames.")
@click.option(
    "--reach",
    type=_Reach(),
    metavar="LENGTH|box",
    help="A cage that extends further than this is open. Ten of the largest diameters "
    "unless given; with box, regions that wrap around the periodic box are measured.",
)
@click.option(
    "--overlap-tolerance",
    type=float,
    metavar="LENGTH",
    help="Overlaps up to this depth count as contacts. From the resolution of the "
    "coordinates unless given.",
)
@click.option("--strict", is_flag=True, help="Stop at the first deeper overlap.")
@click.option(
    "--skip",
    multiple=True,
    type=NearChoice(_SKIPPABLE),
    help="Leave out a family of quantities and what builds on it; may be repeated.",
)
@click.option(
    "--bonded",
    type=float,
    default=1.35,
    show_default=True,
    metavar="A1",
    help="Neighbors are bonded up to this distance in units of the contact distance.",
)
@click.option(
    "--broken",
    type=float,
    default=1.6,
    show_default=True,
    metavar="A2",
    help="Bonds are broken beyond this distance.",
)
@click.option(
    "--fraction-lost",
    type=float,
    default=0.5,
    show_default=True,
    help="Share of its neighbors whose loss breaks a cage.",
)
@click.option(
    "--mobility-window",
    type=float,
    metavar="TIME",
    help="Time for which a particle counts as mobile after its cage broke. Ten frames "
    "unless given.",
)
@click.option(
    "--remove-drift", is_flag=True, help="Take displacements relative to their mean."
)
@click.option(
    "--contact-tolerance",
    type=float,
    metavar="GAP",
    help="Largest gap of a contact, in units of the contact distance. From the "
    "resolution of the coordinates unless given.",
)
@click.option(
    "--workers",
    type=int,
    metavar="N",
    default=1,
    show_default=True,
    help="Processes; 0 for one on every core. Results do not depend on it.",
)
@click.option(
    "--dask",
    metavar="ADDRESS",
    help="Measure on an existing dask cluster: the address of its scheduler, or its "
    "scheduler file. Its workers must see the input under the same paths.",
)
@click.option("--store-positions", is_flag=True, help="Store the positions too.")
@click.option(
    "--store-walls", is_flag=True, help="Store by whom each particle is caged."
)
@click.option("--resume", is_flag=True, help="Continue the result file if it exists.")
@click.option("--overwrite", is_flag=True, help="Replace the result file if it exists.")
@verbosity_options
@click.pass_context
def command(
    context: click.Context,
    /,
    *,
    bonded: float,
    broken: float,
    fraction_lost: float,
    mobility_window: float | None,
    remove_drift: bool,
    contact_tolerance: float | None,
    output: Path,
    **given: Any,
) -> None:
    """Measure every frame of a trajectory and write one result file.

    TOPOLOGY and TRAJECTORY are any files that MDAnalysis reads; a single file can be
    both. The run can be stopped at any time with Ctrl-C and continued with --resume.
    Options can come from a TOML file or from an earlier result file; those given here
    go first.

    \b
      trajcage measure melt.gsd -o cages.h5
      trajcage measure start.data run.xtc --diameter A=1.0,B=1.4 -o cages.h5
      trajcage measure --config run.toml
      trajcage measure longer.gsd --like cages.h5 -o longer.h5
    """
    from trajcage.analysis.contacts import ContactOptions
    from trajcage.analysis.order import OrderOptions
    from trajcage.analysis.regions import RegionOptions
    from trajcage.analysis.time_options import TimeOptions
    from trajcage.kernel.jit import is_compiled
    from trajcage.run import measure

    started = time.monotonic()
    if not is_compiled():
        say("compiling the geometry, once after each installation: half a minute or so")
    elsewhere = context.get_parameter_source("topology") == ParameterSource.COMMANDLINE
    if elsewhere and context.get_parameter_source("trajectory") != (
        ParameterSource.COMMANDLINE
    ):
        given["trajectory"] = None  # the configured one goes with another topology
    time_analysis = TimeOptions(
        **settings(context, "time"),
        bonded=bonded,
        broken=broken,
        fraction_lost=fraction_lost,
        mobility_window=mobility_window,
        remove_drift=remove_drift,
    )
    with ExitStack() as stack:
        result = measure(
            output=output,
            time_analysis=time_analysis,
            contacts=ContactOptions(
                **settings(context, "contacts"), tolerance=contact_tolerance
            ),
            order=OrderOptions(**settings(context, "order")),
            regions=RegionOptions(**settings(context, "regions")),
            progress=progress_bar(stack),
            notify=note,
            command_line=shlex.join(["trajcage", *sys.argv[1:]]),
            **given,
        )
    with result:
        done, n = result.frames_complete, result.n_particles
        inputs = result.parameters["inputs"]
    before = {} if elsewhere else {f["name"]: f for f in recorded_inputs(context)}
    for file in inputs:
        if file["sha256"] != before.get(file["name"], file)["sha256"]:
            note(
                f"{file['name']} is not what it was when the file given with --like was measured"
            )
    say(
        f"{done} frames of {n} particles in {output} "
        f"({time.monotonic() - started:.1f} s); next: trajcage summary {output}"
    )
