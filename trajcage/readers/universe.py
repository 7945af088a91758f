"""Every other format, read by MDAnalysis with its unit conversion off.

MDAnalysis turns nanometers into angstroms, so a trajectory in units of the
particle diameter would come out ten times too large beside diameters given by
the user: `convert_units` is always False here.
"""

from collections.abc import Iterable, Iterator
from itertools import islice
from pathlib import Path
from typing import Any

import MDAnalysis
import numpy as np
from MDAnalysis.coordinates.core import reader as open_reader
from MDAnalysis.lib.formats.libmdaxdr import XTCFile
from numpy.typing import NDArray

from trajcage.errors import FrameError, InputError
from trajcage.model import Box
from trajcage.readers.source import (
    Particles,
    RawFrame,
    Source,
    collect_warnings,
    float_spacing,
)
from trajcage.readers.text import decimal_spacing

__all__ = ["UniverseSource", "read_topology", "stored_spacing", "vectors_of"]

# Formats that store a step or a time of their own with every frame. The rest
# get a counter from MDAnalysis that is neither.
_STEPPED = {"XTC", "TRR", "TNG", "TRC"}
_TIMED = {*_STEPPED, "NCDF"}


class UniverseSource(Source):
    """A trajectory opened by MDAnalysis.

    Parameters
    ----------
    path : Path
        The file with the frames.
    companion : Particles, optional
        Particles from a topology; without them the file must name its own.

    Raises
    ------
    InputError
        If MDAnalysis cannot read the file or it does not match the topology.
    """

    _reader: Any

    def __init__(self, path: Path, companion: Particles | None = None) -> None:
        self.notes = []
        self.files = (path,)
        self.format = path.suffix.lstrip(".").upper() or "file without suffix"
        try:
            with collect_warnings(self.notes):
                particles = self._open(path, companion)
            self.n_frames = int(self._reader.n_frames)
            self._unit = stored_spacing(path, self.format)
        except InputError:
            raise
        except Exception as error:  # third parties raise what they like
            raise InputError(
                f"MDAnalysis cannot read {path}: {_one_line(error)}; expected a format "
                "that MDAnalysis knows by its suffix (XTC, TRR, DCD, GRO, PDB, H5MD, "
                "...) or GSD, LAMMPS (.dump, .lammpstrj, .data) or XYZ, with a "
                "topology file before it if it needs one"
            ) from error
        self.box_source = f"the {self.format} file"
        self.type_names = particles.type_names
        self.radii_source = particles.radii_source
        self._particles = particles
        self._note_lost_bytes()

    def _open(self, path: Path, companion: Particles | None) -> Particles:
        if companion is not None:
            self._reader = open_reader(
                str(path), n_atoms=len(companion.types), convert_units=False
            )
            found = companion
        else:
            universe = MDAnalysis.Universe(str(path), convert_units=False, to_guess=())
            if not hasattr(universe, "trajectory"):
                raise InputError(
                    f"{path} has no coordinates; give the trajectory after it"
                )
            self._reader = universe.trajectory
            found = _particles(universe, path)
        name = self._reader.format
        self.format = str(name if isinstance(name, str) else name[0])
        if self.format == "GRO":
            _refuse_more_frames(path)
        n = int(self._reader.n_atoms)
        if n != len(found.types):
            raise InputError(
                f"the topology has {len(found.types)} particles, {path} has {n}"
            )
        return found

    def read(self, index: int) -> RawFrame:
        """Read one frame."""
        try:
            with collect_warnings(self.notes):
                return self._extract(self._reader[index], index)
        except Exception as error:  # third parties raise what they like
            raise FrameError(
                f"cannot read {self.files[0]}: {_one_line(error)}; the file may be "
                "truncated or damaged",
                frame=index,
            ) from error

    def _extract(self, ts: Any, index: int) -> RawFrame:
        step, time = self._clock(ts, index)
        radii = self._particles.radii
        return RawFrame(
            positions=np.array(ts.positions, dtype=np.float64),
            ids=self._particles.own_ids(),
            types=self._particles.types.copy(),
            vectors=vectors_of(ts.dimensions),
            step=step,
            time=time,
            radii=None if radii is None else radii.copy(),
        )

    def spacing(self, raw: RawFrame) -> float:
        """Return the coarser of the float spacing and the format's own."""
        return max(self._unit, float_spacing(raw.positions))

    def close(self) -> None:
        """Close the reader."""
        self._reader.close()

    def _note_lost_bytes(self) -> None:
        """Tell of an incomplete last frame, which MDAnalysis drops in silence."""
        if self.format == "DCD":
            dcd = self._reader._file  # noqa: SLF001 - not exposed otherwise
            sizes = dcd._header_size, dcd._firstframesize, dcd._framesize  # noqa: SLF001
            end = int(sizes[0] + sizes[1] + (self.n_frames - 1) * sizes[2])
        elif self.format in {"XTC", "TRR"}:
            try:
                self.read(self.n_frames - 1)
            except FrameError:
                return  # no silence: whoever reads that frame is told
            end = int(self._reader._xdr._bytes_tell())  # noqa: SLF001 - as above
        else:
            return
        lost = self.files[0].stat().st_size - end
        if lost > 0:
            self.notes.append(
                f"{lost} bytes after the last frame are no complete frame: the file "
                "was truncated, or is still being written"
            )

    def _clock(self, ts: Any, index: int) -> tuple[int | None, float | None]:
        if self.format == "DCD":
            header = self._reader._file.header  # noqa: SLF001 - not exposed otherwise
            step = int(header["istart"]) + index * int(header["nsavc"])
            # MDAnalysis takes every DCD's time for AKMA units and converts it.
            return step, step * float(header["delta"])
        stored_step = int(ts.data["step"]) if self.format in _STEPPED else None
        return stored_step, float(ts.time) if self.format in _TIMED else None


def read_topology(path: Path) -> Particles:
    """Read types and radii from a topology that MDAnalysis knows.

    Raises
    ------
    InputError
        If MDAnalysis cannot read the file.
    """
    try:
        with collect_warnings([]):
            universe = MDAnalysis.Universe(str(path), to_guess=(), convert_units=False)
            return _particles(universe, path)
    except Exception as error:  # third parties raise what they like
        raise InputError(
            f"MDAnalysis cannot read the topology {path}: {_one_line(error)}"
        ) from error


def _particles(universe: Any, path: Path) -> Particles:
    """Types and radii that stand in the file, nothing guessed."""
    atoms = universe.atoms
    # Beside names, the types of these formats are chemical elements.
    by_name = path.suffix.lower() in {".pdb", ".ent", ".gro", ".pqr"}
    order = ("names", "types") if by_name else ("types", "names")
    names = next(
        (getattr(atoms, name) for name in order if hasattr(atoms, name)),
        np.full(len(atoms), "A"),
    )
    type_names, types = np.unique(np.asarray(names, dtype=str), return_inverse=True)
    radii, source = None, ""
    if path.suffix.lower() == ".pqr":  # other parsers make radii up
        radii = np.array(atoms.radii, dtype=np.float64)
        source = "the radii in the PQR file"
    return Particles(
        tuple(type_names.tolist()), types.ravel().astype(np.int32), radii, source
    )


def vectors_of(dimensions: NDArray[np.float32] | None) -> NDArray[np.float64] | None:
    """Row vectors from MDAnalysis' lengths and angles, in float64.

    Parameters
    ----------
    dimensions : (6,) float32 or None
        Lengths and angles in degrees.
    """
    if dimensions is None or not np.any(dimensions[:3]):
        return None
    six = np.array(dimensions, dtype=np.float64)
    if np.all(six[:3] > 0.0):
        return Box.from_any(six).vectors
    return np.diag(six[:3])  # a missing edge: fine in a plane, else an error later


def stored_spacing(path: Path, name: str) -> float:
    """Spacing that the format itself imposes, 0 if only floats do.

    Parameters
    ----------
    path : Path
        The file.
    name : str
        Name of its format.
    """
    if name == "XTC":
        with XTCFile(str(path)) as file:
            frame = file.read()
        # Nine particles or fewer are stored as floats and leave prec unset.
        return 1.0 / float(frame.prec) if len(frame.x) > 9 else 0.0
    if name in {"GRO", "PDB", "ENT", "PQR"}:
        with path.open("rb") as file:
            return decimal_spacing(_coordinate_words(file, name))
    return 0.0


def _refuse_more_frames(path: Path) -> None:
    """Refuse a GRO file with several frames, of which MDAnalysis reads the first."""
    with path.open("rb") as file:
        next(file)
        n = int(next(file))
        rest = any(line.strip() for line in islice(file, n + 1, None))
    if rest:
        raise InputError(
            f"{path} holds more than one frame, of which MDAnalysis reads only the "
            "first; convert the file to XTC or TRR, or split it"
        )


def _coordinate_words(lines: Iterable[bytes], name: str) -> Iterator[bytes]:
    """Coordinates of the first frame as printed."""
    if name == "GRO":
        rows = iter(lines)
        next(rows)
        n = int(next(rows))
        for line in islice(rows, n):
            columns = line[20:]
            width = columns.find(b".", columns.find(b".") + 1) - columns.find(b".")
            yield from (columns[k * width : (k + 1) * width].strip() for k in range(3))
        return
    for line in lines:
        if line.startswith((b"ATOM", b"HETATM")):
            if name == "PQR":
                yield from line.split()[-5:-2]
            else:
                yield from (line[k : k + 8].strip() for k in (30, 38, 46))
        elif line.startswith(b"ENDMDL"):
            return


def _one_line(error: Exception) -> str:
    return " ".join(str(error).split()) or type(error).__name__
