"""One writer at a time: a lock that the operating system drops with the process.

HDF5 gives its own file lock back as soon as readers are allowed beside the
writer, so the lock lives on a small hidden file beside the result. It tells a
running writer from one that was killed.
"""

import fcntl
import os
import time
from pathlib import Path

from trajcage.errors import ResultFileError

__all__ = ["WriterLock", "is_being_written"]

_PATIENCE = 0.5  # seconds; a reader that asks holds the lock for microseconds


def _lock_path(path: Path) -> Path:
    return path.with_name(f".{path.name}.lock")


def _locking_disabled() -> bool:
    """Whether the user turned locks off, by the variable that HDF5 obeys."""
    return os.environ.get("HDF5_USE_FILE_LOCKING", "").upper() in {"FALSE", "0"}


class WriterLock:
    """The right to write one result file, held until :meth:`release`.

    Raises
    ------
    ResultFileError
        If another process (or another writer here) holds it, or if the
        directory cannot be written.
    """

    def __init__(self, path: Path) -> None:
        self._path = _lock_path(path)
        self._handle: int | None = None
        if _locking_disabled():
            return
        deadline = time.monotonic() + _PATIENCE
        while self._handle is None:
            self._handle = self._try(path, last=time.monotonic() > deadline)

    def _try(self, path: Path, *, last: bool) -> int | None:
        try:
            handle = os.open(self._path, os.O_RDWR | os.O_CREAT, 0o666)
        except OSError as error:
            raise ResultFileError(
                f"cannot write to the directory of {path}: {error.strerror}"
            ) from error
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            # Another writer may have removed the file between open and lock.
            if os.fstat(handle).st_ino == self._path.stat().st_ino:
                return handle
        except FileNotFoundError:
            pass
        except BlockingIOError as error:
            if last:
                os.close(handle)
                raise ResultFileError(
                    f"{path} is being written by another process; wait for it or "
                    "choose another output file"
                ) from error
            time.sleep(0.01)
        except OSError as error:
            os.close(handle)
            raise ResultFileError(
                f"the file system of {path} cannot lock files ({error.strerror}); "
                "set HDF5_USE_FILE_LOCKING=FALSE if you are sure that only one "
                "process writes this file"
            ) from error
        os.close(handle)
        return None

    def release(self) -> None:
        """Give the lock back; harmless when called again."""
        if self._handle is not None:
            self._path.unlink(missing_ok=True)
            os.close(self._handle)
            self._handle = None


def is_being_written(path: Path) -> bool:
    """Whether a living process on this machine holds the writer lock.

    With locks turned off a flagged file counts as being written.
    """
    if _locking_disabled():
        return True
    try:
        handle = os.open(_lock_path(path), os.O_RDONLY)
    except OSError:
        return False
    try:
        fcntl.flock(handle, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except OSError:
        return True
    finally:
        os.close(handle)
    return False
