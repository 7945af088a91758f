"""Appending frames to a result file so that it survives a crash at any moment."""

import json
import os
from collections.abc import Mapping, Sequence
from contextlib import suppress
from dataclasses import replace
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import numpy as np
from numpy.typing import ArrayLike, NDArray

from trajcage.errors import FrameError, ResultFileError, UsageError
from trajcage.model import Field, FrameRecord
from trajcage.store.access import abandon, open_for_writing, read_commit
from trajcage.store.framing import pack_arrays, unpack_arrays
from trajcage.store.guard import guard
from trajcage.store.layout import Layout, image, position_field
from trajcage.store.lock import WriterLock
from trajcage.store.resuming import check_resumable
from trajcage.store.rows import FrameRows, RowWriter
from trajcage.store.specs import ArraySpec, TableSpec, check_arrays, fill_value
from trajcage.store.superblock import repair_superblock
from trajcage.store.tables import TableBuffer

__all__ = ["ResultWriter"]

_State = Mapping[str, NDArray[np.generic]]
_Rows = Mapping[str, Mapping[str, ArrayLike]]

# Summaries of one run are about equally long; whole blocks make them equal, so that
# the dataset, which cannot shrink, does not tell how often it was replaced.
_SUMMARY_BLOCK = 32_768


class ResultWriter:
    """Writes one result file; made by :meth:`create` or :meth:`resume`.

    :meth:`append` keeps frames in memory; :meth:`flush` commits them: rows
    first, then the fold state, the commit record last. With ``flush_every=k``
    every k-th append commits by itself. A crash of the process loses the
    frames since the last commit, never one before it. (A power failure may
    lose what the operating system had not yet written.)

    Used as a context manager it closes the file; frames appended since the
    last commit are kept unless an exception is on its way, because then the
    fold state may be half changed.
    """

    def __init__(
        self,
        path: Path,
        lock: WriterLock,
        *,
        fields: Sequence[Field],
        tables: Sequence[TableSpec],
        arrays: Sequence[ArraySpec],
        flush_every: int,
    ) -> None:
        self.path = path
        self.flush_every = flush_every
        self._lock = lock
        self._arrays = {a.name: a for a in arrays if a.values is None}
        self._pending: list[dict[str, NDArray[np.generic]]] = []
        self._state: _State | None = None
        self._failed = False
        with guard(path, "opening for writing"):
            self._file = open_for_writing(path)
            self._commit = read_commit(self._file, path)
            root = self._file["trajcage"]
            self._frames = FrameRows(self._file, fields, with_tables=bool(tables))
            self._tables = {t.name: TableBuffer(root[t.name], t) for t in tables}
            self._slots = [RowWriter(root["state"][slot]) for slot in "ab"]
            self._summary = RowWriter(root["summary"])
            self._record = root["commit"]
            self._mirrors = (root["frames_complete"], root["complete"])
            last = self._frames.last(self._commit.frames_complete)
            self._last_step, self.last_source_frame, counts = last
            names = [n for table in self._tables.values() for n in table.names]
            self._rows = dict(self._commit.rows) | dict.fromkeys(names, 0)
            # Not the committed rows: those of a finished run hold its last rows.
            self._rows |= dict(zip(names, counts, strict=False))
            self.state = self._stored_state(root)

    @classmethod
    def create(
        cls,
        path: str | Path,
        *,
        fields: Sequence[Field],
        n_particles: int,
        dimensions: int,
        periodic: Sequence[bool],
        ids: NDArray[np.int64],
        species: NDArray[np.int32],
        type_names: Sequence[str],
        radii: NDArray[np.float64],
        tables: Sequence[TableSpec] = (),
        arrays: Sequence[ArraySpec] = (),
        parameters: Mapping[str, object],
        length_unit: str = "sigma",
        time_unit: str = "tau",
        overwrite: bool = False,
        store_positions: bool = False,
        flush_every: int = 1,
    ) -> Self:
        """Start a new file; it appears under its name once it can be read.

        Parameters
        ----------
        path : str or Path
            The file.
        fields : sequence of Field
            Per-particle and per-frame quantities of every frame.
        n_particles, dimensions : int
            Size of every frame.
        periodic : sequence of bool
            Boundary flag of each box edge.
        ids : (n,) int64
            Particle ids.
        species : (n,) int32
            Type index of each particle.
        type_names : sequence of str
            Names of the types.
        radii : (n,) float64, length
            Radii; stored unless a per-particle field ``radius`` is declared.
        tables, arrays : sequence of TableSpec, ArraySpec
            What lives below ``/trajcage`` beside the frames.
        parameters : mapping
            JSON-able record of the run; ``parameters["options"]`` holds what
            must agree when the run is resumed.
        length_unit, time_unit : str
            Unit symbols.
        overwrite : bool
            Whether to replace an existing file.
        store_positions : bool
            Whether frames carry a value ``position``, (n, d), to be stored.
        flush_every : int
            Appends per commit; 0 leaves committing to :meth:`flush`.

        Raises
        ------
        ResultFileError
            If the file exists, is being written, or cannot be created.
        UsageError
            If the declarations contradict each other.
        """
        target = Path(path)
        declared = tuple(fields)
        if store_positions:
            declared = (*declared, position_field(dimensions))
        layout = Layout(
            declared,
            tables,
            arrays,
            n_particles,
            dimensions,
            periodic,
            ids,
            species,
            type_names,
            radii,
            length_unit,
            time_unit,
        )
        parameters = {
            **parameters,
            "length_unit": length_unit,
            "time_unit": time_unit,
        }
        lock = WriterLock(target)
        part = target.with_name(f".{target.name}.part")
        try:
            _check_free(target, overwrite=overwrite)
            with guard(target, "creating"):
                part.write_bytes(image(layout, parameters))
                part.replace(target)
            return cls(
                target,
                lock,
                fields=declared,
                tables=tables,
                arrays=arrays,
                flush_every=flush_every,
            )
        except BaseException:
            part.unlink(missing_ok=True)
            lock.release()
            raise

    @classmethod
    def resume(
        cls,
        path: str | Path,
        *,
        options: Mapping[str, object],
        fields: Sequence[Field],
        tables: Sequence[TableSpec] = (),
        arrays: Sequence[ArraySpec] = (),
        store_positions: bool = False,
        flush_every: int = 1,
    ) -> Self:
        """Continue a file behind its last complete frame.

        Parameters
        ----------
        path : str or Path
            A file that was killed, closed early or finished.
        options : mapping
            The wanted ``parameters["options"]``.
        fields, tables, arrays, store_positions, flush_every
            As in :meth:`create`.

        Raises
        ------
        ResultFileError
            If the file is missing, damaged or being written, if an option
            differs (all of them are named with both values) or if it declares
            other datasets.
        """
        target = Path(path)
        if not target.exists():
            raise ResultFileError(f"cannot resume {target}: there is no such file")
        lock = WriterLock(target)
        try:
            declared = check_resumable(
                target, options, fields, tables, arrays, store_positions
            )
            repair_superblock(target)
            return cls(
                target,
                lock,
                fields=declared,
                tables=tables,
                arrays=arrays,
                flush_every=flush_every,
            )
        except BaseException:
            lock.release()
            raise

    @property
    def frames_complete(self) -> int:
        """Frames that are committed."""
        return self._commit.frames_complete

    @property
    def complete(self) -> bool:
        """Whether the file was finished; appending to it opens it again."""
        return self._commit.complete

    @property
    def n_pending(self) -> int:
        """Frames appended but not yet committed."""
        return len(self._pending)

    def append(
        self,
        record: FrameRecord,
        rows: _Rows | None = None,
        *,
        state: _State | None = None,
    ) -> None:
        """Add one frame.

        Parameters
        ----------
        record : FrameRecord
            A value for every declared field, at a later step than before.
        rows : mapping, optional
            For each table (named as below ``/trajcage/``) its new rows: one
            array a column, all of the same length; for a ragged column the
            values and ``<name>_offsets`` (rows + 1, starting at 0).
        state : mapping of str to array, optional
            Fold state after this frame. Only a reference is kept; it is
            serialized when this frame is the last of a commit, so it must not
            change between this call and an explicit :meth:`flush`.

        Raises
        ------
        UsageError
            If values do not fit the declarations.
        FrameError
            If the step does not increase.
        ResultFileError
            If a commit fails, for instance on a full disk.
        """
        self._check_usable()
        self._check_tables(rows)
        if self._last_step is not None and record.step <= self._last_step:
            raise FrameError(
                f"expected a step after {self._last_step}; steps must increase in an "
                "H5MD file, so sort the frames or leave repeated ones out",
                frame=record.index,
                step=record.step,
            )
        frame = self._frames.check(record)
        added = {
            name: self._tables[name].check(new) for name, new in (rows or {}).items()
        }
        for name, new in added.items():
            self._tables[name].add(new)
        counts = [n for t in self._tables.values() for n in t.totals(self._rows)]
        frame["/tables"] = np.array(counts, np.int64)
        self._pending.append(frame)
        self._last_step, self._state = record.step, state
        self.last_source_frame = record.index
        if self.flush_every and len(self._pending) >= self.flush_every:
            self.flush()

    def flush(
        self,
        *,
        state: _State | None = None,
        arrays: Mapping[str, ArrayLike] | None = None,
        summary: Mapping[str, object] | None = None,
    ) -> None:
        """Commit everything appended so far.

        Parameters
        ----------
        state : mapping of str to array, optional
            Fold state after the last appended frame; by default the one given
            with that frame.
        arrays, summary : mapping, optional
            Replace the arrays and the summary by those of the frames so far.

        Raises
        ------
        ResultFileError
            If writing fails; the frames committed before stay valid.
        """
        self._commit_all(state, arrays, summary, finished=False)

    def finish(
        self,
        *,
        arrays: Mapping[str, ArrayLike] | None = None,
        summary: Mapping[str, object] | None = None,
        rows: _Rows | None = None,
        state: _State | None = None,
    ) -> None:
        """Write what the whole run yields, mark the file complete, close it.

        Parameters
        ----------
        arrays, summary, state
            As in :meth:`flush`.
        rows : mapping, optional
            Last rows of tables, as in :meth:`append`; a resumed run drops them.

        Raises
        ------
        ResultFileError
            If writing fails.
        """
        self._check_usable()
        self._check_tables(rows)
        for name, new in (rows or {}).items():
            self._tables[name].add(self._tables[name].check(new))
        self._commit_all(state, arrays, summary, finished=True)
        with guard(self.path, "finishing"):
            self._trim_arrays()
        self.close()

    def close(self) -> None:
        """Commit what is pending and close; ``complete`` stays as it is."""
        try:
            if self._file and not self._failed and self._pending:
                self.flush()
        finally:
            self._shut()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if kind is None:
            self.close()
        else:
            self._shut()

    def _shut(self) -> None:
        try:
            if self._failed:  # the error is on its way; a second would hide it
                with suppress(OSError, RuntimeError):
                    abandon(self._file)
            elif self._file:
                with guard(self.path, "closing"):
                    self._file.close()
                    handle = os.open(self.path, os.O_RDONLY)
                    try:
                        os.fsync(handle)
                    finally:
                        os.close(handle)
        finally:
            self._lock.release()

    def _check_usable(self) -> None:
        if self._failed or not self._file:
            why = "an earlier write failed" if self._failed else "it is closed"
            raise ResultFileError(f"cannot write to {self.path}: {why}")

    def _check_tables(self, rows: _Rows | None) -> None:
        unknown = set(rows or {}) - set(self._tables)
        if unknown:
            raise UsageError(f"rows of undeclared tables: {sorted(unknown)}")

    def _commit_all(
        self,
        state: _State | None,
        arrays: Mapping[str, ArrayLike] | None,
        summary: Mapping[str, object] | None,
        *,
        finished: bool,
    ) -> None:
        self._check_usable()
        state = self._state if state is None else state
        packed = None if state is None else pack_arrays(state)
        new_arrays = check_arrays(arrays or {}, self._arrays)
        text = None if summary is None else _summary_text(summary)
        self._failed = True  # until proven otherwise
        with guard(self.path, "writing"):
            old = self._commit
            if new_arrays or text is not None:
                if old.arrays_frames >= 0:
                    self._publish({"arrays_frames": -1})
                self._write_arrays(new_arrays)
            total = self._write_pending()
            values: dict[str, Any] = {"frames_complete": total, "complete": finished}
            if packed is not None:
                slot = 1 - old.state_slot
                size = 0
                for part in packed:
                    self._slots[slot].write(size, np.frombuffer(part, np.uint8))
                    size += len(part)
                values |= {"state_slot": slot, "state_bytes": size}
            elif total != old.frames_complete:
                values["state_bytes"] = -1
            if text is not None:
                self._summary.replace(np.frombuffer(text, np.uint8), ord(" "))
                values["summary_bytes"] = len(text)
            if new_arrays or text is not None:
                values["arrays_frames"] = total
            self._publish(values)
        self._failed = False
        self._state = None

    def _publish(self, changes: Mapping[str, Any]) -> None:
        """Flush all data, then write and flush the commit record."""
        self._file.flush()
        commit = replace(
            self._commit,
            generation=self._commit.generation + 1,
            rows=dict(self._rows),
            **changes,
        )
        self._record[commit.generation % 2] = commit.encode()
        self._record.id.flush()
        self._commit = commit
        numbers = (commit.frames_complete, int(commit.complete))
        for mirror, number in zip(self._mirrors, numbers, strict=True):
            mirror[()] = number
            mirror.id.flush()

    def _write_pending(self) -> int:
        first = self._commit.frames_complete
        self._frames.write(first, self._pending)
        for table in self._tables.values():
            self._rows.update(table.write(self._rows))
        total = first + len(self._pending)
        self._pending.clear()
        return total

    def _write_arrays(self, arrays: Mapping[str, NDArray[np.generic]]) -> None:
        for name, array in arrays.items():
            dataset = self._file["trajcage"][name]
            if array.ndim == 0:
                dataset[()] = array
                self._rows[name] = 1
            else:
                blank = fill_value(array.dtype)
                RowWriter(dataset).replace(array, blank)
                self._rows[name] = len(array)

    def _trim_arrays(self) -> None:
        """Cut off the blank rows behind arrays that were longer in an earlier commit.

        So a finished file does not tell how often it was committed. What is cut off
        is vouched for by no commit record, hence nobody reads it.
        """
        for name in self._arrays:
            dataset = self._file["trajcage"][name]
            if dataset.ndim and len(dataset) > self._rows[name]:
                dataset.id.set_extent((self._rows[name], *dataset.shape[1:]))
                dataset.id.flush()

    def _stored_state(self, root: Any) -> dict[str, NDArray[np.generic]] | None:
        size = self._commit.state_bytes
        if size < 0:
            return None
        data = root["state"]["ab"[self._commit.state_slot]][:size]
        return unpack_arrays(data.tobytes(), self.path)


def _summary_text(summary: Mapping[str, object]) -> bytes:
    text = json.dumps(summary, indent=1).encode()
    return text.ljust(-(-len(text) // _SUMMARY_BLOCK) * _SUMMARY_BLOCK)


def _check_free(path: Path, *, overwrite: bool) -> None:
    if path.exists() and not overwrite:
        raise ResultFileError(
            f"{path} exists; continue it with --resume, replace it with --overwrite, "
            "or choose another name"
        )
