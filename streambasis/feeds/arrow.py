"""Parquet files, and Arrow IPC files and streams, as feeds."""

from __future__ import annotations

from abc import abstractmethod
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pyarrow as pa

from streambasis.errors import FeedError
from streambasis.feeds.columns import Columns, choose, times_of, values_of
from streambasis.feeds.lines import digest
from streambasis.feeds.reading import (
    BATCH_ROWS,
    FeedOptions,
    Malformed,
    Piece,
    PieceFeed,
    Position,
    whole_number,
)
from streambasis.feeds.rows import Rows, lines_behind
from streambasis.feeds.sources import PipeSource

_HEAD_BYTES = 4096
_READ_VALUES = 1 << 19
"""Values decoded from Parquet at a time: 4 MB where they are float64."""


@contextmanager
def damage_named(name: str, format_name: str) -> Iterator[None]:
    """Turn what Arrow says of damaged data into an error that names where they come from."""
    try:
        yield
    except FeedError:
        raise
    except (pa.ArrowException, OSError) as error:
        first_line = str(error).partition("\n")[0]
        raise FeedError(f"{name}: damaged {format_name} ({first_line})") from None


def samples_of(batch: pa.RecordBatch, columns: Columns) -> Rows:
    """Return the rows of an Arrow batch that hold samples, and what is wrong with the others."""
    rows = Rows.empty(len(columns.read), columns.time is not None)
    values = np.empty((len(batch), len(columns.read)))
    values_of((batch.column(name) for name in columns.read), values, columns.keys)
    lines = np.arange(len(batch))
    times = None
    if columns.time is not None:
        times, missing, outside = times_of(batch.column(columns.time), columns)
        rows.note_times(lines, missing, outside, columns.time)
    if columns.keys is not None:
        rows.note_keys(lines, values[:, -1], columns.keys.column)
    rows.add(values, times, lines, columns.read)
    return rows


class _TableFeed(PieceFeed):
    """Arrow batches as samples; a position is a number of rows."""

    kind = "rows"
    format_name = ""

    def _begin(self, position: Position | None, identity: Position) -> None:
        self._identity = identity
        self._skip = 0
        if position is None or not self.repeatable:
            return
        self._skip = whole_number(self.name, position, "row")
        if any(position.get(key) != value for key, value in identity.items()):
            raise FeedError(
                f"{self.name}: not the file that the run left off in; give the same file, or "
                "start in a new folder"
            )

    @abstractmethod
    def _record_batches(self, skip: int) -> Iterator[tuple[int, pa.RecordBatch | None]]:
        """Yield batches with the number of their first row, those before row ``skip`` left out."""

    def pieces(self) -> Iterator[Piece | None]:
        """Yield the samples, Arrow batch by Arrow batch."""
        with damage_named(self.name, self.format_name):
            for first, batch in self._record_batches(self._skip):
                if batch is None:
                    yield None
                    continue
                left_out = max(0, self._skip - first)
                for start in range(left_out, len(batch), BATCH_ROWS):
                    yield self._piece(first + start, batch.slice(start, BATCH_ROWS))

    def _piece(self, first: int, batch: pa.RecordBatch) -> Piece:
        rows = samples_of(batch, self.columns)
        values, times, where = rows.joined()
        faults = sorted(rows.faults.items())
        if faults and self.options.strict:
            index, reason = faults[0]
            raise FeedError(f"{self.name}, row {first + index + 1}: {reason}")
        before = np.searchsorted(where, [index for index, _ in faults]).tolist()
        malformed = [
            (place, Malformed(self.name, first + index + 1, reason, "", "row"))
            for place, (index, reason) in zip(before, faults, strict=True)
        ]

        def place(count: int) -> Position:
            behind = lines_behind(count, where, len(batch))
            return {"row": first + behind, **self._identity}

        return Piece(values, times, place, malformed)


class ParquetFeed(_TableFeed):
    """A Parquet file, read one batch of rows after the other."""

    format_name = "Parquet file"

    def __init__(
        self,
        path: Path,
        name: str,
        channels: Sequence[str] | None,
        time: str | None,
        options: FeedOptions,
        position: Position | None,
    ) -> None:
        import pyarrow.parquet as pq

        super().__init__(name, options, position)
        with damage_named(name, self.format_name):
            # read, not mapped: a mapped file that somebody cuts short kills the process
            self._file = pq.ParquetFile(path, memory_map=False)
            self.columns = choose(name, self._file.schema_arrow, channels, time, options.keys)
            self.rows = self._file.metadata.num_rows
        self._begin(position, _identity(path, whole=True))

    def _record_batches(self, skip: int) -> Iterator[tuple[int, pa.RecordBatch | None]]:
        wanted = [*self.columns.read, *([self.columns.time] if self.columns.time else [])]
        first = 0
        groups: list[int] = []
        for group in range(self._file.metadata.num_row_groups):
            rows = self._file.metadata.row_group(group).num_rows
            if not groups and first + rows <= skip:
                first += rows
            else:
                groups.append(group)
        size = max(BATCH_ROWS, _READ_VALUES // len(wanted))
        if groups:
            for batch in self._file.iter_batches(
                batch_size=size, columns=wanted, row_groups=groups
            ):
                yield first, batch
                first += len(batch)

    def close(self) -> None:
        """Close the file."""
        super().close()
        self._file.close()


class ArrowFeed(_TableFeed):
    """An Arrow IPC file or stream, read one record batch after the other."""

    format_name = "Arrow IPC file"

    def __init__(
        self,
        path: Path,
        name: str,
        channels: Sequence[str] | None,
        time: str | None,
        options: FeedOptions,
        position: Position | None,
    ) -> None:
        super().__init__(name, options, position)
        with damage_named(name, self.format_name):
            # read, not mapped: a mapped file that somebody cuts short kills the process
            self._source = pa.OSFile(str(path))
            self._read: Callable[[], Iterator[pa.RecordBatch]]
            is_file = self._source.read(6) == b"ARROW1"
            if is_file:
                file = pa.ipc.open_file(self._source)
                self._read = lambda: (file.get_batch(i) for i in range(file.num_record_batches))
                schema = file.schema
                last = file.num_record_batches - 1
                if last >= 0:
                    # writers cut equal batches and a shorter last one
                    self.rows = last * file.get_batch(0).num_rows + file.get_batch(last).num_rows
            else:
                self._source.seek(0)
                stream = pa.ipc.open_stream(self._source)
                self._read = lambda: iter(stream)
                schema = stream.schema
            self.columns = choose(name, schema, channels, time, options.keys)
        self._begin(position, _identity(path, whole=is_file))

    def _record_batches(self, skip: int) -> Iterator[tuple[int, pa.RecordBatch | None]]:
        first = 0
        for batch in self._read():
            if first + len(batch) > skip:
                yield first, batch
            first += len(batch)

    def close(self) -> None:
        """Close the file."""
        super().close()
        self._source.close()


class ArrowPipeFeed(_TableFeed):
    """An Arrow IPC stream from a pipe, each record batch given when it comes."""

    format_name = "Arrow IPC stream"
    live = True
    repeatable = False

    def __init__(
        self,
        source: PipeSource,
        beginning: bytes,
        name: str,
        channels: Sequence[str] | None,
        time: str | None,
        options: FeedOptions,
        position: Position | None,
    ) -> None:
        super().__init__(name, options, position)
        self._bytes = _Exactly(source, beginning)
        with damage_named(name, self.format_name):
            self._stream = pa.ipc.open_stream(pa.PythonFile(self._bytes, mode="r"))
            self.columns = choose(name, self._stream.schema, channels, time, options.keys)
        self._begin(position, {})

    def _record_batches(self, skip: int) -> Iterator[tuple[int, pa.RecordBatch | None]]:
        first = skip
        while not self.options.stop.is_set():
            if self._bytes.idle():
                yield first, None
            try:
                batch = self._stream.read_next_batch()
            except StopIteration:
                return
            except (pa.ArrowException, OSError):
                if self.options.stop.is_set():
                    return
                raise
            yield first, batch
            first += len(batch)


class _Exactly:
    """A pipe as Arrow reads it: as many bytes as asked for, unless it ends."""

    closed = False

    def __init__(self, source: PipeSource, beginning: bytes) -> None:
        self._source = source
        self._held = beginning

    def idle(self) -> bool:
        """Wait for a byte; return whether none came for a while."""
        if not self._held:
            more = self._source.read(1)
            if more is None:
                return True
            self._held = more
        return False

    def read(self, count: int = -1) -> bytes:
        parts, left = [self._held[:count]], count - len(self._held[:count])
        self._held = self._held[count:]
        while left > 0:
            more = self._source.read(min(left, 1 << 20))
            if more is not None:
                if not more:
                    break
                parts.append(more)
                left -= len(more)
        return b"".join(parts)

    def close(self) -> None:
        """Do nothing: the descriptor is not ours."""


def _identity(path: Path, *, whole: bool) -> Position:
    """Return what tells a file from another; a stream may have grown since."""
    with path.open("rb") as file:
        size = file.seek(0, 2)
        file.seek(0)
        if not whole:
            return {"check": digest(file.read(min(size, _HEAD_BYTES // 16)))}
        head = file.read(_HEAD_BYTES)
        file.seek(max(0, size - _HEAD_BYTES))
        return {"size": size, "check": digest(head + file.read())}
