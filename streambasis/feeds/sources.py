"""Where the bytes of a text feed come from: a file, a packed file, a pipe."""

from __future__ import annotations

import os
import select
import threading
import weakref
import zlib
from pathlib import Path
from typing import Protocol

from streambasis.errors import FeedError

CHUNK_BYTES = 1 << 18
PATIENCE = 0.2
"""Seconds between two looks at whether a waiting feed was asked to stop."""


class Source(Protocol):
    """Bytes in order.

    Attributes
    ----------
    live : bool
        More may come later, so that nothing for a while is not the end.
    repeatable : bool
        ``seek`` works.
    generation : int
        Changes when ``read`` has gone over to the beginning of another file.
    stopped : bool
        It ended because somebody asked it to.
    """

    live: bool
    repeatable: bool
    generation: int

    @property
    def stopped(self) -> bool: ...

    def read(self) -> bytes | None:
        """Return the next bytes, at most CHUNK_BYTES; nothing at the end; None to wait."""
        ...

    def seek(self, offset: int) -> None:
        """Go to an offset from the beginning."""
        ...

    def identity(self) -> dict[str, int]:
        """Return what tells this file from another of the same name, for a position."""
        ...

    def close(self) -> None: ...


class Descriptor:
    """A file open for reading, closed with the last reference at the latest."""

    def __init__(self, path: Path) -> None:
        self.number = os.open(path, os.O_RDONLY | os.O_CLOEXEC)
        self.close = weakref.finalize(self, os.close, self.number)


class FileSource:
    """A file that is complete."""

    live = False
    repeatable = True
    generation = 0
    stopped = False

    def __init__(self, path: Path) -> None:
        self._file = Descriptor(path)
        self._offset = 0

    def read(self) -> bytes:
        """Return the next bytes; nothing at the end."""
        data = os.pread(self._file.number, CHUNK_BYTES, self._offset)
        self._offset += len(data)
        return data

    def seek(self, offset: int) -> None:
        """Go to an offset from the beginning."""
        self._offset = offset

    def identity(self) -> dict[str, int]:
        """Return nothing: what stands before a position says whether it is the same file."""
        return {}

    def close(self) -> None:
        """Close the file."""
        self._file.close()


class PipeSource:
    """A pipe, a socket or a terminal, whose bytes come once and when they come.

    Parameters
    ----------
    descriptor : int
        Stays open; whoever opened it closes it.
    stop : threading.Event
        When set, the source ends.
    wait : float
        Seconds without a byte after which ``read`` returns None.
    """

    live = True
    repeatable = False
    generation = 0

    def __init__(self, descriptor: int, stop: threading.Event, wait: float) -> None:
        self._descriptor = descriptor
        self._stop = stop
        self._wait = wait
        self._silent = False
        self._ahead = b""

    @property
    def stopped(self) -> bool:
        """Whether it ended because somebody asked it to."""
        return self._stop.is_set()

    def read(self, most: int = CHUNK_BYTES) -> bytes | None:
        """Return what has come; nothing at the end; None when nothing comes for a while."""
        if self._ahead:
            data, self._ahead = self._ahead[:most], self._ahead[most:]
            return data
        if not self._stop.is_set():
            # a pipe that stays silent is asked less often: a byte ends the wait at once
            timeout = PATIENCE if self._silent else self._wait
            if select.select([self._descriptor], [], [], timeout)[0]:
                self._silent = False
                return os.read(self._descriptor, most)
            self._silent = True
            return None
        return b""

    def take_back(self, data: bytes) -> None:
        """Take back bytes that were only looked at."""
        self._ahead = data + self._ahead

    def seek(self, offset: int) -> None:
        """Do nothing: what was read is gone."""

    def identity(self) -> dict[str, int]:
        """Return nothing: a pipe is not gone back to."""
        return {}

    def close(self) -> None:
        """Do nothing: the descriptor is not ours."""


class GzipSource:
    """The unpacked bytes of another source, a bounded number at a time."""

    generation = 0

    def __init__(self, name: str, packed: Source) -> None:
        self._name = name
        self._packed = packed
        self.live = packed.live
        self.repeatable = packed.repeatable
        self._start()

    @property
    def stopped(self) -> bool:
        """Whether the packed source ended because somebody asked it to."""
        return self._packed.stopped

    def _start(self) -> None:
        self._unpack = zlib.decompressobj(wbits=31)
        self._rest = self._ahead = b""
        self._begun = False

    def read(self) -> bytes | None:
        """Return the next unpacked bytes; nothing at the end; None to wait."""
        try:
            return self._read()
        except zlib.error as error:
            raise FeedError(f"{self._name}: damaged gzip data ({error})") from None

    def _read(self) -> bytes | None:
        if self._ahead:
            data, self._ahead = self._ahead, b""
            return data
        while True:
            if self._unpack.eof:
                # a gzip file may be several, one behind the other, and some writers fill the last
                # block up with zeros
                self._rest = self._unpack.unused_data.lstrip(b"\x00")
                self._unpack, self._begun = zlib.decompressobj(wbits=31), False
            if not self._rest:
                more = self._packed.read()
                if more is None or (not more and not self._begun):
                    return more
                self._rest = more if self._begun else more.lstrip(b"\x00")
                if more and not self._rest:
                    continue
            ended = not self._rest
            self._begun = True
            # with no input left this gives what the unpacker still holds back
            data = self._unpack.decompress(self._rest, CHUNK_BYTES)
            self._rest = self._unpack.unconsumed_tail
            if data:
                return data
            if ended and not self._unpack.eof:
                raise FeedError(f"{self._name}: damaged gzip data (it ends too early)")

    def seek(self, offset: int) -> None:
        """Start over and unpack up to an offset from the beginning."""
        self._packed.seek(0)
        self._start()
        while offset > 0 and (data := self.read()):
            # what was unpacked beyond the offset comes next
            self._ahead = data[offset:]
            offset -= len(data)

    def identity(self) -> dict[str, int]:
        """Return what tells the packed file from another."""
        return self._packed.identity()

    def close(self) -> None:
        """Close the packed source."""
        self._packed.close()
