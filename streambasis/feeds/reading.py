"""What every feed yields, and how pieces of any size become batches cut at the same samples."""

from __future__ import annotations

import threading
from abc import ABC, abstractmethod
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field, replace
from types import TracebackType
from typing import Any, Protocol, Self

import numpy as np
from numpy.typing import NDArray

from streambasis.errors import FeedError
from streambasis.feeds.ahead import Ahead
from streambasis.feeds.broker import WHEN_FULL, Broker
from streambasis.feeds.columns import Columns
from streambasis.feeds.keys import Keys

BATCH_ROWS = 1024
"""Samples per batch. Batches are cut at the same sample numbers whatever the format and its own
blocks, so that the same samples give bit-identical results from every file."""

AHEAD_ROWS = 32 * BATCH_ROWS
"""Samples of a file that are read ahead."""

FORMATS = ("csv", "json")
"""Formats of text; what is binary is told by its first bytes."""

MOST_TEXT = 4096
"""Characters of a malformed row that are kept."""

OUTNUMBERED = 8
"""Malformed rows per sample of a whole batch at which a batch is given before its boundary."""

Position = dict[str, Any]
"""Where a feed goes on: JSON things only, made by a feed and understood by that kind of feed."""


@dataclass(frozen=True, slots=True)
class Malformed:
    """A row that holds no sample and was passed over.

    Attributes
    ----------
    source : str
        The file, topic or standard input that it came from.
    number : int
        Its line, counted from 1 over the file; in a binary file its row, counted from 1; in a
        feed of messages the message, counted from 1 over the feed.
    reason : str
        What is wrong with it.
    text : str
        The row itself, cut after MOST_TEXT characters; empty where the file is binary.
    unit : str
        What is counted: "line", "row" or "message".
    """

    source: str
    number: int
    reason: str
    text: str
    unit: str = "line"


@dataclass(frozen=True, slots=True)
class Batch:
    """Consecutive samples of a feed.

    Attributes
    ----------
    first : int
        Number of the first sample, counted from 0 over the feed.
    values : ndarray of float64, shape (m, n)
        One row per sample, one column per channel; NaN where a value is missing, never infinite.
    times : ndarray of int64, shape (m,), or None
        Nanoseconds, since the Unix epoch where the feed has timestamps.
    place : callable
        Returns the position behind this batch, the same at any time; it costs something for some
        feeds, and not every batch is committed.
    malformed : tuple of Malformed
        Rows passed over on the way to that position; always empty from a strict feed. A batch
        may hold malformed rows and no sample.
    """

    first: int
    values: NDArray[np.float64]
    times: NDArray[np.int64] | None
    place: Callable[[], Position] = dict
    malformed: tuple[Malformed, ...] = ()

    def __len__(self) -> int:
        return len(self.values)

    @property
    def position(self) -> Position:
        """Where to go on after this batch; JSON things only.

        Whoever keeps it together with what came of the samples can open the feed there again, and
        no sample is lost or taken twice.
        """
        return self.place()


@dataclass(frozen=True, slots=True)
class Piece:
    """Samples as a reader finds them, before they are cut into batches.

    Attributes
    ----------
    values, times
        As of a batch.
    place : callable
        Given k, returns where to go on after the first k samples; for k = m, after the piece.
    malformed : list of (int, Malformed)
        The rows passed over, each with the number of samples of the piece that come before it.
    """

    values: NDArray[np.float64]
    times: NDArray[np.int64] | None
    place: Callable[[int], Position]
    malformed: list[tuple[int, Malformed]] = field(default_factory=list)


@dataclass(frozen=True, slots=True)
class FeedOptions:
    """How a feed is read.

    Attributes
    ----------
    format : str or None
        "csv" or "json" where the first bytes should not decide; binary formats are always told
        by their first bytes.
    strict : bool
        A malformed row is a FeedError; otherwise it is passed over and reported with the batch.
    follow : bool
        The file still grows: at its end wait for more, through rotation and truncation.
    wait : float or None
        Seconds after which a feed that still grows gives what it has as a short batch; None gives
        whole batches only, cut at the same sample numbers in every run.
    stop : threading.Event
        Set by whoever wants a waiting feed to end.
    when_full : str
        Of a pipe or a file that still grows: "block", so that its writer waits or the file keeps
        what is not yet read; or "drop-oldest", so that it is read at once and what has waited
        longest makes room, and is counted. Other files are never dropped from, and a broker has a
        queue of its own.
    queue : int
        Samples that may wait where the oldest are dropped.
    ahead : bool
        Read files in a thread of its own, a little ahead of whoever takes the samples.
    broker : Broker or None
        How to reach a broker; None takes user and password from the environment and the defaults
        for the rest.
    keys : Keys or None
        The column that tells several feeds in one source apart: then the values of a batch have
        one column more, the number of each row's key.
    """

    format: str | None = None
    strict: bool = True
    follow: bool = False
    wait: float | None = 0.005
    stop: threading.Event = field(default_factory=threading.Event)
    when_full: str = "block"
    queue: int = 1 << 16
    ahead: bool = False
    broker: Broker | None = None
    keys: Keys | None = None

    def __post_init__(self) -> None:
        if self.format not in (None, *FORMATS):
            raise FeedError(f"format {self.format!r} is none of {', '.join(FORMATS)}")
        if self.wait is not None and not self.wait > 0:
            raise FeedError(f"wait {self.wait!r}: a number of seconds above 0, or None")
        if self.when_full not in WHEN_FULL:
            raise FeedError(f"when_full {self.when_full!r} is none of {', '.join(WHEN_FULL)}")
        if self.queue < 1:
            raise FeedError(f"queue {self.queue}: at least one sample")


class Feed(Protocol):
    """A feed that is open for reading.

    Attributes
    ----------
    name : str
        What the feed is called in messages.
    columns : Columns
        Its channels and its time column.
    rows : int or None
        How many samples it holds, estimated for text; None where nobody knows.
    live : bool
        Samples are given as they arrive, so that a batch may be short without being the last.
    repeatable : bool
        The samples after a position can be read again: from a file, or from a broker that keeps
        what was not committed. A pipe gives every sample once.
    due : bool
        The feed holds back samples until what it gave is committed.
    counts : dict of str to int
        What the feed counts beside samples, such as ``malformed`` and ``dropped``.
    trouble : str
        What keeps samples from coming, such as a lost connection; empty while all is well.
    """

    name: str
    columns: Columns
    rows: int | None
    live: bool
    repeatable: bool

    @property
    def due(self) -> bool: ...

    @property
    def counts(self) -> dict[str, int]: ...

    @property
    def trouble(self) -> str: ...

    def batches(self) -> Iterator[Batch]:
        """Yield the samples in order, once, in batches that end at multiples of BATCH_ROWS."""
        ...

    def arrivals(self) -> Iterator[Batch | None]:
        """Yield the same batches, and None when nothing has come for a while."""
        ...

    def commit(self, position: Position) -> None:
        """Hear that everything up to a position is kept and need not be given again."""
        ...

    def close(self) -> None:
        """Let go of files, threads and connections."""
        ...

    def __enter__(self) -> Self: ...

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None: ...


class PieceFeed(ABC):
    """What feeds have in common: a subclass yields pieces, this cuts them into batches.

    Parameters
    ----------
    name : str
        What the feed is called in messages.
    options : FeedOptions
        How it is read.
    position : dict or None
        Where to go on.
    """

    kind = ""
    """What the positions of this feed say they are for."""

    columns: Columns
    rows: int | None = None
    live = False
    repeatable = True
    queues = False
    """Whether it has a queue of its own."""

    def __init__(self, name: str, options: FeedOptions, position: Position | None) -> None:
        self.name = name
        self.options = options
        self._first = 0
        self._malformed = 0
        self._ahead: Ahead | None = None
        if position is not None:
            self._first = whole_number(name, position, "sample")
            self._malformed = whole_number(name, position, "malformed")
            if position.get("kind") != self.kind:
                raise FeedError(
                    f"{name}: the run left off in another kind of feed "
                    f"({position.get('kind')!r}, not {self.kind!r}); start in a new folder"
                )

    @property
    def due(self) -> bool:
        """Whether the feed waits for a commit."""
        return False

    @property
    def counts(self) -> dict[str, int]:
        """Malformed rows up to the last batch given; rows dropped, samples in the queue."""
        if self._ahead is None:
            return {"malformed": self._malformed}
        ahead = self._ahead
        return {"malformed": self._malformed, "dropped": ahead.dropped, "queued": ahead.queued}

    @property
    def trouble(self) -> str:
        """What keeps samples from coming; empty while all is well."""
        return ""

    @abstractmethod
    def pieces(self) -> Iterator[Piece | None]:
        """Yield the samples as they are found; None when nothing has come for a while."""

    def batches(self) -> Iterator[Batch]:
        """Yield the samples in order, once, in batches that end at multiples of BATCH_ROWS."""
        return (batch for batch in self.arrivals() if batch is not None)

    def arrivals(self) -> Iterator[Batch | None]:
        """Yield the same batches, and None when nothing has come for a while."""
        given = self._first > 0
        pieces: Iterable[Piece | None] = self.pieces()
        options = self.options
        if self.live and not self.queues and options.when_full == "drop-oldest":
            pieces = self._ahead = Ahead(self.pieces(), options.queue, drops=True)
        elif options.ahead and not self.live:
            pieces = self._ahead = Ahead(self.pieces(), AHEAD_ROWS, drops=False)
        found = cut_or_wait(
            pieces, self.columns, self._first, self._keeps_rest, self.options.wait is None
        )
        for batch in found:
            if batch is not None:
                self._malformed += len(batch.malformed)
                batch = replace(batch, place=self._placed(batch.place, self._malformed))
                given = True
            yield batch
        if not given and not self.options.stop.is_set():
            raise FeedError(
                f"{self.name}: no samples; the file holds column names and nothing else"
            )

    def _placed(self, place: Callable[[], Position], malformed: int) -> Callable[[], Position]:
        return lambda: {**place(), "kind": self.kind, "malformed": malformed}

    def _keeps_rest(self) -> bool:
        """Return whether what does not fill a batch is given when the pieces end."""
        # asked to stop in the middle: a sample that can be read again stays for the next run,
        # which then cuts its batches where this one would have
        return not (self.repeatable and self.options.stop.is_set())

    def commit(self, position: Position) -> None:  # noqa: B027, most feeds have nothing to do
        """Hear that everything up to a position is kept."""

    def close(self) -> None:
        """Let go of what is open."""
        if self._ahead is not None:
            self._ahead.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()


def whole_number(name: str, position: Position, key: str) -> int:
    """Return a count that a position holds.

    Raises
    ------
    FeedError
        If it is no count.
    """
    value = position.get(key)
    if not isinstance(value, int) or isinstance(value, bool) or not 0 <= value < 2**63:
        raise FeedError(f"{name}: the position to go on from is damaged ({key} = {value!r})")
    return value


def cut(
    pieces: Iterable[Piece | None],
    columns: Columns,
    first: int = 0,
    rows: int = BATCH_ROWS,
) -> Iterator[Batch]:
    """Cut pieces of any size into batches that end where the sample number divides by ``rows``.

    Parameters
    ----------
    pieces : iterable of Piece or None
        None asks for what there is as a short batch.
    columns : Columns
        The channels, and whether there is a time.
    first : int
        Number of the first sample.
    rows : int
        Samples per batch.

    Notes
    -----
    Holds less than one batch of samples and OUTNUMBERED times as many malformed rows beside the
    piece in hand, whatever the length of the feed.
    """
    batches = cut_or_wait(pieces, columns, first, lambda: True, whole=False, rows=rows)
    return (batch for batch in batches if batch is not None)


def cut_or_wait(
    pieces: Iterable[Piece | None],
    columns: Columns,
    first: int,
    keeps_rest: Callable[[], bool],
    whole: bool,
    rows: int = BATCH_ROWS,
) -> Iterator[Batch | None]:
    """Cut as :func:`cut`, and yield None where a None among the pieces gives no batch.

    Parameters
    ----------
    pieces, columns, first, rows
        As of :func:`cut`.
    keeps_rest : callable
        Asked at the end whether a last short batch is given.
    whole : bool
        None among the pieces gives no short batch.
    """
    held = _Held(first, columns)
    for piece in pieces:
        if piece is None:
            yield held.give() if held and not whole else None
            continue
        start, length = 0, len(piece.values)
        while True:
            stop = min(length, start + rows - (held.first + held.count) % rows)
            held.take(piece, start, stop)
            if (stop > start and (held.first + held.count) % rows == 0) or held.full(rows):
                yield held.give()
            start = stop
            if start == length:
                break
    if held and keeps_rest():
        yield held.give()


class _Held:
    """The samples and malformed rows of the batch that is being filled."""

    def __init__(self, first: int, columns: Columns) -> None:
        self.first = first
        self._width = len(columns.read)
        self._timed = columns.time is not None
        self._clear()

    def _clear(self) -> None:
        self.count = 0
        self._values: list[NDArray[np.float64]] = []
        self._times: list[NDArray[np.int64]] = []
        self._malformed: list[Malformed] = []

    def __bool__(self) -> bool:
        return bool(self.count or self._malformed)

    def full(self, rows: int) -> bool:
        # samples that are held stay for their boundary, unless malformed rows by far outnumber them
        return len(self._malformed) >= (OUTNUMBERED * rows if self.count else rows)

    def take(self, piece: Piece, start: int, stop: int) -> None:
        self._values.append(piece.values[start:stop])
        if piece.times is not None:
            self._times.append(piece.times[start:stop])
        self.count += stop - start
        last = stop == len(piece.values)
        self._malformed += [
            row
            for before, row in piece.malformed
            # what stands behind the last sample taken would be met again from its position
            if before >= start and (before < stop or last)
        ]
        self._place, self._rows = piece.place, stop

    def give(self) -> Batch:
        values = (
            self._values[0] if len(self._values) == 1 else np.concatenate(self._values)
        ).reshape(self.count, self._width)
        times = None
        if self._timed:
            times = self._times[0] if len(self._times) == 1 else np.concatenate(self._times)
        place, behind, rows = self._place, self.first + self.count, self._rows
        batch = Batch(
            self.first,
            values,
            times,
            lambda: {"sample": behind, **place(rows)},
            tuple(self._malformed),
        )
        self.first += self.count
        self._clear()
        return batch


def shortened(row: bytes) -> str:
    """Return a row as text that can be shown and kept: printable, of bounded length."""
    text = row[:MOST_TEXT].decode("utf-8", "backslashreplace").rstrip("\r\n")
    return "".join(c if c.isprintable() or c == "\t" else ascii(c)[1:-1] for c in text)
