"""The run itself: samples in, decisions and events out."""

from __future__ import annotations

import threading
import time
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from streambasis.errors import FeedError
from streambasis.feeds import Batch, Feed, Position
from streambasis.monitor import Event, NoveltyMonitor
from streambasis.watch.home import Home
from streambasis.watch.progress import Progress

COMMIT_SAMPLES = 1 << 16
COMMIT_SECONDS = 10.0
"""Samples and seconds between two commits: what a crash makes the next run do again."""

_COUNTERS = ("opened", "repeats", "adopted", "first_time", "last_time")


class Reporter(Protocol):
    """Whoever wants to hear how a run goes."""

    def opened(self, event: Event) -> None:
        """Hear that an event has opened."""

    def closed(self, event: Event) -> None:
        """Hear that an event has closed."""

    def adopted(self, event: Event) -> None:
        """Hear that an event lasted so long that it counts as known behaviour from now on."""

    def advance(self, samples: int) -> None:
        """Hear how many samples have been read."""


@dataclass(frozen=True, slots=True)
class Summary:
    """What a run came to.

    Attributes
    ----------
    samples : int
        Samples read.
    first_time, last_time : int or None
        Their first and last time in nanoseconds, where the feed has times.
    rank : int
        Directions of the basis at the end.
    noise : float
        Variance per residual dimension, in units of each channel's own noise.
    drift : float
        Largest principal angle between the baseline's subspace and today's, in radians.
    events, repeats, adopted : int
        Events, those that repeat an earlier one, and those adopted as known behaviour.
    seconds : float
        Time taken.
    orthogonality : float
        Orthogonality defect of the basis, |VVᴴ - I|₁ / (n·u); the contract is below 3.
    """

    samples: int
    first_time: int | None
    last_time: int | None
    rank: int
    noise: float
    drift: float
    events: int
    repeats: int
    adopted: int
    seconds: float
    orthogonality: float


class Run:
    """One pass of a monitor over a feed.

    Parameters
    ----------
    feed : Feed
        Where samples come from.
    monitor : NoveltyMonitor
        Made for the feed's channels; it may have seen samples before.
    reporter : Reporter
        Told of every event as it opens and closes.
    home : Home, optional
        Where decisions, closed events and the run itself are kept. Where it holds an earlier part
        of this run, the feed and the monitor are those that go on from there.
    every : (int, float)
        Samples, and seconds, after which what was taken is committed to the home.
    adopt_after : int
        An event still open after so many samples is adopted as known behaviour: a change that
        lasts is another way of running, and what happens on top of it must be seen as its own.
        0 never adopts.
    """

    def __init__(
        self,
        feed: Feed,
        monitor: NoveltyMonitor,
        reporter: Reporter,
        *,
        home: Home | None = None,
        every: tuple[int, float] = (COMMIT_SAMPLES, COMMIT_SECONDS),
        adopt_after: int,
    ) -> None:
        self._feed = feed
        self._monitor = monitor
        self._reporter = reporter
        self._home = home
        self._adopt_after = adopt_after
        self._opened = self._repeats = self._adopted = 0
        self._open = {event["event"] for event in self._open_events()}
        self._first_time: int | None = None
        self._last_time: int | None = None
        self._position: Position | None = None
        self._every = every
        self._committed = (monitor.count, time.monotonic())
        columns = feed.columns
        clock = "seconds" if columns.unit else "timestamps"
        self._progress = Progress(
            {
                "feed": feed.name,
                "channels": list(columns.channels),
                "clock": None if columns.time is None else clock,
                "adopt_after": adopt_after,
            }
        )
        if home is not None and home.state is not None:
            facts = home.state.facts
            for name in _COUNTERS:
                setattr(self, f"_{name}", facts[name])
            self._position = facts["position"]
            self._progress.take_state(home.state.parts["progress"])

    def __call__(self, asked: threading.Event) -> Summary:
        """Read the feed to its end, or until asked to stop.

        Parameters
        ----------
        asked : threading.Event
            Set by whoever wants the run to stop at the next batch.

        Raises
        ------
        FeedError
            If the feed cannot be read, or is shorter than the baseline.
        """
        start, before = time.perf_counter(), self._monitor.count
        if self._home is not None and self._home.state is None:
            self._commit()
        for batch in self._feed.batches():
            if batch.times is not None and len(batch):
                first = int(batch.times[0])
                self._first_time = first if self._first_time is None else self._first_time
                self._last_time = int(batch.times[-1])
            self._take(batch)
            self._position = batch.position
            self._progress.take(self._monitor)
            self._reporter.advance(self._monitor.count)
            if self._commit_due():
                self._commit()
            if asked.is_set():
                break
        monitor, samples = self._monitor, self._monitor.count
        if not monitor.baseline_done and not asked.is_set():
            raise FeedError(
                f"{self._feed.name}: {samples} samples, fewer than the baseline of "
                f"{monitor.baseline}; lower --baseline or give a longer feed"
            )
        if self._home is None or not asked.is_set():
            # a run that was asked to stop and goes on later leaves its open events open
            monitor.finish()
            self._tell()
        if self._home is not None:
            if monitor.baseline_done:
                self._home.keep_progress(self._progress.table(monitor))
            self._commit()
        return Summary(
            samples - before,
            self._first_time,
            self._last_time,
            monitor.rank,
            monitor.noise,
            monitor.drift,
            self._opened,
            self._repeats,
            self._adopted,
            time.perf_counter() - start,
            monitor.basis.audit().orthogonality if monitor.baseline_done else 0.0,
        )

    def _commit_due(self) -> bool:
        if self._home is None:
            return False
        samples, seconds = self._every
        count, then = self._committed
        return (
            self._monitor.count - count >= samples
            or time.monotonic() - then >= seconds
            or self._feed.due
        )

    def _commit(self) -> None:
        """Keep the run as it is after the last batch, and tell the feed."""
        if self._home is None:
            return
        facts = {name: getattr(self, f"_{name}") for name in _COUNTERS}
        self._home.commit(
            self._monitor,
            {**facts, "position": self._position},
            {"progress": self._progress.to_state()},
        )
        if self._position is not None:
            self._feed.commit(self._position)
        self._committed = (self._monitor.count, time.monotonic())

    def _take(self, batch: Batch) -> None:
        """Push a batch, cut where an open event is due to be adopted."""
        done = 0
        while done < len(batch):
            due = self._adoption_due()
            until = len(batch) if due is None else min(max(due - batch.first, done), len(batch))
            if until > done:
                self._push(batch.values[done:until], batch.times, done)
                done = until
            self._adopt(batch.first + done)

    def _push(
        self, values: NDArray[np.float64], times: NDArray[np.int64] | None, first: int
    ) -> None:
        at = None if times is None else times[first : first + len(values)].view("datetime64[ns]")
        decisions = self._monitor.push_many(values, at=at)
        if self._home is not None and self._home.take(decisions):
            self._home.keep_progress(self._progress.table(self._monitor))
        self._tell()

    def _open_events(self) -> list[Event]:
        return [event for event in self._monitor.events if event.open]

    def _adoption_due(self) -> int | None:
        """Return the number of samples after which the first open event is adopted, if any is."""
        starts = [int(event["start"]) for event in self._open_events()]
        return min(starts) + self._adopt_after if starts and self._adopt_after else None

    def _adopt(self, samples: int) -> None:
        if not self._adopt_after:
            return
        for event in self._open_events():
            if samples >= event["start"] + self._adopt_after:
                self._monitor.adopt(event["event"])
                self._adopted += 1
                self._reporter.adopted(event)
        self._tell()

    def _tell(self) -> None:
        """Report the events that have opened or closed since the last call."""
        for event in self._monitor.events:
            number = event["event"]
            if number >= self._opened:
                self._opened = number + 1
                self._open.add(number)
                self._reporter.opened(event)
            # of events that overlap, the later one may close first
            if number in self._open and not event.open:
                self._open.remove(number)
                self._repeats += event["repeats"] is not None
                if self._home is not None:
                    self._home.take_event(event)
                self._reporter.closed(event)
