"""Parquet files, and Arrow IPC files and streams, as feeds."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

import pyarrow as pa

from streambasis.errors import FeedError
from streambasis.feeds.columns import choose
from streambasis.feeds.reading import BATCH_ROWS, Batch, recut


@contextmanager
def _damage_named(name: str, format_name: str) -> Iterator[None]:
    """Turn what Arrow says of a damaged file into an error that names the file."""
    try:
        yield
    except FeedError:
        raise
    except (pa.ArrowException, OSError) as error:
        first_line = str(error).partition("\n")[0]
        raise FeedError(f"{name}: damaged {format_name} ({first_line})") from None


class ParquetFeed:
    """A Parquet file, read one batch of rows after the other."""

    def __init__(self, path: Path, channels: Sequence[str] | None, time: str | None) -> None:
        import pyarrow.parquet as pq

        self.name = str(path)
        with _damage_named(self.name, "Parquet file"):
            self._file = pq.ParquetFile(path)
            self.columns = choose(self.name, self._file.schema_arrow, channels, time)
        self.rows: int | None = self._file.metadata.num_rows

    def batches(self) -> Iterator[Batch]:
        """Yield the samples in order."""
        wanted = [*self.columns.channels, *([self.columns.time] if self.columns.time else [])]
        with _damage_named(self.name, "Parquet file"):
            source = self._file.iter_batches(batch_size=BATCH_ROWS, columns=wanted)
            yield from recut(self.name, self.columns, source)


class ArrowFeed:
    """An Arrow IPC file or stream, read one record batch after the other."""

    def __init__(self, path: Path, channels: Sequence[str] | None, time: str | None) -> None:
        self.name = str(path)
        with _damage_named(self.name, "Arrow IPC file"):
            # read, not mapped: a mapped file that somebody cuts short kills the process
            source = pa.OSFile(self.name)
            self.rows: int | None = None
            self._read: Callable[[], Iterator[pa.RecordBatch]]
            if source.read(6) == b"ARROW1":
                file = pa.ipc.open_file(source)
                self._read = lambda: (file.get_batch(i) for i in range(file.num_record_batches))
                schema = file.schema
                last = file.num_record_batches - 1
                if last >= 0:
                    # writers cut equal batches and a shorter last one
                    self.rows = last * file.get_batch(0).num_rows + file.get_batch(last).num_rows
            else:
                source.seek(0)
                stream = pa.ipc.open_stream(source)
                self._read = lambda: iter(stream)
                schema = stream.schema
            self.columns = choose(self.name, schema, channels, time)

    def batches(self) -> Iterator[Batch]:
        """Yield the samples in order."""
        with _damage_named(self.name, "Arrow IPC file"):
            yield from recut(self.name, self.columns, self._read())
