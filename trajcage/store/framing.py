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


def pack_arrays(arrays: Mapping[str, NDArray[np.generic]]) -> bytes:
    """Serialize named arrays.

    Raises
    ------
    UsageError
        If an array holds Python objects.
    """
    out = io.BytesIO()
    out.write(b"\0" * _HEAD.size)
    for name, array in arrays.items():
        values = np.asarray(array)
        if values.dtype.hasobject:
            raise UsageError(f"state {name!r} holds Python objects, expected numbers")
        body = io.BytesIO()
        np.lib.format.write_array(body, values, allow_pickle=False)
        key = name.encode()
        out.write(_ITEM.pack(len(key), body.tell()))
        out.write(key)
        out.write(body.getbuffer())
    data = out.getbuffer()
    _HEAD.pack_into(data, 0, _MAGIC, zlib.crc32(data[_HEAD.size :]), len(arrays))
    return bytes(data)


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
