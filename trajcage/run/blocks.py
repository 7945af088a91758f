"""Blocks of frames: measured by other processes, taken home in order."""

import atexit
import pickle
import threading
import uuid
from abc import ABC, abstractmethod
from collections.abc import Iterable, Sequence

from trajcage.errors import TrajcageError
from trajcage.neighborhood import set_threads
from trajcage.readers import InputOptions, Trajectory, open_trajectory
from trajcage.run.frames import MeasuredFrame, MeasuredFrames, measure_frame
from trajcage.run.settings import RunSettings

__all__ = [
    "Block",
    "Crew",
    "MeasuredBlock",
    "cut",
    "in_order",
    "measure_block",
    "pack_job",
]

#: Frame numbers.
Block = Sequence[int]

#: Frames of a block up to the first error, and that error.
MeasuredBlock = tuple[list[MeasuredFrame], TrajcageError | None]

# The results of a block wait in memory, and a stopped run waits for the blocks that
# are being measured: blocks are long enough to be worth sending and no longer.
_LONGEST_BLOCK = 8  # frames
_LARGEST_BLOCK = 100_000  # particles of all its frames together

# What a worker process keeps open from one block to the next, by job.
_opened: dict[bytes, tuple[Trajectory, RunSettings]] = {}
_reading = threading.Lock()  # the threads of a worker share its files


def cut(indices: Block, n_workers: int, n_particles: int) -> list[Block]:
    """Cut frames into consecutive blocks, several for each worker if there are enough.

    Parameters
    ----------
    indices : sequence of int
        Frame numbers.
    n_workers : int
        How many blocks are measured at a time.
    n_particles : int
        Particles of a frame.
    """
    most = min(_LONGEST_BLOCK, _LARGEST_BLOCK // n_particles)
    length = max(1, min(most, len(indices) // (4 * n_workers)))
    return [indices[k : k + length] for k in range(0, len(indices), length)]


def pack_job(options: InputOptions, settings: RunSettings) -> bytes:
    """Pack all that a worker needs to know; no two jobs are equal."""
    return pickle.dumps((options, settings, uuid.uuid4()))


def measure_block(job: bytes, indices: Block) -> MeasuredBlock:
    """Measure frames in a worker process, which opens the input once.

    Parameters
    ----------
    job : bytes
        From :func:`pack_job`.
    indices : sequence of int
        Frame numbers.
    """
    frames: list[MeasuredFrame] = []
    try:
        for index in indices:
            with _reading:
                trajectory, settings = _open(job)
                frame = trajectory.frame(index)
            frames.append(measure_frame(frame, settings))
    except TrajcageError as error:
        return frames, error
    return frames, None


def _open(job: bytes) -> tuple[Trajectory, RunSettings]:
    if job not in _opened:
        _close()  # of a run before, in the long life of a worker of a cluster
        options, settings, _ = pickle.loads(job)
        set_threads(1)
        _opened[job] = open_trajectory(options), settings
    return _opened[job]


@atexit.register  # left to the end of the interpreter, files complain
def _close() -> None:
    while _opened:
        _opened.popitem()[1][0].close()


class Crew(ABC):
    """Workers that measure blocks; results come back in the order of :meth:`add`."""

    @property
    @abstractmethod
    def capacity(self) -> int:
        """How many blocks may be on their way, which bounds the memory they need."""

    @abstractmethod
    def __len__(self) -> int:
        """Return the number of blocks on their way."""

    @abstractmethod
    def add(self, block: Block) -> None:
        """Hand a block to the workers."""

    @abstractmethod
    def take(self) -> MeasuredBlock:
        """Wait for the block that was added first.

        Raises
        ------
        TrajcageError
            If it cannot be measured for a reason that lies outside its frames.
        """

    @abstractmethod
    def close(self) -> None:
        """Drop what is on its way and let the workers go."""


def in_order(crew: Crew, blocks: Iterable[Block]) -> MeasuredFrames:
    """Yield the frames of all blocks in order; close the crew at the end.

    Raises
    ------
    TrajcageError
        At the first frame that fails, after all frames before it came out.
    """
    try:
        for block in blocks:
            while len(crew) >= crew.capacity:
                yield from _unpack(crew.take())
            crew.add(block)
        while len(crew):
            yield from _unpack(crew.take())
    finally:
        crew.close()


def _unpack(block: MeasuredBlock) -> MeasuredFrames:
    frames, error = block
    yield from frames
    if error is not None:
        raise error
