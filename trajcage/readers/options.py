"""What the user says about the input, parsed once."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import UsageError

__all__ = ["DIAMETER_FORMS", "InputOptions", "parse_box", "parse_diameter"]

#: How diameters can be given, for messages and help texts.
DIAMETER_FORMS = (
    "one number for all particles (1.0)",
    "one number for each type (A=1.0,B=1.4)",
    "a text file with one diameter or 'id diameter' a line (@diameters.txt)",
)


@dataclass(frozen=True)
class InputOptions:
    """Where the input is and what the file does not say itself.

    Instances pickle, so a worker process can open the same input again.

    Parameters
    ----------
    topology : path
        The file that names the particles; alone it is also the trajectory.
    trajectory : path, optional
        The file with the frames.
    diameter : float, mapping of type name to float, or str, optional
        Hard-sphere diameters, instead of those in the file. A string takes
        the forms of the command line, see `DIAMETER_FORMS`.
    box : str or sequence of float, optional
        Lengths, three lengths and three angles in degrees, or row vectors,
        instead of the box in the file.
    dimensions : {2, 3}, optional
        Number of dimensions, instead of what the file says or shows.
    periodic : str, optional
        Periodic edges, such as ``"xyz"``, ``"xy"`` or ``"none"``.
    dt : float, optional
        Time of one simulation step.
    time_unit : str, optional
        Name of the time unit.

    Raises
    ------
    UsageError
        If an option cannot mean anything.
    """

    topology: Path
    trajectory: Path | None = None
    diameter: float | Mapping[str, float] | str | None = None
    box: str | Sequence[float] | Sequence[Sequence[float]] | None = None
    dimensions: int | None = None
    periodic: str | None = None
    dt: float | None = None
    time_unit: str | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "topology", Path(self.topology))
        if self.trajectory is not None:
            object.__setattr__(self, "trajectory", Path(self.trajectory))
        if self.dimensions not in {None, 2, 3}:
            raise UsageError(f"dimensions must be 2 or 3, got {self.dimensions}")
        if self.periodic is not None and self.periodic != "none":
            axes = set(self.periodic)
            if not axes or axes - set("xyz") or len(axes) != len(self.periodic):
                raise UsageError(
                    "periodic edges are named by letters out of 'xyz', or 'none'; "
                    f"got {self.periodic!r}"
                )
        if self.dt is not None and not (math.isfinite(self.dt) and self.dt > 0.0):
            raise UsageError(f"dt, the time of one step, must be > 0, got {self.dt}")
        parse_box(self.box)
        parse_diameter(self.diameter)


def parse_box(
    box: str | Sequence[float] | Sequence[Sequence[float]] | None,
) -> NDArray[np.float64] | None:
    """Turn a box option into numbers that `Box.from_any` understands.

    Returns
    -------
    numpy.ndarray or None
        (2,), (3,), (6,), (2, 2) or (3, 3) float64.

    Raises
    ------
    UsageError
        If the option is not made of such numbers.
    """
    if box is None:
        return None
    try:
        if isinstance(box, str):
            numbers = np.array([float(word) for word in box.split(",")])
        else:
            numbers = np.array(box, dtype=np.float64)
    except ValueError:
        numbers = np.array([math.nan])
    if numbers.shape == (9,):
        numbers = numbers.reshape(3, 3)
    elif numbers.shape == (4,):
        numbers = numbers.reshape(2, 2)
    if numbers.shape not in {(2,), (3,), (6,), (2, 2), (3, 3)} or not (
        np.isfinite(numbers).all()
    ):
        raise UsageError(
            "the box is given as 2 or 3 lengths (10,10,10), as three lengths and "
            "three angles in degrees (10,10,10,90,90,60), or as the 4 or 9 numbers "
            f"of its row vectors; got {box!r}"
        )
    return numbers


def parse_diameter(
    diameter: float | Mapping[str, float] | str | None,
) -> float | dict[str, float] | Path | None:
    """Turn a diameter option into a number, a number for each type, or a file.

    Raises
    ------
    UsageError
        If the option has none of the forms in `DIAMETER_FORMS`, or a number
        is not positive.
    """
    if diameter is None:
        return None
    if isinstance(diameter, Mapping):
        return {str(k): _positive(v, diameter) for k, v in diameter.items()}
    if not isinstance(diameter, str):
        return _positive(diameter, diameter)
    text = diameter.strip()
    if text.startswith("@") and len(text) > 1:
        return Path(text[1:]).expanduser()
    if "=" not in text:
        return _positive(text, diameter)
    by_type: dict[str, float] = {}
    for item in text.split(","):
        name, equals, value = (part.strip() for part in item.rpartition("="))
        if not equals or not name or name in by_type:
            raise _diameter_error(diameter)
        by_type[name] = _positive(value, diameter)
    return by_type


def _positive(value: float | str, whole: object) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        raise _diameter_error(whole) from None
    if not (math.isfinite(number) and number > 0.0):
        raise UsageError(f"diameters must be positive numbers, got {whole!r}")
    return number


def _diameter_error(whole: object) -> UsageError:
    return UsageError(
        f"cannot read {whole!r} as diameters; give " + ", or ".join(DIAMETER_FORMS)
    )
