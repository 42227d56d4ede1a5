"""Opening a feed: what it is, is told by its first bytes."""

from __future__ import annotations

import os
import stat
import sys
from collections.abc import Callable, Sequence
from pathlib import Path

from streambasis.errors import FeedError
from streambasis.feeds.arrow import ArrowFeed, ArrowPipeFeed, ParquetFeed
from streambasis.feeds.folder import FolderFeed
from streambasis.feeds.growing import GrowingSource
from streambasis.feeds.linefeed import LineFeed, RowParser
from streambasis.feeds.objects import JsonRows
from streambasis.feeds.reading import Feed, FeedOptions, PieceFeed, Position
from streambasis.feeds.sources import PATIENCE, FileSource, GzipSource, PipeSource, Source
from streambasis.feeds.text import CsvRows

STANDARD_INPUT = "-"

_GZIP = b"\x1f\x8b"
# an Arrow stream begins with a continuation marker, an Arrow file with its name
_ARROW_STREAM = b"\xff\xff\xff\xff"
_ARROW_FILE = b"ARROW1"
_PARQUET = b"PAR1"
_BEGINNING = 8
_ENDINGS = {
    ".parquet": "Parquet",
    ".arrow": "Arrow IPC",
    ".arrows": "Arrow IPC",
    ".ipc": "Arrow IPC",
    ".feather": "Arrow IPC",
}


def open_feed(
    source: str | Path,
    *,
    channels: Sequence[str] | None = None,
    time: str | None = None,
    position: Position | None = None,
    options: FeedOptions | None = None,
) -> Feed:
    """Open a feed of samples: a file, a folder of files, standard input, or a topic of a broker.

    Parameters
    ----------
    source : str or Path
        A file of CSV or JSON lines (either may be packed with gzip), Parquet, or Arrow IPC (file
        or stream), whose format is told by its first bytes, not by its name; a folder of such
        files, read in the order of their names; ``-`` for standard input; or
        ``mqtt://host:port/topic``, ``mqtts://host:port/topic``.
    channels : sequence of str, optional
        Columns to read, in this order; every column but the time where not given.
    time : str, optional
        The time column; found by itself where there is one obvious candidate.
    position : dict, optional
        The position of a batch of an earlier run: the feed goes on behind it.
    options : FeedOptions, optional
        Everything else.

    Returns
    -------
    Feed
        Nothing but the beginning has been read yet.

    Raises
    ------
    FeedError
        If the source does not exist, is empty or damaged, the columns do not fit, or the position
        is not one of this feed; the message names the file, the column and the way out.

    Examples
    --------
    >>> import pathlib, tempfile
    >>> file = pathlib.Path(tempfile.mkdtemp()) / "feed.csv"
    >>> _ = file.write_text("time,a,b\\n2026-03-02T00:00:00,1,2\\n2026-03-02T00:00:01,3,\\n")
    >>> feed = open_feed(file)
    >>> feed.columns.channels, feed.columns.time
    (('a', 'b'), 'time')
    >>> [batch.values.tolist() for batch in feed.batches()]
    [[[1.0, 2.0], [3.0, nan]]]
    """
    options = options or FeedOptions()
    opening = _Opening(channels, time, options, position)
    text = str(source)
    if text.startswith(("mqtt://", "mqtts://")):
        # needs paho-mqtt, which only the extra [watch] installs
        from streambasis.feeds.mqtt import MqttFeed

        if options.keys is not None:
            raise FeedError(f"{text}: keys are read from files and pipes, not from a topic")

        return MqttFeed(text, channels, time, options, position)
    if text == STANDARD_INPUT:
        return opening.standard_input()
    path = Path(source)
    if path.is_dir():
        if options.follow:
            raise FeedError(f"{path}: a folder cannot be followed; follow one file of it")

        def opener(
            file: Path,
            channels: Sequence[str] | None,
            time: str | None,
            position: Position | None,
        ) -> PieceFeed:
            return _Opening(channels, time, options, position).file(file, str(file))

        return FolderFeed(path, channels, time, options, position, opener)
    return opening.file(path, str(path))


class _Opening:
    """One feed being opened."""

    def __init__(
        self,
        channels: Sequence[str] | None,
        time: str | None,
        options: FeedOptions,
        position: Position | None,
    ) -> None:
        self.channels, self.time = channels, time
        self.options, self.position = options, position

    def file(self, path: Path, name: str) -> PieceFeed:
        """Open a file."""
        beginning = self._beginning(path, name)
        packed = beginning.startswith(_GZIP)
        if self.options.follow:
            if packed or beginning.startswith((_PARQUET, _ARROW_FILE, _ARROW_STREAM)):
                raise FeedError(f"{name}: only text can be followed; this file is binary")
            return self._growing(path, name)
        if beginning.startswith(_PARQUET):
            return ParquetFeed(path, name, self.channels, self.time, self.options, self.position)
        if beginning.startswith((_ARROW_FILE, _ARROW_STREAM)):
            return ArrowFeed(path, name, self.channels, self.time, self.options, self.position)
        ending = "" if packed else path.suffix.lower()
        if ending in _ENDINGS:
            raise FeedError(f"{name}: named like {_ENDINGS[ending]}, but its content is not that")
        source: Source = FileSource(path)
        if packed:
            source = GzipSource(name, source)
        size = None if packed else path.stat().st_size
        return LineFeed(name, source, self._parser(name), self.options, self.position, size=size)

    def _beginning(self, path: Path, name: str) -> bytes:
        try:
            if not stat.S_ISREG(path.stat().st_mode):
                raise FeedError(f"{name}: not a file; send it to standard input (-) instead")
            with path.open("rb") as handle:
                beginning = handle.read(_BEGINNING)
        except FileNotFoundError:
            raise FeedError(f"{name}: no such file") from None
        except OSError as error:
            raise FeedError(f"{name}: cannot be read ({error.strerror})") from None
        if not beginning and not self.options.follow:
            raise FeedError(f"{name}: the file is empty")
        return beginning

    def _parser(self, name: str) -> Callable[[bytes], RowParser]:
        """Return what makes the parser, given the first lines."""
        kind = self.options.format

        def make(peek: bytes) -> RowParser:
            start = peek[:_BEGINNING]
            if b"\x00" in start:
                raise FeedError(f"{name}: neither text nor Parquet nor Arrow IPC (binary content)")
            if kind == "json" or (
                kind is None and start.lstrip(b"\xef\xbb\xbf \r\n\t")[:1] == b"{"
            ):
                return JsonRows(name, peek, self.channels, self.time, self.options.keys)
            return CsvRows(name, peek, self.channels, self.time, self.options.keys)

        return make

    def _growing(self, path: Path, name: str) -> PieceFeed:
        source = GrowingSource(path, self.options.stop, self.options.wait or PATIENCE)
        lost = None
        if self.position is not None and not source.find(self.position):
            lost = "the file that the run left off in is gone: samples may be missing here"
        return LineFeed(name, source, self._parser(name), self.options, self.position, lost=lost)

    def standard_input(self) -> PieceFeed:
        """Open standard input: a file that was put there, or a pipe."""
        name = "standard input"
        descriptor = sys.stdin.fileno()
        if stat.S_ISREG(os.fstat(descriptor).st_mode):
            # the same file by another name, which can be gone back to
            return self.file(Path(f"/dev/fd/{descriptor}"), name)
        if self.options.follow:
            raise FeedError(f"{name}: a pipe is always read as it comes; leave out following")
        source = PipeSource(descriptor, self.options.stop, self.options.wait or PATIENCE)
        beginning = b""
        while len(beginning) < _BEGINNING:
            more = source.read(_BEGINNING - len(beginning))
            if more == b"":
                break
            beginning += more or b""
            if b"\n" in beginning:
                break
        if not beginning:
            raise FeedError(f"{name}: the feed is empty")
        if beginning.startswith(_ARROW_STREAM):
            return ArrowPipeFeed(
                source, beginning, name, self.channels, self.time, self.options, self.position
            )
        if beginning.startswith((_ARROW_FILE, _PARQUET)):
            raise FeedError(
                f"{name}: this format is read from its end, which a pipe does not have; give the "
                "file by name, or send an Arrow IPC stream"
            )
        source.take_back(beginning)
        text: Source = source
        if beginning.startswith(_GZIP):
            text = GzipSource(name, source)
        return LineFeed(name, text, self._parser(name), self.options, self.position)
