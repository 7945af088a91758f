"""Named numpy arrays as bytes and back, without pickle.

Frame: magic, crc32 of the rest, number of arrays; then for each array the
lengths of name and body, the name in UTF-8 and the body in the ``.npy`` format.
"""

import io
import struct
import zlib
from collections.abc import Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from trajcage.errors import ResultFileError, UsageError

__all__ = ["pack_arrays", "unpack_arrays"]

_MAGIC = b"TCSTATE1"
_HEAD = struct.Struct("<8sII")
_ITEM = struct.Struct("<IQ")
_LARGE = 1 << 20  # bytes from which on an array is not copied


def pack_arrays(arrays: Mapping[str, NDArray[np.generic]]) -> list[memoryview]:
    """Serialize named arrays.

    Returns
    -------
    list of memoryview
        Bytes to be written one after the other; large arrays are not copied.

    Raises
    ------
    UsageError
        If an array holds Python objects.
    """
    parts: list[bytes] = []
    views: list[memoryview] = []
    for name, array in arrays.items():
        values = np.asarray(array, order="C")
        if values.dtype.hasobject:
            raise UsageError(f"state {name!r} holds Python objects, expected numbers")
        header = io.BytesIO()
        np.lib.format.write_array_header_1_0(
            header, np.lib.format.header_data_from_array_1_0(values)
        )
        key, start = name.encode(), header.getvalue()
        parts += [_ITEM.pack(len(key), len(start) + values.nbytes), key, start]
        body = values.reshape(-1).view(np.uint8).data
        if len(body) < _LARGE:
            parts.append(bytes(body))
        else:
            views += [memoryview(b"".join(parts)), body]
            parts = []
    views.append(memoryview(b"".join(parts)))
    checksum = 0
    for view in views:
        checksum = zlib.crc32(view, checksum)
    return [memoryview(_HEAD.pack(_MAGIC, checksum, len(arrays))), *views]


def unpack_arrays(data: bytes, path: Path) -> dict[str, NDArray[np.generic]]:
    """Read back what :func:`pack_arrays` wrote.

    Raises
    ------
    ResultFileError
        If the bytes are damaged.
    """
    try:
        magic, checksum, count = _HEAD.unpack_from(data)
        if magic != _MAGIC or zlib.crc32(data[_HEAD.size :]) != checksum:
            raise ResultFileError(f"{path}: the saved state of the run is damaged")
        arrays: dict[str, NDArray[np.generic]] = {}
        start = _HEAD.size
        for _ in range(count):
            key, body = _ITEM.unpack_from(data, start)
            start += _ITEM.size
            name = data[start : start + key].decode()
            start += key
            stream = io.BytesIO(data[start : start + body])
            arrays[name] = np.lib.format.read_array(stream, allow_pickle=False)
            start += body
    except (struct.error, ValueError) as error:
        raise ResultFileError(
            f"{path}: the saved state of the run is damaged"
        ) from error
    return arrays
