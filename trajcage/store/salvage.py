"""Rescuing what is left of a killed, truncated or damaged result file."""

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from trajcage.errors import ResultFileError
from trajcage.store.access import open_mended, read_checked
from trajcage.store.commit import Commit, read_text
from trajcage.store.extents import datasets, is_per_frame, valid_rows
from trajcage.store.guard import guard
from trajcage.store.lock import WriterLock, is_being_written
from trajcage.store.superblock import read_superblock

__all__ = ["salvage"]


def salvage(path: str | Path, target: str | Path) -> int:
    """Copy all complete frames into a fresh file of the same structure.

    The copy ends before the first frame that cannot be read in every dataset;
    its tables end with that frame. If all committed frames are there, arrays,
    summary and fold state come along and the copy can be resumed; if not, the
    copy is marked incomplete and holds no fold state.

    Parameters
    ----------
    path : str or Path
        A file that no process is writing. It is only read.
    target : str or Path
        The new file; it must not exist.

    Returns
    -------
    int
        Number of frames in the copy.

    Raises
    ------
    ResultFileError
        If the target exists or the structure itself cannot be read.
    """
    source, copy = Path(path), Path(target)
    superblock = read_superblock(source)
    if superblock.open_for_writing and is_being_written(source):
        raise ResultFileError(f"{source} is being written; salvage is for dead files")
    lock = WriterLock(copy)
    part = copy.with_name(f".{copy.name}.part")
    try:
        if copy.exists():
            raise ResultFileError(f"{copy} exists; choose another name for the copy")
        with guard(source, "salvaging"), open_mended(source, superblock) as old:
            commit = _reachable(old, read_checked(old, source, whole=False))
            with h5py.File(part, "w", libver=("v110", "v110")) as new:
                _copy_group(old, new, valid_rows(old, commit), {})
                _write_commit(new, commit)
            part.replace(copy)
        return commit.frames_complete
    finally:
        part.unlink(missing_ok=True)
        lock.release()


def _reachable(file: Any, commit: Commit) -> Commit:
    """Return the commit record of what can be read."""
    root = file["trajcage"]
    frames = commit.frames_complete
    for name, dataset in datasets(file).items():
        if is_per_frame(name):
            frames = min(frames, _readable_rows(dataset, frames))
    counts = _table_rows(root, frames)
    readable = {name: _readable_table(root, name, commit.rows[name]) for name in counts}
    for name, column in counts.items():
        frames = min(frames, int(np.searchsorted(column, readable[name], "right")))
    arrays = [name for name in commit.rows if name not in counts]
    whole = (
        frames == commit.frames_complete
        and all(readable[name] == commit.rows[name] for name in counts)
        and all(
            _readable_rows(root[name], commit.rows[name]) == commit.rows[name]
            for name in arrays
            if root[name].ndim
        )
        and _readable_rows(root["summary"], commit.summary_bytes)
        == commit.summary_bytes
    )
    size, slot = max(commit.state_bytes, 0), root["state"]["ab"[commit.state_slot]]
    has_state = frames == commit.frames_complete and _readable_rows(slot, size) == size
    if not has_state:
        commit = replace(commit, state_bytes=-1)
    if whole:
        return commit
    rows = {name: int(c[frames - 1]) if frames else 0 for name, c in counts.items()}
    return replace(
        commit,
        frames_complete=frames,
        complete=False,
        arrays_frames=-1,
        summary_bytes=0,
        rows=rows | dict.fromkeys(arrays, 0),
    )


def _table_rows(root: Any, frames: int) -> dict[str, NDArray[np.int64]]:
    """For each table and ragged column, its rows after each frame."""
    dataset = root["frames"].get("table_rows")
    if dataset is None:
        return {}
    names = read_text(dataset.attrs, "columns").split("\n")
    return dict(zip(names, dataset[:frames].T, strict=True))


def _readable_table(root: Any, name: str, rows: int) -> int:
    """Rows that can be read of a ragged column or of all plain columns of a table."""
    item = root[name]
    if isinstance(item, h5py.Dataset):
        return _readable_rows(item, rows)
    for dataset in item.values():
        kind = read_text(dataset.attrs, "kind")
        if kind == "column":
            rows = min(rows, _readable_rows(dataset, rows))
        elif kind == "offsets":
            rows = min(rows, max(_readable_rows(dataset, rows + 1) - 1, 0))
    return rows


def _readable_rows(dataset: Any, rows: int) -> int:
    """Rows from the start that can be read, by whole chunks."""
    rows = min(rows, dataset.shape[0])
    for start, end in _blocks(dataset, rows):
        try:
            dataset[start:end]
        except (OSError, RuntimeError, ValueError):
            return start
    return rows


def _blocks(dataset: Any, rows: int) -> Iterator[tuple[int, int]]:
    step = dataset.chunks[0]
    for start in range(0, rows, step):
        yield start, min(start + step, rows)


def _copy_group(
    old: Any, new: Any, valid: dict[str, int], copies: dict[int, Any]
) -> None:
    """Copy links, groups, datasets and attributes; shared objects stay shared."""
    _copy_attributes(old, new)
    for name, item in old.items():
        address = h5py.h5o.get_info(item.id).addr
        if address in copies:
            new[name] = copies[address]
        elif isinstance(item, h5py.Group):
            copies[address] = new.create_group(name)
            _copy_group(item, copies[address], valid, copies)
        else:
            copies[address] = _copy_dataset(item, new, name, valid)


def _copy_dataset(old: Any, new_group: Any, name: str, valid: dict[str, int]) -> Any:
    rows = valid.get(old.name.lstrip("/"))
    space = old.id.get_space()
    if rows is not None:
        most = (h5py.h5s.UNLIMITED, *old.shape[1:])
        space = h5py.h5s.create_simple((rows, *old.shape[1:]), most)
    plist = old.id.get_create_plist()
    made = h5py.h5d.create(new_group.id, name.encode(), old.id.get_type(), space, plist)
    new = h5py.Dataset(made)
    _copy_attributes(old, new)
    if rows is None:
        new[()] = old[()]
    else:
        for start, end in _blocks(old, rows):
            new[start:end] = old[start:end]
    return new


def _copy_attributes(old: Any, new: Any) -> None:
    for name in old.attrs:
        source = old.attrs.get_id(name)
        values = np.empty(source.shape, source.dtype)
        source.read(values)
        made = h5py.h5a.create(
            new.id, name.encode(), source.get_type(), source.get_space()
        )
        made.write(values)


def _write_commit(file: Any, commit: Commit) -> None:
    root = file["trajcage"]
    row = commit.encode()
    root["commit"][...] = np.stack([row, np.zeros_like(row)])
    root["frames_complete"][()] = commit.frames_complete
    root["complete"][()] = int(commit.complete)
