"""Following a growing file: through half-written lines, rotation, truncation and restarts."""

from __future__ import annotations

import os
import shutil
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pytest

from streambasis.errors import FeedError
from streambasis.feeds import BATCH_ROWS, Batch, Feed, FeedOptions, Position, open_feed
from streambasis.feeds.growing import GRACE_LOOKS, PAUSE

GIVE_UP = 20.0
HEADER = "time,a\n"
START = 1_772_409_601_000_000_000


class Follower:
    """A feed that is followed, and what it has given so far."""

    def __init__(self, feed: Feed, stop: threading.Event) -> None:
        self.feed = feed
        self.stop = stop
        self._batches = feed.batches()
        self.given: list[Batch] = []

    def read(self, samples: int) -> list[float]:
        """Return the next samples of channel ``a``, of which there must be that many."""
        found: list[float] = []
        while len(found) < samples:
            batch = next(self._batches, None)
            assert batch is not None, f"{samples} samples expected, {len(found)} came: {found}"
            self.given.append(batch)
            found += batch.values[:, 0].tolist()
        assert len(found) == samples
        return found

    def rest(self) -> list[Batch]:
        """Return what else comes before the feed ends."""
        return list(self._batches)

    def faults(self) -> list[tuple[int, str]]:
        """Return line and reason of the malformed rows given so far."""
        return [(row.number, row.reason) for batch in self.given for row in batch.malformed]

    @property
    def position(self) -> Position:
        """Return the position behind what was given."""
        return self.given[-1].position


@contextmanager
def following(
    path: Path, position: Position | None = None, *, strict: bool = False, wait: float | None = 0.01
) -> Iterator[Follower]:
    """Follow a file; a feed that does not give what a test waits for ends after a while."""
    stop = threading.Event()
    timer = threading.Timer(GIVE_UP, stop.set)
    timer.start()
    options = FeedOptions(strict=strict, follow=True, wait=wait, stop=stop)
    try:
        with open_feed(path, position=position, options=options) as feed:
            yield Follower(feed, stop)
    finally:
        timer.cancel()


def append(path: Path, text: str) -> None:
    """Write at the end of a file, as its writer does."""
    with path.open("a") as file:
        file.write(text)


def rows(*values: float) -> str:
    """Return lines of a time and a value."""
    return "".join(f"{value},{value}\n" for value in values)


@pytest.fixture
def path(tmp_path: Path) -> Path:
    """Return a file with names and two rows."""
    path = tmp_path / "feed.csv"
    path.write_text(HEADER + rows(1, 2))
    return path


def test_a_half_written_line_waits_for_its_rest(path: Path) -> None:
    """Digits of an unfinished number are never taken for a number."""
    with following(path) as follower:
        assert follower.read(2) == [1, 2]
        append(path, "3,3")
        append(path, ".25\n4,4.")
        assert follower.read(1) == [3.25]
        append(path, "5\n")
        assert follower.read(1) == [4.5]
        assert follower.faults() == []
        assert follower.feed.live
        assert follower.feed.repeatable


def test_a_file_renamed_away_is_read_to_its_end_then_the_new_one(path: Path) -> None:
    """What the writer adds after the renaming, before it notices, is not lost."""
    with following(path) as follower:
        assert follower.read(2) == [1, 2]
        path.rename(path.with_name("feed.csv.1"))
        append(path.with_name("feed.csv.1"), rows(3))
        assert follower.read(1) == [3]
        path.write_text(HEADER + rows(10))
        append(path.with_name("feed.csv.1"), rows(4))
        assert follower.read(2) == [4, 10]
        append(path, rows(11))
        assert follower.read(1) == [11]
        assert follower.position["line"] == 4
        assert follower.faults() == []


def test_a_line_cut_short_by_rotation_is_malformed(path: Path) -> None:
    """The unfinished end of a file that was replaced is reported, not taken as a number."""
    with following(path) as follower:
        follower.read(2)
        append(path, "3,3.1")
        path.rename(path.with_name("feed.csv.1"))
        path.write_text(HEADER + rows(10))
        assert follower.read(1) == [10]
        assert follower.faults() == [(4, "the file was replaced before this line was whole")]


@pytest.mark.parametrize("content", [rows(7), rows(*range(100, 200))], ids=["shorter", "longer"])
def test_a_truncated_file_is_read_from_its_beginning(path: Path, content: str) -> None:
    """A file emptied and written anew in place is noticed even if it is longer than before."""
    with following(path) as follower:
        follower.read(2)
        with path.open("r+") as file:
            file.truncate(0)
            file.write(HEADER + content)
        expected = [float(line.split(",")[1]) for line in content.splitlines()]
        assert follower.read(len(expected)) == expected


def test_a_new_file_may_order_its_columns_anew_or_name_none(path: Path) -> None:
    """Channels are found by name in every file; a file without names goes on with the last."""
    with following(path) as follower:
        follower.read(2)
        path.rename(path.with_name("feed.csv.1"))
        path.write_text("b,a,time\n0,3,3\n")
        assert follower.read(1) == [3]
        path.rename(path.with_name("feed.csv.2"))
        path.write_text("0,4,4\n")
        assert follower.read(1) == [4]
        path.rename(path.with_name("feed.csv.3"))
        path.write_text("time,c\n5,5\n")
        with pytest.raises(FeedError, match="a new file begins without a column 'a'"):
            follower.read(1)


def test_a_stop_ends_the_feed_and_leaves_what_is_unfinished(path: Path) -> None:
    """Whole batches only: what does not fill one is left for the next run, which reads it."""
    append(path, rows(*range(3, BATCH_ROWS + 3)))
    with following(path, wait=None) as follower:
        assert len(follower.read(BATCH_ROWS)) == BATCH_ROWS
        follower.stop.set()
        assert follower.rest() == []
    with following(path, follower.position) as again:
        assert again.read(2) == [BATCH_ROWS + 1, BATCH_ROWS + 2]


def test_restarts_anywhere_lose_and_repeat_nothing(path: Path) -> None:
    """Over growth, rotations and truncations, a new run at each position gives what is missing."""
    rng = np.random.default_rng(8)
    with following(path) as follower:
        found = follower.read(2)
        position = follower.position
    expected = list(found)
    number = 3
    for step in range(24):
        kind = rng.integers(4)
        fresh = [float(number + i) for i in range(rng.integers(1, 6))]
        number += len(fresh)
        if kind == 0:
            path.rename(path.with_name(f"feed.csv.{step}"))
            path.write_text(HEADER + rows(*fresh))
        elif kind == 1:
            shutil.copy2(path, path.with_name(f"feed.csv.{step}"))
            path.write_text(HEADER + rows(*fresh))
        else:
            append(path, rows(*fresh))
        # steps of a second: the clock of a file system may be coarser than this loop is fast
        os.utime(path, ns=(0, START + step * 10**9))
        expected += fresh
        if rng.random() < 0.6:
            with following(path, position, strict=True) as follower:
                found += follower.read(len(expected) - len(found))
                position = follower.position
            assert found == expected
            assert position["sample"] == len(expected)


def test_several_rotations_between_two_runs_are_caught_up(path: Path) -> None:
    """Files written in between are read in their order; other files beside them are not."""
    with following(path) as follower:
        follower.read(1 + 1)
    shutil.copy(path, path.with_name("feed.csv.bak"))
    append(path, rows(3))
    for number, name in [(4, "feed.csv.1"), (5, "feed.csv-20260302"), (6, "feed.csv.3")]:
        os.utime(path, ns=(0, START + number * 10**9))
        path.rename(path.with_name(name))
        path.write_text(HEADER + rows(number))
    with following(path, follower.position) as again:
        assert again.read(4) == [3, 4, 5, 6]
        assert again.faults() == []


def test_a_file_that_is_gone_is_reported(path: Path) -> None:
    """Where the file of the position cannot be found, the gap is told, or is an error."""
    with following(path) as follower:
        follower.read(2)
    path.write_text(HEADER + rows(9))
    with following(path, follower.position) as again:
        assert again.read(1) == [9]
        assert [reason[:27] for _, reason in again.faults()] == ["the file that the run left "]
        assert again.position["sample"] == 3
    with (
        following(path, follower.position, strict=True) as again,
        pytest.raises(FeedError, match="samples may be missing"),
    ):
        again.read(1)


def test_an_empty_file_is_waited_for(tmp_path: Path) -> None:
    """A file that its writer has only just made is no error."""
    path = tmp_path / "feed.csv"
    path.touch()
    timer = threading.Timer(5 * PAUSE, path.write_text, [HEADER + rows(1)])
    timer.start()
    with following(path) as follower:
        assert follower.read(1) == [1]
    timer.join()
    assert GRACE_LOOKS * PAUSE < 1


@pytest.mark.parametrize("wait", [0.01, 0.5, None])
def test_a_rotated_file_is_gone_on_with_however_long_silence_is(
    path: Path, wait: float | None
) -> None:
    """Looking at the names of the file that a run left off in does not lead out of it."""
    with following(path) as follower:
        follower.read(2)
    append(path, rows(3))
    path.rename(path.with_name("feed.csv.1"))
    path.write_text(HEADER + rows(*range(4, BATCH_ROWS + 4)))
    with following(path, follower.position, wait=wait, strict=True) as again:
        assert again.read(BATCH_ROWS - 2)[:3] == [3, 4, 5]


def test_a_file_replaced_before_its_first_row_is_no_error(tmp_path: Path) -> None:
    """Names alone, then another file with names and a row."""
    path = tmp_path / "feed.csv"
    path.write_text(HEADER)

    def replace() -> None:
        path.rename(tmp_path / "feed.csv.1")
        path.write_text(HEADER + rows(1))

    timer = threading.Timer(5 * PAUSE, replace)
    timer.start()
    with following(path, strict=True) as follower:
        assert follower.read(1) == [1]
    timer.join()


def test_binary_files_and_folders_cannot_be_followed(tmp_path: Path) -> None:
    """Each is refused with the reason."""
    (tmp_path / "feed").write_bytes(b"PAR1 and so on")
    with pytest.raises(FeedError, match="only text can be followed"):
        open_feed(tmp_path / "feed", options=FeedOptions(follow=True))
    with pytest.raises(FeedError, match="a folder cannot be followed"):
        open_feed(tmp_path, options=FeedOptions(follow=True))
