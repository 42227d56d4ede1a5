"""What a worker of Spark does for a stream: each feed goes on from its snapshot.

Nothing here imports Spark, which hands the objects over and calls them in its workers.
"""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from streambasis.errors import StreambasisError
from streambasis.monitor import Event, NoveltyMonitor
from streambasis.monitor.verdict import NO_EVENT, Columns
from streambasis.snapshot import state_from_bytes, to_bytes
from streambasis.state import State
from streambasis.times import EARLIEST, NANOSECONDS

if TYPE_CHECKING:
    import pandas as pd

STORED = "snapshot BINARY"
"""What the state store keeps of a feed, as Spark writes a schema."""

FEED = "feed"
"""Name of that state."""

DECISION, EVENT, REFUSED = "decision", "event", "refused"
"""Kinds of rows that come out."""

DECIDED = {
    "sample": "bigint",
    "spe": "double",
    "t2": "double",
    "limit": "double",
    "t2_limit": "double",
    "novel": "boolean",
    "extreme": "boolean",
    "rank": "int",
    "event": "bigint",
}
"""The decision columns but the time, and what Spark calls their types."""

NO_KEY, NO_TIME, NOT_FINITE = "no key", "no time", "not finite"
DUPLICATE, LATE = "duplicate", "late"
"""Why a row is not taken as a sample."""

MICROSECOND = 1000
UNKNOWN = EARLIEST - 1
"""Among times in nanoseconds: none that could be read."""


class Arrivals:
    """The rows of one feed in one micro-batch, in the order of their times.

    Parameters
    ----------
    at : ndarray of float64 or int64, shape (m,)
        Times as they came: microseconds, or seconds; NaN where there is none.
    values : ndarray of float64, shape (m, n)
        NaN marks a missing value.
    seconds : bool
        Whether times are seconds.

    Notes
    -----
    Spark does not say in which order the rows of a micro-batch come, so it is made here: by time,
    and rows of one time by their values, so that a micro-batch that is repeated gives the same.
    """

    def __init__(self, at: NDArray[Any], values: NDArray[np.float64], *, seconds: bool) -> None:
        times = _nanoseconds(at, NANOSECONDS if seconds else MICROSECOND)
        order = np.argsort(times, kind="stable")
        if (np.diff(times[order]) == 0).any():
            order = np.lexsort((*values.T[::-1], times))
        self.at, self.times, self.values = at[order], times[order], values[order]

    def refused(self, last: int | None) -> NDArray[Any]:
        """Return for each row why it is not taken, or None, given the last time taken."""
        reasons = np.full(len(self.times), None, object)
        if last is not None:
            reasons[self.times < last] = LATE
            reasons[self.times == last] = DUPLICATE
        infinite = np.isinf(self.values).any(axis=1)
        # of rows of one time the first that can be taken is
        fine = np.flatnonzero(~infinite)
        again = fine[1:][np.diff(self.times[fine]) == 0]
        reasons[again] = np.where(reasons[again] == LATE, LATE, DUPLICATE)
        reasons[infinite] = NOT_FINITE
        reasons[self.times == UNKNOWN] = NO_TIME
        return reasons


def _nanoseconds(at: NDArray[Any], unit: int) -> NDArray[np.int64]:
    """Return times as nanoseconds, and ``UNKNOWN`` for those that are none."""
    largest = (2**63 - 1) // unit
    with np.errstate(invalid="ignore"):
        known = np.abs(at) < largest
    out = np.full(len(at), UNKNOWN)
    usable = at[known]
    if usable.dtype.kind == "f":
        # whole units and the fraction apart, as everywhere: a product would round the last bits
        whole = np.floor(usable)
        fraction = np.rint((usable - whole) * unit).astype(np.int64)
        out[known] = whole.astype(np.int64) * unit + fraction
    else:
        out[known] = usable.astype(np.int64) * unit
    return out


class Feed:
    """One feed between two micro-batches: its monitor, and how far it has come.

    Parameters
    ----------
    monitor : NoveltyMonitor
    last : int, optional
        Time of the last sample taken, in nanoseconds.
    opened : int
        Number of the next event to be heard of.
    open : set of int
        Events heard of that had not closed.
    refused : mapping of str to int
        How many rows were not taken, by reason.
    """

    KIND = "Feed"

    def __init__(
        self,
        monitor: NoveltyMonitor,
        last: int | None = None,
        opened: int = 0,
        open: set[int] | None = None,
        refused: Counter[str] | None = None,
    ) -> None:
        self.monitor, self.last, self.opened = monitor, last, opened
        self.open = set() if open is None else open
        self.refused: Counter[str] = Counter() if refused is None else refused

    @classmethod
    def from_bytes(cls, data: bytes) -> Feed:
        """Build a feed that goes on where its bytes were taken."""
        state = state_from_bytes(data)
        monitor = NoveltyMonitor.from_state(state.parts["core"])
        facts = dict(state.facts)
        return cls(
            monitor, facts["last"], facts["opened"], set(facts["open"]), Counter(facts["refused"])
        )

    def to_bytes(self) -> bytes:
        """Return a snapshot; :func:`streambasis.from_bytes` makes the monitor of it."""
        facts = {
            "last": self.last,
            "opened": self.opened,
            "open": sorted(self.open),
            "refused": dict(self.refused),
        }
        return to_bytes(State(self.KIND, facts, {}, {"core": self.monitor.to_state()}))

    def take(self, rows: Arrivals) -> tuple[dict[str, NDArray[Any]], NDArray[Any]]:
        """Judge rows; return the decisions on those taken, and why the others were not.

        Decisions are columns, NaN where there is nothing to tell, beside the times as they came.
        """
        reasons = rows.refused(self.last)
        taken = reasons == np.array(None)
        times = rows.times[taken]
        columns = Columns(0, times, len(times))
        self.monitor.judge_rows(rows.values[taken], columns, 0)
        if len(times):
            self.last = int(times[-1])
        self.refused.update(reasons[~taken].tolist())
        decided = {name: getattr(columns, name) for name in DECIDED}
        decided["limit"] = np.where(np.isnan(columns.spe), np.nan, columns.limit)
        decided["event"] = np.where(columns.event == NO_EVENT, np.nan, columns.event)
        return decided | {"at": rows.at[taken]}, reasons

    def closed(self) -> list[Event]:
        """Return the events that have closed since the last call."""
        out = []
        for event in self.monitor.events:
            if event["event"] >= self.opened:
                self.opened = event["event"] + 1
                self.open.add(event["event"])
            # of events that overlap, the later one may close first
            if event["event"] in self.open and not event.open:
                self.open.remove(event["event"])
                out.append(event)
        return out


class Watching:
    """The stateful operator: a monitor for each key.

    Parameters
    ----------
    start : bytes
        Snapshot of the monitor that a feed begins with.
    seconds : bool
        Whether times are seconds rather than microseconds.

    Notes
    -----
    Spark calls :meth:`init` once for a task, then :meth:`handleInputRows` for each key that has
    rows in the micro-batch. Whatever the state store takes becomes true when Spark commits the
    micro-batch, together with its output.
    """

    def __init__(self, start: bytes, *, seconds: bool) -> None:
        self._start = start
        self._seconds = seconds

    def init(self, handle: Any) -> None:
        """Name the state to the state store."""
        self._kept = handle.getValueState(FEED, STORED)

    def handleInputRows(
        self, key: tuple[str], rows: Iterator[pd.DataFrame], timers: Any
    ) -> Iterator[pd.DataFrame]:
        """Judge the rows of one key."""
        del timers  # nothing here waits for a time
        pieces = list(rows)
        at = np.concatenate([_numbers(piece["at"]) for piece in pieces])
        values = np.array([row for piece in pieces for row in piece["values"]], np.float64)
        taken = Arrivals(at, values, seconds=self._seconds)
        name = key[0]
        if not name:
            yield _refusals(name, taken.at, np.full(len(at), NO_KEY, object))
            return
        kept = self._kept.get()
        if kept is None:
            feed = Feed(NoveltyMonitor.from_state(state_from_bytes(self._start)))
        else:
            feed = Feed.from_bytes(kept[0])
        try:
            decisions, reasons = feed.take(taken)
        except StreambasisError as error:
            raise type(error)(f"key {name[1:]!r}: {error}") from None
        closed = feed.closed()
        self._kept.update((feed.to_bytes(),))
        refused = reasons != np.array(None)
        if not refused.all():
            yield _frame({"kind": DECISION, "key": name, **decisions}, len(decisions["at"]))
        if closed:
            yield _told(name, closed)
        if refused.any():
            yield _refusals(name, taken.at[refused], reasons[refused])

    def close(self) -> None:
        """Do nothing: there is nothing to let go of."""


def _numbers(column: pd.Series) -> NDArray[Any]:
    """Return a column of numbers, which may be of a type of pandas' own, with NaN for null."""
    if column.isna().any():
        return np.asarray(column.to_numpy(np.float64, na_value=np.nan))
    return np.asarray(column.to_numpy())


def _told(key: str, events: list[Event]) -> pd.DataFrame:
    texts = [json.dumps(event) for event in events]
    numbers = [event["event"] for event in events]
    return _frame({"kind": EVENT, "key": key, "event": numbers, "text": texts}, len(events))


def _refusals(key: str, at: NDArray[Any], reasons: NDArray[Any]) -> pd.DataFrame:
    return _frame({"kind": REFUSED, "key": key, "at": at, "text": reasons}, len(at))


def _frame(known: dict[str, Any], length: int) -> pd.DataFrame:
    """Return rows in which all columns but the known ones are null."""
    import pandas as pd

    columns = dict.fromkeys(("kind", "key", "at", *DECIDED, "text")) | known
    return pd.DataFrame(columns, index=range(length))
