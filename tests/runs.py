"""A feed worth a run, and runs over it that can be stopped, disturbed and compared."""

from __future__ import annotations

import threading
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pytest

from streambasis.feeds import Broker, FeedOptions, Position, open_feed
from streambasis.monitor import NoveltyMonitor
from streambasis.watch import home as home_module
from streambasis.watch.home import Home
from streambasis.watch.loop import Run
from streambasis.watch.vitals import Vitals

CHANNELS = 8
FILE_ROWS = 3000
"""Decisions per file in these runs, so that there are several."""


def table_of(rows: int) -> pa.Table:
    """Return samples with faults that come back, one that stays, and missing values."""
    rng = np.random.default_rng(6)
    values = rng.normal(size=(rows, 2)) @ rng.normal(size=(2, CHANNELS)) * 3
    values += 0.5 * rng.normal(size=(rows, CHANNELS))
    for start in range(4000, rows, 2500):
        values[start : start + 120, start // 2500 % CHANNELS] += 6
    values[rows * 3 // 4 :, CHANNELS - 1] += 5
    values[rng.random(values.shape) < 0.0005] = np.nan
    return pa.table({f"c{i}": values[:, i] for i in range(CHANNELS)})


def write_feed(path: Path, rows: int, torn: int = 0) -> Path:
    """Write the feed as CSV; of every ``torn`` rows one is no sample."""
    pa.csv.write_csv(table_of(rows), path, pa.csv.WriteOptions(quoting_style="none"))
    if torn:
        lines = path.read_bytes().replace(b"nan", b"").splitlines(keepends=True)
        lines[1::torn] = [b"torn" + line for line in lines[1::torn]]
        path.write_bytes(b"".join(lines))
    return path


class Ear:
    """Hears a run, keeps what it is warned of, and does something after each batch."""

    def __init__(self, after: Callable[[int], None] = lambda _: None) -> None:
        self.warnings: list[str] = []
        self.after = after

    def opened(self, event: Any) -> None:
        """Hear an opening."""

    def closed(self, event: Any) -> None:
        """Hear a closing."""

    def adopted(self, event: Any) -> None:
        """Hear an adoption."""

    def warned(self, warning: str) -> None:
        """Keep a warning."""
        self.warnings.append(warning)

    def advance(self, samples: int) -> None:
        """Do what is to be done after so many samples."""
        self.after(samples)


class Watched:
    """One process's part of a run, with everything in reach of a test.

    Parameters
    ----------
    feed, folder : Path
        What it reads (or an address), and its home; None for none.
    after : callable
        Called with the number of samples after each batch.
    strict, reopens, decisions, broker
        As of the feed, the run and the home.
    given
        Further arguments of the run.
    """

    def __init__(
        self,
        feed: Path | str,
        folder: Path | None,
        after: Callable[[int], None] = lambda _: None,
        *,
        strict: bool = False,
        reopens: bool = False,
        decisions: str = "arrow",
        broker: Broker | None = None,
        **given: Any,
    ) -> None:
        self.feed, self.folder = feed, folder
        self.asked = threading.Event()
        self.vitals = Vitals()
        self.ear = Ear(after)
        self.monitor: NoveltyMonitor
        self._strict, self._reopens, self._decisions = strict, reopens, decisions
        self._broker = broker
        self._given = {"every": (1024, 1e9), "adopt_after": 1000, **given}

    def open(self, position: Position | None) -> Any:
        """Open the feed at a position."""
        # what comes as it is sent is taken as it comes, everything else in whole batches
        wait = 0.005 if self._broker else None
        options = FeedOptions(strict=self._strict, stop=self.asked, wait=wait, broker=self._broker)
        channels = None if position is None else self.monitor.channels
        return open_feed(self.feed, position=position, options=options, channels=channels)

    def __call__(self) -> Watched:
        """Run to the end of the feed, or until asked to stop."""
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(home_module, "SEGMENT_ROWS", FILE_ROWS)
            if self.folder is None:
                self._run(None)
            else:
                with Home(self.folder, self._decisions) as home:
                    home.begin({"feed": str(self.feed)})
                    self._run(home)
        return self

    def _run(self, home: Home | None) -> None:
        kept = None if home is None else home.monitor()
        if kept is not None:
            self.monitor = kept
        with self.open(None if home is None else home.position) as feed:
            if kept is None:
                channels = feed.columns.channels
                self.monitor = NoveltyMonitor(channels, baseline=1000, false_alarm=1e-3)
            self.run = Run(
                feed,
                self.monitor,
                self.ear,
                home=home,
                vitals=self.vitals,
                reopen=self.open if self._reopens else None,
                **self._given,
            )
            self.run(self.asked)


def results(folder: Path) -> dict[str, bytes]:
    """Return what a run leaves for others, byte for byte."""
    files = [*folder.glob("decisions/*"), *folder.glob("*.jsonl"), folder / "progress.arrow"]
    return {str(path.relative_to(folder)): path.read_bytes() for path in files}
