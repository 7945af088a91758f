"""What a result file declares before its first frame: tables, arrays, units."""

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from trajcage.errors import UsageError
from trajcage.model import Field

__all__ = [
    "ArraySpec",
    "TableSpec",
    "check_arrays",
    "check_fields",
    "fill_value",
    "resolve_unit",
    "to_dtype",
]

ROOT = "/trajcage/"
_RESERVED = {"commit", "complete", "frames", "frames_complete", "state", "summary"}
_STANDARD = {"box", "charge", "force", "id", "image", "mass", "species", "velocity"}
_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]*\Z")
_FACTOR = re.compile(r"([A-Za-z_]+)([+-][1-9][0-9]*)?\Z")


def _name_below_root(path: str) -> str:
    name = path.removeprefix(ROOT)
    parts = name.split("/")
    if not path.startswith(ROOT) or not all(_NAME.match(part) for part in parts):
        raise UsageError(f"expected a path such as {ROOT}events, got {path!r}")
    if parts[0] in _RESERVED:
        raise UsageError(f"{path} belongs to the file's own bookkeeping")
    return name


@dataclass(frozen=True)
class TableSpec:
    """A table that grows while frames are appended, one dataset a column.

    Parameters
    ----------
    path : str
        Group below ``/trajcage``, such as ``/trajcage/events``.
    columns : sequence of Field
        Columns with one value (of the field's ``shape``) a row.
    ragged : sequence of Field
        Columns with a varying number of values a row. Row i of ``name`` is
        ``name[name_offsets[i]:name_offsets[i + 1]]``.
    description : str
        One sentence on what a row is.
    """

    path: str
    columns: Sequence[Field]
    ragged: Sequence[Field] = ()
    description: str = ""

    def __post_init__(self) -> None:
        _name_below_root(self.path)
        names = [f.name for f in self.columns]
        names += [n for f in self.ragged for n in (f.name, f"{f.name}_offsets")]
        _check_names(names, f"columns of {self.path}")
        if not names:
            raise UsageError(f"table {self.path} declares no columns")

    @property
    def name(self) -> str:
        """The path below ``/trajcage/``."""
        return _name_below_root(self.path)


@dataclass(frozen=True, eq=False)
class ArraySpec:
    """An array beside the frames: a histogram, a correlation, a reference table.

    Parameters
    ----------
    path : str
        Dataset below ``/trajcage``, such as ``/trajcage/histograms/free_volume``.
    description, unit, dtype : str
        As in :class:`~trajcage.model.Field`.
    shape : tuple of int or None
        Shape; None as the first entry stands for a length not known yet.
    values : array_like or None
        Contents if they are known from the start and never change.
    """

    path: str
    description: str
    unit: str = "1"
    dtype: str = "f8"
    shape: tuple[int | None, ...] = (None,)
    values: NDArray[np.generic] | None = None

    def __post_init__(self) -> None:
        _name_below_root(self.path)
        if None in self.shape[1:]:
            raise UsageError(
                f"array {self.path}: only the first axis may be open, got {self.shape}"
            )

    @property
    def name(self) -> str:
        """The path below ``/trajcage/``."""
        return _name_below_root(self.path)


def _check_names(names: Sequence[str], where: str) -> None:
    for name in names:
        if not _NAME.match(name):
            raise UsageError(f"{where}: {name!r} is no valid name of a dataset")
        if names.count(name) > 1:
            raise UsageError(f"{where}: {name!r} is declared twice")


def check_fields(fields: Sequence[Field]) -> None:
    """Refuse declarations that could not be stored.

    Raises
    ------
    UsageError
        If a name is invalid, declared twice or taken by the H5MD standard.
    """
    _check_names([f.name for f in fields], "fields")
    for field in fields:
        if field.per_particle and field.name in _STANDARD:
            raise UsageError(f"field {field.name!r}: the H5MD standard owns this name")
        if np.dtype(field.dtype).kind not in "fiub":
            raise UsageError(
                f"field {field.name!r}: expected a real number type, got {field.dtype!r}"
            )


def resolve_unit(unit: str, length_unit: str, time_unit: str) -> str:
    """Write a unit of ``length`` and ``time`` in the symbols of the run.

    Parameters
    ----------
    unit : str
        Powers of ``length`` and ``time`` separated by spaces, or ``"1"``.
    length_unit, time_unit : str
        Unit symbols of the run, such as ``sigma`` and ``tau``.

    Returns
    -------
    str
        The unit in the notation of the H5MD units module, such as ``sigma+3``.

    Raises
    ------
    UsageError
        If the unit does not follow the notation.
    """
    if unit == "1":
        return unit
    symbols = {"length": length_unit, "time": time_unit}
    factors = []
    for factor in unit.split(" "):
        match = _FACTOR.match(factor)
        if match is None or match[1] not in symbols:
            raise UsageError(
                f"expected a unit such as 'length+3' or 'length+2 time-1', got {unit!r}"
            )
        factors.append(symbols[match[1]] + (match[2] or ""))
    return " ".join(factors)


def fill_value(dtype: np.dtype[np.generic]) -> object:
    """Return what stands where nothing was written: NaN, -1 or the largest code."""
    if dtype.kind == "f":
        return np.nan
    if dtype.kind == "i":
        return -1
    if dtype.kind == "u":
        return 2 ** (8 * dtype.itemsize) - 1
    return np.zeros((), dtype)[()]


def to_dtype(values: ArrayLike, field: Field) -> NDArray[np.generic]:
    """Copy values to the declared type if that loses nothing but rounding.

    Raises
    ------
    UsageError
        If they are no numbers of that kind or out of its range.
    """
    given = np.asarray(values)
    kind = np.dtype(field.dtype)
    if kind.kind == "f":
        fits = given.dtype.kind in "fiub"
    elif kind.kind in "iu":
        bounds = np.iinfo(kind)
        fits = given.dtype.kind in "iub" and (
            given.size == 0
            or (int(given.min()) >= bounds.min and int(given.max()) <= bounds.max)
        )
    else:
        fits = given.dtype.kind == kind.kind
    if not fits:
        raise UsageError(
            f"{field.name!r}: values of type {given.dtype} do not fit the declared "
            f"type {kind}"
        )
    return np.array(given, dtype=kind, order="C")


def check_arrays(
    arrays: Mapping[str, ArrayLike], specs: Mapping[str, ArraySpec]
) -> dict[str, NDArray[np.generic]]:
    """Return arrays in their declared types.

    Raises
    ------
    UsageError
        If one was not declared or has another shape.
    """
    checked = {}
    for name, values in arrays.items():
        if name not in specs:
            raise UsageError(f"array {name!r} was not declared; known: {sorted(specs)}")
        spec, array = specs[name], np.asarray(values)
        fits = array.ndim == len(spec.shape) and all(
            want is None or want == got
            for want, got in zip(spec.shape, array.shape, strict=True)
        )
        if not fits:
            raise UsageError(
                f"array {name!r}: expected shape {spec.shape}, got {array.shape}"
            )
        checked[name] = array.astype(spec.dtype)
    return checked
