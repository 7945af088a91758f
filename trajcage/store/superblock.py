"""The first 48 bytes of an HDF5 file, read and repaired as the format says.

A writer that is killed leaves two traces in the superblock: the flags that
say "open for writing", because of which HDF5 refuses to open the file again,
and an end-of-file address that may lie before data already written. Both are
mended here; nothing else in the file is touched. Layout and checksum: HDF5
File Format Specification, version 3.0, section II.A, "Superblock" version 3,
and its appendix on checksums (Bob Jenkins' lookup3, public domain, 2006).
"""

import os
import struct
from dataclasses import dataclass, replace
from pathlib import Path

from trajcage.errors import ResultFileError

__all__ = [
    "SIZE",
    "Superblock",
    "is_truncated",
    "lookup3",
    "read_superblock",
    "repair_superblock",
]

SIZE = 48  # with addresses of 8 bytes, as HDF5 writes on all current platforms
_SIGNATURE = b"\x89HDF\r\n\x1a\n"
_LAYOUT = struct.Struct("<8sBBBBQQQQ")
_OPEN_FOR_WRITING = 0x05  # bit 0: write access; bit 2: single writer, many readers
_MASK = 0xFFFFFFFF


@dataclass(frozen=True)
class Superblock:
    """Superblock of version 2 or 3; addresses in bytes."""

    version: int
    flags: int
    base: int
    extension: int
    end_of_file: int
    root: int

    @property
    def open_for_writing(self) -> bool:
        """Whether a writer has the file open, or died before closing it."""
        return bool(self.flags & _OPEN_FOR_WRITING)

    def is_closed(self, file_size: int) -> bool:
        """Whether HDF5 opens the file: no flags and nothing missing at its end."""
        return not self.flags & _OPEN_FOR_WRITING and (
            file_size >= self.base + self.end_of_file
        )

    def pack(self) -> bytes:
        """Return the 48 bytes, checksum included."""
        body = _LAYOUT.pack(
            _SIGNATURE,
            self.version,
            8,
            8,
            self.flags,
            self.base,
            self.extension,
            self.end_of_file,
            self.root,
        )
        return body + struct.pack("<I", lookup3(body))

    def closed(self, file_size: int) -> "Superblock":
        """Return the superblock of the same file properly closed.

        New data must go behind everything in the file, also behind what the
        writer had written but not yet entered in the superblock.
        """
        flags = self.flags & ~_OPEN_FOR_WRITING
        return replace(
            self, flags=flags, end_of_file=max(self.end_of_file, file_size - self.base)
        )


def read_superblock(path: Path) -> Superblock:
    """Read and verify the superblock of a result file.

    Raises
    ------
    ResultFileError
        If the file is missing, unreadable, not HDF5, of another superblock
        version than trajcage writes, or damaged in its first bytes.
    """
    try:
        with path.open("rb") as stream:
            data = stream.read(SIZE)
    except OSError as error:
        raise ResultFileError(f"cannot read {path}: {error.strerror}") from error
    if len(data) < SIZE or data[:8] != _SIGNATURE:
        found = "an empty file" if not data else f"a file that starts with {data[:8]!r}"
        raise ResultFileError(f"{path} is not an HDF5 file: found {found}")
    version, offsets, lengths = data[8:11]
    if version not in {2, 3} or (offsets, lengths) != (8, 8):
        raise ResultFileError(
            f"{path} is an HDF5 file but not one that trajcage wrote (superblock "
            f"version {version}, expected 3)"
        )
    if data[44:] != struct.pack("<I", lookup3(data[:44])):
        raise ResultFileError(
            f"{path} is damaged: the checksum of its first 48 bytes is wrong"
        )
    _, _, _, _, flags, base, extension, end, root = _LAYOUT.unpack_from(data)
    return Superblock(version, flags, base, extension, end, root)


def is_truncated(path: Path) -> bool:
    """Whether this is an HDF5 file that is shorter than its superblock says."""
    try:
        superblock = read_superblock(path)
    except ResultFileError:
        return False
    return path.stat().st_size < superblock.base + superblock.end_of_file


def repair_superblock(path: Path) -> bool:
    """Mark a killed file as closed; True if there was something to mend.

    The caller makes sure that nobody is writing to the file.

    Raises
    ------
    ResultFileError
        If the superblock is damaged or cannot be written.
    """
    old = read_superblock(path)
    try:
        size = path.stat().st_size
        if old.is_closed(size):
            return False
        new = old.closed(size)
        handle = os.open(path, os.O_RDWR)
        try:
            # Space that was given out but never written, as after a full disk.
            os.truncate(handle, new.base + new.end_of_file)
            os.pwrite(handle, new.pack(), 0)
            os.fsync(handle)
        finally:
            os.close(handle)
    except OSError as error:
        raise ResultFileError(f"cannot repair {path}: {error.strerror}") from error
    if read_superblock(path) != new:
        raise ResultFileError(f"{path} changed while it was being repaired")
    return True


def _rotate(x: int, k: int) -> int:
    return ((x << k) | (x >> (32 - k))) & _MASK


def lookup3(data: bytes) -> int:
    """Return Bob Jenkins' lookup3 hash (``hashlittle``), 32 bits."""
    x: int
    y: int
    z: int
    a = b = c = (0xDEADBEEF + len(data)) & _MASK
    if not data:
        return c
    whole = (len(data) - 1) // 12 * 12
    for start in range(0, whole, 12):
        x, y, z = struct.unpack_from("<III", data, start)
        a, b, c = (a + x) & _MASK, (b + y) & _MASK, (c + z) & _MASK
        a = ((a - c) & _MASK) ^ _rotate(c, 4)
        c = (c + b) & _MASK
        b = ((b - a) & _MASK) ^ _rotate(a, 6)
        a = (a + c) & _MASK
        c = ((c - b) & _MASK) ^ _rotate(b, 8)
        b = (b + a) & _MASK
        a = ((a - c) & _MASK) ^ _rotate(c, 16)
        c = (c + b) & _MASK
        b = ((b - a) & _MASK) ^ _rotate(a, 19)
        a = (a + c) & _MASK
        c = ((c - b) & _MASK) ^ _rotate(b, 4)
        b = (b + a) & _MASK
    x, y, z = struct.unpack("<III", data[whole:].ljust(12, b"\0"))
    a, b, c = (a + x) & _MASK, (b + y) & _MASK, (c + z) & _MASK
    c = ((c ^ b) - _rotate(b, 14)) & _MASK
    a = ((a ^ c) - _rotate(c, 11)) & _MASK
    b = ((b ^ a) - _rotate(a, 25)) & _MASK
    c = ((c ^ b) - _rotate(b, 16)) & _MASK
    a = ((a ^ c) - _rotate(c, 4)) & _MASK
    b = ((b ^ a) - _rotate(a, 14)) & _MASK
    return ((c ^ b) - _rotate(b, 24)) & _MASK
