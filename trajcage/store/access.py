"""Opening HDF5 files that are complete, being written, killed, foreign or hostile.

Only what trajcage itself writes is accepted: hard links, plain numbers and
fixed-length strings, storage inside the file. Everything else could make a
reader open other files, load code or allocate without limit.
"""

import io
import os
import time
from dataclasses import replace
from pathlib import Path
from typing import Any

import h5py

from trajcage.errors import ResultFileError
from trajcage.store.commit import FORMAT_VERSION, Commit, latest_commit, read_text
from trajcage.store.extents import valid_rows
from trajcage.store.guard import guard
from trajcage.store.lock import is_being_written
from trajcage.store.superblock import Superblock, is_truncated, read_superblock

__all__ = [
    "abandon",
    "open_for_reading",
    "open_for_writing",
    "open_mended",
    "read_checked",
    "read_commit",
]

_FILTERS = {h5py.h5z.FILTER_DEFLATE, h5py.h5z.FILTER_SHUFFLE}
_MAX_DEPTH = 16
_MAX_OBJECTS = 10_000
_PATIENCE = 1.0  # seconds


class _Mended(io.FileIO):
    """The file as it would be with another superblock; the disk is not touched."""

    def __init__(self, path: Path, superblock: Superblock) -> None:
        super().__init__(path, "rb")
        self._head = superblock.pack()

    def readinto(self, buffer: Any) -> int | None:
        start = self.tell()
        count = super().readinto(buffer)
        if count and start < len(self._head):
            end = min(start + count, len(self._head))
            memoryview(buffer).cast("B")[: end - start] = self._head[start:end]
        return count


class _MendedFile(h5py.File):  # type: ignore[misc]  # h5py is untyped
    """An HDF5 file that closes the stream it is read from."""

    def __init__(self, stream: _Mended) -> None:
        self._stream = stream
        try:
            super().__init__(stream, "r")
        except BaseException:
            stream.close()
            raise

    def close(self) -> None:
        super().close()
        self._stream.close()


def open_for_reading(path: Path, *, alone: bool = False) -> Any:
    """Open a result file whatever its writer is doing.

    Parameters
    ----------
    path : Path
        The file.
    alone : bool
        Whether the caller holds the writer lock, so that nobody is writing.

    Raises
    ------
    ResultFileError
        If the file is missing, truncated, damaged or no HDF5 file.
    """
    deadline = time.monotonic() + _PATIENCE
    while True:
        superblock = read_superblock(path)
        live = superblock.open_for_writing and not alone and is_being_written(path)
        if not live and not superblock.is_closed(path.stat().st_size):
            return open_mended(path, superblock)
        with guard(path, "opening"):
            try:
                return h5py.File(path, "r", swmr=live)
            except OSError:
                # A writer that comes or goes just now; else the file is at fault.
                if time.monotonic() > deadline or (
                    read_superblock(path) == superblock and not is_being_written(path)
                ):
                    raise
        time.sleep(0.01)


def open_mended(path: Path, superblock: Superblock) -> Any:
    """Open a file that no process is writing as if it were closed and whole.

    What lies beyond the end of the file is an error where it is read.
    """
    size = path.stat().st_size
    closed = replace(superblock.closed(0), end_of_file=size - superblock.base)
    with guard(path, "opening"):
        return _MendedFile(_Mended(path, closed))


def open_for_writing(path: Path) -> Any:
    """Open an existing file as its single writer with many readers.

    Goes straight to that mode, so the file is never in the state of an
    ordinary writer, in which a crash leaves anything behind.
    """
    access = h5py.h5p.create(h5py.h5p.FILE_ACCESS)
    access.set_libver_bounds(h5py.h5f.LIBVER_V110, h5py.h5f.LIBVER_V110)
    access.set_sieve_buf_size(0)  # the commit record goes to disk as it is written
    flags = h5py.h5f.ACC_RDWR | h5py.h5f.ACC_SWMR_WRITE
    deadline = time.monotonic() + _PATIENCE
    while True:
        try:
            return h5py.File(h5py.h5f.open(os.fsencode(path), flags, access))
        except BlockingIOError as error:  # some program is just looking at it
            if time.monotonic() > deadline:
                raise ResultFileError(
                    f"{path} is open in another program; close it there first"
                ) from error
            time.sleep(0.02)


def abandon(file: Any) -> None:
    """Close a file to which a write has failed, say on a full disk.

    The library insists on writing what is left in its memory, fails again, and crashes
    when its objects are released later. So these writes go to a file in memory; the
    result file stays as the last commit left it.

    Parameters
    ----------
    file : h5py.File
        Open for writing.
    """
    if hasattr(os, "memfd_create"):  # on Linux
        handle = file.id.get_vfd_handle()
        sink = os.memfd_create("abandoned")
        try:
            os.ftruncate(sink, os.fstat(handle).st_size)
            os.dup2(sink, handle, inheritable=False)
        finally:
            os.close(sink)
    file.close()


def _check_contents(file: Any, path: Path) -> None:
    """Refuse a file with anything in it that trajcage does not write.

    Raises
    ------
    ResultFileError
        Names the first offending object and what is wrong with it.
    """
    seen: set[int] = set()
    waiting = [("", file, 0)]
    while waiting:
        prefix, group, depth = waiting.pop()
        for name in group:
            where = f"{prefix}/{name}"
            item = _hard_linked(group, name, path, where)
            address = h5py.h5o.get_info(item.id).addr
            if address in seen:
                continue
            seen.add(address)
            if len(seen) > _MAX_OBJECTS or depth > _MAX_DEPTH:
                raise ResultFileError(
                    f"{path} holds too many objects for a result file"
                )
            if isinstance(item, h5py.Group):
                waiting.append((where, item, depth + 1))
            elif isinstance(item, h5py.Dataset):
                _check_dataset(item, f"{path}: {where}")
            else:
                raise ResultFileError(f"{path}: {where} is neither group nor dataset")


def _hard_linked(group: Any, name: str, path: Path, where: str) -> Any:
    link = group.get(name, getlink=True)
    if not isinstance(link, h5py.HardLink):
        raise ResultFileError(
            f"{path}: {where} is a link ({type(link).__name__}) that could lead out "
            "of the file; remove it or copy the data into the file"
        )
    return group[name]


def _check_dataset(dataset: Any, where: str) -> None:
    plist = dataset.id.get_create_plist()
    if plist.get_layout() == h5py.h5d.VIRTUAL:
        raise ResultFileError(f"{where} is a virtual dataset made of other files")
    if plist.get_external_count():
        raise ResultFileError(f"{where} keeps its data in other files")
    kind = dataset.id.get_type()
    if kind.get_class() not in {h5py.h5t.INTEGER, h5py.h5t.FLOAT, h5py.h5t.STRING} or (
        kind.get_class() == h5py.h5t.STRING and kind.is_variable_str()
    ):
        raise ResultFileError(
            f"{where} is of type {dataset.dtype}, expected numbers or fixed-length text"
        )
    filters = {plist.get_filter(i)[0] for i in range(plist.get_nfilters())}
    if filters - _FILTERS:
        raise ResultFileError(f"{where} uses unknown filters {filters - _FILTERS}")


def read_commit(file: Any, path: Path) -> Commit:
    """Return the valid commit record of an open file.

    Raises
    ------
    ResultFileError
        If the file has none: it is foreign or damaged.
    """
    item = file
    for name in ("trajcage", "commit"):
        if not isinstance(item, h5py.Group) or name not in item:
            raise ResultFileError(
                f"{path} is an HDF5 file but not a result of trajcage: it has no "
                "/trajcage/commit"
            )
        item = _hard_linked(item, name, path, f"{item.name}/{name}")
    _check_dataset(item, f"{path}: /trajcage/commit")
    if item.size > _MAX_OBJECTS:
        raise ResultFileError(f"{path}: the commit record has an unexpected shape")
    columns = tuple(read_text(item.attrs, "columns").split("\n"))
    return latest_commit(item[()], columns, path)


def read_checked(file: Any, path: Path, *, whole: bool = True) -> Commit:
    """Check the whole structure of an open file; return its commit record.

    Parameters
    ----------
    file, path
        The open file and its name.
    whole : bool
        Whether a truncated file is refused.

    Raises
    ------
    ResultFileError
        If the file is foreign, damaged, hostile or of another format version.
    """
    # The record is read before any other dataset is opened: what is opened
    # later is then at least as far as the record says, also beside a writer.
    commit = read_commit(file, path)
    _check_contents(file, path)
    version = int(file["trajcage/format_version"][()])
    if version != FORMAT_VERSION:
        raise ResultFileError(
            f"{path} has format version {version}, this trajcage reads version "
            f"{FORMAT_VERSION}"
        )
    if whole and is_truncated(path):
        _probe(file, path, commit)
    return commit


def _probe(file: Any, path: Path, commit: Commit) -> None:
    """Tell a truncated file from one whose last, uncommitted rows failed."""
    for name, rows in valid_rows(file, commit).items():
        try:
            if rows:
                file[name][rows - 1]
        except (OSError, RuntimeError, ValueError) as error:
            raise ResultFileError(
                f"{path}: /{name} ends before its {rows} committed rows"
            ) from error
