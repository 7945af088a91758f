"""One clear error instead of the many that the HDF5 library raises."""

import os
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from trajcage.errors import ResultFileError, TrajcageError

__all__ = ["guard"]

_FROM_BELOW = (
    AttributeError,
    IndexError,
    KeyError,
    MemoryError,
    OSError,
    OverflowError,
    RuntimeError,
    TypeError,
    ValueError,
    zlib.error,
)


@contextmanager
def guard(path: Path, task: str) -> Iterator[None]:
    """Turn errors of the HDF5 library into a ResultFileError.

    Raises
    ------
    ResultFileError
        Names the file, the task and the cause.
    """
    try:
        yield
    except TrajcageError:
        raise
    except _FROM_BELOW as error:
        lines = str(error).strip().splitlines() or [type(error).__name__]
        reason = lines[0]
        if isinstance(error, OSError) and error.errno:  # clearer than HDF5's own words
            reason = os.strerror(error.errno)
        raise ResultFileError(f"{path}: {task} failed: {reason}") from error
