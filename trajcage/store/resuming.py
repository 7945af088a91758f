"""Whether a file can be continued by a run with these options."""

import json
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path

from trajcage.errors import ResultFileError
from trajcage.model import Field
from trajcage.store.access import open_for_reading
from trajcage.store.layout import position_field
from trajcage.store.result import Result
from trajcage.store.specs import ArraySpec, TableSpec

__all__ = ["check_resumable"]

_MISSING = "not set"


def check_resumable(
    path: Path,
    options: Mapping[str, object],
    fields: Sequence[Field],
    tables: Sequence[TableSpec],
    arrays: Sequence[ArraySpec],
    store_positions: bool,
) -> tuple[Field, ...]:
    """Compare a file with what a run wants to write; return all its fields.

    The caller holds the writer lock.

    Raises
    ------
    ResultFileError
        Names every option that differs with both values, or the datasets.
    """
    with Result(open_for_reading(path, alone=True), path) as result:
        if store_positions:
            fields = (*fields, position_field(result.dimensions))
        old, new = _plain(result.parameters.get("options", {})), _plain(options)
        different = [
            f"{name} was {_show(old, name)}, now {_show(new, name)}"
            for name in sorted(old.keys() | new.keys())
            if _show(old, name) != _show(new, name)
        ]
        if different:
            raise ResultFileError(
                f"cannot resume {path} with other options: {'; '.join(different)}; "
                "give the same options or write a new file"
            )
        _compare(
            path,
            "fields",
            map(_shape_of, fields),
            map(_shape_of, result.fields.values()),
        )
        _compare(path, "tables", (t.name for t in tables), result.tables)
        _compare(path, "arrays", (a.name for a in arrays), result.arrays)
    return tuple(fields)


def _plain(options: object) -> dict[str, object]:
    """Return options as they look after a way through JSON."""
    return dict(json.loads(json.dumps(options)))


def _show(options: Mapping[str, object], name: str) -> str:
    return json.dumps(options[name], sort_keys=True) if name in options else _MISSING


def _shape_of(field: Field) -> str:
    place = "per particle" if field.per_particle else "per frame"
    return f"{field.name} ({place}, {field.dtype}{list(field.shape) or ''})"


def _compare(
    path: Path, kind: str, wanted: Iterable[str], found: Iterable[str]
) -> None:
    want, have = set(wanted), set(found)
    if want != have:
        raise ResultFileError(
            f"cannot resume {path}: its {kind} differ from those of this run: "
            f"missing {sorted(want - have)}, not wanted {sorted(have - want)}"
        )
