"""The run itself: samples in, decisions and events out, all of it kept, nothing of it unproven."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from streambasis.audit import ORTHOGONALITY_LIMIT
from streambasis.errors import FeedError, NumericalError
from streambasis.feeds import Batch, Feed, Malformed, Position
from streambasis.monitor import Event, NoveltyMonitor
from streambasis.monitor.verdict import NO_EVENT
from streambasis.state import State
from streambasis.times import NANOSECONDS
from streambasis.watch.home import Home
from streambasis.watch.keeping import COMMIT_SAMPLES, COMMIT_SECONDS, Keeping
from streambasis.watch.progress import Progress
from streambasis.watch.reporting import Reporter, Summary
from streambasis.watch.segment import Segment
from streambasis.watch.vitals import Vitals

AUDIT_SECONDS = 1.0
AUDIT_SHARE = 0.02
"""Seconds between two audits, and the largest part of the time that they may take: an audit that
costs more than that part of the seconds comes less often. One also goes before each commit, which
costs many times as much."""

FIRST_SHOWN = 10
"""Malformed rows of a run that are shown; the others are counted."""

RECENT = 366 * 86_400.0
"""Times that are numbers of seconds count from the Unix epoch if that makes them so recent."""

PAUSE = 0.2
"""Seconds between two looks at a disk that is waited for."""

_COUNTERS = ("opened", "repeats", "adopted", "first_time", "last_time", "novel", "malformed")


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
    vitals : Vitals, optional
        Readings, brought up to date after each batch and audit.
    audit_every : float
        Seconds between two audits of the monitor, more where an audit is costly.
    reopen : callable, optional
        Opens the feed again at a position (None: at its beginning), the old one being closed. With
        it and a home a run whose monitor fails an audit goes back to its last commit and goes on
        from there; without, such a run ends.
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
        vitals: Vitals | None = None,
        audit_every: float = AUDIT_SECONDS,
        reopen: Callable[[Position | None], Feed] | None = None,
    ) -> None:
        self._feed = feed
        self._monitor = monitor
        self._reporter = reporter
        self._home = home
        self._adopt_after = adopt_after
        self._vitals = vitals or Vitals()
        self._keeping = None
        if home is not None:
            self._keeping = Keeping(home, self._vitals, reporter, every)
        self._audit_every = audit_every
        self._audit_due = time.monotonic() + audit_every
        self._reopen = reopen
        self._acknowledged = 0
        self._repaired_at = -1
        if home is not None and home.state is not None:
            self._vitals.restarts = home.state.facts.get("restarts", 0) + 1
        # an event starts at most one persistence window before it opens: pieces of a batch that
        # are shorter by that than the time until an adoption have none due inside them
        window = monitor.to_state().facts["settings"]["window"]
        self._piece = max(1, adopt_after - window + 1) if adopt_after else None
        self._start()

    def _start(self) -> None:
        """Take over where the home's last commit stands, or start afresh."""
        self._opened = self._repeats = self._adopted = self._novel = self._malformed = 0
        self._first_time: int | None = None
        self._last_time: int | None = None
        self._place: Callable[[], Position | None] = lambda: None
        columns = self._feed.columns
        clock = "seconds" if columns.unit else "timestamps"
        self._progress = Progress(
            {
                "feed": self._feed.name,
                "channels": list(columns.channels),
                "clock": None if columns.time is None else clock,
                "adopt_after": self._adopt_after,
            }
        )
        if self._home is not None and self._home.state is not None:
            facts = self._home.state.facts
            for name in _COUNTERS:
                setattr(self, f"_{name}", facts.get(name, 0))
            position = facts["position"]
            self._place = lambda: position
            self._progress.take_state(self._home.state.parts["progress"])
        self._open = {event["event"] for event in self._monitor.events if event.open}
        self._count_up()
        self._vitals.rank, self._vitals.malformed = self._monitor.rank, self._malformed

    def _count_up(self) -> None:
        vitals = self._vitals
        vitals.samples, vitals.novel = self._monitor.count, self._novel
        vitals.events, vitals.open_events = self._opened, len(self._open)

    def commit_every(self, every: tuple[int, float]) -> None:
        """Change after how many samples and seconds a commit is due; from any thread."""
        if self._keeping is not None:
            self._keeping.every = every

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
        HomeError
            If the first or the last commit cannot be written. In between scoring goes on, and what
            it gives waits in memory until there is room.
        NumericalError
            If the monitor fails an audit and there is nothing to go back to.
        """
        start, before, opened = time.perf_counter(), self._monitor.count, self._feed
        try:
            if self._keeping is not None and self._keeping.fresh:
                self._commit()
            sound = False
            while not sound:
                for batch in self._arrivals():
                    if batch is not None:
                        self._take(batch)
                    self._look()
                    self._keep(asked)
                    self._vitals.busy_since = None
                    if asked.is_set():
                        break
                sound = self._audit()
            return self._end(asked, start, before)
        finally:
            if self._feed is not opened:
                self._feed.close()

    def _arrivals(self) -> Iterator[Batch | None]:
        """Yield what the feed gives; after a repair, what the feed gives that was opened again."""
        while True:
            feed = self._feed
            for batch in feed.arrivals():
                yield batch
                if self._feed is not feed:
                    break
            else:
                return

    def _end(self, asked: threading.Event, start: float, before: int) -> Summary:
        """Close and keep what a run is to leave, and say what it came to."""
        monitor, samples = self._monitor, self._monitor.count
        if not monitor.baseline_done and not asked.is_set():
            count = f"{samples} sample{'s' * (samples != 1)}"
            raise FeedError(
                f"{self._feed.name}: {count}, fewer than the baseline of "
                f"{monitor.baseline}; lower --baseline or give a longer feed"
            )
        if self._home is None or not asked.is_set():
            # a run that was asked to stop and goes on later leaves its open events open
            monitor.finish()
            self._tell()
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
            before,
        )

    # what is kept

    def _keep(self, asked: threading.Event) -> None:
        """See to commits and audits; wait while more waits for the disk than memory may hold."""
        keeping = self._keeping
        if time.monotonic() >= self._audit_due and not self._audit():
            return
        if keeping is None:
            return
        while True:
            self._hear(keeping.settle())
            feed = self._feed
            if keeping.due(self._monitor.count, soon=feed.due):
                if not self._audit():
                    return
                readings = self._readings() if keeping.fills_files else None
                keeping.start(self._monitor, *self._facts(), readings)
            if self._vitals.unkept and feed.due:
                # a broker would send nothing more: scoring goes on, and memory holds what it gives
                feed.commit(self._place() or {})
                self._acknowledged = self._monitor.count
            if not keeping.full(live=feed.live) or asked.is_set():
                return
            # a watchdog is to end a loop that hangs, not one that waits for the disk
            self._vitals.busy_since = None
            keeping.wait(PAUSE, asked)

    def _commit(self) -> None:
        """Keep the run as it is after the last batch, and wait for that."""
        if self._keeping is not None:
            facts, parts = self._facts()
            self._hear(self._keeping.finish(self._monitor, facts, parts, self._readings()))

    def _hear(self, facts: Mapping[str, Any] | None) -> None:
        """Tell the feed of a commit that has come through."""
        if facts is not None and facts["position"] is not None:
            self._feed.commit(facts["position"])

    def _facts(self) -> tuple[dict[str, Any], dict[str, State]]:
        """Return what a commit holds beside the monitor and the results."""
        facts = {name: getattr(self, f"_{name}") for name in _COUNTERS}
        facts |= {"position": self._place(), "restarts": self._vitals.restarts}
        return facts, {"progress": self._progress.to_state()}

    def _readings(self) -> pa.Table | None:
        return self._progress.table(self._monitor) if self._monitor.baseline_done else None

    # what is sound

    def _audit(self) -> bool:
        """Audit the monitor; return whether it is sound, and was not put back instead."""
        if not self._monitor.baseline_done:
            return True
        start = time.perf_counter()
        found = self._monitor.audit()
        cost = time.perf_counter() - start
        self._audit_due = time.monotonic() + max(self._audit_every, cost / AUDIT_SHARE)
        vitals = self._vitals
        vitals.audits += 1
        vitals.orthogonality, vitals.renewals = found.orthogonality, found.renewals
        vitals.rank, vitals.noise = self._monitor.rank, self._monitor.noise
        if found.orthogonality < ORTHOGONALITY_LIMIT:
            vitals.unsound = None
            return True
        vitals.failed_audits += 1
        vitals.unsound = (
            f"at sample {self._monitor.count} an audit found an orthogonality defect of "
            f"{found.orthogonality:.3g}, which is sound below {ORTHOGONALITY_LIMIT:g}"
        )
        self._repair(vitals.unsound)
        return False

    def _repair(self, found: str) -> None:
        """Go back to the last commit, which passed its audit, and read the feed again from there.

        Directions that are made orthonormal again would span something else than before: that
        would hide the fault, not repair it.
        """
        home, feed = self._home, self._feed
        ended = NumericalError(
            f"{found}; the run has no commit to go back to from which its feed can be read again, "
            "and ends here: what it kept before is sound"
        )
        if home is None or self._reopen is None or not feed.repeatable:
            raise ended
        home.go_back()
        monitor = home.monitor()
        if monitor is None or monitor.count < self._acknowledged:
            raise ended
        if monitor.count == self._repaired_at:
            raise NumericalError(
                f"{found}, once more after going back to sample {monitor.count}: suspect the "
                "machine; what the run kept before is sound"
            )
        self._repaired_at = monitor.count
        feed.close()
        self._feed, self._monitor = self._reopen(home.position), monitor
        self._start()
        self._reporter.warned(
            f"{found}; went back to the last commit, at sample {monitor.count}, and goes on there"
        )
        self._vitals.unsound = None

    # what is taken

    def _take(self, batch: Batch) -> None:
        """Push a batch, cut where an open event is due to be adopted."""
        vitals = self._vitals
        vitals.busy_since = time.monotonic()
        if batch.malformed:
            self._set_aside(batch.malformed)
        if batch.times is not None and len(batch):
            first = int(batch.times[0])
            self._first_time = first if self._first_time is None else self._first_time
            self._last_time = int(batch.times[-1])
        done = 0
        while done < len(batch):
            until = len(batch)
            if self._piece is not None:
                # in equal parts, as few as possible
                parts = -(-(until - done) // self._piece)
                until = done - (done - until) // parts
            due = self._adoption_due()
            if due is not None:
                until = min(max(due - self._monitor.count + done, done), until)
            if until > done:
                times = batch.times
                self._push(batch.values[done:until], None if times is None else times[done:until])
                done = until
            self._adopt()
        self._place = batch.place
        vitals.taken_at = time.time()
        vitals.batches += 1
        if len(batch):
            self._progress.take(self._monitor)
            self._reporter.advance(self._monitor.count)

    def _set_aside(self, rows: Sequence[Malformed]) -> None:
        """Count malformed rows, show the first of the run, keep them."""
        for row in rows[: max(0, FIRST_SHOWN - self._malformed)]:
            self._reporter.warned(f"{row.source}, {row.unit} {row.number}: {row.reason}")
        if self._malformed < FIRST_SHOWN <= self._malformed + len(rows):
            self._reporter.warned("further malformed rows are counted, not shown")
        self._malformed += len(rows)
        self._vitals.malformed = self._malformed
        if self._home is not None:
            self._home.take_malformed(rows)

    def _push(self, values: NDArray[np.float64], times: NDArray[np.int64] | None) -> None:
        """Push samples, cut where a file of decisions is full."""
        vitals, home = self._vitals, self._home
        while len(values):
            segment = Segment(0, len(values)) if home is None else home.segment
            rows = segment.judge(self._monitor, values, times)
            columns, taken = segment.columns, rows.stop - rows.start
            values, times = values[taken:], None if times is None else times[taken:]
            self._novel += int(np.count_nonzero(columns.novel[rows]))
            spe, limit = columns.spe[rows.stop - 1], columns.limit[rows.stop - 1]
            if not np.isnan(spe):
                vitals.spe, vitals.limit = float(spe), float(limit)
            # the events themselves are dear, and every one that is open marks the samples after it
            if self._open or (columns.event[rows] != NO_EVENT).any():
                self._tell()

    def _look(self) -> None:
        """Take the readings that cost next to nothing."""
        vitals, counts = self._vitals, self._feed.counts
        self._count_up()
        vitals.rank, vitals.noise = self._monitor.rank, self._monitor.noise
        vitals.queue, vitals.dropped = counts.get("queued", 0), counts.get("dropped", 0)
        vitals.duplicates = counts.get("duplicates", 0)
        vitals.connections = counts.get("connections", 0)
        vitals.sessions_lost = counts.get("sessions_lost", 0)
        if self._last_time is not None and vitals.taken_at is not None:
            moment = self._last_time / NANOSECONDS
            if self._feed.columns.unit is None or abs(moment - vitals.taken_at) < RECENT:
                vitals.sample_time = moment

    def _open_events(self) -> list[Event]:
        return [event for event in self._monitor.events if event.open] if self._open else []

    def _adoption_due(self) -> int | None:
        """Return the number of samples after which the first open event is adopted, if any is."""
        starts = [int(event["start"]) for event in self._open_events()]
        return min(starts) + self._adopt_after if starts and self._adopt_after else None

    def _adopt(self) -> None:
        if not self._adopt_after or not self._open:
            return
        for event in self._open_events():
            if self._monitor.count >= event["start"] + self._adopt_after:
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
