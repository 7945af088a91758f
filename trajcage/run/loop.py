"""The ordered loop of a run: fold, append, commit, and stop in good order."""

import time
from collections.abc import Callable, Iterator

from trajcage.errors import InterruptedRunError, TrajcageError
from trajcage.run.fold import RunFold
from trajcage.run.frames import MeasuredFrame
from trajcage.run.interruption import StopRequest
from trajcage.store import ResultWriter

__all__ = ["Progress", "fold_frames"]

#: Called with the frames done and the frames of the whole run.
Progress = Callable[[int, int], None]

# Frames are committed when this much time has passed, or twenty times what the last
# commit took: slow frames one by one, fast ones in batches.
_COMMIT_EVERY = 0.5  # seconds
_COMMIT_SHARE = 20


def fold_frames(
    measured: Iterator[MeasuredFrame],
    fold: RunFold,
    writer: ResultWriter,
    n_frames: int,
    note: Callable[[str], None],
    progress: Progress | None,
) -> None:
    """Take measured frames in order until they end, fail or are told to stop.

    Whatever ends it, all frames taken so far are committed.

    Parameters
    ----------
    measured : iterator of MeasuredFrame
        The frames that are missing in the file.
    fold : RunFold
        Restored to the frames that are there.
    writer : ResultWriter
        Open for appending.
    n_frames : int
        Frames of the whole run.
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
    overlapping = 0
    last, interval = time.monotonic(), _COMMIT_EVERY
    with StopRequest() as stop:
        try:
            for frame in measured:
                record, rows = fold.update(frame)
                writer.append(record, rows)
                if frame.values["overlaps"]:
                    overlapping += 1
                    if overlapping == 1:
                        note(_overlap_note(frame))
                if progress is not None:
                    progress(writer.frames_complete + writer.n_pending, n_frames)
                now = time.monotonic()
                if now - last >= interval:
                    _commit(fold, writer)
                    last = time.monotonic()
                    interval = max(_COMMIT_EVERY, _COMMIT_SHARE * (last - now))
                if stop.signal is not None:
                    break
        except TrajcageError:
            if writer.n_pending:
                _commit(fold, writer)
            raise
        finally:
            close = getattr(measured, "close", None)
            if close is not None:
                close()
        if overlapping > 1:
            note(f"{overlapping} frames have overlaps beyond the tolerance")
        if stop.signal is not None and writer.frames_complete + writer.n_pending < (
            n_frames
        ):
            _commit(fold, writer)
            raise InterruptedRunError(
                f"stopped by {stop.signal} after {writer.frames_complete} of {n_frames} "
                f"frames, which are in {writer.path}; continue with --resume"
            )
        arrays, summary = fold.conclude()
        writer.finish(arrays=arrays, summary=summary, state=fold.state())


def _commit(fold: RunFold, writer: ResultWriter) -> None:
    arrays, summary = fold.conclude()
    writer.flush(arrays=arrays, summary=summary, state=fold.state())


def _overlap_note(measured: MeasuredFrame) -> str:
    values, frame = measured.values, measured.frame
    first, second = (int(i) for i in values["deepest_overlap_ids"])  # type: ignore[union-attr]
    depth, tolerance = values["deepest_overlap"], values["overlap_tolerance"]
    return (
        f"frame {frame.index}: {values['overlaps']} pairs overlap by more than "
        f"{tolerance:.3g}, the deepest is particles {first} and {second} by {depth:.3g}; "
        f"{values['cages_overlap']} particles have no cage (status overlap)"
    )
