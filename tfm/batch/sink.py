"""A file under HDF5 that never fails in HDF5's face.

HDF5 does not survive a disk that fills up: a failed write leaves it unable to close the file, and the process may crash
later. So HDF5 writes through this object, which keeps the first error to itself, pretends from then on that writing
works, and hands the error out when asked.
"""

from __future__ import annotations

import io
import os
from pathlib import Path

__all__ = ["PatientFile"]


class PatientFile(io.RawIOBase):
    """A binary file opened for reading and writing; :meth:`check` raises the first error of the disk.

    Parameters
    ----------
    path
        File to create.
    """

    def __init__(self, path: Path) -> None:
        super().__init__()
        self.failure: OSError | None = None
        self._descriptor = -1
        self._descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_TRUNC | getattr(os, "O_CLOEXEC", 0), 0o666)
        self._place = 0
        self._size = 0

    def check(self) -> None:
        """Raise the first error, if there was one."""
        if self.failure is not None:
            raise self.failure

    def readable(self) -> bool:
        """True."""
        return True

    def writable(self) -> bool:
        """True."""
        return True

    def seekable(self) -> bool:
        """True."""
        return True

    def tell(self) -> int:
        """Position in bytes."""
        return self._place

    def seek(self, offset: int, whence: int = os.SEEK_SET) -> int:
        """Move to a position, which may lie beyond the end."""
        start = {os.SEEK_SET: 0, os.SEEK_CUR: self._place, os.SEEK_END: self._size}[whence]
        self._place = start + offset
        return self._place

    def readinto(self, buffer: object) -> int:
        """Read what is there; beyond the end, and after a failure, the rest reads as zeros."""
        view = memoryview(buffer).cast("B")  # type: ignore[arg-type]
        data = b""
        if self.failure is None:
            try:
                data = os.pread(self._descriptor, len(view), self._place)
            except OSError as error:
                self.failure = error
        count = min(len(view), max(self._size - self._place, 0))
        view[: len(data)] = data
        view[len(data) : count] = bytes(max(count - len(data), 0))
        self._place += max(count, len(data))
        return max(count, len(data))

    def write(self, buffer: object) -> int:
        """Write all of it, or remember why not."""
        view = memoryview(buffer).cast("B")  # type: ignore[arg-type]
        if self.failure is None:
            try:
                done = 0
                while done < len(view):
                    done += os.pwrite(self._descriptor, view[done:], self._place + done)
            except OSError as error:
                self.failure = error
        self._place += len(view)
        self._size = max(self._size, self._place)
        return len(view)

    def truncate(self, size: int | None = None) -> int:
        """Set the size."""
        size = self._place if size is None else size
        if self.failure is None:
            try:
                os.ftruncate(self._descriptor, size)
            except OSError as error:
                self.failure = error
        self._size = size
        return size

    def close(self) -> None:
        """Close the file."""
        if not self.closed and self._descriptor >= 0:
            try:
                os.close(self._descriptor)
            except OSError as error:
                self.failure = self.failure or error
        super().close()
