"""From the options of a run to an open trajectory and the frames wanted."""

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path

from trajcage.errors import UsageError
from trajcage.lattices import effective_diameter_wca
from trajcage.readers import InputOptions

__all__ = ["Diameter", "FrameSelection", "input_options"]

#: One diameter, one for each type, or a string in the forms of the command line.
Diameter = float | Mapping[str, float] | str

_WCA = "wca:"


def input_options(
    topology: str | Path,
    trajectory: str | Path | None = None,
    *,
    diameter: Diameter | None = None,
    box: str | Sequence[float] | Sequence[Sequence[float]] | None = None,
    dimensions: int | None = None,
    periodic: str | None = None,
    dt: float | None = None,
    time_unit: str | None = None,
) -> InputOptions:
    """Collect the options of an input; see :func:`trajcage.measure`.

    Raises
    ------
    UsageError
        If an option cannot mean anything.
    """
    if isinstance(diameter, str) and diameter.startswith(_WCA):
        diameter = _soft_diameter(diameter)
    return InputOptions(
        Path(topology),
        None if trajectory is None else Path(trajectory),
        diameter,
        box,
        dimensions,
        periodic,
        dt,
        time_unit,
    )


def _soft_diameter(text: str) -> float:
    """Barker-Henderson diameter of ``wca:EPSILON_OVER_KT``, in Lennard-Jones lengths."""
    try:
        strength = float(text.removeprefix(_WCA))
    except ValueError:
        raise UsageError(
            f"cannot read {text!r} as a diameter; expected wca:EPSILON_OVER_KT with the "
            "strength of the repulsion over the thermal energy, such as wca:40"
        ) from None
    return effective_diameter_wca(strength)


@dataclass(frozen=True)
class FrameSelection:
    """Which frames of a trajectory a run measures, as in a Python slice.

    Parameters
    ----------
    start, stop, step : int, optional
        First frame, frame to stop before, and stride; negative frames count from
        the end.

    Raises
    ------
    UsageError
        If the stride is not positive.
    """

    start: int | None = None
    stop: int | None = None
    step: int | None = None

    def __post_init__(self) -> None:
        if self.step is not None and self.step < 1:
            raise UsageError(f"the stride of frames must be 1 or more, got {self.step}")

    def of(self, n_frames: int) -> range:
        """Frame numbers in a trajectory of this length.

        Raises
        ------
        UsageError
            If none is left.
        """
        frames = range(*slice(self.start, self.stop, self.step).indices(n_frames))
        if len(frames) == 0:
            given = ", ".join(
                f"{k} {v}" for k, v in asdict(self).items() if v is not None
            )
            raise UsageError(
                f"no frame is selected by {given or 'all frames'}: "
                f"{f'frames go from 0 to {n_frames - 1}' if n_frames else 'there is none'}"
            )
        return frames
