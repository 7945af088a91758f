"""Rows of a growing table, collected between commits."""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from trajcage.errors import UsageError
from trajcage.store.rows import RowWriter
from trajcage.store.specs import TableSpec, to_dtype

__all__ = ["TableBuffer"]

_Columns = dict[str, NDArray[np.generic]]


class TableBuffer:
    """Checks rows, keeps them and writes them behind the committed ones."""

    def __init__(self, group: Any, spec: TableSpec) -> None:
        self.spec = spec
        self._fields = {f.name: f for f in (*spec.columns, *spec.ragged)}
        offsets = [f"{f.name}_offsets" for f in spec.ragged]
        self._ragged = {f.name: f"{spec.name}/{f.name}" for f in spec.ragged}
        self._writers = {
            name: RowWriter(group[name]) for name in (*self._fields, *offsets)
        }
        self._pending: list[_Columns] = []

    @property
    def names(self) -> tuple[str, ...]:
        """Names under which rows are counted: the table, then ragged columns."""
        return (self.spec.name, *self._ragged.values())

    def check(self, rows: Mapping[str, ArrayLike]) -> _Columns:
        """Return the rows as arrays of the declared types.

        Raises
        ------
        UsageError
            If a column is missing, unknown, or of another length or shape.
        """
        where = f"table {self.spec.name!r}"
        if set(rows) != set(self._writers):
            raise UsageError(
                f"{where}: expected columns {sorted(self._writers)}, got {sorted(rows)}"
            )
        checked = {name: to_dtype(rows[name], f) for name, f in self._fields.items()}
        lengths = {f.name: len(checked[f.name]) for f in self.spec.columns}
        for name in self._ragged:
            offsets = np.array(rows[f"{name}_offsets"], dtype=np.int64)
            checked[f"{name}_offsets"] = offsets
            if (
                offsets.ndim != 1
                or len(offsets) == 0
                or offsets[0] != 0
                or offsets[-1] != len(checked[name])
                or np.any(np.diff(offsets) < 0)
            ):
                raise UsageError(
                    f"{where}: {name}_offsets must rise from 0 to the number of "
                    f"values, {len(checked[name])}"
                )
            lengths[name] = len(offsets) - 1
        if len(set(lengths.values())) > 1:
            raise UsageError(f"{where}: columns of different lengths {lengths}")
        for name, field in self._fields.items():
            if checked[name].shape[1:] != field.shape:
                raise UsageError(
                    f"{where}: column {name!r} has rows of shape "
                    f"{checked[name].shape[1:]}, expected {field.shape}"
                )
        return checked

    def add(self, rows: _Columns) -> None:
        """Keep checked rows until the next commit."""
        self._pending.append(rows)

    def totals(self, committed: Mapping[str, int]) -> list[int]:
        """Rows of the table and its ragged columns, pending ones included."""
        plain = self.spec.columns[0].name if self.spec.columns else None
        first = plain or f"{self.spec.ragged[0].name}_offsets"
        extra = 0 if plain else 1
        counts = [sum(len(p[first]) - extra for p in self._pending)]
        counts += [sum(len(p[name]) for p in self._pending) for name in self._ragged]
        return [committed[n] + c for n, c in zip(self.names, counts, strict=True)]

    def write(self, committed: Mapping[str, int]) -> dict[str, int]:
        """Write pending rows; return the new counts."""
        totals = dict(zip(self.names, self.totals(committed), strict=True))
        if self._pending:
            start = committed[self.spec.name]
            for field in self.spec.columns:
                block = np.concatenate([p[field.name] for p in self._pending])
                self._writers[field.name].write(start, block)
            for name, counter in self._ragged.items():
                base = committed[counter]
                values = np.concatenate([p[name] for p in self._pending])
                self._writers[name].write(base, values)
                steps = [np.diff(p[f"{name}_offsets"]) for p in self._pending]
                offsets = base + np.cumsum(np.concatenate(steps))
                self._writers[f"{name}_offsets"].write(start + 1, offsets)
            self._pending.clear()
        return totals
