"""Result files as CSV, extended XYZ and NPZ for other programs."""

import csv
import os
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import IO, TextIO

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import ResultFileError, TrajcageError, UsageError
from trajcage.model import Field
from trajcage.store import Result
from trajcage.wording import near_miss

__all__ = [
    "columns_of",
    "export_fields",
    "new_file",
    "write_csv",
    "write_extxyz",
    "write_npz",
]

_AXES = "xyz"


@contextmanager
def new_file(path: Path, *, overwrite: bool) -> Iterator[Path]:
    """Give a name to write to; the file gets its own name when all is written.

    Parameters
    ----------
    path : path
        The file.
    overwrite : bool
        Whether to replace a file that is there.

    Raises
    ------
    ResultFileError
        If the file is in the way or cannot be written.
    """
    if path.exists() and not overwrite:
        raise ResultFileError(
            f"{path} exists; replace it with --overwrite, or choose another name"
        )
    unfinished = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        yield unfinished
        unfinished.replace(path)
    except OSError as error:
        if isinstance(error, TrajcageError):
            raise
        raise ResultFileError(f"cannot write {path}: {error.strerror}") from error
    finally:
        unfinished.unlink(missing_ok=True)


def write_csv(
    result: Result,
    stream: TextIO,
    frames: Sequence[int],
    names: Sequence[str] | None = None,
    *,
    per_particle: bool = True,
) -> None:
    """Write one line for each particle and frame, or for each frame.

    Parameters
    ----------
    result : Result
        Open result file.
    stream : text stream
        Where to.
    frames : sequence of int
        Rows of the result file.
    names : sequence of str, optional
        Fields; all of that kind unless given. Fields of codes are written by name.
    per_particle : bool
        Whether to write the fields of particles or those of frames.

    Raises
    ------
    UsageError
        If a field does not exist or is of the other kind.
    """
    fields = export_fields(result, names, per_particle=per_particle)
    writer = csv.writer(stream, lineterminator="\n")
    header = ["frame", "step", "time", *(["id", "type"] if per_particle else [])]
    writer.writerow(header + [column for f in fields for column in columns_of(f)])
    types = np.array(result.type_names)[result.species] if per_particle else None
    steps, times, source = result.steps, result.times, result.source_frames
    for row in frames:
        stamp = [int(source[row]), int(steps[row]), float(times[row])]
        values = [_named(result[f.name][row], f) for f in fields]
        if types is None:
            writer.writerow(stamp + [x for v in values for x in np.ravel(v).tolist()])
            continue
        columns = [part for v in values for part in _split(v)]
        for cells in zip(result.ids.tolist(), types.tolist(), *columns, strict=True):
            writer.writerow([*stamp, *cells])


def write_extxyz(
    result: Result,
    stream: TextIO,
    frames: Sequence[int],
    names: Sequence[str] | None = None,
) -> None:
    """Write extended XYZ: positions with the fields of particles as columns.

    Parameters
    ----------
    result, stream, frames, names
        As in :func:`write_csv`. Codes are written as numbers.

    Raises
    ------
    UsageError
        If the result file holds no positions or not these fields.
    """
    if "position" not in result:
        raise UsageError(
            f"{result.path} holds no positions, which extended XYZ needs; measure again "
            "with --store-positions"
        )
    fields = [f for f in export_fields(result, names) if f.name != "position"]
    d = result.dimensions
    properties = ["species:S:1", "pos:R:3", "id:I:1", "radius:R:1"] + [
        f"{f.name}:{'R' if np.dtype(f.dtype).kind == 'f' else 'I'}:{_width(f)}"
        for f in fields
        if f.name != "radius"
    ]
    types = np.array(result.type_names)[result.species].tolist()
    periodic = " ".join("T" if p else "F" for p in (*result.periodic, False, False)[:3])
    for row in frames:
        box = np.eye(3)
        box[:d, :d] = result.boxes[row]
        lattice = " ".join(f"{x:.17g}" for x in box.ravel())
        origin = " ".join(
            f"{x:.17g}" for x in np.pad(result.box(row).origin, (0, 3 - d))
        )
        positions = np.zeros((result.n_particles, 3))
        positions[:, :d] = result["position"][row]
        radii = np.asarray(result.radii)
        columns = [
            *positions.T.tolist(),
            result.ids.tolist(),
            (radii if radii.ndim == 1 else radii[row]).tolist(),
        ]
        for f in fields:
            if f.name != "radius":
                columns += _split(result[f.name][row])
        stream.write(
            f"{result.n_particles}\n"
            f'Lattice="{lattice}" Origin="{origin}" Properties={":".join(properties)} '
            f'pbc="{periodic}" Step={result.steps[row]} Time={result.times[row]:.17g}\n'
        )
        stream.writelines(
            " ".join([name, *map(repr, cells)]) + "\n"
            for name, *cells in zip(types, *columns, strict=True)
        )


def write_npz(
    result: Result,
    file: IO[bytes],
    frames: Sequence[int],
    names: Sequence[str] | None = None,
) -> None:
    """Write a compressed archive of numpy arrays, one a field, frames first.

    Parameters
    ----------
    result, frames, names
        As in :func:`write_csv`; fields of both kinds.
    file : binary stream
        Where to.

    Raises
    ------
    UsageError
        If a field does not exist.
    """
    chosen = [f.name for f in export_fields(result, names, per_particle=None)]
    rows = list(frames)
    arrays: dict[str, NDArray[np.generic]] = {
        name: np.asarray(result[name])[rows] for name in chosen
    }
    arrays |= {
        "source_frame": result.source_frames[rows],
        "step": result.steps[rows],
        "time": result.times[rows],
        "box": result.boxes[rows],
        "id": result.ids,
        "species": result.species,
    }
    arrays.setdefault("radius", result.radii)
    np.savez_compressed(file, **arrays)  # type: ignore[arg-type]  # stubs: bool flag


def export_fields(
    result: Result, names: Sequence[str] | None, *, per_particle: bool | None = True
) -> list[Field]:
    """Return the fields to write.

    Parameters
    ----------
    result : Result
        Open result file.
    names : sequence of str or None
        Fields; all of that kind if None.
    per_particle : bool or None
        Kind: fields of particles, of frames, or both.

    Raises
    ------
    UsageError
        If a field does not exist or is of the other kind.
    """
    kinds = {True: " of particles", False: " of frames", None: ""}
    known = {
        name: f
        for name, f in result.fields.items()
        if per_particle is None or f.per_particle == per_particle
    }
    for name in names or ():
        if name in result.fields and name not in known:
            raise UsageError(
                f"{name} is a field{kinds[not per_particle]}, not{kinds[per_particle]}: "
                f"{'leave out' if per_particle is False else 'add'} --observables"
            )
        if name not in known:
            raise UsageError(
                f"{result.path} has no field {name!r}{kinds[per_particle]}"
                f"{near_miss(name, known)}; it has {', '.join(known)}"
            )
    return [known[name] for name in names or known]


def _width(field: Field) -> int:
    return int(np.prod(field.shape, dtype=np.int64))


def columns_of(field: Field) -> Iterator[str]:
    """Return the names of the columns of one field."""
    if not field.shape:
        yield field.name
        return
    for k in range(_width(field)):
        yield f"{field.name}_{_AXES[k] if field.name == 'position' else k}"


def _named(values: NDArray[np.generic], field: Field) -> NDArray[np.generic]:
    """Codes by their names, all other values as they are."""
    if not field.codes:
        return np.asarray(values)
    return np.asarray(np.array(field.codes)[values])


def _split(values: NDArray[np.generic]) -> list[list[object]]:
    """One list for each column of a field of particles."""
    flat = values.reshape(len(values), -1)
    return [flat[:, k].tolist() for k in range(flat.shape[1])]
