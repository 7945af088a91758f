"""What made a result: versions, inputs, command line."""

import math
import platform
from collections.abc import Mapping
from dataclasses import asdict
from pathlib import Path
from typing import Any

from trajcage.readers import InputDescription, InputOptions
from trajcage.store import describe_file
from trajcage.versions import versions

__all__ = ["describe_inputs", "flat", "parameters", "under"]


def describe_inputs(options: InputOptions) -> list[dict[str, str | int]]:
    """Name, size and sha256 of every file that the run reads."""
    paths: list[Path] = [options.topology]
    if options.trajectory is not None:
        paths.append(options.trajectory)
    if isinstance(options.diameter, str) and options.diameter.startswith("@"):
        paths.append(Path(options.diameter[1:]).expanduser())
    return [describe_file(path) for path in paths]


def flat(options: Mapping[str, object], prefix: str = "") -> dict[str, object]:
    """Flatten nested options to dotted names, so that each can be named alone."""
    found: dict[str, object] = {}
    for name, value in options.items():
        if isinstance(value, list) and value and isinstance(value[0], Mapping):
            value = {str(k): item for k, item in enumerate(value)}  # noqa: PLW2901
        if isinstance(value, Mapping):
            found |= flat(value, f"{prefix}{name}.")
        elif isinstance(value, float) and not math.isfinite(value):
            found[f"{prefix}{name}"] = str(value)  # JSON has no infinity
        else:
            found[f"{prefix}{name}"] = value
    return found


def under(name: str, options: Mapping[str, Any]) -> dict[str, Any]:
    """Options of one part, by their names within it; the reverse of :func:`flat`."""
    start = f"{name}."
    return {k.removeprefix(start): v for k, v in options.items() if k.startswith(start)}


def parameters(
    options: Mapping[str, object],
    inputs: list[dict[str, str | int]],
    description: InputDescription,
    notes: list[str],
    command_line: str | None,
) -> dict[str, object]:
    """Everything that a result file records about its run.

    Parameters
    ----------
    options : dict
        What must agree when the run is resumed.
    inputs : list of dict
        From :func:`describe_inputs`.
    description : InputDescription
        What was understood of the input.
    notes : list of str
        What else the user was told.
    command_line : str or None
        The command, if there was one.
    """
    return {
        "options": options,
        "inputs": inputs,
        "input": asdict(description),
        "notes": notes,
        "versions": versions(),
        "platform": platform.platform(),
        "command_line": command_line or "library call",
    }
