"""A live feed that outruns its reader waits, or the oldest samples make room and are counted."""

from __future__ import annotations

import os
import sys
import threading
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from streambasis.errors import FeedError
from streambasis.feeds import FeedOptions, open_feed
from streambasis.feeds.ahead import Ahead
from streambasis.feeds.reading import Piece

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


def test_an_error_of_the_feed_reaches_the_reader_behind_what_came_before() -> None:
    """The thread keeps what ended it for whoever reads."""

    def pieces() -> Iterator[Piece | None]:
        yield Piece(np.zeros((3, 1)), None, lambda _: {})
        yield None
        raise FeedError("torn")

    ahead = Ahead(pieces(), 10)
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
