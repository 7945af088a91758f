"""Options of a run as a TOML file, and those that a result file has recorded.

In each table the keys are the long names of options of ``trajcage measure``. Settings
that have no option there stand beside them, under their names in the library.
"""

import json
import tomllib
from collections.abc import Mapping
from pathlib import Path
from types import NoneType, UnionType
from typing import Any, Literal, Union, get_args, get_origin, get_type_hints

from trajcage.analysis.contacts import ContactOptions
from trajcage.analysis.order import OrderOptions
from trajcage.analysis.regions import RegionOptions
from trajcage.analysis.time_options import TimeOptions
from trajcage.errors import InputError, UsageError
from trajcage.run.provenance import under
from trajcage.store import Result
from trajcage.wording import near_miss

__all__ = ["Configuration", "read_configuration", "recorded_configuration", "to_toml"]

#: Values by table and key.
Configuration = Mapping[str, Mapping[str, Any]]


def _settings(part: type, **longer: str) -> dict[str, Any]:
    """Keys of a part and their types; some have a longer name as options."""
    hints = get_type_hints(part)
    return {longer.get(k, k).replace("_", "-"): v for k, v in hints.items()}


#: Keys of each table and the types of their values.
TABLES: dict[str, dict[str, Any]] = {
    "input": {
        "topology": str,
        "trajectory": str,
        "diameter": float | str | dict[str, float],
        "box": str | list[float],
        "dimensions": int,
        "periodic": str,
        "dt": float,
        "time-unit": str,
    },
    "frames": {"start": int, "stop": int, "step": int},
    "output": {
        "output": str,
        "skip": list[str],
        "store-positions": bool,
        "store-walls": bool,
    },
    "cages": {"reach": float | str, "overlap-tolerance": float, "strict": bool},
    "order": _settings(OrderOptions),
    "contacts": _settings(ContactOptions, tolerance="contact-tolerance"),
    "regions": _settings(RegionOptions),
    "time": _settings(TimeOptions),
    "run": {"workers": int, "dask": str},
}


def read_configuration(path: str | Path) -> Configuration:
    """Read options from a TOML file and check their names and types.

    Parameters
    ----------
    path : path
        The file.

    Raises
    ------
    InputError
        If the file cannot be read.
    UsageError
        If it is not TOML, or holds what is no option.
    """
    try:
        with Path(path).open("rb") as file:
            found = tomllib.load(file)
    except OSError as error:
        raise InputError(f"cannot read {path}: {error.strerror}") from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise UsageError(f"{path} is not a TOML file: {error}") from error
    homes = {key: table for table, keys in TABLES.items() for key in keys}
    for table, values in found.items():
        if table not in TABLES:
            hint = near_miss(table, TABLES)
            if table in homes:
                hint = f": {table} belongs into [{homes[table]}]"
            raise UsageError(
                f"{path}: there is no table [{table}]{hint}; there are "
                f"{', '.join(TABLES)}"
            )
        if not isinstance(values, dict):
            raise UsageError(
                f"{path}: {table} is a table: write [{table}] above its keys"
            )
        for key, value in values.items():
            if key not in TABLES[table]:
                hint = near_miss(key, TABLES[table])
                if key in homes:
                    hint = f": it belongs into [{homes[key]}]"
                raise UsageError(
                    f"{path}: there is no option {key!r} in [{table}]{hint}; there are "
                    f"{', '.join(TABLES[table])}"
                )
            kind = TABLES[table][key]
            if not _fits(value, kind):
                raise UsageError(
                    f"{path}: expected {_told(kind)} as {key} in [{table}], got {value!r}"
                )
    return found


def recorded_configuration(result: Result) -> Configuration:
    """Return the options with which a result file was measured, but for its own name.

    Parameters
    ----------
    result : Result
        An open result file.
    """
    recorded = result.parameters
    options = recorded["options"]
    files = recorded["input"]["files"]
    parts = {table: under(table, options) for table in TABLES if table != "run"}
    parts["input"] = {
        "topology": files[0],
        "trajectory": files[1] if len(files) > 1 else None,
        "diameter": under("diameter", options) or options.get("diameter"),
        "box": _listed(options["box"]),
        **{k: options[k] for k in ("dimensions", "periodic", "dt", "time_unit")},
    }
    parts["output"] = {
        k: options[k] for k in ("skip", "store_positions", "store_walls")
    }
    if parts["cages"]["reach"] == "inf":  # JSON has no infinity
        parts["cages"]["reach"] = "box"
    parts["contacts"]["contact_tolerance"] = parts["contacts"].pop("tolerance")
    return {
        table: {
            key.replace("_", "-"): value
            for key, value in values.items()
            if value is not None
        }
        for table, values in parts.items()
    }


def _listed(box: Any) -> Any:
    """Write the vectors of a box one after the other."""
    if isinstance(box, list) and isinstance(box[0], list):
        return [x for vector in box for x in vector]
    return box


def to_toml(configuration: Configuration) -> str:
    """Write a configuration as TOML, as :func:`read_configuration` takes it."""
    blocks = []
    for table, values in configuration.items():
        lines = [f"{key} = {_toml(value)}" for key, value in values.items()]
        if lines:
            blocks.append("\n".join([f"[{table}]", *lines]))
    return "\n\n".join(blocks)


def _toml(value: object) -> str:
    if isinstance(value, Mapping):
        items = (f"{json.dumps(k)} = {_toml(v)}" for k, v in value.items())
        return f"{{ {', '.join(items)} }}"
    if isinstance(value, (list, tuple)):
        return f"[{', '.join(map(_toml, value))}]"
    if isinstance(value, float):
        return repr(value)
    return json.dumps(value, ensure_ascii=False)  # text, true, false, whole numbers


def _fits(value: object, kind: Any) -> bool:
    """Whether a value read from TOML is of a type."""
    origin, parts = get_origin(kind), get_args(kind)
    if origin in {Union, UnionType}:
        return any(_fits(value, part) for part in parts)
    if origin is Literal:
        return value in parts
    if origin in {list, tuple}:
        return isinstance(value, list) and all(_fits(x, parts[0]) for x in value)
    if origin is dict:
        return isinstance(value, dict) and all(
            _fits(x, parts[1]) for x in value.values()
        )
    if kind is float:
        return isinstance(value, (int, float)) and not isinstance(value, bool)
    if kind is int:
        return isinstance(value, int) and not isinstance(value, bool)
    return kind is not NoneType and isinstance(value, kind)


def _told(kind: Any) -> str:
    """Write a type in words."""
    origin, parts = get_origin(kind), get_args(kind)
    if origin in {Union, UnionType}:
        return " or ".join(_told(part) for part in parts if part is not NoneType)
    if origin is Literal:
        return " or ".join(map(repr, parts))
    if origin in {list, tuple}:
        return "a list of " + ("numbers" if parts[0] is float else "texts")
    if origin is dict:
        return "a table of numbers"
    words = {float: "a number", int: "a whole number", bool: "true or false"}
    return words.get(kind, "a text")
