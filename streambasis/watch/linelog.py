"""A file that only grows, line by line, and is part of a run up to a size."""

from __future__ import annotations

import os
from pathlib import Path

from streambasis.errors import HomeError

READABLE = 0o644


class LineLog:
    """A file of lines, of which so much counts as the last commit says.

    Lines are taken in one thread; another may write them meanwhile, up to a size that it is told.

    Parameters
    ----------
    path : Path
        The file, made where it does not exist.
    counted : int
        Bytes that count; what is behind them is cut off.

    Raises
    ------
    HomeError
        If the file is shorter.
    """

    def __init__(self, path: Path, counted: int) -> None:
        self._path = path
        self._file = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_CLOEXEC, READABLE)
        self.back_to(counted)

    def back_to(self, counted: int) -> None:
        """Forget everything behind what counts."""
        if os.fstat(self._file).st_size < counted:
            self.close()
            raise HomeError(f"{self._path}: shorter than the run that state.arrow belongs to")
        os.ftruncate(self._file, counted)
        self._written = counted
        self._lines = bytearray()

    @property
    def size(self) -> int:
        """Bytes with what waits to be written."""
        return self._written + len(self._lines)

    @property
    def waiting(self) -> int:
        """Bytes that wait to be written."""
        return len(self._lines)

    def add(self, line: bytes) -> None:
        """Take a line, to be written with the next commit."""
        self._lines += line

    def write(self, size: int) -> None:
        """Write and force to the disk everything up to a size, in the thread that writes."""
        data = bytes(self._lines[: size - self._written])
        if data:
            # all of it again after a failure: the kernel may have dropped what it could not write
            write_at(self._file, data, self._written)
            os.fsync(self._file)

    def keep(self, size: int) -> None:
        """Hear that everything up to a size is part of the run."""
        del self._lines[: size - self._written]
        self._written = size

    def close(self) -> None:
        """Close the file."""
        os.close(self._file)


def write_at(descriptor: int, data: bytes, offset: int) -> None:
    """Write every byte at a place: one call of the system may take only a part."""
    rest = memoryview(data)
    while rest:
        done = os.pwrite(descriptor, rest, offset)
        rest, offset = rest[done:], offset + done
