"""Feeds made of lines, CSV or JSON, from any source of bytes."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Protocol

import numpy as np

from streambasis.errors import FeedError
from streambasis.feeds.columns import Columns
from streambasis.feeds.lines import LineReader, Lines
from streambasis.feeds.reading import (
    FeedOptions,
    Malformed,
    Piece,
    PieceFeed,
    Position,
    shortened,
)
from streambasis.feeds.rows import Rows, lines_behind
from streambasis.feeds.sources import Source


class RowParser(Protocol):
    """Makes rows of lines."""

    columns: Columns

    def begin(self, line: bytes) -> bool:
        """Hear the first line of a file; return whether it holds no row, but names."""
        ...

    def parse(self, lines: Lines) -> Rows:
        """Return the rows that lines hold."""
        ...


class LineFeed(PieceFeed):
    """Lines of text as samples.

    Parameters
    ----------
    name : str
        What the feed is called in messages.
    source : Source
        The bytes.
    parser : callable
        Makes the parser, given the first lines.
    options, position
        As of :class:`~streambasis.feeds.reading.PieceFeed`.
    size : int, optional
        Bytes of the whole feed, to estimate its samples.
    lost : str, optional
        What is to be reported as malformed before anything else.
    """

    kind = "lines"

    def __init__(
        self,
        name: str,
        source: Source,
        parser: Callable[[bytes], RowParser],
        options: FeedOptions,
        position: Position | None,
        *,
        size: int | None = None,
        lost: str | None = None,
    ) -> None:
        super().__init__(name, options, position)
        self.live, self.repeatable = source.live, source.repeatable
        self._lost = lost
        self._reader = LineReader(name, source)
        peek = self._reader.peek()
        if not peek:
            raise FeedError(f"{name}: the feed is empty")
        self._parser = parser(peek)
        self.columns = self._parser.columns
        if size is not None:
            body = len(peek) - peek.find(b"\n") - 1
            lines = peek.count(b"\n") - 1 + (not peek.endswith(b"\n"))
            self.rows = round((size - len(peek) + body) * lines / body) if body > 0 else 0
        if position is not None and source.repeatable and lost is None:
            self._reader.go_to(position)

    def pieces(self) -> Iterator[Piece | None]:
        """Yield the samples block by block."""
        if self._lost is not None:
            yield self._piece_of_fault(self._lost)
        for lines in self._reader.blocks():
            if lines is None:
                yield None
                continue
            if lines.refused is None and lines.fresh and self._parser.begin(lines.text(0)):
                lines = lines.without_first()
            yield self._piece(lines)

    def _piece(self, lines: Lines) -> Piece:
        if lines.refused is not None:
            rows = Rows.empty(len(self.columns.read), self.columns.time is not None)
            rows.faults[0] = lines.refused
        else:
            rows = self._parser.parse(lines)
        values, times, where = rows.joined()
        faults = sorted(rows.faults.items())
        if faults and self.options.strict:
            index, reason = faults[0]
            raise FeedError(f"{self.name}, line {lines.line + index}: {reason}")
        before = np.searchsorted(where, [index for index, _ in faults]).tolist()
        malformed = [
            (place, Malformed(self.name, lines.line + index, reason, shortened(lines.text(index))))
            for place, (index, reason) in zip(before, faults, strict=True)
        ]
        identity = self._reader.source.identity()

        def place(count: int) -> Position:
            behind = lines_behind(count, where, len(lines))
            return {**lines.place(behind), **identity}

        return Piece(values, times, place, malformed)

    def _piece_of_fault(self, reason: str) -> Piece:
        if self.options.strict:
            raise FeedError(f"{self.name}: {reason}")
        start = Lines(b"", np.empty(0, np.int64), 0, 1, 0, True)
        identity = self._reader.source.identity()
        nothing = np.empty((0, len(self.columns.read)))
        times = None if self.columns.time is None else np.empty(0, np.int64)
        return Piece(
            nothing,
            times,
            lambda _: {**start.place(0), **identity},
            [(0, Malformed(self.name, 0, reason, ""))],
        )

    def close(self) -> None:
        """Close the source."""
        super().close()
        self._reader.source.close()
