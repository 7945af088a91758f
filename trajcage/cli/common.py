"""Options and forms of output that several commands share."""

import json
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import is_dataclass
from enum import Enum
from pathlib import Path
from typing import Any, TypeVar

import click

from trajcage.wording import near_miss

__all__ = [
    "NearChoice",
    "input_options",
    "json_option",
    "print_json",
    "result_argument",
    "table",
]


class NearChoice(click.Choice[str]):
    """One of several words; a misspelled one gets a suggestion."""

    def convert(
        self,
        value: Any,
        param: click.Parameter | None,
        ctx: click.Context | None,
    ) -> str:
        """Return the word."""
        if value not in self.choices:
            self.fail(
                f"there is no {value!r}{near_miss(str(value), self.choices)}; choose "
                f"among {', '.join(self.choices)}",
                param,
                ctx,
            )
        return str(value)


F = TypeVar("F", bound=Callable[..., Any])

_FILE = click.Path(path_type=Path)

_INPUT = (
    click.argument("topology", type=_FILE),
    click.argument("trajectory", type=_FILE, required=False),
    click.option(
        "--diameter",
        metavar="D",
        help="Hard-sphere diameter: a number, one for each type (A=1.0,B=1.4), a file "
        "(@diameters.txt), or wca:EPSILON_OVER_KT for a soft repulsion. From the input "
        "unless given.",
    ),
    click.option(
        "--box",
        metavar="NUMBERS",
        help="Box instead of that of the input: edge lengths (10,10,10), lengths and "
        "angles in degrees (10,10,10,90,90,60), or all edge vectors.",
    ),
    click.option(
        "--dimensions",
        type=int,
        metavar="2|3",
        help="Number of dimensions. From the input unless given.",
    ),
    click.option(
        "--periodic",
        metavar="AXES",
        help="Periodic edges: xyz, xy, ..., or none. From the input unless given.",
    ),
    click.option(
        "--dt", type=float, metavar="TIME", help="Time of one simulation step."
    ),
    click.option("--time-unit", metavar="NAME", help="Name of the time unit."),
)

result_argument = click.argument("result", type=_FILE, metavar="FILE")

json_option = click.option(
    "--json", "as_json", is_flag=True, help="Print JSON instead of text."
)


def input_options(function: F) -> F:
    """Add the arguments and options that describe an input."""
    for decorate in reversed(_INPUT):
        function = decorate(function)
    return function


def print_json(value: object) -> None:
    """Print a value as JSON; what is undefined or infinite becomes null."""
    click.echo(json.dumps(_plain(value), indent=2, allow_nan=False))


def _plain(value: object) -> object:
    if isinstance(value, Enum):
        return value.name.lower()
    if is_dataclass(value) and not isinstance(value, type):
        return {k: _plain(getattr(value, k)) for k in value.__dataclass_fields__}
    if isinstance(value, Mapping):
        return {name: _plain(item) for name, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def table(
    rows: Sequence[Sequence[str]], header: Sequence[str] = (), *, align: str = "right"
) -> str:
    """Lay out rows in columns: the first to the left, the others as told."""
    lines = [header, *rows] if header else list(rows)
    widths = [max(len(line[k]) for line in lines) for k in range(len(lines[0]))]
    laid_out = []
    for line in lines:
        cells = [
            cell.ljust(width) if k == 0 or align == "left" else cell.rjust(width)
            for k, (cell, width) in enumerate(zip(line, widths, strict=True))
        ]
        laid_out.append("  ".join(cells).rstrip())
    return "\n".join(laid_out)
