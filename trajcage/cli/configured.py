"""Options from a TOML file or from an earlier result file, below the command line."""

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, TypeVar

import click

__all__ = ["configuration_options", "recorded_inputs", "settings"]

F = TypeVar("F", bound=Callable[..., Any])

_LIKE, _CONFIG = "trajcage.like", "trajcage.config"
_SETTINGS, _INPUTS = "trajcage.settings", "trajcage.inputs"


def configuration_options(function: F) -> F:
    """Add ``--like`` and ``--config``, which set the defaults of the other options."""
    like = click.option(
        "--like",
        type=click.Path(path_type=Path),
        metavar="FILE",
        is_eager=True,
        expose_value=False,
        callback=_like,
        help="Measure as this result file was measured: input, frames and settings, but "
        "for those given here. A TOPOLOGY given here replaces the input.",
    )
    config = click.option(
        "--config",
        type=click.Path(path_type=Path),
        metavar="FILE",
        is_eager=True,
        expose_value=False,
        callback=_config,
        help="Read options from a TOML file, as trajcage summary FILE --toml writes it; "
        "those given here go first.",
    )
    return like(config(function))


def settings(context: click.Context, part: str) -> dict[str, Any]:
    """Return configured settings of a part that are no options of the command."""
    found: dict[str, dict[str, Any]] = context.meta.get(_SETTINGS, {})
    return found.get(part, {})


def recorded_inputs(context: click.Context) -> list[dict[str, Any]]:
    """Return the input files of the result file given with ``--like``."""
    found: list[dict[str, Any]] = context.meta.get(_INPUTS, [])
    return found


def _like(context: click.Context, _: click.Parameter, path: Path | None) -> None:
    if path is None or context.resilient_parsing:
        return
    from trajcage.run.configuration import recorded_configuration
    from trajcage.store import open_result

    with open_result(path) as result:
        context.meta[_LIKE] = recorded_configuration(result)
        context.meta[_INPUTS] = result.parameters["inputs"]
    _apply(context)


def _config(context: click.Context, _: click.Parameter, path: Path | None) -> None:
    if path is None or context.resilient_parsing:
        return
    from trajcage.run.configuration import read_configuration

    context.meta[_CONFIG] = read_configuration(path)
    _apply(context)


def _apply(context: click.Context) -> None:
    """Make what was read the defaults of the options, the rest settings."""
    options = {str(parameter.name) for parameter in context.command.params}
    defaults: dict[str, Any] = {}
    rest: dict[str, dict[str, Any]] = {}
    for source in (_LIKE, _CONFIG):  # the latter goes first
        for table, values in context.meta.get(source, {}).items():
            for key, value in values.items():
                name = key.replace("-", "_")
                if name in options:
                    defaults[name] = _as_word(name, value)
                else:
                    given = tuple(value) if isinstance(value, list) else value
                    rest.setdefault(table, {})[name] = given
    context.default_map = defaults
    context.meta[_SETTINGS] = rest


def _as_word(name: str, value: Any) -> Any:
    """Write a value as it is written on the command line."""
    if name == "box" and isinstance(value, list):
        return ",".join(map(repr, value))
    if isinstance(value, Mapping):
        return ",".join(f"{key}={x!r}" for key, x in value.items())
    return value
