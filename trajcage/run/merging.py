"""Parts of a trajectory, measured apart, become one result file.

What one frame yields is copied. What needs several frames in order cannot be put
together from parts: it is measured anew over all frames, whose positions come from the
trajectory, or from the parts if they hold them.
"""

from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import ExitStack
from dataclasses import replace
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis import fold as time_fold
from trajcage.analysis import regions
from trajcage.analysis.order import order_neighbors
from trajcage.errors import InputError, ResultFileError, UsageError
from trajcage.model import CageTable, CageWalls, Frame
from trajcage.neighborhood import tessellate
from trajcage.readers import InputOptions, Trajectory, open_trajectory
from trajcage.run.fold import RunFold
from trajcage.run.frames import MeasuredFrame, MeasuredFrames, bare
from trajcage.run.interruption import StopRequest
from trajcage.run.loop import Progress, fold_frames
from trajcage.run.output import create_writer
from trajcage.run.provenance import describe_inputs, under
from trajcage.run.settings import RunSettings
from trajcage.store import Result, open_result

__all__ = ["merge"]

_FRAMES = "frames."
# Options that may differ from part to part.
_FREE = (f"{_FRAMES}start", f"{_FRAMES}stop", "varying_radii")
# Fields of single frames that depend on other frames.
_REMADE = {f.name for f in (*time_fold.FIELDS, *regions.FIELDS)} | {"region_id"}


def merge(
    parts: Sequence[str | Path],
    *,
    output: str | Path,
    topology: str | Path | None = None,
    trajectory: str | Path | None = None,
    overwrite: bool = False,
    progress: Progress | None = None,
    notify: Callable[[str], None] | None = None,
    command_line: str | None = None,
) -> Result:
    """Merge result files of consecutive parts of one trajectory into one.

    The merged file equals that of one run over all frames, and can be resumed. If
    the trajectory is not there and the parts hold no positions, the families `time`
    and `regions` are left out.

    Parameters
    ----------
    parts : sequence of path
        Result files in any order, measured with the same options but for start and
        stop, without a gap between them.
    output : path
        The merged file.
    topology, trajectory : path, optional
        The input, if it is no longer where the parts say.
    overwrite, progress, notify, command_line
        As in :func:`trajcage.measure`.

    Returns
    -------
    Result
        The open merged file.

    Raises
    ------
    ResultFileError
        If the parts do not fit together, or the output is in the way.
    InputError
        If the trajectory is not the one that was measured.
    UsageError
        If there are no parts.
    InterruptedRunError
        If SIGINT or SIGTERM stopped it; merge again with ``overwrite``.
    """
    if not parts:
        raise UsageError("expected result files to merge, got none")
    target = Path(output)
    if target.exists() and not overwrite:
        raise ResultFileError(
            f"{target} exists; replace it with --overwrite, or choose another name"
        )
    if any(Path(part).resolve() == target.resolve() for part in parts):
        raise UsageError(f"{target} is one of the parts: choose another output")
    notes: list[str] = []

    def note(text: str) -> None:
        notes.append(text)
        if notify is not None:
            notify(text)

    with ExitStack() as stack:
        opened = [stack.enter_context(open_result(part)) for part in parts]
        opened.sort(
            key=lambda part: int(part.source_frames[0]) if len(part.steps) else -1
        )
        _check_parts(opened)
        options = _merged_options(opened)
        settings = RunSettings.recorded(options)
        source = _open_source(opened[0], options, topology, trajectory)
        if source is not None:
            stack.callback(source.close)
        elif "position" in opened[0]:
            note(
                "the trajectory is not there: positions are those stored in the parts, "
                "and particles are followed by their nearest images"
            )
        elif settings.has("time") or settings.has("regions"):
            settings = replace(settings, skip=(*settings.skip, "time", "regions"))
            options["skip"] = list(settings.skip)
            note(
                "the time analysis and the regions are left out: they need positions, "
                "but the trajectory is not there and the parts were measured without "
                "--store-positions"
            )
        first = _frame(opened[0], 0, source)
        fold = RunFold(settings, first, _inputs(options))
        record = {
            **opened[0].parameters,
            "options": options,
            "notes": [*opened[0].parameters["notes"], *notes],
            "merged": [str(part.path) for part in opened],
            "command_line": command_line or "library call",
        }
        time_unit = str(record["time_unit"])
        n_frames = sum(part.frames_complete for part in opened)
        measured = _stored_frames(opened, source, settings)
        stopping = stack.enter_context(StopRequest())
        writer = stack.enter_context(
            create_writer(
                target,
                settings,
                first,
                tuple(opened[0].type_names),
                time_unit,
                record,
                overwrite=overwrite,
            )
        )
        fold_frames(measured, fold, writer, n_frames, stopping, note, progress)
    return open_result(target)


def _check_parts(parts: Sequence[Result]) -> None:
    """Refuse parts that do not make one record."""
    first = parts[0]
    for part in parts:
        if part.frames_complete == 0:
            raise ResultFileError(f"{part.path} holds no frames")
        if not np.array_equal(part.ids, first.ids):
            raise ResultFileError(
                f"{part.path} and {first.path} hold other particles: expected the same "
                "ids in all parts"
            )
    expected = _fixed_options(first)
    for part in parts[1:]:
        found = _fixed_options(part)
        differ = [k for k in {*expected, *found} if expected.get(k) != found.get(k)]
        if differ:
            name = min(differ)
            raise ResultFileError(
                f"the parts were measured with other options: {name} is "
                f"{expected.get(name)} in {first.path} and {found.get(name)} in "
                f"{part.path}; measure them with the same options"
            )
    stride = int(first.parameters["options"][f"{_FRAMES}step"] or 1)
    for before, after in pairwise(parts):
        last, following = int(before.source_frames[-1]), int(after.source_frames[0])
        if following != last + stride:
            what = "a gap" if following > last + stride else "an overlap"
            raise ResultFileError(
                f"there is {what} between {before.path}, which ends with frame {last}, "
                f"and {after.path}, which starts with frame {following}; expected "
                f"frame {last + stride} there"
            )


def _fixed_options(part: Result) -> dict[str, Any]:
    options = dict(part.parameters["options"])
    return {k: v for k, v in options.items() if k not in _FREE}


def _merged_options(parts: Sequence[Result]) -> dict[str, Any]:
    """Options of one run over the frames of all parts."""
    options = dict(parts[0].parameters["options"])
    options[f"{_FRAMES}stop"] = parts[-1].parameters["options"][f"{_FRAMES}stop"]
    radii = parts[0].radii
    options["varying_radii"] = any(
        "radius" in part or not np.array_equal(part.radii, radii) for part in parts
    )
    return options


def _inputs(options: Mapping[str, Any]) -> list[dict[str, str | int]]:
    """Size and sha256 of each input file."""
    count = sum(name.endswith(".sha256") for name in options)
    return [under(f"inputs.{k}", options) for k in range(count)]


def _open_source(
    part: Result,
    options: Mapping[str, Any],
    topology: str | Path | None,
    trajectory: str | Path | None,
) -> Trajectory | None:
    """Open the trajectory that was measured, None if it is not there."""
    files = [Path(name) for name in part.parameters["input"]["files"]]
    if topology is not None:
        files = [Path(name) for name in (topology, trajectory) if name is not None]
    elif not all(path.exists() for path in files):
        return None
    diameter = under("diameter", options) or options.get("effective_diameter")
    source = InputOptions(
        files[0],
        files[1] if len(files) > 1 else None,
        diameter,
        options["box"],
        options["dimensions"],
        options["periodic"],
        options["dt"],
        options["time_unit"],
    )
    for file, expected in zip(describe_inputs(source), _inputs(options), strict=True):
        if file["sha256"] != expected["sha256"]:
            raise InputError(
                f"{file['name']} is not the file that the parts were measured from: "
                f"expected {expected['size']} bytes and sha256 "
                f"{str(expected['sha256'])[:12]}..., found {file['size']} bytes and "
                f"{str(file['sha256'])[:12]}...; give the right one with --topology "
                "and --trajectory, or move it away to merge without"
            )
    return open_trajectory(source)


def _stored_frames(
    parts: Sequence[Result], source: Trajectory | None, settings: RunSettings
) -> MeasuredFrames:
    for part in parts:
        walls = _walls(part) if settings.store_walls else None
        series = {name: part[name] for name in part.fields if name not in _REMADE}
        for row in range(part.frames_complete):
            frame = _frame(part, row, source)
            values: dict[str, Any] = {name: s[row] for name, s in series.items()}
            if settings.varying_radii:
                values["radius"] = frame.radii
            cages = CageTable(
                values["free_volume"],
                values["free_surface"],
                values["wall_sum"],
                values["cage_status"],
                values["bounding_neighbors"],
                values["weakest_window"],
                values["weakest_window_neighbors"].astype(np.int64),
                next(walls) if walls is not None else None,
            )
            bonds = None
            if settings.has("regions"):
                cells = tessellate(frame)
                bonds = bare(order_neighbors(frame, cells, settings.order)[0])
            yield MeasuredFrame(frame, cages, values, bonds)


def _frame(part: Result, row: int, source: Trajectory | None) -> Frame:
    """Return a frame of the trajectory, or as far as the part holds it."""
    index, step = int(part.source_frames[row]), int(part.steps[row])
    time, box = float(part.times[row]), part.box(row)
    if source is not None:
        frame = source.frame(index)
        same = (frame.step, frame.time) == (step, time)
        if not (same and np.array_equal(frame.box.vectors, box.vectors)):
            raise frame.error(
                f"expected step, time and box as in {part.path}, which was measured from "
                "this trajectory"
            )
        return frame
    radii = part.radii
    if "position" in part:
        positions = part["position"][row]
    else:  # nothing looks at them
        positions = np.zeros((part.n_particles, part.dimensions))
    return Frame(
        positions,
        radii if radii.ndim == 1 else radii[row],
        box,
        index,
        step,
        time,
        part.ids,
        part.species,
    )


def _walls(part: Result) -> Iterator[CageWalls]:
    """Walls of each frame, which the table holds as one row for each particle."""
    table = part.table("walls")
    n = part.n_particles
    offsets = table["neighbors_offsets"].astype(np.int64)
    none: NDArray[np.float64] = np.zeros((0, part.dimensions))
    for row in range(part.frames_complete):
        rows = offsets[n * row : n * (row + 1) + 1]
        patches = slice(rows[0], rows[-1])
        yield CageWalls(
            rows - rows[0],
            table["neighbors"][patches].astype(np.int64),
            table["areas"][patches].astype(np.float64),
            none,
        )
