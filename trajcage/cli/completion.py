"""The command that prints the completion script of a shell."""

import click
from click.shell_completion import get_completion_class

from trajcage.cli.common import NearChoice
from trajcage.cli.verbosity import verbosity_options

__all__ = ["command"]


@click.command(name="completion")
@click.argument("shell", type=NearChoice(["bash", "zsh", "fish"]))
@verbosity_options
@click.pass_context
def command(context: click.Context, /, *, shell: str) -> None:
    """Print the script that lets a shell complete commands, options and names.

    \b
      eval "$(trajcage completion bash)"         in ~/.bashrc
      eval "$(trajcage completion zsh)"          in ~/.zshrc
      trajcage completion fish | source          in ~/.config/fish/config.fish
    """
    made = get_completion_class(shell)
    assert made is not None
    program = context.find_root()
    script = made(program.command, {}, "trajcage", "_TRAJCAGE_COMPLETE")
    click.echo(script.source(), nl=False)
