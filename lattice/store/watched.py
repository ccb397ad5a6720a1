"""A file for HDF5 to write to that never fails under it, but remembers that it did.

HDF5 1.10 leaves its own structures broken when a write fails, and then crashes the process while closing
the file. Here a failed write is remembered and reported as done; whoever opened the file asks afterwards.
"""

from __future__ import annotations

import io
import os

import numpy as np

HOLE_BYTES = 4096
"""All-zero writes from this size on are left as holes; `reserve` fills them in with real blocks."""


class WatchedFile:
    """The Python file object that h5py's `fileobj` driver works on.

    Parameters
    ----------
    path : path-like
        The file.
    mode : str
        "w+b" for a new file, "r+b" for one that exists.

    Attributes
    ----------
    error : OSError or None
        The first failure of any operation.
    """

    def __init__(self, path: str | os.PathLike[str], mode: str) -> None:
        self._raw = io.FileIO(path, mode)
        self._skips_zeros = mode == "w+b"
        self.error: OSError | None = None

    def write(self, content: bytes | memoryview) -> int:
        """Write all of `content` at the current position."""
        view = memoryview(content).cast("B")
        try:
            if self._skips_zeros and len(view) >= HOLE_BYTES and not np.frombuffer(view, np.uint8).any():
                self._raw.seek(len(view), os.SEEK_CUR)
            else:
                self._write_all(view)
        except OSError as error:
            self.error = self.error or error
        return len(view)

    def _write_all(self, view: memoryview) -> None:
        while view:
            view = view[self._raw.write(view) :]

    def read(self, size: int) -> bytes:
        """Return `size` bytes from the current position."""
        content = bytearray(size)
        self.readinto(content)
        return bytes(content)

    def readinto(self, buffer: bytearray | memoryview) -> int:
        """Fill `buffer` from the current position, with zeros where the file has nothing."""
        view = memoryview(buffer).cast("B")
        try:
            count = self._raw.readinto(view) or 0
        except OSError as error:
            self.error, count = self.error or error, 0
        view[count:] = bytes(len(view) - count)
        return len(view)

    def seek(self, offset: int, whence: int = os.SEEK_SET) -> int:
        """Move to a position and return it."""
        return self._raw.seek(offset, whence)

    def tell(self) -> int:
        """Return the current position."""
        return self._raw.tell()

    def truncate(self, size: int | None = None) -> int:
        """Set the file's length."""
        length = self._raw.tell() if size is None else size
        try:
            self._raw.truncate(length)
        except OSError as error:
            self.error = self.error or error
        return length

    def flush(self) -> None:
        """Do nothing: writes are not buffered here."""

    def close(self) -> None:
        """Close the file."""
        try:
            self._raw.close()
        except OSError as error:
            self.error = self.error or error
