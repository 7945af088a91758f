"""Every error a user can meet: one base class beside the matching builtin.

A message says what was expected, what came (frame, particle ids, value) and
what to do about it.
"""

__all__ = [
    "FrameError",
    "InputError",
    "InterruptedRunError",
    "ResultFileError",
    "TrajcageError",
    "UsageError",
]


class TrajcageError(Exception):
    """Base class of all errors that trajcage raises on purpose."""


class UsageError(TrajcageError, ValueError):
    """An option or argument that cannot mean anything (command line: exit code 2)."""


class InputError(TrajcageError, ValueError):
    """Input that cannot be analyzed as given: no radii, no box, unreadable file."""


class FrameError(InputError):
    """One frame of the input is unusable.

    Parameters
    ----------
    message : str
        What was expected, what came and what to do, without the frame's name.
    frame : int
        Index of the frame in the source trajectory, counted from 0.
    step : int or None
        Simulation step of the frame, if the format stores one.
    """

    def __init__(self, message: str, *, frame: int, step: int | None = None) -> None:
        where = f"frame {frame}" if step is None else f"frame {frame} (step {step})"
        super().__init__(f"{where}: {message}")
        self.message = message
        self.frame = frame
        self.step = step

    def __reduce__(self) -> tuple[object, ...]:
        """Keep the keyword arguments when a worker process sends the error home."""
        return _rebuild_frame_error, (type(self), self.message, self.frame, self.step)


class ResultFileError(TrajcageError, OSError):
    """A result file that is missing, damaged, foreign or in the way."""


class InterruptedRunError(TrajcageError, RuntimeError):
    """A run was stopped from outside; all finished frames are in the file."""


def _rebuild_frame_error(
    kind: type[FrameError], message: str, frame: int, step: int | None
) -> FrameError:
    return kind(message, frame=frame, step=step)
