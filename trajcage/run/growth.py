"""Continuing a run whose trajectory has grown meanwhile, and no other."""

import hashlib
from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.state import State
from trajcage.errors import FrameError, ResultFileError
from trajcage.model import Frame
from trajcage.readers import Trajectory
from trajcage.store import ResultWriter, open_result

__all__ = ["Trail", "accept_growth", "check_same_frames"]


class Trail:
    """Fingerprint of all frames of a run, in order."""

    def __init__(self) -> None:
        self._digest: NDArray[np.uint8] = np.zeros(32, dtype=np.uint8)

    def add(self, frame: Frame) -> None:
        """Append a frame."""
        clock = np.array([frame.index, frame.step, frame.time], dtype=np.float64)
        chain = hashlib.sha256(self._digest.tobytes())
        for part in (clock, frame.box.vectors, frame.positions, frame.radii):
            chain.update(np.asarray(part, dtype="<f8").tobytes())
        self._digest = np.frombuffer(chain.digest(), dtype=np.uint8)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Trail):
            return NotImplemented
        return np.array_equal(self._digest, other._digest)

    __hash__ = None  # type: ignore[assignment]  # it grows

    def state(self) -> State:
        """Everything needed to go on."""
        return {"digest": self._digest.copy()}

    def restore(self, state: Mapping[str, NDArray[np.generic]]) -> None:
        """Go on from what :meth:`state` returned."""
        self._digest = np.array(state["digest"], dtype=np.uint8)


def accept_growth(
    target: Path,
    options: Mapping[str, object],
    inputs: Sequence[Mapping[str, str | int]],
    trajectory: str,
) -> tuple[dict[str, object], bool]:
    """Compare the input files with those that a result file was made from.

    Parameters
    ----------
    target : Path
        The result file.
    options : mapping
        Options of this run, those of the input files among them.
    inputs : sequence of dict
        Name, size and sha256 of the input files.
    trajectory : str
        Name of the one that may have grown.

    Returns
    -------
    options : dict
        With the recorded description of a trajectory that has grown.
    grown : bool
        Whether it has.

    Raises
    ------
    ResultFileError
        If a file has changed in another way.
    """
    with open_result(target) as result:
        recorded = dict(result.parameters["options"])
    options, grown = dict(options), False
    for k, file in enumerate(inputs):
        names = f"inputs.{k}.size", f"inputs.{k}.sha256"
        if any(name not in recorded for name in names):
            continue  # other input options, which are named elsewhere
        size, digest = (recorded[name] for name in names)
        if (size, digest) == (file["size"], file["sha256"]):
            continue
        if file["name"] != trajectory or int(file["size"]) <= int(size):
            raise ResultFileError(
                f"cannot resume {target}: {file['name']} is not the file that it was "
                f"made from, which had {size} bytes and sha256 {digest[:12]}..., but has "
                f"{file['size']} bytes and sha256 {str(file['sha256'])[:12]}...; only a "
                "trajectory that has grown can be continued: restore the file, or write "
                "a new result"
            )
        grown = True
        options |= dict(zip(names, (size, digest), strict=True))
    return options, grown


def check_same_frames(
    trajectory: Trajectory,
    frames: Sequence[int],
    writer: ResultWriter,
    trail: Trail,
    *,
    grown: bool,
) -> None:
    """Make sure that the frames in a result file are those of the trajectory.

    Parameters
    ----------
    trajectory : Trajectory
        The open input.
    frames : sequence of int
        All frames of this run.
    writer : ResultWriter
        The open result file.
    trail : Trail
        Of the frames in it.
    grown : bool
        Whether the trajectory has changed, so that its frames are read again.

    Raises
    ------
    ResultFileError
        If they differ.
    """
    done = frames[: writer.frames_complete]
    if not len(done):
        return
    if writer.state is None:
        raise ResultFileError(
            f"cannot resume {writer.path}: it is salvaged, and the state of the time "
            f"analysis was lost; trajcage merge {writer.path} -o NEW makes a file from "
            "its frames that can be resumed"
        )
    if (len(done), done[-1]) != (writer.frames_complete, writer.last_source_frame):
        raise ResultFileError(
            f"cannot resume {writer.path}: its last frame is frame "
            f"{writer.last_source_frame} of the trajectory, but the frames chosen now "
            f"put frame {done[-1]} there; count start and stop from the first frame, "
            "since the trajectory grows at its end"
        )
    if not grown:
        return
    found = Trail()
    try:
        for index in done:
            found.add(trajectory.frame(index))
    except FrameError as error:
        raise _changed(writer) from error
    if found != trail:
        raise _changed(writer)


def _changed(writer: ResultWriter) -> ResultFileError:
    return ResultFileError(
        f"cannot resume {writer.path}: the trajectory has grown, but the "
        f"{writer.frames_complete} frames measured so far are no longer the same in it; "
        "restore the trajectory, or write a new result"
    )
