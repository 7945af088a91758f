"""Blocks of frames measured by an existing cluster of dask workers."""

import asyncio
from collections import deque
from dataclasses import replace
from pathlib import Path
from typing import Any

from trajcage.errors import FrameError, InputError, TrajcageError, UsageError
from trajcage.readers import InputOptions
from trajcage.run.blocks import Block, Crew, MeasuredBlock, measure_block, pack_job
from trajcage.run.settings import RunSettings

__all__ = ["Cluster"]

_PATIENCE = 30  # seconds, for the scheduler to answer and for a first worker


class Cluster(Crew):
    """Workers of a dask.distributed cluster that is already there.

    Blocks of a worker that is lost are measured again by others: dask sees to it, and
    gives up on a block that several workers in a row did not survive.

    Parameters
    ----------
    address : str, path or distributed.Client
        Address of the scheduler, its scheduler file, or a client, which is left open.
    options : InputOptions
        The input; the workers must find its files under the same absolute paths.
    settings : RunSettings
        What to measure.

    Raises
    ------
    UsageError
        If dask.distributed is not installed.
    TrajcageError
        If the scheduler does not answer or has no workers.
    """

    def __init__(
        self, address: object, options: InputOptions, settings: RunSettings
    ) -> None:
        try:
            import distributed
            from distributed.comm.core import CommClosedError
        except ImportError as error:
            raise UsageError(
                "a cluster needs dask.distributed; install it with "
                "'pip install trajcage[cluster]'"
            ) from error
        self._lost = (
            asyncio.CancelledError,  # how dask tells that the scheduler is gone
            distributed.CancelledError,
            CommClosedError,
        )
        self._killed = distributed.KilledWorker
        self._job = pack_job(_absolute(options), settings)
        self._waiting: deque[tuple[Block, Any]] = deque()
        self._own = not isinstance(address, distributed.Client)
        self._name = str(address)
        self._client: Any = address
        if self._own:
            self._client = _connect(distributed.Client, self._name)
        try:
            self._client.wait_for_workers(1, timeout=_PATIENCE)
        except TimeoutError as error:
            self.close()
            raise TrajcageError(
                f"the cluster at {self._name} has no workers; start some first"
            ) from error

    @property
    def n_threads(self) -> int:
        """Threads of all workers at this moment."""
        n_threads: dict[str, int] = self._client.nthreads()
        return max(1, sum(n_threads.values()))

    @property
    def capacity(self) -> int:
        """Two blocks for every thread."""
        return 2 * self.n_threads

    def __len__(self) -> int:
        return len(self._waiting)

    def add(self, block: Block) -> None:
        """Hand a block to the cluster."""
        # Blocks added first come out first, so they go first.
        future = self._client.submit(
            measure_block, self._job, list(block), pure=False, priority=-block[0]
        )
        self._waiting.append((block, future))

    def take(self) -> MeasuredBlock:
        """Wait for the block that was added first."""
        block, future = self._waiting.popleft()
        named = f"frames {block[0]} to {block[-1]}"
        try:
            frames, error = future.result()
        except self._killed as killed:
            raise TrajcageError(
                f"{named}: {killed.allowed_failures + 1} workers of the cluster in a row "
                "died while they measured these, most likely for lack of memory; all "
                "frames before are in the file: continue with --resume and larger "
                "workers"
            ) from killed
        except self._lost as lost:
            raise TrajcageError(
                f"{named}: the connection to the cluster at {self._name} was lost; all "
                "frames before are in the file: continue with --resume"
            ) from lost
        except ImportError as missing:
            raise TrajcageError(
                f"the workers of the cluster cannot import trajcage: {missing}; install "
                "the same version there"
            ) from missing
        finally:
            future.release()
        if isinstance(error, InputError) and not isinstance(error, FrameError):
            error = InputError(
                f"a worker of the cluster cannot use the input: {error}; workers must "
                "see the same files under the same paths"
            )
        return frames, error

    def close(self) -> None:
        """Drop what is on its way; leave a client of others open."""
        for _, future in self._waiting:
            future.cancel()
        self._waiting.clear()
        if self._own:
            self._client.close()


def _connect(client: Any, address: str) -> Any:
    try:
        if Path(address).is_file():
            return client(
                scheduler_file=address, timeout=_PATIENCE, set_as_default=False
            )
        return client(address, timeout=_PATIENCE, set_as_default=False)
    except (OSError, ValueError) as error:  # also of a malformed address
        raise TrajcageError(
            f"no dask scheduler answers at {address}; expected an address such as "
            f"tcp://host:8786, or a scheduler file: {error}"
        ) from error


def _absolute(options: InputOptions) -> InputOptions:
    """Paths that mean the same in another directory."""
    diameter, trajectory = options.diameter, options.trajectory
    if isinstance(diameter, str) and diameter.startswith("@"):
        diameter = f"@{Path(diameter[1:]).expanduser().absolute()}"
    return replace(
        options,
        topology=options.topology.absolute(),
        trajectory=None if trajectory is None else trajectory.absolute(),
        diameter=diameter,
    )
