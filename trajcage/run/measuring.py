"""The main job: from a trajectory to one result file."""

import contextlib
import logging
import os
from collections.abc import Callable, Collection, Sequence
from dataclasses import asdict, replace
from pathlib import Path

import numpy as np

from trajcage.analysis.cages import CageOptions, check_packing
from trajcage.analysis.contacts import ContactOptions
from trajcage.analysis.order import OrderOptions
from trajcage.analysis.regions import RegionOptions
from trajcage.analysis.time_options import TimeOptions
from trajcage.errors import FrameError, ResultFileError, UsageError
from trajcage.model import Frame
from trajcage.readers import InputDescription, Trajectory, open_trajectory
from trajcage.run.fold import RunFold
from trajcage.run.frames import MeasuredFrame, MeasuredFrames
from trajcage.run.growth import accept_growth, check_same_frames
from trajcage.run.inputs import Diameter, FrameSelection, input_options
from trajcage.run.interruption import StopRequest
from trajcage.run.loop import Progress, fold_frames
from trajcage.run.output import create_writer, resume_writer
from trajcage.run.provenance import describe_inputs, flat, parameters
from trajcage.run.settings import RunSettings
from trajcage.run.workers import measured_frames
from trajcage.store import Result, open_result

__all__ = ["measure"]

_LOGGER = logging.getLogger(__name__)


def measure(
    topology: str | Path,
    trajectory: str | Path | None = None,
    *,
    output: str | Path,
    diameter: Diameter | None = None,
    box: str | Sequence[float] | Sequence[Sequence[float]] | None = None,
    dimensions: int | None = None,
    periodic: str | None = None,
    dt: float | None = None,
    time_unit: str | None = None,
    start: int | None = None,
    stop: int | None = None,
    step: int | None = None,
    reach: float | None = None,
    overlap_tolerance: float | None = None,
    strict: bool = False,
    skip: Collection[str] = (),
    order: OrderOptions | None = None,
    contacts: ContactOptions | None = None,
    regions: RegionOptions | None = None,
    time_analysis: TimeOptions | None = None,
    workers: int = 1,
    dask: object = None,
    resume: bool = False,
    overwrite: bool = False,
    store_positions: bool = False,
    store_walls: bool = False,
    progress: Progress | None = None,
    notify: Callable[[str], None] | None = None,
    command_line: str | None = None,
) -> Result:
    """Measure every frame of a trajectory and write one result file.

    Parameters
    ----------
    topology, trajectory : path
        Any files that MDAnalysis reads; a single file can be both.
    output : path
        The result file.
    diameter : float, mapping of type name to float, or str, optional
        Hard-sphere diameters, instead of those in the input. Strings take the forms
        of the command line: ``"1.0"``, ``"A=1.0,B=1.4"``, ``"@file"``, or
        ``"wca:EPSILON_OVER_KT"`` for the effective diameter of a soft repulsion.
    box, dimensions, periodic
        Box, number of dimensions and periodic edges (``"xyz"``, ``"none"``), instead
        of those in the input.
    dt : float, optional
        Time of one simulation step.
    time_unit : str, optional
        Name of the time unit.
    start, stop, step : int, optional
        Frames to measure, as in a Python slice.
    reach : float, length, optional
        A cage that extends further than this is open; ten of the largest diameters
        unless given. With ``inf`` regions that wrap around the box are measured.
    overlap_tolerance : float, length, optional
        Overlaps up to this depth count as contacts. Unless given it follows from the
        resolution of the stored coordinates.
    strict : bool
        Whether a deeper overlap ends the run.
    skip : collection of str
        Families of quantities to leave out: cells, order, rattlers, regions, time.
    order, contacts, regions, time_analysis
        Settings of these parts.
    workers : int
        Processes; 0 for one on every core. Results do not depend on it. With more
        than one, call this under ``if __name__ == "__main__":``.
    dask : str, path or distributed.Client, optional
        An existing cluster that measures instead: the address of its scheduler, its
        scheduler file, or a client. Its workers must see the input under the same
        paths.
    resume : bool
        Whether to continue the file, if there is one. The trajectory may have grown
        meanwhile.
    overwrite : bool
        Whether to replace the file, if there is one.
    store_positions : bool
        Whether to store the positions too.
    store_walls : bool
        Whether to store by whom each particle is caged, with the wall areas.
    progress : callable, optional
        Called with the number of frames done and of all frames.
    notify : callable, optional
        Called with one line of text about anything the user should know.
    command_line : str, optional
        Recorded in the file.

    Returns
    -------
    Result
        The open result file.

    Raises
    ------
    InputError
        If the input cannot be used; frames before a bad one are in the file.
    UsageError
        If an option makes no sense.
    ResultFileError
        If the output is in the way, damaged, or does not fit when resumed.
    InterruptedRunError
        If SIGINT or SIGTERM stopped the run; finished frames are in the file.
    """
    if resume and overwrite:
        raise UsageError("resume continues a file and overwrite replaces it: give one")
    if workers < 0:
        raise UsageError(f"workers must be 0 (all cores) or more, got {workers}")
    if dask is not None and workers != 1:
        raise UsageError("with dask the cluster has its own workers: leave out workers")
    selection = FrameSelection(start, stop, step)
    source = input_options(
        topology,
        trajectory,
        diameter=diameter,
        box=box,
        dimensions=dimensions,
        periodic=periodic,
        dt=dt,
        time_unit=time_unit,
    )
    settings = RunSettings(
        skip=skip,
        store_positions=store_positions,
        store_walls=store_walls,
        cages=CageOptions(reach, overlap_tolerance, strict),
        order=order or OrderOptions(),
        contacts=contacts or ContactOptions(),
        regions=regions or RegionOptions(),
        time=time_analysis or TimeOptions(),
    )
    target = Path(output)
    resume = resume and target.exists()
    if target.exists() and not (resume or overwrite):
        raise ResultFileError(
            f"{target} exists; continue it with --resume, replace it with --overwrite, "
            "or choose another name"
        )
    notes: list[str] = []

    def note(text: str) -> None:
        notes.append(text)
        if notify is not None:
            notify(text)

    given = {
        "diameter": diameter,
        "effective_diameter": source.diameter,
        "box": box,
        "dimensions": dimensions,
        "periodic": periodic,
        "dt": dt,
        "time_unit": time_unit,
        "frames": asdict(selection),
    }
    with open_trajectory(source) as opened:
        frames = selection.of(opened.n_frames)
        first = opened.frame(frames[0])
        if _radii_vary(opened, first, frames[-1]):
            settings = replace(settings, varying_radii=True)
        description = opened.describe()
        _log_input(description, frames)
        for text in (*description.notes, check_packing(first)):
            if text:
                note(text)
        inputs = describe_inputs(source)
        _LOGGER.info("sha256 of the input taken")
        options = flat(
            {
                "inputs": [{k: file[k] for k in ("size", "sha256")} for file in inputs],
                **given,
                **asdict(settings),
            }
        )
        record = parameters(options, inputs, description, notes, command_line)
        fold = RunFold(settings, first, inputs)
        n_workers = workers or _usable_cores()
        _LOGGER.info("processes: %d", n_workers)
        measured = measured_frames(opened, frames, settings, n_workers, note, dask)
        if not resume:
            # a first frame that fails leaves no file, and an old one alone
            head = next(measured)
            _log_first(head)
            measured = _put_back(head, measured)
        with StopRequest() as stopping:
            if resume:
                trajectory_name = str(source.trajectory or source.topology)
                options, grown = accept_growth(target, options, inputs, trajectory_name)
                writer = resume_writer(target, settings, first, options)
            else:
                writer = create_writer(
                    target,
                    settings,
                    first,
                    opened.type_names,
                    opened.time_unit,
                    record,
                    overwrite=overwrite,
                )
            with writer:
                if resume:
                    if writer.state is not None:
                        fold.restore(writer.state)
                    check_same_frames(opened, frames, writer, fold.trail, grown=grown)
                    rest = frames[writer.frames_complete :]
                    measured = measured_frames(
                        opened, rest, settings, n_workers, note, dask
                    )
                fold_frames(
                    measured, fold, writer, len(frames), stopping, note, progress
                )
    return open_result(target)


def _usable_cores() -> int:
    """Cores that this process may use; all of the machine where that is not told."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def _put_back(first: MeasuredFrame, rest: MeasuredFrames) -> MeasuredFrames:
    yield first
    yield from rest


def _log_input(told: InputDescription, frames: range) -> None:
    for source in (
        told.dimensions_source,
        told.box_source,
        told.periodic_source,
        told.radii_source,
        told.time_source,
    ):
        _LOGGER.info("%s", source)
    _LOGGER.info("%d of %d frames chosen: %s", len(frames), told.n_frames, frames)


def _log_first(measured: MeasuredFrame) -> None:
    """Tell what was chosen for the first frame, and how long it took."""
    told = {
        name.replace("_", " "): measured.values[name]
        for name in ("overlap_tolerance", "contact_tolerance")
        if name in measured.values
    }
    _LOGGER.info("%s", ", ".join(f"{name} {x:.3g}" for name, x in told.items()))
    took = sum(measured.seconds.values())
    _LOGGER.info("first frame measured in %.3g s, compiling or loading included", took)


def _radii_vary(trajectory: Trajectory, first: Frame, last: int) -> bool:
    """Whether the radii of the last frame differ from those of the first."""
    with contextlib.suppress(FrameError):  # it has its say when its turn comes
        return not np.array_equal(trajectory.frame(last).radii, first.radii)
    return False
