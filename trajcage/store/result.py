"""Reading result files: complete, unfinished, being written or killed."""

import json
import logging
from collections.abc import Iterator, Sequence
from functools import cached_property
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import ResultFileError, UsageError
from trajcage.model import Box, Field
from trajcage.store.access import (
    open_for_reading,
    read_checked,
)
from trajcage.store.commit import read_text
from trajcage.store.guard import guard
from trajcage.store.series import Series
from trajcage.store.superblock import is_truncated
from trajcage.wording import near_miss

__all__ = ["Result", "open_result"]

_LOGGER = logging.getLogger(__name__)


def open_result(path: str | Path) -> "Result":
    """Open a result file for reading.

    Parameters
    ----------
    path : str or Path
        The file; it may be complete, unfinished, killed or just being written.

    Raises
    ------
    ResultFileError
        If the file is missing, damaged, hostile or not a result file.
    """
    target = Path(path)
    try:
        result = Result(open_for_reading(target), target)
    except ResultFileError as error:
        if is_truncated(target):
            raise ResultFileError(
                f"{error} (the file is truncated; trajcage salvage copies the "
                "frames that are left, if any)"
            ) from error
        raise
    _LOGGER.info("read %r", result)
    return result


class Result:
    """A result file as it was when it was opened.

    Every array ends at ``frames_complete``, whatever the writer adds meanwhile;
    open the file again to see more. Made by :func:`open_result`.
    """

    def __init__(self, file: Any, path: Path) -> None:
        self.path = path
        self._file = file
        try:
            with guard(path, "reading"):
                self._commit = read_checked(file, path)
                self._particles = file["particles/all"]
                self._observables = file["observables"]
                box = self._particles["box"]
                self.dimensions = int(box.attrs["dimension"])
                self.periodic: tuple[bool, ...] = tuple(
                    b == b"periodic" for b in box.attrs["boundary"]
                )
                self.n_particles = int(self._particles["id"].shape[0])
                self.fields: dict[str, Field] = dict(self._read_fields())
        except BaseException:
            file.close()
            raise

    def _read_fields(self) -> Iterator[tuple[str, Field]]:
        for group, per_particle in (
            (self._particles, True),
            (self._observables, False),
        ):
            for name, item in group.items():
                # of a dataset, "in" would look through all values
                if not hasattr(item, "keys") or "value" not in item:
                    continue
                series = Series(item["value"], 0, self.path)
                yield (
                    name,
                    Field(
                        name,
                        series.description,
                        series.unit or "1",
                        series.dtype.str[1:],
                        per_particle,
                        series.shape[2:] if per_particle else series.shape[1:],
                        series.codes,
                    ),
                )

    @property
    def frames_complete(self) -> int:
        """Number of valid frames."""
        return self._commit.frames_complete

    @property
    def complete(self) -> bool:
        """Whether the run was finished."""
        return self._commit.complete

    @property
    def resumable(self) -> bool:
        """Whether the state after the last frame is there, which resuming needs."""
        return self.frames_complete == 0 or self._commit.state_bytes >= 0

    @property
    def steps(self) -> NDArray[np.int64]:
        """Simulation step of each frame, (T,) int64."""
        return np.asarray(self._series("particles/all/box/edges/step"), np.int64)

    @property
    def times(self) -> NDArray[np.float64]:
        """Time of each frame, (T,) float64, time."""
        return np.asarray(self._series("particles/all/box/edges/time"), np.float64)

    @property
    def source_frames(self) -> NDArray[np.int64]:
        """Frame number in the source of each frame, (T,) int64."""
        return np.asarray(self._series("trajcage/frames/source_frame"), np.int64)

    @property
    def boxes(self) -> NDArray[np.float64]:
        """Edge vectors as rows of each frame, (T, d, d) float64, length."""
        return np.asarray(self._series("particles/all/box/edges/value"), np.float64)

    def box(self, frame: int) -> Box:
        """Return the box of one frame."""
        edges = self._series("particles/all/box/edges/value")[frame]
        origin = self._series("trajcage/frames/box_origin")[frame]
        return Box(edges, origin, self.periodic)

    @property
    def ids(self) -> NDArray[np.int64]:
        """Particle ids, (n,) int64."""
        return np.asarray(self._static("id"), np.int64)

    @property
    def species(self) -> NDArray[np.int32]:
        """Type index of each particle, (n,) int32."""
        return np.asarray(self._static("species"), np.int32)

    @property
    def type_names(self) -> list[str]:
        """Names of the types."""
        with guard(self.path, "reading the type names"):
            text = read_text(self._particles["species"].attrs, "type_names")
            return [str(name) for name in json.loads(text)]

    @property
    def radii(self) -> NDArray[np.float64]:
        """Radii, (n,) or, if they change in time, (T, n) float64, length."""
        if "radius" in self.fields:
            return np.asarray(self.particle("radius"), np.float64)
        return np.asarray(self._static("radius"), np.float64)

    def particle(self, name: str) -> Series:
        """Return a per-particle field, (T, n, ...).

        Raises
        ------
        UsageError
            If there is no such field.
        """
        return self._field(name, per_particle=True)

    def observable(self, name: str) -> Series:
        """Return a per-frame field, (T, ...).

        Raises
        ------
        UsageError
            If there is no such field.
        """
        return self._field(name, per_particle=False)

    def __getitem__(self, name: str) -> Series:
        if name not in self.fields:
            raise self._unknown("field", name, self.fields)
        return self._field(name, per_particle=self.fields[name].per_particle)

    def __contains__(self, name: str) -> bool:
        return name in self.fields

    @property
    def parameters(self) -> dict[str, Any]:
        """Everything recorded about the run."""
        with guard(self.path, "reading the parameters"):
            data = self._file["parameters/trajcage/document"][()]
            return dict(json.loads(data))

    @property
    def summary(self) -> dict[str, Any]:
        """Summary of the run; empty while there is none."""
        if self._commit.arrays_frames < 0 or self._commit.summary_bytes == 0:
            return {}
        with guard(self.path, "reading the summary"):
            dataset = self._file["trajcage/summary"]
            series = Series(dataset, self._commit.summary_bytes, self.path)
            return dict(json.loads(np.asarray(series).tobytes()))

    @property
    def tables(self) -> tuple[str, ...]:
        """Names of the growing tables."""
        return tuple(self._named("table"))

    @property
    def arrays(self) -> tuple[str, ...]:
        """Names of the arrays beside the frames."""
        kinds = ("array", "scalar", "static")
        return tuple(name for kind in kinds for name in self._named(kind))

    @property
    def arrays_frames(self) -> int:
        """Number of frames that arrays and summary describe; -1 if none."""
        return self._commit.arrays_frames

    def table(self, name: str) -> dict[str, NDArray[np.generic]]:
        """Return the columns of a growing table.

        A ragged column comes as its values and ``<name>_offsets``.

        Raises
        ------
        UsageError
            If there is no such table.
        """
        if name not in self.tables:
            raise self._unknown("table", name, self.tables)
        n_rows = self._commit.rows[name]
        columns = {}
        with guard(self.path, f"reading table {name}"):
            for column, dataset in self._file["trajcage"][name].items():
                kind = read_text(dataset.attrs, "kind")
                length = {"column": n_rows, "offsets": n_rows + 1}.get(kind)
                if length is None:
                    length = self._commit.rows[f"{name}/{column}"]
                columns[column] = np.asarray(Series(dataset, length, self.path))
        return columns

    def array(self, name: str) -> NDArray[np.generic]:
        """Return an array beside the frames, empty while it is not written.

        Raises
        ------
        UsageError
            If there is no such array.
        """
        if name not in self.arrays:
            raise self._unknown("array", name, self.arrays)
        with guard(self.path, f"reading array {name}"):
            dataset = self._file["trajcage"][name]
            if self._kinds[name] == "array":
                valid = self._commit.arrays_frames >= 0
                rows = self._commit.rows[name] if valid else 0
                return np.asarray(Series(dataset, rows, self.path))
            if dataset.ndim == 0:
                return np.asarray(dataset[()])
            return np.asarray(Series(dataset, len(dataset), self.path))

    @property
    def events(self) -> Any:
        """The cage-breaking events: a pandas DataFrame, a dict without pandas.

        In the DataFrame a ragged column is a column of arrays.
        """
        columns = self.table("events")
        try:
            import pandas as pd
        except ImportError:
            return columns
        for name in [n for n in columns if f"{n}_offsets" in columns]:
            offsets = columns.pop(f"{name}_offsets").astype(np.int64)
            columns[name] = _split(columns[name], offsets)
        return pd.DataFrame(
            {n: c if c.ndim == 1 else list(c) for n, c in columns.items()}
        )

    def to_xarray(self, fields: Sequence[str] | None = None) -> Any:
        """Return fields as an ``xarray.Dataset`` in memory.

        Parameters
        ----------
        fields : sequence of str, optional
            Names; all fields unless given.

        Raises
        ------
        UsageError
            If xarray is not installed or a field does not exist.
        """
        try:
            import xarray as xr
        except ImportError as error:
            raise UsageError(
                "to_xarray needs xarray; install it with 'pip install xarray'"
            ) from error
        variables = {}
        for name in self.fields if fields is None else fields:
            series = self[name]
            axes = (
                ["frame", "particle"] if self.fields[name].per_particle else ["frame"]
            )
            axes += [f"{name}_{i}" for i in range(series.ndim - len(axes))]
            notes = {"description": series.description, "unit": series.unit}
            if series.codes:
                notes["flag_meanings"] = " ".join(series.codes)
            variables[name] = (axes, np.asarray(series), notes)
        coordinates = {
            "step": ("frame", self.steps),
            "time": ("frame", self.times),
            "id": ("particle", self.ids),
            "species": ("particle", self.species),
        }
        return xr.Dataset(variables, coordinates)

    def close(self) -> None:
        """Close the file."""
        self._file.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def __repr__(self) -> str:
        state = "complete" if self.complete else "incomplete"
        return (
            f"<Result {str(self.path)!r}: {self.frames_complete} frames ({state}), "
            f"{self.n_particles} particles in {self.dimensions}D, "
            f"{len(self.fields)} fields>"
        )

    def _series(self, where: str) -> Series:
        with guard(self.path, f"reading {where}"):
            return Series(self._file[where], self.frames_complete, self.path)

    def _static(self, name: str) -> Series:
        with guard(self.path, f"reading {name}"):
            return Series(self._particles[name], self.n_particles, self.path)

    def _field(self, name: str, *, per_particle: bool) -> Series:
        group = self._particles if per_particle else self._observables
        known = [n for n, f in self.fields.items() if f.per_particle == per_particle]
        if name not in known:
            kind = "per-particle field" if per_particle else "observable"
            raise self._unknown(kind, name, known)
        return self._series(f"{group.name}/{name}/value")

    def _unknown(self, kind: str, name: str, known: Any) -> UsageError:
        return UsageError(
            f"{self.path} has no {kind} {name!r}{near_miss(name, known)}; it has "
            f"{', '.join(sorted(known))}"
        )

    @cached_property
    def _kinds(self) -> dict[str, str]:
        """What each object below /trajcage is; nothing is added to a file later."""
        kinds: dict[str, str] = {}

        def visit(name: str, item: Any) -> None:
            kinds[name] = read_text(item.attrs, "kind")

        with guard(self.path, "reading"):
            self._file["trajcage"].visititems(visit)
        return kinds

    def _named(self, kind: str) -> list[str]:
        return [name for name, found in self._kinds.items() if found == kind]


def _split(values: NDArray[np.generic], offsets: NDArray[np.int64]) -> Any:
    rows = np.empty(len(offsets) - 1, dtype=object)
    for i in range(len(rows)):
        rows[i] = values[offsets[i] : offsets[i + 1]]
    return rows
