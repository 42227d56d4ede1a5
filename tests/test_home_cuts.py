"""However the samples of a run are cut into batches, what it finds is the same."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from runs import Ear, table_of

from streambasis.feeds import Batch
from streambasis.feeds.columns import Columns
from streambasis.monitor import NoveltyMonitor
from streambasis.watch.home import Home
from streambasis.watch.loop import Run

ROWS = 14_000


class CutFeed:
    """A feed whose batches end at given samples."""

    name = "cut"
    rows = None
    live, repeatable, due = True, False, False
    trouble = ""

    def __init__(self, values: np.ndarray, ends: np.ndarray) -> None:
        self._values, self._ends = values, ends
        self.columns = Columns(tuple(f"c{i}" for i in range(values.shape[1])), None, None)
        self.counts: dict[str, int] = {}

    def arrivals(self) -> Iterator[Batch | None]:
        """Yield the batches, and nothing now and then."""
        first = 0
        for end in self._ends.tolist():
            yield Batch(first, self._values[first:end], None)
            yield None
            first = end

    def commit(self, position: dict[str, Any]) -> None:
        """Hear of a commit."""


class Story(Ear):
    """Keeps what a run tells of its events."""

    def __init__(self) -> None:
        super().__init__()
        self.told: list[tuple[str, dict[str, Any]]] = []

    def opened(self, event: Any) -> None:
        """Keep the number of an opening; what is known of the event then depends on the batch."""
        self.told.append(("opened", {"event": event["event"], "start": event["start"]}))

    def closed(self, event: Any) -> None:
        """Keep a closing."""
        self.told.append(("closed", dict(event)))

    def adopted(self, event: Any) -> None:
        """Keep an adoption."""
        self.told.append(("adopted", {"event": event["event"]}))


def told(values: np.ndarray, ends: np.ndarray, adopt_after: int, folder: Path) -> Any:
    """Run over batches that end at some samples; return events and decisions."""
    story = Story()
    feed: Any = CutFeed(values, ends)
    monitor = NoveltyMonitor(feed.columns.channels, baseline=1000, false_alarm=1e-3)
    with Home(folder) as home:
        Run(feed, monitor, story, home=home, every=(700, 1e9), adopt_after=adopt_after)(
            threading.Event()
        )
    # an opening and an adoption in one batch are told in the order in which they are noticed
    (decisions,) = (folder / "decisions").iterdir()
    return sorted(story.told, key=lambda item: (item[1]["event"], item[0])), decisions.read_bytes()


@pytest.mark.parametrize("adopt_after", [20, 60, 1000])
def test_adoption_is_at_its_sample_however_batches_are_cut(
    tmp_path: Path, adopt_after: int
) -> None:
    """Whole batches, one after the other or all at once, or cut at random: the same bytes."""
    table = table_of(ROWS)
    values = np.column_stack([column.to_numpy() for column in table.columns])
    rng = np.random.default_rng(adopt_after)
    whole = np.append(np.arange(1024, ROWS, 1024), ROWS)
    random = np.append(np.sort(rng.choice(np.arange(1, ROWS), 60, replace=False)), ROWS)
    expected = told(values, whole, adopt_after, tmp_path / "whole")
    assert any(kind == "adopted" for kind, _ in expected[0])
    assert told(values, random, adopt_after, tmp_path / "random") == expected
    assert told(values, np.array([ROWS]), adopt_after, tmp_path / "one") == expected
