"""One frame of a trajectory or of a result file, as the geometry takes it."""

from pathlib import Path
from typing import Any

import numpy as np

from trajcage.analysis.cages import CageOptions
from trajcage.errors import InputError, ResultFileError, UsageError
from trajcage.model import Frame
from trajcage.readers import open_trajectory
from trajcage.run.inputs import input_options
from trajcage.store import Result, open_result

__all__ = ["single_frame"]


def single_frame(
    topology: str | Path,
    trajectory: str | Path | None = None,
    *,
    frame: int = 0,
    reach: float | None = None,
    overlap_tolerance: float | None = None,
    **given: Any,
) -> tuple[Frame, CageOptions]:
    """Read one frame and say how its cages are measured.

    Parameters
    ----------
    topology, trajectory : path
        A result file with stored positions, or files as for
        :func:`trajcage.measure`.
    frame : int
        Number of the frame in the trajectory, counted from 0; also that of a result
        file, which need not hold all of them.
    reach, overlap_tolerance : float, length, optional
        As for :func:`trajcage.measure`; those of the run for a result file.
    given
        Other options of the input, as there; none of them for a result file.

    Raises
    ------
    InputError
        If the frame cannot be used or is not there.
    ResultFileError
        If the result file holds no positions.
    UsageError
        If an option makes no sense.
    """
    options = CageOptions(reach, overlap_tolerance)
    result = _result(topology) if trajectory is None else None
    if result is not None:
        with result:
            return _stored_frame(result, frame, options, given)
    with open_trajectory(input_options(topology, trajectory, **given)) as opened:
        return opened.frame(frame), options


def _result(path: str | Path) -> Result | None:
    """Open a result file, None if this is none (H5MD trajectories look alike)."""
    if not Path(path).is_file():
        return None
    with Path(path).open("rb") as stream:
        if stream.read(4) != b"\x89HDF":
            return None
    try:
        return open_result(path)
    except ResultFileError:
        return None


def _stored_frame(
    result: Result, frame: int, options: CageOptions, given: dict[str, Any]
) -> tuple[Frame, CageOptions]:
    for name, value in given.items():
        if value is not None:
            raise UsageError(
                f"{name} belongs to a trajectory; {result.path} is a result file, which "
                "knows it already"
            )
    if "position" not in result:
        raise ResultFileError(
            f"{result.path} holds no positions; measure again with --store-positions, "
            "or give the trajectory"
        )
    rows = np.flatnonzero(result.source_frames == frame)
    if len(rows) == 0:
        held = result.source_frames
        raise InputError(
            f"{result.path} does not hold frame {frame}; it has {len(held)} frames from "
            f"{held[0]} to {held[-1]}"
            if len(held)
            else f"{result.path} holds no frame yet"
        )
    row = int(rows[0])
    tolerance, reach = options.overlap_tolerance, options.reach
    if tolerance is None:
        tolerance = float(result["overlap_tolerance"][row])
    if reach is None:
        stored = result.parameters["options"]["cages.reach"]
        reach = None if stored is None else float(stored)
    radii = result.radii
    found = Frame(
        np.asarray(result["position"][row], np.float64),
        np.asarray(radii if radii.ndim == 1 else radii[row], np.float64),
        result.box(row),
        index=frame,
        step=int(result.steps[row]),
        time=float(result.times[row]),
        ids=result.ids,
        species=result.species,
    )
    return found, CageOptions(reach, tolerance)
