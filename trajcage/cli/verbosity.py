"""What commands say on standard error: errors only, the usual, or all they do.

Every command takes ``--quiet`` and ``--verbose``. Results are no messages: they go to
standard output or to files whatever is chosen.
"""

import logging
import sys
import time
from collections.abc import Callable
from typing import Any, TypeVar

import click

__all__ = ["is_quiet", "is_verbose", "note", "say", "verbosity_options"]

F = TypeVar("F", bound=Callable[..., Any])

_QUIET, _VERBOSE = "trajcage.quiet", "trajcage.verbose"
_FORMAT = "%(asctime)s %(name)s: %(message)s"


def verbosity_options(function: F) -> F:
    """Add ``--quiet`` and ``--verbose``, which the command itself does not see."""
    for names, told, callback in (
        (("-v", "--verbose"), "Log what is read and chosen, and timings.", _verbose),
        (("-q", "--quiet"), "Print errors only.", _quiet),
    ):
        function = click.option(
            *names, is_flag=True, expose_value=False, callback=callback, help=told
        )(function)
    return function


def say(text: str) -> None:
    """Print a line on standard error, unless told to be quiet."""
    if not is_quiet():
        click.echo(text, err=True)


def note(text: str) -> None:
    """Print something the user should know, unless told to be quiet."""
    say(f"Note: {text}")


def is_quiet() -> bool:
    """Whether nothing but errors is to be printed."""
    return bool(click.get_current_context().meta.get(_QUIET))


def is_verbose() -> bool:
    """Whether the log is printed."""
    return bool(click.get_current_context().meta.get(_VERBOSE))


def _quiet(context: click.Context, _: click.Parameter, value: bool) -> None:
    context.meta[_QUIET] = value
    _refuse_both(context)


def _verbose(context: click.Context, _: click.Parameter, value: bool) -> None:
    context.meta[_VERBOSE] = value
    _refuse_both(context)
    if not value:
        return
    logger = logging.getLogger("trajcage")
    handler = logging.StreamHandler(sys.stderr)
    handler.setFormatter(logging.Formatter(_FORMAT, "%H:%M:%S"))
    before, started = logger.level, time.monotonic()
    logger.addHandler(handler)
    logger.setLevel(logging.INFO)

    def end() -> None:
        logger.info("ended after %.2f s", time.monotonic() - started)
        logger.removeHandler(handler)
        logger.setLevel(before)

    context.call_on_close(end)


def _refuse_both(context: click.Context) -> None:
    if context.meta.get(_QUIET) and context.meta.get(_VERBOSE):
        raise click.UsageError("--quiet and --verbose exclude each other: give one")
