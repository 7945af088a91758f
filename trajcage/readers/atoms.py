"""Particles of an open MDAnalysis universe, frame by frame as it is read."""

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import InputError
from trajcage.readers.options import InputOptions
from trajcage.readers.source import RawFrame, Source, collect_warnings, float_spacing
from trajcage.readers.trajectory import Trajectory
from trajcage.readers.universe import stored_spacing, vectors_of

__all__ = ["open_atoms"]


class _AtomsSource(Source):
    """An atom group; what its universe converted or guessed is the user's affair.

    Parameters
    ----------
    atoms : MDAnalysis.AtomGroup
        The particles.
    needs_box : bool
        Whether its box is used.
    """

    def __init__(self, atoms: Any, *, needs_box: bool) -> None:
        self._atoms = atoms
        self._needs_box = needs_box
        trajectory = atoms.universe.trajectory
        self.files = (Path(str(trajectory.filename)),)
        name = trajectory.format
        self.format = str(name if isinstance(name, str) else name[0])
        self.n_frames = len(trajectory)
        self.notes = []
        self.box_source = "the universe"
        names = getattr(atoms, "types", getattr(atoms, "names", None))
        if names is None:
            names = np.full(len(atoms), "A")
        type_names, types = np.unique(np.asarray(names, dtype=str), return_inverse=True)
        self.type_names = tuple(type_names.tolist())
        self._types = types.ravel().astype(np.int32)
        self._unit = 0.0
        if self.files[0].is_file():
            scale = 10.0 if trajectory.units.get("length") == "nm" else 1.0
            scale = scale if trajectory.convert_units else 1.0
            self._unit = scale * stored_spacing(self.files[0], self.format)
        self._radii: NDArray[np.float64] | None = None
        self.radii_source = ""
        if self.format != "GSD" and hasattr(atoms, "radii"):
            self._radii = np.array(atoms.radii, dtype=np.float64)
            self.radii_source = "the radii of the atom group"

    def read(self, index: int) -> RawFrame:
        """Take the frame that the universe is at, or move it there."""
        trajectory = self._atoms.universe.trajectory
        with collect_warnings(self.notes):
            ts = trajectory.ts if trajectory.ts.frame == index else trajectory[index]
        dimensions = ts.dimensions
        if (
            self._needs_box
            and self.format == "GSD"
            and dimensions is not None
            and not np.all(dimensions[3:] == 90.0)
        ):
            raise InputError(
                "MDAnalysis reads tilted boxes of GSD files wrongly; use "
                "trajcage.measure, which reads them itself, or give box="
            )
        step, time = ts.data.get("step"), ts.data.get("time")
        return RawFrame(
            positions=np.array(self._atoms.positions, dtype=np.float64),
            ids=np.asarray(self._atoms.ix, dtype=np.int64),
            types=self._types.copy(),
            vectors=vectors_of(dimensions),
            step=index if step is None else int(step),
            time=None if time is None else float(time),
            radii=None if self._radii is None else self._radii.copy(),
        )

    def spacing(self, raw: RawFrame) -> float:
        """Return the coarser of the float spacing and that of the file."""
        return max(self._unit, float_spacing(raw.positions))

    def close(self) -> None:
        """Leave the universe open: it is not ours."""


def open_atoms(atoms: Any, options: InputOptions) -> Trajectory:
    """Use an atom group as an input.

    Parameters
    ----------
    atoms : MDAnalysis.AtomGroup
        The particles, fixed. Reading moves the frame of its universe only if it is
        not there already.
    options : InputOptions
        What the universe does not say; its files are not looked at.

    Returns
    -------
    Trajectory

    Raises
    ------
    InputError
        If diameters or box are unknown, or the first frame cannot be used.
    """
    return Trajectory(options, _AtomsSource(atoms, needs_box=options.box is None))
