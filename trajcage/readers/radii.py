"""Where the hard-sphere radii come from: the user before the file, never a guess."""

from collections.abc import Iterable
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import FrameError, InputError
from trajcage.readers.options import DIAMETER_FORMS
from trajcage.readers.source import RawFrame
from trajcage.wording import near_miss

__all__ = ["Radii"]


class Radii:
    """Radii of every frame from one declared origin.

    Parameters
    ----------
    diameter : float, dict, Path or None
        The parsed option, see `parse_diameter`.
    first : RawFrame
        The first frame.
    type_names : tuple of str
        Names of the particle types.
    file_source : str
        Where the file's own radii stand.

    Attributes
    ----------
    source : str
        Where the radii come from, as a sentence.

    Raises
    ------
    InputError
        If no radii are known, or the option does not fit the particles.
    """

    def __init__(
        self,
        diameter: float | dict[str, float] | Path | None,
        first: RawFrame,
        type_names: tuple[str, ...],
        file_source: str,
    ) -> None:
        self._fixed: NDArray[np.float64] | None = None
        self._by_type: NDArray[np.float64] | None = None
        self._type_names = type_names
        self._file_source = file_source
        n = len(first.positions)
        if diameter is None:
            if first.radii is None:
                raise InputError(
                    "no particle diameters are known: the input stores none; give "
                    "them with --diameter (or diameter=) as "
                    + ", or ".join(DIAMETER_FORMS)
                )
            self.source = f"Radii from {file_source}."
        elif isinstance(diameter, dict):
            used = [type_names[k] for k in np.unique(first.types)]
            self._by_type = _table(diameter, type_names, used)
            given = ", ".join(f"{name}={value:g}" for name, value in diameter.items())
            self.source = f"Diameters given for each type: {given}."
        elif isinstance(diameter, Path):
            self._fixed = _read_diameters(diameter, first.ids) / 2.0
            self.source = f"Diameters given for each particle in {diameter}."
        else:
            self._fixed = np.full(n, diameter / 2.0)
            self.source = f"One diameter given for all particles: {diameter:g}."
        if diameter is not None and first.radii is not None:
            self.source += f" Those in {file_source.removeprefix('the ')} are not used."

    def of(self, raw: RawFrame, index: int) -> NDArray[np.float64]:
        """Radii of one frame, (n,) float64, length.

        Raises
        ------
        FrameError
            If this frame lacks the radii that the first frame has.
        """
        if self._fixed is not None:
            return self._fixed.copy()
        if self._by_type is not None:
            radii = self._by_type[raw.types]
            if np.isnan(radii).any():
                name = self._type_names[int(raw.types[np.isnan(radii)][0])]
                raise FrameError(
                    f"type {name} appears here first and has no diameter; add "
                    f"{name}=VALUE to the diameters",
                    frame=index,
                    step=raw.step,
                )
            return radii
        if raw.radii is None:
            raise FrameError(
                f"expected radii from {self._file_source} as in the first frame, "
                "found none",
                frame=index,
                step=raw.step,
            )
        return raw.radii.copy()


def _table(
    diameter: dict[str, float], type_names: tuple[str, ...], used: Iterable[str]
) -> NDArray[np.float64]:
    """Radius of each type, NaN where not given."""
    for name in diameter:
        if name not in type_names:
            raise InputError(
                f"a diameter is given for type {name}{near_miss(name, type_names)}, but "
                f"the types are {', '.join(type_names)}"
            )
    missing = [name for name in used if name not in diameter]
    if missing:
        raise InputError(
            f"expected a diameter for each type, none is given for "
            f"{', '.join(missing)}; add {missing[0]}=VALUE"
        )
    return np.array([diameter.get(name, np.nan) / 2.0 for name in type_names])


def _read_diameters(path: Path, ids: NDArray[np.int64]) -> NDArray[np.float64]:
    """Diameters in the order of the ids, from one column or from id and diameter."""
    rows: list[list[float]] = []
    try:
        lines = path.read_text(encoding="utf-8").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        why = error.strerror if isinstance(error, OSError) else error
        raise InputError(f"cannot read the diameters in {path}: {why}") from error
    for number, line in enumerate(lines, start=1):
        words = line.partition("#")[0].replace(",", " ").split()
        if not words:
            continue
        try:
            row = [float(word) for word in words]
        except ValueError:
            row = []
        if len(row) not in {1, 2} or (rows and len(row) != len(rows[0])):
            raise InputError(
                f"{path}, line {number}: expected one diameter or 'id diameter' a "
                f"line, the same on all lines; found {line.strip()!r}"
            )
        if not (np.isfinite(row[-1]) and row[-1] > 0.0):
            raise InputError(
                f"{path}, line {number}: expected a positive diameter, found "
                f"{words[-1]}"
            )
        rows.append(row)
    if len(rows) != len(ids):
        raise InputError(
            f"expected {len(ids)} diameters, one for each particle, {path} has "
            f"{len(rows)}"
        )
    table = np.array(rows)
    if table.shape[1] == 1:
        return np.asarray(table[:, 0])
    order = np.argsort(table[:, 0], kind="stable")
    if not np.array_equal(table[order, 0], np.sort(ids)):
        odd = sorted({int(i) for i in ids} ^ set(table[:, 0].tolist()))
        named = ", ".join(f"{i:g}" for i in odd[:5]) or "some id twice"
        raise InputError(
            f"the ids in {path} are not those of the particles; they differ in {named}"
        )
    diameters = np.empty(len(ids))
    diameters[np.argsort(ids, kind="stable")] = table[order, 1]
    return diameters
