"""Feeds from files: what a file is, is told by its first bytes."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from streambasis.errors import FeedError
from streambasis.feeds.arrow import ArrowFeed, ParquetFeed
from streambasis.feeds.reading import Feed
from streambasis.feeds.text import CsvFeed

_ENDINGS = {
    ".parquet": "Parquet",
    ".arrow": "Arrow IPC",
    ".arrows": "Arrow IPC",
    ".ipc": "Arrow IPC",
    ".feather": "Arrow IPC",
}


def open_feed(
    path: str | Path, *, channels: Sequence[str] | None = None, time: str | None = None
) -> Feed:
    """Open a file of samples: CSV, Parquet, or Arrow IPC (file or stream).

    Parameters
    ----------
    path : str or Path
        The file. The format is told by its first bytes, not by its name.
    channels : sequence of str, optional
        Columns to read, in this order; every column but the time where not given.
    time : str, optional
        The time column; found by itself where there is one obvious candidate.

    Returns
    -------
    Feed
        Nothing but the beginning of the file has been read yet.

    Raises
    ------
    FeedError
        If the file does not exist, is empty or damaged, or the columns do not fit; the message
        names the file, the column and the way out.

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
    file = Path(path)
    try:
        with file.open("rb") as handle:
            beginning = handle.read(8)
    except FileNotFoundError:
        raise FeedError(f"{file}: no such file") from None
    except IsADirectoryError:
        raise FeedError(f"{file}: a folder, not a file") from None
    except OSError as error:
        raise FeedError(f"{file}: cannot be read ({error.strerror})") from None
    if not beginning:
        raise FeedError(f"{file}: the file is empty")
    if beginning.startswith(b"PAR1"):
        return ParquetFeed(file, channels, time)
    # an Arrow stream begins with a continuation marker, an Arrow file with its name
    if beginning.startswith((b"ARROW1", b"\xff\xff\xff\xff")):
        return ArrowFeed(file, channels, time)
    format_name = _ENDINGS.get(file.suffix.lower())
    if format_name is not None:
        raise FeedError(f"{file}: named like {format_name}, but its content is not that")
    if b"\x00" in beginning:
        raise FeedError(f"{file}: neither CSV nor Parquet nor Arrow IPC (binary content)")
    return CsvFeed(file, channels, time)
