"""LAMMPS data files, read here instead of by MDAnalysis.

MDAnalysis needs the atom style from the caller, ignores diameters and takes
a sphere's diameter for its type if it is not told.
"""

import copy
import re
from pathlib import Path

import numpy as np

from trajcage.errors import InputError
from trajcage.readers.source import RawFrame, Source
from trajcage.readers.text import Table, check_last_line, to_floats

__all__ = ["LammpsDataSource"]

# Columns up to the coordinates, as the LAMMPS manual lists them for read_data.
_STYLES = {
    "atomic": "id type x y z",
    "bond": "id molecule type x y z",
    "molecular": "id molecule type x y z",
    "angle": "id molecule type x y z",
    "charge": "id type charge x y z",
    "full": "id molecule type charge x y z",
    "sphere": "id type diameter density x y z",
    "bpm/sphere": "id molecule type diameter density x y z",
}
_SECTION = re.compile(rb"^[A-Z][A-Za-z ]+(#.*)?$")


class LammpsDataSource(Source):
    """A LAMMPS data file: one configuration.

    Parameters
    ----------
    path : Path
        The data file, its Atoms section headed by the style (``Atoms # sphere``).

    Raises
    ------
    InputError
        If the file or its atom style cannot be read.
    """

    format = "LAMMPS data"
    box_source = "the header of the data file"
    box_anchor = "corner"
    has_ids = True
    n_frames = 1

    def __init__(self, path: Path) -> None:
        self.files = (path,)
        self.notes = []
        try:
            text = path.read_bytes()
            check_last_line(text)
            self._read(text.splitlines())
        except ValueError as error:
            raise InputError(f"cannot read {path}: {error}") from None

    def _read(self, lines: list[bytes]) -> None:
        head, style, rows = _split(lines)
        names = _columns(style, rows).split()
        n = int(head.get("atoms", [b"-1"])[0])
        if len(rows) != n:
            raise ValueError(f"expected {n} atoms, found {len(rows)} (truncated?)")
        columns = {name: k for k, name in enumerate([*names, "ix", "iy", "iz"])}
        table = Table(rows, columns, len(names))
        ids = table.integers("id")[:, 0]
        order = np.argsort(ids, kind="stable")
        self._spacing = table.spacing("x", "y", "z")
        types = table.names("type")
        self.type_names = tuple(sorted(set(types), key=lambda t: (len(t), t)))
        radii = images = None
        if "diameter" in table:
            self.radii_source = "the diameters in the LAMMPS data file"
            radii = table.floats("diameter")[order, 0] / 2.0
        if all(len(row) == len(columns) for row in table.rows):
            images = table.integers("ix", "iy", "iz")[order].astype(np.int32)
        low, vectors = _box(head)
        self._raw = RawFrame(
            positions=table.floats("x", "y", "z")[order],
            ids=ids[order],
            types=self.index_types(types, 0)[order],
            vectors=vectors,
            origin=low,
            radii=radii,
            images=images,
        )

    def read(self, index: int) -> RawFrame:  # noqa: ARG002 - there is one frame
        """Return the configuration."""
        return copy.deepcopy(self._raw)

    def spacing(self, raw: RawFrame) -> float:  # noqa: ARG002 - known since opening
        """Return the unit of the last printed digit."""
        return self._spacing

    def close(self) -> None:
        """Nothing is open."""


def _split(
    lines: list[bytes],
) -> tuple[dict[str, list[bytes]], str, list[bytes]]:
    """Header values by keyword, atom style, and the lines of the Atoms section."""
    head: dict[str, list[bytes]] = {}
    style, rows, section = "", [], ""
    for line in lines[1:]:  # the first line is a title
        text = line.strip()
        if not text:
            continue
        if _SECTION.match(text):
            title, _, comment = text.partition(b"#")
            section = title.strip().decode()
            if section == "Atoms":
                style = comment.strip().decode()
            continue
        text = text.partition(b"#")[0]
        words = text.split()
        if section == "Atoms" and words:
            rows.append(text)
        elif not section and words:
            n_values = sum(_is_number(word) for word in words)
            keyword = b" ".join(words[n_values:]).decode(errors="replace")
            head[keyword] = words[:n_values]
    if not rows:
        raise ValueError("expected a LAMMPS data file with a section 'Atoms'")
    return head, style, rows


def _columns(style: str, rows: list[bytes]) -> str:
    if style in _STYLES:
        return _STYLES[style]
    if not style and len(rows[0].split()) in {
        5,
        8,
    }:  # no other style has as few columns
        return _STYLES["atomic"]
    raise ValueError(
        f"atom style {style!r} is not known; head the section as 'Atoms # STYLE' with "
        f"STYLE out of {', '.join(_STYLES)}, or use a dump instead"
    )


def _box(head: dict[str, list[bytes]]) -> tuple[np.ndarray, np.ndarray]:
    try:
        bounds = [head[f"{axis}lo {axis}hi"] for axis in "xyz"]
    except KeyError as missing:
        raise ValueError(f"expected a line ending in {missing} in the header") from None
    low, high = np.array([to_floats(pair) for pair in bounds]).T
    xy, xz, yz = to_floats(head.get("xy xz yz", [b"0", b"0", b"0"]))
    lx, ly, lz = high - low
    return low, np.array([[lx, 0.0, 0.0], [xy, ly, 0.0], [xz, yz, lz]])


def _is_number(word: bytes) -> bool:
    try:
        float(word)
    except ValueError:
        return False
    return True
