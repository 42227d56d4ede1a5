"""Bytes as blocks of whole lines, each line with its place in the file."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from streambasis.errors import FeedError
from streambasis.feeds.reading import Position, whole_number
from streambasis.feeds.sources import Source

LONGEST_LINE = 1 << 22
"""Bytes of a line, its end included; a longer one is malformed and never held in memory."""

TOO_LONG = f"the line is longer than {LONGEST_LINE} bytes"

PEEK_BYTES = 1 << 18
"""How much of a feed is read to learn its names and types."""

CHECKED_BYTES = 4096
"""How much of what stands before a position tells whether a file is still the same."""

_NEWLINE = 10


@dataclass(frozen=True, slots=True)
class Lines:
    """Whole lines that follow one another in a file.

    Attributes
    ----------
    data : bytes
        The lines with their ends; of a refused line the beginning.
    ends : ndarray of int64, shape (m,)
        Where in ``data`` each line ends, its end included.
    offset : int
        Where in the file ``data`` begins.
    line : int
        Number of the first line, counted from 1 over the file.
    after : int
        Where in the file the next line begins.
    fresh : bool
        These are the first lines of a file.
    before : bytes
        What stands before ``data`` in the file, at most CHECKED_BYTES of it.
    refused : str or None
        Why these bytes, one line, are no line to be parsed.
    """

    data: bytes
    ends: NDArray[np.int64]
    offset: int
    line: int
    after: int
    fresh: bool
    before: bytes = b""
    refused: str | None = None

    def __len__(self) -> int:
        return len(self.ends)

    def text(self, index: int) -> bytes:
        """Return one line."""
        start = self.ends[index - 1] if index else 0
        return self.data[start : self.ends[index]]

    def without_first(self) -> Lines:
        """Return the lines behind the first one."""
        cut = int(self.ends[0])
        ends = self.ends[1:] - cut
        before = (self.before + self.data[:cut])[-CHECKED_BYTES:]
        return Lines(
            self.data[cut:], ends, self.offset + cut, self.line + 1, self.after, False, before
        )

    def place(self, count: int) -> Position:
        """Return the place behind the first ``count`` lines."""
        if count == len(self):
            inside, offset = len(self.data), self.after
        else:
            inside = int(self.ends[count - 1]) if count else 0
            offset = self.offset + inside
        before = self.data[max(0, inside - CHECKED_BYTES) : inside]
        if len(before) < CHECKED_BYTES:
            before = (self.before + before)[-CHECKED_BYTES:]
        if self.refused:
            # not all of the line is at hand
            before = b""
        return {
            "offset": offset,
            "line": self.line + count,
            "checked": len(before),
            "check": digest(before),
        }


def digest(data: bytes) -> str:
    """Return what stands for some bytes in a position."""
    return hashlib.blake2b(data, digest_size=16).hexdigest()


class LineReader:
    """Reads a source line by line, many at a time.

    Parameters
    ----------
    name : str
        What the feed is called in messages.
    source : Source
        The bytes.

    Notes
    -----
    Holds at most LONGEST_LINE and one chunk, whatever the feed holds.
    """

    def __init__(self, name: str, source: Source) -> None:
        self.name = name
        self.source = source
        self._held = b""
        self._start_file()

    def _start_file(self) -> None:
        self._generation = self.source.generation
        self._offset = 0
        self._line = 1
        self._fresh = True
        self._before = b""

    def _read(self) -> bytes | None:
        try:
            return self.source.read()
        except OSError as error:
            raise FeedError(f"{self.name}: cannot be read ({error.strerror})") from None

    def peek(self) -> bytes:
        """Return the first lines, whole, without taking them: about PEEK_BYTES where there are.

        Raises
        ------
        FeedError
            If the first line is too long.
        """
        ended = False
        while not ended and len(self._held) < PEEK_BYTES:
            more = self._read()
            if more is None:
                # nothing more for now: names and a row, or an object, are enough to begin with
                enough = 1 if self._held.lstrip().startswith(b"{") else 2
                if self._held.count(b"\n") >= enough:
                    break
                continue
            if self.source.generation != self._generation:
                # replaced before it held more than names
                self._held = b""
                self._start_file()
            ended = not more
            self._held += more
        while not ended and b"\n" not in self._held and len(self._held) <= LONGEST_LINE:
            more = self._read()
            ended = more == b""
            self._held += more or b""
        if ended and not self.source.stopped:
            return self._held
        whole = self._held[: self._held.rfind(b"\n") + 1]
        if len(self._held) > LONGEST_LINE and not whole:
            raise FeedError(f"{self.name}: the first line is longer than {LONGEST_LINE} bytes")
        return whole

    def go_to(self, position: Position) -> None:
        """Go on at a place that :meth:`Lines.place` returned.

        Raises
        ------
        FeedError
            If the file does not hold what stood before that place.
        """
        offset = whole_number(self.name, position, "offset")
        checked = whole_number(self.name, position, "checked")
        if checked > min(offset, CHECKED_BYTES):
            raise FeedError(f"{self.name}: the position to go on from is damaged")
        self.source.seek(offset - checked)
        before = self._read_exactly(checked)
        if digest(before) != position.get("check"):
            raise FeedError(
                f"{self.name}: not the file that the run left off in: what stands before byte "
                f"{offset} has changed; give the same file, or start in a new folder"
            )
        self._offset, self._before = offset, before
        self._line = whole_number(self.name, position, "line")
        self._fresh = offset == 0

    def _read_exactly(self, count: int) -> bytes:
        self._held = b""
        while len(self._held) < count and (more := self._read()):
            self._held += more
        before, self._held = self._held[:count], self._held[count:]
        return before

    def blocks(self) -> Iterator[Lines | None]:
        """Yield the lines in order; None when nothing has come for a while."""
        ended = False
        while not ended:
            if not self._held or b"\n" not in self._held:
                more = self._read()
                if more is None:
                    yield None
                    continue
                if self.source.generation != self._generation:
                    yield from self._cut_short()
                    self._start_file()
                ended = not more
                self._held += more
            end = self._held.rfind(b"\n") + 1
            if not end and len(self._held) > LONGEST_LINE:
                yield from self._skip_line()
                continue
            if end:
                yield from self._give(end)
        if self._held:
            if self.source.stopped:
                # what has no end yet is no line
                return
            yield from self._give(len(self._held))

    def _give(self, end: int) -> Iterator[Lines]:
        """Give the first ``end`` bytes that are held; only their first line can be too long."""
        first = self._held.find(b"\n", 0, end) + 1
        if first > LONGEST_LINE:
            beginning, self._held = self._held[:CHECKED_BYTES], self._held[first:]
            yield self._made(beginning, np.array([len(beginning)]), first, TOO_LONG)
            end -= first
            if not end:
                return
        data, self._held = self._held[:end], self._held[end:]
        ends = np.flatnonzero(np.frombuffer(data, np.uint8) == _NEWLINE) + 1
        if not len(ends) or ends[-1] != end:
            ends = np.append(ends, end)
        yield self._made(data, ends.astype(np.int64), end)

    def _made(
        self, data: bytes, ends: NDArray[np.int64], length: int, refused: str | None = None
    ) -> Lines:
        lines = Lines(
            data,
            ends,
            self._offset,
            self._line,
            self._offset + length,
            self._fresh,
            self._before,
            refused,
        )
        self._before = b"" if refused else (self._before + data[-CHECKED_BYTES:])[-CHECKED_BYTES:]
        self._offset += length
        self._line += len(ends)
        self._fresh = False
        return lines

    def _cut_short(self) -> Iterator[Lines]:
        """Give what is left of a file that was replaced before its last line was whole."""
        if self._held:
            data, self._held = self._held, b""
            reason = "the file was replaced before this line was whole"
            yield self._made(data, np.array([len(data)]), len(data), reason)

    def _skip_line(self) -> Iterator[Lines | None]:
        """Pass over a line that is too long, holding no more than its beginning."""
        beginning, length = self._held[:CHECKED_BYTES], len(self._held)
        self._held = b""
        while True:
            more = self._read()
            if more is None:
                yield None
                continue
            if self.source.generation != self._generation or not more:
                rest, more = more, b""
            else:
                end = more.find(b"\n") + 1
                rest, more = (more[end:], more[:end]) if end else (b"", more)
            length += len(more)
            if more.endswith(b"\n") or rest or not more:
                break
        self._held = rest
        yield self._made(beginning, np.array([len(beginning)]), length, TOO_LONG)
        if self.source.generation != self._generation:
            self._start_file()
