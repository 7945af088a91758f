"""The command line: the only place that prints and sets exit codes.

Commands are modules of the same name with a command ``command``, imported when they
are called, and they import the rest of the package when they run.
"""

from importlib import import_module

import click

from trajcage.errors import InterruptedRunError, TrajcageError, UsageError
from trajcage.wording import near_miss

__all__ = ["main"]

# Name and one-line help of every command, in the order of a session; `--help` shows
# these without importing the commands.
_COMMANDS = {
    "inspect": "Tell what is understood of an input.",
    "measure": "Measure cages, order and cage breaking; write a result file.",
    "merge": "Put parts of a trajectory, measured apart, into one result file.",
    "salvage": "Copy the complete frames out of a damaged result file.",
    "summary": "Show the numbers of a result file beside published references.",
    "breaks": "List the cages that broke.",
    "plot": "Draw the figures of a result file.",
    "report": "Write a result file as one page with figures.",
    "cage": "Draw the cage of one particle.",
    "export": "Write a result file as CSV, Parquet, extended XYZ or NPZ.",
    "lattice": "Show the cages of ideal lattices.",
    "cite": "Print what to cite.",
    "completion": "Print the completion script of a shell.",
}


class _Failure(click.ClickException):
    """Data that cannot be used."""

    exit_code = 1


class _Mistake(click.ClickException):
    """A command that cannot mean anything."""

    exit_code = 2


class _Stopped(click.ClickException):
    """A run that was interrupted."""

    exit_code = 130


class _Program(click.Group):
    """Commands imported on demand, our errors turned into messages."""

    # click calls these with a context that they do not need
    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002
        return list(_COMMANDS)

    def get_command(
        self,
        ctx: click.Context,  # noqa: ARG002
        cmd_name: str,
    ) -> click.Command | None:
        if cmd_name not in _COMMANDS:
            return None
        command: click.Command = import_module(f"trajcage.cli.{cmd_name}").command
        return command

    def format_commands(
        self,
        ctx: click.Context,  # noqa: ARG002
        formatter: click.HelpFormatter,
    ) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(_COMMANDS.items()))

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        name = args[0]
        if name not in _COMMANDS and not name.startswith("-"):
            ctx.fail(f"there is no command {name!r}{near_miss(name, _COMMANDS)}")
        return super().resolve_command(ctx, args)

    def invoke(self, ctx: click.Context) -> object:
        try:
            return super().invoke(ctx)
        except UsageError as error:
            raise _Mistake(str(error)) from error
        except InterruptedRunError as error:
            raise _Stopped(str(error)) from error
        except KeyboardInterrupt:
            raise _Stopped("interrupted") from None
        except TrajcageError as error:
            raise _Failure(str(error)) from error


def _print_versions(ctx: click.Context, _: click.Parameter, value: bool) -> None:
    if not value or ctx.resilient_parsing:
        return
    from trajcage.versions import versions

    for name, version in versions().items():
        click.echo(f"{name} {version}")
    ctx.exit()


@click.group(
    cls=_Program,
    context_settings={"help_option_names": ["-h", "--help"]},
    epilog="Each command explains itself: trajcage measure --help.",
)
@click.option(
    "--version",
    is_flag=True,
    is_eager=True,
    expose_value=False,
    callback=_print_versions,
    help="Show the versions of trajcage and of what it stands on.",
)
def main() -> None:
    """Exact cages, free volumes and cage breaking of hard spheres and colloids.

    Reads any trajectory that MDAnalysis reads and writes one HDF5 file. Results go to
    files and standard output, messages to standard error.
    """
