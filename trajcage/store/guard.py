"""One clear error instead of the many that the HDF5 library raises."""

import os
import re
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
        text = str(error).strip()
        reason = (text.splitlines() or [type(error).__name__])[0]
        number = error.errno if isinstance(error, OSError) else None
        if not number and (told := re.search(r"errno = (\d+)", text)):
            number = int(told[1])  # in the middle of HDF5's own words
        if number:
            reason = os.strerror(number)
        raise ResultFileError(f"{path}: {task} failed: {reason}") from error
