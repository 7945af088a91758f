"""Result files as Parquet: columns with units, written in blocks of bounded size."""

import json
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import UsageError
from trajcage.model import Field
from trajcage.run.exporting import columns_of, export_fields
from trajcage.store import Result

__all__ = ["write_parquet"]

# Rows of one row group, in memory at a time: some 40 columns of 8 bytes make 40 MB.
_LARGEST_GROUP = 1 << 17


def write_parquet(
    result: Result,
    file: str | Path,
    frames: Sequence[int],
    names: Sequence[str] | None = None,
    *,
    per_particle: bool = True,
) -> None:
    """Write one row for each particle and frame, or for each frame.

    Columns have the names they have in CSV; codes and types are dictionaries of words.
    Every column says its unit and description in its metadata, and the metadata of the
    schema hold, as JSON under ``trajcage``, all that the result file records of its run.

    Parameters
    ----------
    result, frames, names, per_particle
        As in :func:`trajcage.run.exporting.write_csv`.
    file : path
        Where to.

    Raises
    ------
    UsageError
        If pyarrow is not installed, or if a field does not exist or is of the other
        kind.
    """
    try:
        import pyarrow as pa
        from pyarrow import parquet
    except ImportError as error:
        raise UsageError(
            "Parquet needs pyarrow, an optional extra: pip install 'trajcage[parquet]'"
        ) from error
    fields = export_fields(result, names, per_particle=per_particle)
    parameters = result.parameters
    stamps = [
        ("frame", pa.int64(), "1", "Frame in the source, counted from 0"),
        ("step", pa.int64(), "1", "Simulation step"),
        ("time", pa.float64(), str(parameters["time_unit"]), "Time of the frame"),
    ]
    if per_particle:
        stamps += [
            ("id", pa.int64(), "1", "Particle id of the input"),
            ("type", _words(pa), "1", "Particle type of the input"),
        ]
    declared = [_column(pa, *stamp) for stamp in stamps]
    for field in fields:
        kind = _words(pa) if field.codes else pa.from_numpy_dtype(field.dtype)
        declared += [
            _column(pa, name, kind, field.unit, field.description)
            for name in columns_of(field)
        ]
    schema = pa.schema(declared, metadata={"trajcage": json.dumps(parameters)})
    series = {field.name: result[field.name] for field in fields}
    source, steps, times = result.source_frames, result.steps, result.times
    with parquet.ParquetWriter(file, schema, compression="zstd") as writer:
        for rows, part in _groups(frames, result.n_particles if per_particle else 1):
            n = part.stop - part.start
            columns: list[Any] = [
                np.repeat(stamp[rows], n) for stamp in (source, steps, times)
            ]
            if per_particle:
                columns.append(np.tile(result.ids[part], len(rows)))
                species = np.tile(result.species[part], len(rows))
                columns.append(_named(pa, species, result.type_names))
            for field in fields:
                where = (part,) if per_particle else ()
                blocks = [series[field.name][(row, *where)] for row in rows]
                flat = np.stack(blocks).reshape(len(rows) * n, -1)
                columns += [
                    _values(pa, flat[:, k], field) for k in range(flat.shape[1])
                ]
            writer.write_table(
                pa.Table.from_arrays(_arrays(pa, columns, schema), schema=schema)
            )


def _groups(
    frames: Sequence[int], n_particles: int
) -> Iterator[tuple[list[int], slice]]:
    """Cut into blocks of whole frames, or a large frame into blocks of particles."""
    at_once = max(1, _LARGEST_GROUP // n_particles)
    for k in range(0, len(frames), at_once):
        for start in range(0, n_particles, _LARGEST_GROUP):
            part = slice(start, min(start + _LARGEST_GROUP, n_particles))
            yield list(frames[k : k + at_once]), part


def _words(pa: Any) -> Any:
    return pa.dictionary(pa.int32(), pa.string())


def _column(pa: Any, name: str, kind: Any, unit: str, description: str) -> Any:
    return pa.field(name, kind, metadata={"unit": unit, "description": description})


def _values(pa: Any, values: NDArray[np.generic], field: Field) -> Any:
    if field.codes:
        return _named(pa, values, field.codes)
    return np.ascontiguousarray(values)


def _named(pa: Any, codes: NDArray[np.generic], words: Sequence[str]) -> Any:
    indices = pa.array(np.asarray(codes, dtype=np.int32))
    return pa.DictionaryArray.from_arrays(indices, pa.array(list(words)))


def _arrays(pa: Any, columns: Sequence[Any], schema: Any) -> list[Any]:
    return [
        column if isinstance(column, pa.Array) else pa.array(column, field.type)
        for column, field in zip(columns, schema, strict=True)
    ]
