"""A thread that reads a feed ahead of whoever takes its samples."""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Iterator
from typing import TYPE_CHECKING

from streambasis.feeds.sources import PATIENCE

if TYPE_CHECKING:
    from streambasis.feeds.reading import Piece

MOST_BYTES = 1 << 26
"""Bytes of samples in the queue, whatever their number."""


class Ahead:
    """Pieces of a feed in a queue of bounded length.

    Parameters
    ----------
    pieces : iterator of Piece or None
        What the feed finds; run through in a thread of its own.
    most : int
        Samples in the queue; one piece always has room.
    drops : bool
        Where there is no room the oldest piece makes some, instead of the newest waiting for it.

    Attributes
    ----------
    dropped : int
        Rows that made room, malformed ones included.
    queued : int
        Samples that wait.
    """

    def __init__(self, pieces: Iterator[Piece | None], most: int, *, drops: bool) -> None:
        self._pieces, self._most, self._drops = pieces, most, drops
        self._change = threading.Condition()
        self._queue: deque[Piece] = deque()
        self._silent = self._ended = self._closed = False
        self._error: BaseException | None = None
        self.dropped = self.queued = self._bytes = 0
        self._thread = threading.Thread(target=self._read, name="streambasis-feed", daemon=True)
        self._thread.start()

    def _read(self) -> None:
        try:
            for piece in self._pieces:
                with self._change:
                    if self._closed:
                        break
                    if piece is None:
                        self._silent = True
                    else:
                        self._put(piece)
                    self._change.notify()
        except BaseException as error:
            self._error = error
        with self._change:
            self._ended = True
            self._change.notify()

    def _put(self, piece: Piece) -> None:
        rows, size = len(piece.values), piece.values.nbytes
        while self._queue and (self.queued + rows > self._most or self._bytes + size > MOST_BYTES):
            if self._drops:
                oldest = self._take()
                self.dropped += len(oldest.values) + len(oldest.malformed)
            else:
                self._change.wait()
                if self._closed:
                    return
        self._queue.append(piece)
        self.queued += rows
        self._bytes += size

    def _take(self) -> Piece:
        piece = self._queue.popleft()
        self.queued -= len(piece.values)
        self._bytes -= piece.values.nbytes
        self._change.notify()
        return piece

    def __iter__(self) -> Iterator[Piece | None]:
        """Yield what waits, oldest first; None when nothing has come for a while."""
        while True:
            with self._change:
                # only what the feed itself calls silence may cut a batch short
                self._change.wait_for(lambda: self._queue or self._silent or self._ended)
                piece = self._take() if self._queue else None
                if piece is None:
                    self._silent = False
                    if self._ended:
                        break
            yield piece
        if self._error is not None:
            raise self._error

    def close(self) -> None:
        """End the thread, before what it reads from is closed."""
        with self._change:
            self._closed = True
            self._change.notify()
        # it looks at least every PATIENCE, unless a pipe stands still in the middle of a batch
        self._thread.join(5 * PATIENCE)
