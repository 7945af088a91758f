"""The ordered loop of a run: fold, append, commit, and stop in good order."""

import logging
import time
from collections.abc import Callable

import numpy as np

from trajcage.errors import InterruptedRunError, ResultFileError, TrajcageError
from trajcage.run.fold import RunFold
from trajcage.run.frames import MeasuredFrame, MeasuredFrames
from trajcage.run.interruption import StopRequest
from trajcage.run.timing import Stages
from trajcage.store import ResultWriter

__all__ = ["Progress", "fold_frames"]

_LOGGER = logging.getLogger(__name__)

#: Called with the frames done and the frames of the whole run.
Progress = Callable[[int, int], None]

# Frames are committed when this much time has passed, or twenty times what the last
# commit took: slow frames one by one, fast ones in batches.
_COMMIT_EVERY = 0.5  # seconds
_COMMIT_SHARE = 20


def fold_frames(
    measured: MeasuredFrames,
    fold: RunFold,
    writer: ResultWriter,
    n_frames: int,
    stop: StopRequest,
    note: Callable[[str], None],
    progress: Progress | None,
) -> None:
    """Take measured frames in order until they end, fail or are told to stop.

    Whatever ends it, all frames taken so far are committed.

    Parameters
    ----------
    measured : generator of MeasuredFrame
        The frames that are missing in the file.
    fold : RunFold
        Restored to the frames that are there.
    writer : ResultWriter
        Open for appending.
    n_frames : int
        Frames of the whole run.
    stop : StopRequest
        Asked after every frame.
    note : callable
        Called with what the user should know.
    progress : callable or None
        See :data:`Progress`.

    Raises
    ------
    TrajcageError
        What went wrong at some frame.
    InterruptedRunError
        If a signal asked to stop.
    """
    overlapping, stages = 0, Stages()
    last, interval = time.monotonic(), _COMMIT_EVERY
    try:
        for frame in measured:
            stages.add(frame.seconds)
            with stages.timed("fold"):
                record, rows = fold.update(frame)
            with stages.timed("writing"):
                writer.append(record, rows)
            if frame.values["overlaps"]:
                overlapping += 1
                if overlapping == 1:
                    note(_overlap_note(frame))
            if progress is not None:
                progress(writer.frames_complete + writer.n_pending, n_frames)
            now = time.monotonic()
            if now - last >= interval:
                with stages.timed("writing"):
                    _commit(fold, writer)
                last = time.monotonic()
                interval = max(_COMMIT_EVERY, _COMMIT_SHARE * (last - now))
            if stop.signal is not None:
                break
    except TrajcageError as error:
        if writer.n_pending and not isinstance(error, ResultFileError):
            _commit(fold, writer)
        raise
    finally:
        measured.close()
    if overlapping > 1:
        note(f"{overlapping} frames have overlaps beyond the tolerance")
    if stop.signal is not None and fold.n_frames < n_frames:
        _commit(fold, writer)
        raise InterruptedRunError(
            f"stopped by {stop.signal} after {writer.frames_complete} of {n_frames} "
            f"frames, which are in {writer.path}; continue with --resume"
        )
    with stages.timed("writing"):
        arrays, summary = fold.conclude()
        writer.finish(arrays=arrays, summary=summary, state=fold.state())
    _LOGGER.info("time by stage, summed over workers: %s", stages)


def _commit(fold: RunFold, writer: ResultWriter) -> None:
    arrays, summary = fold.conclude()
    writer.flush(arrays=arrays, summary=summary, state=fold.state())


def _overlap_note(measured: MeasuredFrame) -> str:
    values, frame = measured.values, measured.frame
    first, second = np.asarray(values["deepest_overlap_ids"]).tolist()
    pairs = (
        "1 pair overlaps"
        if values["overlaps"] == 1
        else (f"{values['overlaps']} pairs overlap")
    )
    return (
        f"frame {frame.index}: {pairs} by more than {values['overlap_tolerance']:.3g}, "
        f"the deepest is that of particles {first} and {second} by "
        f"{values['deepest_overlap']:.3g}; {values['cages_overlap']} particles have no "
        "cage (status overlap)"
    )
