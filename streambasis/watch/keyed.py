"""A run over many feeds in one source: rows in, a monitor for each key, events out."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from streambasis.errors import SettingError
from streambasis.feeds import Batch, Feed, Keys, Position
from streambasis.fleet import Fleet
from streambasis.monitor import Event
from streambasis.state import State
from streambasis.watch.records import Records
from streambasis.watch.vitals import Vitals

COMMIT_SHARE = 0.1
"""Largest part of the time that commits may take: they write every feed that has gone on."""

EVENT_KEYS = ("event", "start", "end", "start_time", "end_time", "peak", "channels",
              "contributions", "repeats", "cosine", "label")  # fmt: skip
_COUNTERS = ("events", "repeats", "adopted")


class Hearer(Protocol):
    """Whoever wants to hear of events; each has the key column first."""

    def opened(self, event: Event) -> None: ...

    def closed(self, event: Event) -> None: ...

    def adopted(self, event: Event) -> None: ...

    def advance(self, samples: int) -> None: ...

    def warned(self, warning: str) -> None: ...


@dataclass(frozen=True, slots=True)
class KeyedSummary:
    """What a run over many feeds came to.

    Attributes
    ----------
    feeds, learning : int
        Feeds, and those of them whose baseline is not complete.
    samples, malformed : int
        Rows taken, and rows passed over.
    events, repeats, adopted : int
        Events, those that repeat an earlier one of their feed, and those adopted.
    seconds : float
        Time taken.
    """

    feeds: int
    learning: int
    samples: int
    malformed: int
    events: int
    repeats: int
    adopted: int
    seconds: float


class KeyedRun:
    """One pass of a fleet over a source.

    Parameters
    ----------
    feed : Feed
        Opened with ``keys`` in its options.
    keys : Keys
        These.
    fleet : Fleet
        Its position is where the feed was opened.
    hearer : Hearer
        Told of every event.
    records : callable, optional
        Given rows and bytes committed, opens what is kept for readers; nothing is kept without.
    every : (int, float)
        Samples, and seconds, after which what was taken is committed.
    adopt_after : int
        An event still open after so many samples of its feed is adopted; 0 never adopts.
    vitals : Vitals
        Readings, brought up to date after each batch; those of one basis stay as they are.
    """

    def __init__(
        self,
        feed: Feed,
        keys: Keys,
        fleet: Fleet,
        hearer: Hearer,
        *,
        records: Callable[[int, int], Records] | None,
        every: tuple[int, float],
        adopt_after: int,
        vitals: Vitals,
    ) -> None:
        if keys.column in EVENT_KEYS:
            raise SettingError(f"key={keys.column!r}: a key of that name is in every event")
        self._feed, self._keys, self._fleet, self._hearer = feed, keys, fleet, hearer
        self._every, self._adopt_after = every, adopt_after
        self._vitals = vitals
        self._opened: dict[str, int] = {}
        self._open: dict[str, dict[int, int]] = {}
        self._counts: dict[str, int] = {}
        self._counters = dict.fromkeys(_COUNTERS, 0)
        self._samples = self._malformed = 0
        rows = size = 0
        held = fleet.parts.get("run")
        if held is not None:
            facts = held.facts
            rows, size = facts["rows"], facts["events_bytes"]
            self._counters = dict(facts["counters"])
            self._opened = dict(facts["opened"])
            self._open = {
                key: {int(number): start for number, start in events.items()}
                for key, events in facts["open"].items()
            }
            counts = held.take("counts", np.int64, (len(fleet),)).tolist()
            self._counts = dict(zip(map(str, fleet.keys), counts, strict=True))
        self._records = None if records is None else records(rows, size)
        self._committed_at = (0, time.monotonic())
        self._cost = 0.0

    def __call__(self, asked: threading.Event) -> KeyedSummary:
        """Read the feed to its end, or until asked to stop.

        Raises
        ------
        FeedError
            If the feed cannot be read.
        HomeError
            If what is kept cannot be written.
        """
        start = time.perf_counter()
        place: Callable[[], Position] | None = None
        for batch in self._feed.batches():
            self._malformed += len(batch.malformed)
            self._take(batch)
            place = batch.place
            self._samples += len(batch)
            self._hearer.advance(self._samples)
            self._read_vitals()
            if self._due():
                self._commit(place())
            if asked.is_set():
                break
        if self._records is None or not asked.is_set():
            for key in list(self._open):
                self._fleet.finish(key)
                self._tell(key)
        if self._records is not None:
            self._commit(place() if place is not None else self._fleet.position)
            self._records.close()
        return KeyedSummary(
            feeds=len(self._fleet),
            learning=self._fleet.learning,
            samples=self._samples,
            malformed=self._malformed,
            seconds=time.perf_counter() - start,
            **self._counters,
        )

    def _read_vitals(self) -> None:
        vitals = self._vitals
        vitals.samples, vitals.malformed = self._samples, self._malformed
        vitals.events = self._counters["events"]
        vitals.open_events = sum(len(events) for events in self._open.values())
        vitals.batches += 1
        vitals.taken_at = time.time()

    def _due(self) -> bool:
        samples, then = self._committed_at
        since = time.monotonic() - then
        soon = self._samples - samples >= self._every[0] or since >= self._every[1]
        return self._records is not None and (
            self._feed.due or (soon and since >= self._cost / COMMIT_SHARE)
        )

    def _commit(self, position: Position | None) -> None:
        """Keep everything as it is after the last batch, and tell the feed."""
        if self._records is None:
            return
        start = time.monotonic()
        self._records.force()
        facts = {
            "rows": self._records.rows,
            "events_bytes": self._records.events_bytes,
            "counters": self._counters,
            "opened": self._opened,
            "open": {key: {str(n): s for n, s in held.items()} for key, held in self._open.items()},
        }
        counts = np.array([self._counts[str(key)] for key in self._fleet.keys], np.int64)
        self._fleet.commit(position, {"run": State("KeyedRun", facts, {"counts": counts})})
        if position is not None:
            self._feed.commit(position)
        self._vitals.committed_at = time.time()
        now = time.monotonic()
        self._committed_at, self._cost = (self._samples, now), now - start

    def _take(self, batch: Batch) -> None:
        """Push a batch, cut where an open event of a feed is due to be adopted."""
        codes = batch.values[:, -1].astype(np.int64)
        done = 0
        while done < len(batch):
            until, due = self._adoption_due(codes, done)
            if until > done:
                times = None if batch.times is None else batch.times[done:until]
                self._push(codes[done:until], batch.values[done:until, :-1], times)
                done = until
            for key, number in due:
                self._adopt(key, number)

    def _adoption_due(
        self, codes: NDArray[np.int64], done: int
    ) -> tuple[int, list[tuple[str, int]]]:
        """Return up to which row a batch can go, and what is adopted then."""
        until = len(codes)
        due: list[tuple[str, int]] = []
        if not self._adopt_after:
            return until, due
        for key, events in self._open.items():
            rows = np.flatnonzero(codes[done:] == self._keys.number(key))
            for number, start in events.items():
                left = start + self._adopt_after - self._counts[key]
                if left > len(rows):
                    continue
                at = done + int(rows[left - 1]) + 1 if left > 0 else done
                if at < until or (at == until and not due):
                    until, due = at, []
                if at == until:
                    due.append((key, number))
        return until, due

    def _push(
        self,
        codes: NDArray[np.int64],
        values: NDArray[np.float64],
        times: NDArray[np.int64] | None,
    ) -> None:
        names = pa.array(self._keys.names)
        column = pa.DictionaryArray.from_arrays(pa.array(codes, pa.int32()), names).cast(
            pa.string()
        )
        columns = {name: values[:, i] for i, name in enumerate(self._fleet.channels)}
        table = pa.table({self._keys.column: column, **columns})
        at = None if times is None else times.view("datetime64[ns]")
        decisions = self._fleet.push_many(table, at=at)
        self._vitals.novel += pc.sum(decisions["novel"]).as_py() or 0
        found, counts = np.unique(codes, return_counts=True)
        for code, count in zip(found.tolist(), counts.tolist(), strict=True):
            key = self._keys.names[code]
            self._counts[key] = self._counts.get(key, 0) + count
        if self._records is not None:
            self._records.take(decisions)
        inside = pc.filter(decisions[self._keys.column], pc.is_valid(decisions["event"]))
        present = {self._keys.names[code] for code in found.tolist()} & set(self._open)
        for key in sorted({*inside.unique().to_pylist(), *present}):
            self._tell(key)

    def _adopt(self, key: str, number: int) -> None:
        event = next(e for e in self._fleet.events[key] if e["event"] == number)
        self._fleet.adopt(key, number)
        self._counters["adopted"] += 1
        self._hearer.adopted(self._named(key, event))
        self._tell(key)

    def _tell(self, key: str) -> None:
        """Report the events of a feed that have opened or closed since the last call."""
        for event in self._fleet.events[key]:
            number = event["event"]
            if number >= self._opened.get(key, 0):
                self._opened[key] = number + 1
                self._open.setdefault(key, {})[number] = event["start"]
                self._counters["events"] += 1
                self._hearer.opened(self._named(key, event))
            if number in self._open.get(key, {}) and not event.open:
                del self._open[key][number]
                if not self._open[key]:
                    del self._open[key]
                self._counters["repeats"] += event["repeats"] is not None
                named = self._named(key, event)
                if self._records is not None:
                    self._records.take_event(named)
                self._hearer.closed(named)

    def _named(self, key: str, event: Event) -> Event:
        fields: Mapping[str, Any] = {self._keys.column: key, **event}
        return Event(dict(fields), event.directions, open=event.open)
