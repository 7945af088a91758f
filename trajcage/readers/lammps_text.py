"""The text of one frame of a LAMMPS dump, taken apart."""

import mmap
import re
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from trajcage.readers.text import Table, check_last_line, to_floats

__all__ = ["BLOCK_HEAD", "DumpBlock", "DumpError", "find_blocks", "parse_block"]

BLOCK_HEAD = b"ITEM: TIMESTEP"
_TIME = re.compile(rb"ITEM: TIME\r?\n\s*(\S+)\s*\r?\n$")


class DumpError(ValueError):
    """Text that is no complete frame; knows the step if that could be read."""

    step: int | None = None


@dataclass(frozen=True, eq=False)
class DumpBlock:
    """The parts of one frame's text.

    Parameters
    ----------
    step : int
        From the TIMESTEP line.
    time : float or None
        From the TIME line before it, if there is one.
    vectors, origin : (3, 3) and (3,) float64, length
        Box edges as rows and the corner where they start.
    periodic : tuple of 3 bool or None
        Periodic edges, if the BOX BOUNDS line has flags.
    table : Table
        The columns as text.
    """

    step: int
    time: float | None
    vectors: NDArray[np.float64]
    origin: NDArray[np.float64]
    periodic: tuple[bool, ...] | None
    table: Table


def find_blocks(text: mmap.mmap) -> list[int]:
    """Find the byte offsets of the frames and of the end of the file."""
    offsets = []
    at = text.find(BLOCK_HEAD)
    while at >= 0:
        offsets.append(at)
        at = text.find(BLOCK_HEAD, at + len(BLOCK_HEAD))
    return [*offsets, len(text)]


def parse_block(text: bytes, before: bytes = b"") -> DumpBlock:
    """Take a frame apart.

    Parameters
    ----------
    text : bytes
        The frame from its TIMESTEP line on.
    before : bytes
        The end of the text before it, where LAMMPS puts the time.

    Raises
    ------
    DumpError
        If the text is not a complete frame.
    """
    lines = _Lines(text)
    step: int | None = None
    try:
        lines.expect(BLOCK_HEAD)
        step = int(lines.next())
        lines.expect(b"ITEM: NUMBER OF ATOMS")
        n = int(lines.next())
        vectors, origin, periodic = _read_box(lines)
        columns = lines.expect(b"ITEM: ATOMS").decode().split()
        table = lines.table(n, columns)
        found = _TIME.search(before)
        time = float(found[1]) if found else None
    except ValueError as error:
        failure = DumpError(str(error))
        failure.step = step
        raise failure from None
    return DumpBlock(step, time, vectors, origin, periodic, table)


class _Lines:
    """A cursor over the lines of one frame."""

    def __init__(self, text: bytes) -> None:
        self._text = text
        self._at = 0

    def next(self) -> bytes:
        """Return the next line; raises ValueError past the last complete one."""
        end = self._text.find(b"\n", self._at)
        if end < 0:
            raise ValueError("the file ends inside this frame (truncated?)")
        line, self._at = self._text[self._at : end], end + 1
        return line.strip()

    def expect(self, head: bytes) -> bytes:
        """Return what follows the head on the next line."""
        line = self.next()
        if not line.startswith(head):
            raise ValueError(f"expected {head.decode()!r}, found {line[:60]!r}")
        return line[len(head) :].strip()

    def table(self, n: int, columns: list[str]) -> Table:
        """Return n lines of words."""
        text = self._text[self._at :]
        if n == 0:
            raise ValueError("expected particles, found none")
        check_last_line(text)
        *lines, rest = text.split(b"\n", n)
        if len(lines) < n:
            raise ValueError(
                f"expected {n} particles, found {len(lines)} lines (truncated?)"
            )
        if rest.strip() and not rest.startswith(b"ITEM:"):
            raise ValueError(f"expected {n} particles, found more lines than that")
        numbered = {name: k for k, name in enumerate(columns)}
        return Table(lines, numbered, len(columns))


def _read_box(
    lines: _Lines,
) -> tuple[NDArray[np.float64], NDArray[np.float64], tuple[bool, ...] | None]:
    head = lines.expect(b"ITEM: BOX BOUNDS").decode().split()
    rows = [to_floats(lines.next().split()) for _ in range(3)]
    flags = [word for word in head if re.fullmatch("[pfsm]{2}", word)]
    periodic = tuple(word == "pp" for word in flags) if len(flags) == 3 else None
    if head[:2] == ["abc", "origin"]:  # general triclinic: three vectors and a corner
        general = np.array(rows)
        if general.shape != (3, 4):
            raise ValueError("expected three lines of four numbers after BOX BOUNDS")
        return general[:, :3], general[:, 3], periodic
    tilted = head[:3] == ["xy", "xz", "yz"]
    if any(len(row) != (3 if tilted else 2) for row in rows):
        raise ValueError(
            f"expected three lines of {3 if tilted else 2} numbers after BOX BOUNDS"
        )
    low, high = np.array([row[:2] for row in rows]).T
    if np.any(high <= low):
        raise ValueError(f"expected box bounds low < high, found {low} and {high}")
    if not tilted:
        return np.diag(high - low), low, periodic
    xy, xz, yz = (float(row[2]) for row in rows)
    # BOX BOUNDS of a tilted box are those of its bounding box.
    low = low - [min(0.0, xy, xz, xy + xz), min(0.0, yz), 0.0]
    high = high - [max(0.0, xy, xz, xy + xz), max(0.0, yz), 0.0]
    lx, ly, lz = high - low
    vectors = np.array([[lx, 0.0, 0.0], [xy, ly, 0.0], [xz, yz, lz]])
    return vectors, low, periodic
