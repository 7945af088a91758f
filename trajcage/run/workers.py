"""Measured frames in order, from this process or from several."""

import os
import signal
from collections import deque
from collections.abc import Iterator, Sequence
from concurrent.futures import Future, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from multiprocessing import get_context

from trajcage.errors import TrajcageError
from trajcage.neighborhood import set_threads
from trajcage.readers import InputOptions, Trajectory, open_trajectory
from trajcage.run.frames import MeasuredFrame, MeasuredFrames, measure_frame
from trajcage.run.settings import RunSettings

__all__ = ["measured_frames"]

_LONGEST_BLOCK = 8  # frames; the results of a block wait in memory

_THREAD_LIMITS = (
    "MKL_NUM_THREADS",
    "NUMBA_NUM_THREADS",
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
)

# Frames of a block up to the first error, and that error.
_Block = tuple[list[MeasuredFrame], TrajcageError | None]

# What a worker process opens once: its trajectory and its settings.
_opened: list[tuple[Trajectory, RunSettings]] = []


def measured_frames(
    trajectory: Trajectory,
    indices: Sequence[int],
    settings: RunSettings,
    n_workers: int,
) -> MeasuredFrames:
    """Measure frames and yield them in the order asked for.

    Parameters
    ----------
    trajectory : Trajectory
        The open input.
    indices : sequence of int
        Frame numbers.
    settings : RunSettings
        What to measure.
    n_workers : int
        Processes. The frames that come out do not depend on it.

    Raises
    ------
    TrajcageError
        At the first frame that fails, after all frames before it came out.
    """
    if n_workers == 1 or len(indices) < 3:
        yield from _measure(trajectory, indices, settings)
        return
    # The first frame is measured here, so that mistakes show before processes
    # start, and the kernels are compiled once.
    yield from _measure(trajectory, indices[:1], settings)
    yield from _from_pool(trajectory.options, indices[1:], settings, n_workers)


def _measure(
    trajectory: Trajectory, indices: Sequence[int], settings: RunSettings
) -> MeasuredFrames:
    for index in indices:
        yield measure_frame(trajectory.frame(index), settings)


def _from_pool(
    options: InputOptions,
    indices: Sequence[int],
    settings: RunSettings,
    n_workers: int,
) -> MeasuredFrames:
    n_workers = min(n_workers, len(indices))
    length = max(1, min(_LONGEST_BLOCK, len(indices) // (4 * n_workers)))
    blocks = [indices[k : k + length] for k in range(0, len(indices), length)]
    waiting: deque[tuple[Sequence[int], Future[_Block]]] = deque()
    with _one_thread_each():
        pool = ProcessPoolExecutor(
            n_workers, get_context("spawn"), _open, (options, settings)
        )
        try:
            for block in [*blocks, *[None] * (2 * n_workers)]:
                if block is not None:
                    waiting.append((block, pool.submit(_measure_block, block)))
                if waiting and (block is None or len(waiting) >= 2 * n_workers):
                    yield from _finished(*waiting.popleft())
        finally:
            pool.shutdown(wait=True, cancel_futures=True)


def _finished(block: Sequence[int], future: "Future[_Block]") -> MeasuredFrames:
    try:
        frames, error = future.result()
    except BrokenProcessPool as broken:
        raise TrajcageError(
            f"a worker process died, probably at one of the frames {block[0]} to "
            f"{block[-1]} and for lack of memory; all frames before are in the file: "
            "continue with --resume and fewer --workers"
        ) from broken
    yield from frames
    if error is not None:
        raise error


def _open(options: InputOptions, settings: RunSettings) -> None:
    """Prepare a worker: the parent alone decides when to stop."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    set_threads(1)
    _opened.append((open_trajectory(options), settings))


def _measure_block(indices: Sequence[int]) -> _Block:
    trajectory, settings = _opened[0]
    frames: list[MeasuredFrame] = []
    try:
        frames.extend(_measure(trajectory, indices, settings))
    except TrajcageError as error:
        return frames, error
    return frames, None


@contextmanager
def _one_thread_each() -> Iterator[None]:
    """Limit the threads of libraries in processes started meanwhile."""
    before = {name: os.environ.get(name) for name in _THREAD_LIMITS}
    os.environ.update(dict.fromkeys(_THREAD_LIMITS, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value
