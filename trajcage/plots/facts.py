"""What all figures need to know of a result file."""

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import ResultFileError, UsageError
from trajcage.plots.style import Missing
from trajcage.store import Result
from trajcage.wording import with_error

__all__ = ["Facts"]


class Facts:
    """A result file with the scales of its figures.

    All figures show the same frames, those that the summary describes.

    Parameters
    ----------
    result : Result
        An open result file.
    frame : int, optional
        The frame of what shows one alone, as numbered in the trajectory; the last one
        unless given.

    Raises
    ------
    ResultFileError
        If the file has no summary yet.
    UsageError
        If there is no such frame.
    """

    def __init__(self, result: Result, frame: int | None = None) -> None:
        self.result = result
        self.summary: dict[str, Any] = result.summary
        if not self.summary:
            raise ResultFileError(
                f"{result.path} has {result.frames_complete} frames but no summary yet; "
                "let the run go on, or continue it with trajcage measure --resume"
            )
        self.parameters: dict[str, Any] = result.parameters
        self.dimensions = result.dimensions
        self.n_particles = result.n_particles
        self.n_frames = int(self.summary["n_frames"])
        self.diameter = float(self.summary["mean_diameter"])
        self.equal_radii = bool(self.summary["equal_radii"])
        self.time_unit = str(self.parameters["time_unit"])
        self.volume = "volume" if self.dimensions == 3 else "area"
        self.row = self.n_frames - 1 if frame is None else self._row(frame)

    def _row(self, frame: int) -> int:
        """Find a frame of the trajectory among those measured."""
        held = self.result.source_frames[: self.n_frames]
        found = np.flatnonzero(held == frame)
        if len(found) == 0:
            steps = np.unique(np.diff(held))
            told = (
                f"frames {held[0]} to {held[-1]}"
                if len(held) > 1
                else f"frame {held[0]}"
            )
            if len(steps) > 1:
                told += f", {len(held)} in all"
            elif len(steps) == 1 and steps[0] > 1:
                told += f" in steps of {steps[0]}"
            raise UsageError(
                f"{self.result.path} does not hold frame {frame}; choose among {told}"
            )
        return int(found[0])

    @property
    def radii(self) -> NDArray[np.float64]:
        """Radii of the first frame, (n,) float64, length."""
        radii = self.result.radii
        return radii if radii.ndim == 1 else radii[0]

    @property
    def equal_diameter(self) -> float:
        """Diameter of equal particles of the same packing, in mean diameters."""
        d = self.dimensions
        mean = float(np.mean(self.radii**d))
        return float(2.0 * mean ** (1.0 / d)) / self.diameter

    @property
    def times(self) -> NDArray[np.float64]:
        """Time of each frame, (T,) float64, time."""
        return self.result.times[: self.n_frames]

    def series(self, name: str) -> NDArray[np.float64]:
        """Return an observable of every frame, (T, ...) float64, as stored."""
        values = self.result.observable(name)[: self.n_frames]
        return np.asarray(values, dtype=np.float64)

    def array(self, name: str) -> NDArray[np.float64]:
        """Return an array beside the frames, as stored."""
        return np.asarray(self.result.array(name), dtype=np.float64)

    def mean(self, name: str) -> tuple[float, float]:
        """Return the mean of an observable and its error; NaN where undefined.

        Lengths are in mean diameters.
        """
        found = self.summary["observables"][name]
        return number_of(found["mean"]), number_of(found["error"])

    def mean_text(self, name: str) -> str:
        """Return the mean of an observable with its error, in mean diameters."""
        text = with_error(*self.mean(name))
        found = self.summary["observables"][name]
        lower = found["error"] and not found["converged"]
        return f"{text} (error a lower bound)" if lower else text

    def left_out(self) -> str:
        """Say how many particles have no closed cage, over all frames."""
        cages = self.summary["cages"]
        total = sum(cages.values())
        others = {name: n for name, n in cages.items() if n and name != "closed"}
        if not others:
            return f"All {total} cages are closed; none was left out."
        told = ", ".join(f"{n} {name}" for name, n in others.items())
        return f"Left out of {total} cages, not closed: {told}."

    def lacks(self, family: str, what: str) -> Missing | None:
        """Say why a family of quantities is not in the file, None if it is."""
        skipped = self.parameters["options"]["skip"]
        if family not in skipped:
            return None
        told = " ".join(f"--skip {name}" for name in skipped)
        return Missing(f"the file holds no {what}: it was measured with {told}")

    def caption(self, *sentences: str) -> str:
        """Put the sentences of a figure after what is true of all."""
        frames = f"{self.n_frames} frame{'s' if self.n_frames != 1 else ''}"
        head = (
            f"{self.result.path.name}: {self.n_particles} particles, {frames}, "
            f"mean diameter D = {self.diameter:.6g} in the input's unit of length."
        )
        if not self.result.complete:
            head += " THE RUN IS NOT COMPLETE."
        return " ".join([head, *(s for s in sentences if s)])

    @property
    def unit_of_time(self) -> str:
        """The unit behind a number, nothing if the input does not tell it."""
        return "" if self.time_unit == "time" else f" ({self.time_unit})"

    def time_label(self, what: str = "time") -> str:
        """Label an axis of time."""
        unit = self.time_unit.replace("$", r"\$")
        return f"{what} (in the input's unit)" if unit == "time" else f"{what} ({unit})"


def number_of(value: float | None) -> float:
    """Return a number of the summary, NaN for null."""
    return math.nan if value is None else float(value)
