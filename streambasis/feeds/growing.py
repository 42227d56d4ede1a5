"""A text file that somebody else still writes, through rotation and truncation."""

from __future__ import annotations

import os
import re
import threading
from pathlib import Path
from stat import S_ISREG

from streambasis.feeds.lines import digest
from streambasis.feeds.reading import Position, whole_number
from streambasis.feeds.sources import CHUNK_BYTES, Descriptor

PAUSE = 0.01
"""Seconds between two looks at the file."""

GRACE_LOOKS = 20
"""Looks for a last word in a file that was replaced: its writer may notice a little later."""

_TAIL_BYTES = 256
_ROTATED = re.compile(r"[.\-_]\d[\d\-_.T:]*")


class GrowingSource:
    """The bytes of a growing file, then of the file that takes its place, and so on.

    Parameters
    ----------
    path : Path
        The file that the writer writes to.
    stop : threading.Event
        When set, the source ends; without it there is no end.
    wait : float
        Seconds without a byte after which ``read`` returns None.

    Notes
    -----
    Rotation by rename: the old file is read to its end, the new one from its beginning; files
    named like the path with a number or a date behind it (``feed.csv.1``, ``feed.csv-20260302``)
    that were written in between are read in the order of their last change. Truncation: what is
    shorter than what was read, or no longer ends as it did there, is read from its beginning.
    """

    live = True
    repeatable = True

    def __init__(self, path: Path, stop: threading.Event, wait: float) -> None:
        self._path = path
        self._stop = stop
        self._looks = max(1, round(wait / PAUSE))
        # silence is told before the file is left, so that nobody is carried over unawares
        self._grace = max(GRACE_LOOKS, self._looks + 1)
        self._quiet = 0
        self.generation = 0
        self._file = Descriptor(path)
        self._restart()

    def _restart(self) -> None:
        self._offset = 0
        self._tail = b""
        self._replaced = 0

    @property
    def stopped(self) -> bool:
        """Whether it was asked to end."""
        return self._stop.is_set()

    def find(self, position: Position) -> bool:
        """Open the file that a position was taken in, wherever it has been renamed to.

        Returns
        -------
        bool
            False if it is not to be found; the newest file is open then.
        """
        offset = whole_number(str(self._path), position, "offset")
        checked = min(whole_number(str(self._path), position, "checked"), offset)
        here = [self._path, *self._rotated()]
        here.sort(key=lambda path: _inode(path) != position.get("inode"))
        for path in here:
            try:
                file = Descriptor(path)
            except FileNotFoundError:
                continue
            before = os.pread(file.number, checked, offset - checked)
            size = os.fstat(file.number).st_size
            if size >= offset and digest(before) == position.get("check"):
                self._switch(file)
                return True
            file.close()
        return False

    def read(self) -> bytes | None:
        """Return the next bytes; None when nothing comes for a while; nothing at the end."""
        while not self._stop.is_set():
            data = os.pread(self._file.number, CHUNK_BYTES, self._offset)
            if data and self._tail_stands():
                self._offset += len(data)
                self._tail = (self._tail + data)[-_TAIL_BYTES:]
                self._quiet = self._replaced = 0
                return data
            if data or os.fstat(self._file.number).st_size < self._offset:
                self.generation += 1
                self._restart()
                continue
            if self._next_file():
                continue
            self._stop.wait(PAUSE)
            self._quiet += 1
            if self._quiet % self._looks == 0:
                return None
        return b""

    def _tail_stands(self) -> bool:
        """Return whether the bytes before the offset are still those that were read."""
        length = len(self._tail)
        return os.pread(self._file.number, length, self._offset - length) == self._tail

    def _next_file(self) -> bool:
        """Go over to the file that has taken this one's place; return whether that was done."""
        mine = os.fstat(self._file.number)
        try:
            now = os.stat(self._path)
        except FileNotFoundError:
            # between the renaming and the new file there may be a moment without any
            return False
        if (now.st_ino, now.st_dev) == (mine.st_ino, mine.st_dev):
            return False
        self._replaced += 1
        if self._replaced < self._grace:
            return False
        between = [
            (stat.st_mtime_ns, path)
            for path in self._rotated()
            if (stat := path.stat()).st_mtime_ns >= mine.st_mtime_ns and stat.st_ino != mine.st_ino
        ]
        following = min(between)[1] if between else self._path
        try:
            self._switch(Descriptor(following))
        except FileNotFoundError:
            return False
        self.generation += 1
        return True

    def _rotated(self) -> list[Path]:
        """Return the regular files that were once written under the path."""
        name = self._path.name
        return [
            Path(entry.path)
            for entry in os.scandir(self._path.parent)
            if entry.name.startswith(name)
            and _ROTATED.fullmatch(entry.name[len(name) :])
            and entry.is_file()
        ]

    def _switch(self, file: Descriptor) -> None:
        self._file.close()
        self._file = file
        self._restart()

    def seek(self, offset: int) -> None:
        """Go to an offset in the file that is open."""
        self._restart()
        self._offset = offset

    def identity(self) -> dict[str, int]:
        """Return the number that a file keeps when it is renamed."""
        return {"inode": os.fstat(self._file.number).st_ino}

    def close(self) -> None:
        """Close the file."""
        self._file.close()


def _inode(path: Path) -> int | None:
    try:
        stat = path.stat()
    except FileNotFoundError:
        return None
    return stat.st_ino if S_ISREG(stat.st_mode) else None
