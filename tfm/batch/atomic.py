"""Files that are whole or not there: written beside their place, read back, pushed to the disk, then renamed.

A process that is killed at any moment leaves the old file, the new file, or a temporary file that the next run removes;
never a part under the final name.
"""

from __future__ import annotations

import errno
import fcntl
import hashlib
import os
import socket
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from tfm.errors import TfmError

__all__ = [
    "LOCK_NAME",
    "StorageError",
    "atomic_file",
    "file_sha256",
    "folder_lock",
    "remove_leftovers",
    "storage_guard",
    "write_text",
]

#: The lock file of a results folder; it is there before any table, so it also marks the folder as ours.
LOCK_NAME = ".tfm-lock"
_TEMPORARY = ".tfm-tmp-"
_CHUNK = 1 << 20
#: Seconds after which a temporary file of another machine counts as abandoned.
_ABANDONED = 86400.0
_DISK = {
    errno.ENOSPC: "the disk is full",
    errno.EDQUOT: "the disk quota is used up",
    errno.EROFS: "the disk is read-only",
    errno.EACCES: "writing is not permitted",
    errno.EPERM: "writing is not permitted",
    errno.EIO: "the disk reports an error",
    errno.EFBIG: "the file would be larger than this disk allows",
    errno.ENOTDIR: "a part of the path is not a folder",
    errno.EISDIR: "there is a folder of that name",
    errno.EMFILE: "too many files are open",
    errno.ENAMETOOLONG: "the name is too long for this disk",
}


class StorageError(TfmError):
    """The results folder cannot be written: the run stops, and everything written before stays valid."""

    default_code = "storage"


@contextmanager
def storage_guard(path: Path) -> Iterator[None]:
    """Turn the operating system's refusals to write into one line that names the path and the remedy."""
    try:
        yield
    except OSError as error:
        number = error.errno
        if number is None:  # HDF5 passes the number on in its text only
            number = next((n for n in _DISK if f"errno = {n}," in str(error)), None)
        reason = _DISK.get(number or 0) or error.strerror or str(error)
        raise StorageError(
            f"cannot be written: {reason}",
            file=str(path),
            code="disk-full" if number in (errno.ENOSPC, errno.EDQUOT) else "storage",
            remedy="make room or choose another folder, then repeat the command: finished fields are kept",
        ) from error


def file_sha256(path: Path) -> str:
    """SHA-256 of a file's bytes, read in pieces."""
    digest = hashlib.sha256()
    with path.open("rb") as stream:
        while chunk := stream.read(_CHUNK):
            digest.update(chunk)
    return digest.hexdigest()


def _sync_folder(folder: Path) -> None:
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


@contextmanager
def atomic_file(path: Path, *, verify: Callable[[Path], None] | None = None) -> Iterator[Path]:
    """A temporary path to write to; on success it becomes ``path`` in one step.

    Writing to the temporary path is the caller's matter, errors included (:func:`storage_guard`).

    Parameters
    ----------
    path
        Where the file shall stand.
    verify
        Reads the finished temporary file back and raises when it is not what was meant.

    Raises
    ------
    StorageError
        When the disk refuses; the file that stood at ``path`` is untouched.
    """
    temporary = path.with_name(f"{_TEMPORARY}{socket.gethostname()[:32]}-{os.getpid()}-{time.monotonic_ns():x}")
    try:
        yield temporary
        with storage_guard(path):
            if verify is not None:
                verify(temporary)
            with temporary.open("rb+") as stream:
                os.fsync(stream.fileno())
            os.replace(temporary, path)
            _sync_folder(path.parent)
    except BaseException:
        with suppress(OSError):
            temporary.unlink()
        raise


def write_text(path: Path, text: str) -> None:
    """Write a text file atomically as UTF-8; a file that holds these bytes already is left alone."""
    data = text.encode("utf-8")

    def verify(temporary: Path) -> None:
        if temporary.read_bytes() != data:
            raise OSError(errno.EIO, "the file does not read back as it was written")

    with storage_guard(path):
        if path.is_file() and path.read_bytes() == data:
            return
    with atomic_file(path, verify=verify) as temporary, storage_guard(path):
        temporary.write_bytes(data)


def _alive(pid: int) -> bool:
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True


def remove_leftovers(folder: Path) -> int:
    """Remove temporary files of processes that are gone; returns their number.

    Files of a live process, or of another machine within the last day, are left: another shard may be writing them.
    """
    removed = 0
    host = socket.gethostname()[:32]
    for path in folder.glob(f"{_TEMPORARY}*"):
        owner, _, rest = path.name.removeprefix(_TEMPORARY).rpartition("-")[0].rpartition("-")
        try:
            old = time.time() - path.stat().st_mtime > _ABANDONED
            gone = owner == host and rest.isdigit() and not _alive(int(rest))
            if old or gone:
                path.unlink()
                removed += 1
        except FileNotFoundError:  # another shard was faster
            continue
    return removed


@contextmanager
def folder_lock(folder: Path) -> Iterator[None]:
    """Hold the folder's lock, which the kernel releases when the process ends in whatever way."""
    path = folder / LOCK_NAME
    with storage_guard(path):
        stream = path.open("a")
    with stream:
        fcntl.flock(stream, fcntl.LOCK_EX)
        yield
