"""A live feed that outruns its reader waits, or the oldest samples make room and are counted."""

from __future__ import annotations

import os
import sys
import threading
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from streambasis.errors import FeedError
from streambasis.feeds import FeedOptions, open_feed
from streambasis.feeds.ahead import Ahead
from streambasis.feeds.reading import AHEAD_ROWS, Piece

ROWS = 200_000
QUEUE = 30_000
HEADER = b"a,b\n"
PAUSE = threading.Event()


def text(first: int, last: int) -> bytes:
    """Return lines of CSV that hold the numbers of their samples."""
    return b"".join(b"%d,%d\n" % (n, -n) for n in range(first, last))


def wait_for(condition: object) -> None:
    """Wait until a condition, a function of nothing, holds."""
    assert callable(condition)
    for _ in range(1000):
        if condition():
            return
        PAUSE.wait(0.01)
    raise AssertionError("what was waited for did not happen")


@pytest.fixture
def pipe(monkeypatch: pytest.MonkeyPatch) -> Iterator[int]:
    """Make standard input a pipe, and give the end to write to."""
    out, into = os.pipe()
    with os.fdopen(out) as reading:
        monkeypatch.setattr(sys, "stdin", reading)
        yield into


def written(into: int) -> threading.Thread:
    """Write the whole feed to a pipe in a thread, as fast as it takes it."""

    def write() -> None:
        with os.fdopen(into, "wb") as file:
            file.write(HEADER + text(0, ROWS))

    thread = threading.Thread(target=write)
    thread.start()
    return thread


def test_a_pipe_that_outruns_its_reader_drops_the_oldest(pipe: int) -> None:
    """The writer never waits; what is left is in order, ends with the newest, and adds up."""
    options = FeedOptions(when_full="drop-oldest", queue=QUEUE)
    writer = written(pipe)
    with open_feed("-", options=options) as feed:
        arrivals = feed.arrivals()
        first = next(batch for batch in arrivals if batch is not None)
        writer.join(20)
        assert not writer.is_alive()
        wait_for(lambda: feed.counts["dropped"] > ROWS // 2)
        assert feed.counts["queued"] <= QUEUE
        rest = [batch.values[:, 0] for batch in arrivals if batch is not None]
        found = np.concatenate([first.values[:, 0], *rest])
        assert len(found) + feed.counts["dropped"] == ROWS
    assert found[-1] == ROWS - 1
    assert (np.diff(found) > 0).all()


def test_a_pipe_that_may_block_loses_nothing(pipe: int) -> None:
    """The writer waits for the reader, and every sample comes."""
    writer = written(pipe)
    with open_feed("-") as feed:
        PAUSE.wait(0.1)
        assert writer.is_alive()
        found = np.concatenate([batch.values[:, 0] for batch in feed.batches()])
        assert "dropped" not in feed.counts
    writer.join(20)
    assert found.tolist() == list(range(ROWS))


def test_a_followed_file_can_drop_as_well_and_goes_on_from_its_position(tmp_path: Path) -> None:
    """Dropped samples have no numbers: those that follow are counted on, also by the next run."""
    path = tmp_path / "feed.csv"
    path.write_bytes(HEADER + text(0, ROWS))
    stop = threading.Event()
    options = FeedOptions(follow=True, when_full="drop-oldest", queue=QUEUE, stop=stop)
    with open_feed(path, options=options) as feed:
        arrivals = feed.arrivals()
        batch = next(batch for batch in arrivals if batch is not None)
        wait_for(lambda: feed.counts["dropped"] > ROWS // 2)
        while batch is None or batch.values[-1, 0] < ROWS - 1:
            batch = next(arrivals) or batch
        count = batch.position["sample"]
        assert count + feed.counts["dropped"] == ROWS
    with path.open("ab") as file:
        file.write(text(ROWS, ROWS + 10))
    with open_feed(path, options=options, position=batch.position) as feed:
        batch = next(feed.batches())
        assert batch.first == count
        assert batch.values[:, 0].tolist() == list(range(ROWS, ROWS + 10))


def file_of(folder: Path, ending: str) -> Path:
    """Return a file of some samples, with gaps where a row is torn."""
    numbers = np.arange(120_000.0)
    table = pa.table({"a": numbers, "b": -numbers})
    path = folder / f"feed.{ending}"
    if ending == "csv":
        lines = [b"%d,%d\n" % (n, -n) if n % 777 else b"torn\n" for n in range(120_000)]
        path.write_bytes(HEADER + b"".join(lines))
    elif ending == "parquet":
        pq.write_table(table, path, row_group_size=3000)
    else:
        with pa.ipc.new_file(path, table.schema) as file:
            file.write_table(table, max_chunksize=3000)
    return path


@pytest.mark.parametrize("ending", ["csv", "parquet", "arrow"])
def test_a_file_read_ahead_gives_the_same_and_ends_with_its_reader(
    tmp_path: Path, ending: str
) -> None:
    """Batches, positions and malformed rows are the same, and no thread outlives the feed."""
    path = file_of(tmp_path, ending)
    plain, ahead = FeedOptions(strict=False), FeedOptions(strict=False, ahead=True)
    with open_feed(path, options=plain) as feed:
        expected = list(feed.batches())
    with open_feed(path, options=ahead) as feed:
        found = list(feed.batches())
    for one, other in zip(expected, found, strict=True):
        assert (one.first, one.position, one.malformed) == (
            other.first,
            other.position,
            other.malformed,
        )
        np.testing.assert_array_equal(one.values, other.values)
    with open_feed(path, options=ahead) as feed:
        next(feed.batches())
        wait_for(lambda: feed.counts["queued"] > AHEAD_ROWS // 2)
        assert feed.counts["queued"] <= AHEAD_ROWS or ending == "csv"
    assert not [t for t in threading.enumerate() if t.name == "streambasis-feed"]
    with open_feed(path, options=ahead, position=expected[4].position) as feed:
        assert next(feed.batches()).position == expected[5].position


def test_an_error_of_the_feed_reaches_the_reader_behind_what_came_before() -> None:
    """The thread keeps what ended it for whoever reads."""

    def pieces() -> Iterator[Piece | None]:
        yield Piece(np.zeros((3, 1)), None, lambda _: {})
        yield None
        raise FeedError("torn")

    ahead = Ahead(pieces(), 10, drops=True)
    given = iter(ahead)
    assert len(next(given).values) == 3
    with pytest.raises(FeedError, match="torn"):
        list(given)
    ahead.close()


@pytest.mark.parametrize("given", [{"when_full": "drop"}, {"queue": 0}])
def test_settings_that_make_no_sense_are_refused(given: dict[str, object]) -> None:
    """Named with the value."""
    (value,) = given.values()
    with pytest.raises(FeedError, match=str(value)):
        FeedOptions(**given)
