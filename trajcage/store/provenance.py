"""Where data came from: size, time and checksum of input files."""

import hashlib
from datetime import UTC, datetime
from pathlib import Path

from trajcage.errors import InputError

__all__ = ["describe_file"]


def describe_file(path: str | Path) -> dict[str, str | int]:
    """Describe a file so that it can be recognized later.

    Parameters
    ----------
    path : str or Path
        The file.

    Returns
    -------
    dict
        ``name`` (as given), ``size`` in bytes, ``modified`` (UTC, ISO 8601)
        and ``sha256``.

    Raises
    ------
    InputError
        If the file cannot be read.
    """
    try:
        with Path(path).open("rb") as stream:
            digest = hashlib.file_digest(stream, "sha256").hexdigest()
        stat = Path(path).stat()
    except OSError as error:
        raise InputError(f"cannot read {path}: {error.strerror}") from error
    return {
        "name": str(path),
        "size": stat.st_size,
        "modified": datetime.fromtimestamp(stat.st_mtime, UTC).isoformat(),
        "sha256": digest,
    }
