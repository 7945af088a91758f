"""The commit record: the only thing a reader believes about how far a file is.

``/trajcage/commit`` holds two rows of int64 that are written in turn, each in
one piece, with a generation number and a checksum. The valid row of the later
generation counts; a row torn by a crash is seen and the earlier one is used.
"""

import zlib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import ResultFileError

__all__ = ["COLUMNS", "FORMAT_VERSION", "Commit", "latest_commit", "read_text"]

FORMAT_VERSION = 1  # of the layout below /trajcage

COLUMNS = (
    "generation",
    "frames_complete",
    "complete",
    "arrays_frames",
    "summary_bytes",
    "state_slot",
    "state_bytes",
)
_CHECKSUM = "checksum"


@dataclass(frozen=True)
class Commit:
    """How much of every dataset is valid.

    Parameters
    ----------
    generation : int
        Counts commits from 1.
    frames_complete : int
        Rows of every per-frame and per-particle dataset.
    complete : bool
        Whether the run was finished.
    arrays_frames : int
        Number of frames that the arrays and the summary describe; -1 while
        there are none or they are being replaced.
    summary_bytes : int
        Length of the summary text.
    state_slot, state_bytes : int
        Which of the two slots holds the fold state and how long it is; length
        -1 if no state belongs to these frames.
    rows : mapping of str to int
        Rows of every table, ragged column and array.
    """

    generation: int
    frames_complete: int
    complete: bool
    arrays_frames: int
    summary_bytes: int
    state_slot: int
    state_bytes: int
    rows: Mapping[str, int]

    @classmethod
    def initial(cls, names: tuple[str, ...]) -> "Commit":
        """Return the record of a file without frames."""
        return cls(1, 0, False, -1, 0, 0, -1, dict.fromkeys(names, 0))

    @property
    def columns(self) -> tuple[str, ...]:
        """Names of the numbers in one row of the dataset."""
        return (*COLUMNS, *self.rows, _CHECKSUM)

    def encode(self) -> NDArray[np.int64]:
        """Return one row of the dataset."""
        fixed = [int(getattr(self, name)) for name in COLUMNS]
        body = np.array([*fixed, *self.rows.values()], dtype="<i8")
        return np.append(body, zlib.crc32(body.tobytes())).astype("<i8")


def latest_commit(
    table: NDArray[np.int64], columns: tuple[str, ...], path: Path
) -> Commit:
    """Pick the valid row of the later generation.

    Raises
    ------
    ResultFileError
        If no row is valid.
    """
    table = np.asarray(table, dtype="<i8")
    if table.ndim != 2 or table.shape[1] != len(columns):
        raise ResultFileError(f"{path}: the commit record has an unexpected shape")
    if columns[: len(COLUMNS)] != COLUMNS or columns[-1] != _CHECKSUM:
        raise ResultFileError(f"{path}: the commit record has unexpected columns")
    valid = [row for row in table if zlib.crc32(row[:-1].tobytes()) == row[-1]]
    if not valid:
        raise ResultFileError(f"{path}: the commit record is damaged")
    row = [int(x) for x in max(valid, key=lambda row: int(row[0]))]
    n = len(COLUMNS)
    rows = dict(zip(columns[n:-1], row[n:-1], strict=True))
    if (
        min(row[1], *row[4:6], *rows.values()) < 0
        or min(row[3], row[6]) < -1
        or row[5] > 1
    ):
        raise ResultFileError(f"{path}: the commit record has negative counts")
    return Commit(
        row[0], row[1], bool(row[2]), row[3], row[4], row[5], row[6], rows=rows
    )


def read_text(attributes: Any, name: str) -> str:
    """Return a text attribute, empty if it is missing."""
    value = attributes.get(name, b"")
    return value.decode() if isinstance(value, bytes) else str(value)
