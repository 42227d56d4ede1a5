"""Replacing a file so that a reader, or a crash at any moment, finds the old one or the new, whole.

The order is the whole point: the new bytes go to a temporary file in the same folder, are forced to
the disk, take the old file's place by one rename, and the folder is forced to the disk as well.
"""

from __future__ import annotations

import contextlib
import errno
import fcntl
import os
import re
import secrets
from collections.abc import Callable

from streambasis.errors import HomeError

OWNER_ONLY = 0o600
PIECE = 1 << 23
BEHIND = 1 << 25
"""Bytes between two words to the kernel; a shorter file stays in the page cache as it is."""
_CREATE = os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC
_NO_FOLDER_SYNC = {errno.EINVAL, errno.ENOTSUP}


def replace_file(
    path: str | os.PathLike[str], write: Callable[[int], None], *, mode: int = OWNER_ONLY
) -> None:
    """Give a file new content, all of it or none.

    Parameters
    ----------
    path : path
        The file; a symbolic link is followed, so that the link itself stays.
    write : callable
        Called with the descriptor of an empty file, open for reading and writing.
    mode : int
        Permissions of the new file, whatever the umask.

    Raises
    ------
    OSError
        If any step fails. Up to the rename the old file is untouched. If the folder alone cannot
        be forced to the disk, the new file is in place but might not outlast a power cut.

    Notes
    -----
    A failed fsync is never tried again on the same file: the kernel may have dropped the pages and
    report success the second time. The temporary file is discarded, and the next call writes
    another one.

    References
    ----------
    Rebello, Patel, Alagappan, A. Arpaci-Dusseau & R. Arpaci-Dusseau (2020), Can applications
    recover from fsync failures?, USENIX ATC.
    """
    target = os.path.realpath(path)
    folder, name = os.path.split(target)
    descriptor, temporary = _create(folder, name)
    try:
        os.fchmod(descriptor, mode)
        write(descriptor)
        os.fsync(descriptor)
        os.replace(temporary, target)
    except BaseException:
        # where even this fails, the leftover is removed at the next start
        with contextlib.suppress(OSError):
            os.unlink(temporary)
        raise
    finally:
        os.close(descriptor)
    sync_folder(folder)


def write_all(descriptor: int, data: bytes | bytearray | memoryview) -> None:
    """Write every byte: one call of the system may take only a part."""
    rest = memoryview(data).cast("B")
    while rest.nbytes:
        rest = rest[os.write(descriptor, rest) :]


class Outflow:
    """Writes a large file through a small part of the page cache.

    Every ``BEHIND`` bytes the kernel is told that what was written is not needed again: it starts
    to write it to the disk, and gives the pages of what is already there to the bytes to come.
    Without that the new file takes as many fresh pages as it is long while the old one still
    holds its own; measured on 512 MiB, that took up to three times as long as writing.

    Parameters
    ----------
    descriptor : int
        A file open for writing, at its beginning.
    """

    def __init__(self, descriptor: int) -> None:
        self._descriptor = descriptor
        self._written = self._told = 0

    def write(self, data: bytes | bytearray | memoryview) -> None:
        """Write every byte."""
        rest = memoryview(data).cast("B")
        while rest.nbytes:
            piece, rest = rest[:PIECE], rest[PIECE:]
            write_all(self._descriptor, piece)
            self._written += piece.nbytes
            if self._written - self._told >= BEHIND and hasattr(os, "posix_fadvise"):
                os.posix_fadvise(self._descriptor, 0, self._written, os.POSIX_FADV_DONTNEED)
                self._told = self._written


def sync_folder(folder: str | os.PathLike[str]) -> None:
    """Force the names in a folder to the disk, where the file system can do so."""
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
    try:
        os.fsync(descriptor)
    except OSError as error:
        if error.errno not in _NO_FOLDER_SYNC:
            raise
    finally:
        os.close(descriptor)


def remove_leftovers(path: str | os.PathLike[str]) -> int:
    """Remove the temporary files that killed processes left while replacing a file.

    Parameters
    ----------
    path : path
        The file that was to be replaced, or a folder, for every file in it.

    Returns
    -------
    int
        How many were removed.

    Notes
    -----
    A writer holds a lock on its temporary file, which ends with the process however it dies. What
    is locked belongs to a living writer and stays.
    """
    target = os.path.realpath(path)
    if os.path.isdir(target):
        folder, name = target, ".+"
    else:
        folder, name = os.path.dirname(target), re.escape(os.path.basename(target))
    leftover = re.compile(rf"\.{name}\.[0-9a-f]{{16}}\.partial")
    removed = 0
    with os.scandir(folder) as entries:
        found = [entry.path for entry in entries if leftover.fullmatch(entry.name)]
    for temporary in found:
        try:
            descriptor = os.open(temporary, os.O_RDONLY | os.O_NOFOLLOW | os.O_CLOEXEC)
        except FileNotFoundError:
            continue
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
            os.unlink(temporary)
            removed += 1
        except (BlockingIOError, FileNotFoundError):
            continue
        finally:
            os.close(descriptor)
    return removed


def lock_folder(folder: str | os.PathLike[str], option: str) -> int:
    """Return the descriptor of a folder's lock, held until it is closed or the process ends.

    Parameters
    ----------
    folder : path
        The folder; the file ``lock`` in it names the process.
    option : str
        What the user chooses the folder with, for the message.

    Raises
    ------
    HomeError
        If another process holds it; the message names that process.
    OSError
        If the folder cannot be written.
    """
    path = os.path.join(folder, "lock")
    descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        process = os.pread(descriptor, 32, 0).decode("ascii", "replace").strip()
        os.close(descriptor)
        raise HomeError(
            f"{os.fspath(folder)}: in use by another streambasis (process "
            f"{process or 'unknown'}); stop it, or choose another folder for {option}"
        ) from None
    name = f"{os.getpid()}\n".encode()
    # over what is there: a full disk has no room for a file that was emptied first
    os.pwrite(descriptor, name, 0)
    os.ftruncate(descriptor, len(name))
    return descriptor


def _create(folder: str, name: str) -> tuple[int, str]:
    """Open a new temporary file, locked, that nobody can have taken for a leftover."""
    while True:
        temporary = os.path.join(folder, f".{name}.{secrets.token_hex(8)}.partial")
        descriptor = os.open(temporary, _CREATE, OWNER_ONLY)
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX)
            # between the two calls above another process may have seen it unlocked and removed it
            if os.fstat(descriptor).st_nlink:
                return descriptor, temporary
        except BaseException:
            os.close(descriptor)
            with contextlib.suppress(OSError):
                os.unlink(temporary)
            raise
        os.close(descriptor)
