"""Measured frames in order: from this process, from several, or from a cluster."""

import os
import signal
import threading
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import closing, contextmanager
from multiprocessing import get_context, parent_process

from trajcage.errors import TrajcageError
from trajcage.readers import Trajectory
from trajcage.run.blocks import (
    Block,
    Crew,
    MeasuredBlock,
    cut,
    in_order,
    measure_block,
    pack_job,
)
from trajcage.run.frames import MeasuredFrames, measure_frame
from trajcage.run.settings import RunSettings

__all__ = ["affordable", "measured_frames"]

_THREAD_LIMITS = (
    "MKL_NUM_THREADS",
    "NUMBA_NUM_THREADS",
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
)

# Memory that a run may use for each of its workers, and what it needs, measured with
# scripts/bench_memory.py: libraries and code of a process, and for every particle of a
# frame what measuring (freud's tessellation) and what the time analysis with its state
# and the frames on their way take.
_PER_WORKER = 2 * 2**30  # bytes
_PER_PROCESS = 300_000_000
_MEASURING = 2500
_FOLDING = 3000

_BlockFuture = Future[MeasuredBlock]


def measured_frames(
    trajectory: Trajectory,
    indices: Sequence[int],
    settings: RunSettings,
    n_workers: int,
    note: Callable[[str], None],
    cluster: object = None,
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
    note : callable
        Called with what the user should know.
    cluster : str, path or distributed.Client, optional
        See :class:`trajcage.run.cluster.Cluster`; in place of processes here.

    Raises
    ------
    TrajcageError
        At the first frame that fails, after all frames before it came out.
    """
    if len(indices) < 3 or (n_workers == 1 and cluster is None):
        yield from _measure(trajectory, indices, settings)
        return
    if cluster is None:
        fitting = affordable(n_workers, trajectory.n_particles)
        if fitting < n_workers:
            note(
                f"{fitting} instead of {n_workers} processes measure frames of "
                f"{trajectory.n_particles:,} particles, to stay within "
                f"{n_workers * _PER_WORKER / 2**30:.0f} GiB of memory"
            )
        if fitting == 1:
            yield from _measure(trajectory, indices, settings)
            return
        n_workers = fitting
    # The first frame is measured here, so that mistakes show before processes
    # start, and the kernels are compiled once.
    first, rest, n = indices[:1], indices[1:], trajectory.n_particles
    if cluster is None:
        yield from _measure(trajectory, first, settings)
        job = pack_job(trajectory.options, settings)
        n_workers = min(n_workers, len(rest))
        yield from in_order(_Pool(job, n_workers, note), cut(rest, n_workers, n))
        return
    from trajcage.run.cluster import Cluster  # dask is optional

    crew = Cluster(cluster, trajectory.options, settings)  # a wrong address shows now
    with closing(crew):
        yield from _measure(trajectory, first, settings)
        yield from in_order(crew, cut(rest, crew.n_threads, n))


def affordable(n_workers: int, n_particles: int) -> int:
    """Return how many processes fit into 2 GiB of memory for each worker asked for.

    Parameters
    ----------
    n_workers : int
        Workers asked for.
    n_particles : int
        Particles of a frame.

    Returns
    -------
    int
        At least 1; the parent itself then measures and folds in turn.
    """
    left = n_workers * _PER_WORKER - _PER_PROCESS - _FOLDING * n_particles
    fitting = int(left // (_PER_PROCESS + _MEASURING * n_particles))
    return max(1, min(n_workers, fitting))


def _measure(
    trajectory: Trajectory, indices: Sequence[int], settings: RunSettings
) -> MeasuredFrames:
    for index in indices:
        yield measure_frame(trajectory.frame(index), settings)


class _Pool(Crew):
    """Processes on this machine, replaced when one of them dies.

    When one dies, nobody knows at which of the blocks on their way. The first of
    these is then measured frame by frame in a process of its own; the others start
    again. A frame that ends a process alone, too, is the guilty one.
    """

    def __init__(self, job: bytes, n_workers: int, note: Callable[[str], None]) -> None:
        self._job = job
        self._n_workers = n_workers
        self._note = note
        self._waiting: deque[tuple[Block, _BlockFuture]] = deque()
        self._executor = _executor(n_workers)

    @property
    def capacity(self) -> int:
        return 2 * self._n_workers

    def __len__(self) -> int:
        return len(self._waiting)

    def add(self, block: Block) -> None:
        self._waiting.append((block, self._submit(self._executor, block)))

    def take(self) -> MeasuredBlock:
        block, future = self._waiting.popleft()
        try:
            return future.result()
        except BrokenProcessPool:
            _shut(self._executor)
        self._note(
            f"a worker process died, maybe for lack of memory; frames {block[0]} to "
            f"{block[-1]} are measured again one by one, then the run goes on"
        )
        found = self._one_by_one(block)
        if found[1] is not None:
            return found  # which ends the run
        self._executor = _executor(self._n_workers)
        for _ in range(len(self._waiting)):
            other, future = self._waiting.popleft()
            if future.cancelled() or future.exception() is not None:
                future = self._submit(self._executor, other)
            self._waiting.append((other, future))
        return found

    def close(self) -> None:
        self._waiting.clear()
        _shut(self._executor)

    def _one_by_one(self, block: Block) -> MeasuredBlock:
        executor = _executor(1)
        frames = []
        try:
            for index in block:
                found, error = self._submit(executor, [index]).result()
                frames += found
                if error is not None:
                    return frames, error
        except BrokenProcessPool as broken:
            culprit = TrajcageError(
                f"frame {index}: the worker process that measures it died, also when "
                "alone, most likely for lack of memory; all frames before it are in "
                "the file: continue with --resume on a machine with more memory, or "
                "leave the frame out"
            )
            culprit.__cause__ = broken
            return frames, culprit
        finally:
            _shut(executor)
        return frames, None

    def _submit(self, executor: ProcessPoolExecutor, block: Block) -> _BlockFuture:
        with _one_thread_each():  # the first block starts the processes
            try:
                return executor.submit(measure_block, self._job, block)
            except BrokenProcessPool as broken:
                failed: _BlockFuture = Future()
                failed.set_exception(broken)
                return failed


def _executor(n_workers: int) -> ProcessPoolExecutor:
    return ProcessPoolExecutor(n_workers, get_context("spawn"), _follow_parent)


def _follow_parent() -> None:
    """Leave it to the parent when to stop, but do not outlive it if it is killed."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    threading.Thread(target=_end_with_parent, daemon=True).start()


def _end_with_parent() -> None:
    parent = parent_process()
    if parent is not None:
        parent.join()
        os._exit(1)


def _shut(executor: ProcessPoolExecutor) -> None:
    executor.shutdown(wait=True, cancel_futures=True)


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
