"""Sample after sample against what is ordinary: verdicts, events, and what is learnt on."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.errors import SettingError, SnapshotError
from streambasis.kernels import plain
from streambasis.kernels.monitor import CLOSED, COLLECTED, NOTHING, OPENED, note_rows, walk
from streambasis.monitor.contributions import leading, shares
from streambasis.monitor.events import COLLECT, Event, History, OpenEvent
from streambasis.monitor.model import Model, Settings
from streambasis.monitor.precursors import Precursors
from streambasis.monitor.projection import NO_EVENT, Scored
from streambasis.monitor.verdict import NO_TIME, Columns
from streambasis.state import State, owned

MOST_OPEN = 8
"""Most events open at the same time."""

SURE = 1024
SELDOM = 16
"""After so many samples an event's directions are brought up to date only every so many times that
samples are folded into it: they hardly move any more."""

NEARLY_WHOLE = 0.75
"""A sample with gaps refines the limit, in proportion, if its own limit is this part of it."""

BUFFERED = ("z", "spe", "number", "time", "loose", "fold", "pool")
COUNTED = ("ring", "counters", "last", "quiet", "taken")
"""The arrays that hold a row of the buffer each, and those of the walk."""

LOOKED_AT = 64
"""Samples behind one with gaps that are looked at for more such, to be judged together."""

_IN_PLACE = np.zeros(0, np.int64)


class Judge:
    """The monitor after its baseline.

    Samples are scored against fixed directions up to the end of a block, blocks being cut at the
    same sample numbers however the feed comes in. At its end the basis takes the samples that it
    explains, and the limit those outside events, both late by one persistence window: only then
    is it known whether an event has begun in them. Exceedances wait for a quiet run as well.

    The newest open event is *forming* while its directions are being learnt, and every sample
    beyond the limit counts to it. Once they explain what it shows, it is *standing*: its
    directions are taken off before a sample is judged, so that the next fault is found while the
    first still lasts, and the basis goes on learning from what is left.

    While no event is open, a sample that is whole and within its limit is taken by a kernel alone,
    every other one by the general way. Which way a sample takes depends on the state before it and
    on itself, never on how the feed is cut, so a last bit that the two round otherwise is the same
    in every run.

    Parameters
    ----------
    model : Model
        What is ordinary.
    first : int
        Number of the first sample to be judged.

    Attributes
    ----------
    port : ndarray of int64
        Where the kernel finds everything, as :mod:`streambasis.kernels.plain` says.
    address : int
        Where the port itself lies.
    """

    def __init__(self, model: Model, first: int) -> None:
        n, settings = len(model.names), model.settings
        self.model = model
        self.settings = settings
        self.port = np.zeros(plain.PORT, np.int64)
        self.address: int = self.port.__array_interface__["data"][0]
        self.count = first
        self.history = History(n, settings.same)
        self.precursors = Precursors(settings.quiet)
        self.open: list[OpenEvent] = []
        self._ring = np.zeros(settings.window, np.bool_)
        self._counters = np.zeros(4, np.int64)
        self._last, self._quiet, self._taken = (np.zeros(MOST_OPEN, np.int64) for _ in range(3))
        self._walk = np.array([settings.opens, settings.quiet, COLLECT, MOST_OPEN])
        rows = settings.window + settings.block
        self._fill = 0
        self._z = np.zeros((rows, n))
        self._spe = np.zeros(rows)
        self._number, self._time = np.full(rows, -1), np.full(rows, NO_TIME)
        self._loose, self._fold, self._pool = (np.zeros(rows, np.bool_) for _ in range(3))
        self._connect()

    @property
    def count(self) -> int:
        """Number of the next sample."""
        return int(self.port[plain.COUNT])

    @count.setter
    def count(self, number: int) -> None:
        self.port[plain.COUNT] = number

    @property
    def _fill(self) -> int:
        """Rows of the block that is under way."""
        return int(self.port[plain.FILL])

    @_fill.setter
    def _fill(self, rows: int) -> None:
        self.port[plain.FILL] = rows

    def _connect(self) -> None:
        """Tell the kernel where everything is, after arrays were replaced or events changed."""
        model, port, projection = self.model, self.port, self.model.projection
        n, first = self._z.shape[1], projection.first
        port[plain.OPEN] = len(self.open)
        port[[plain.CHANNELS, plain.BLOCK, plain.WINDOW]] = (
            n, self.settings.block, self.settings.window,
        )  # fmt: skip
        port[[plain.KNOWN, plain.FIRST, plain.SPREADS, plain.RANK]] = (
            projection.known, first, len(projection.whitening), model.rank,
        )  # fmt: skip
        # whatever the port points at has to live as long as it does
        self._connected = [
            *model.standard_parts, projection.mean, projection.directions, projection.whitening,
            self._z, self._spe, self._number, self._time, self._loose, self._fold, self._pool,
            self._ring, self._counters, np.array([model.limit.value, model.t2_limit]),
            np.zeros(n + first + 5), np.zeros(4, np.bool_),
        ]  # fmt: skip
        port[plain.CENTRE :] = [a.__array_interface__["data"][0] for a in self._connected]

    @property
    def nbytes(self) -> int:
        """Bytes of what is held."""
        own: int = sum(getattr(self, f"_{name}").nbytes for name in (*BUFFERED, *COUNTED))
        events = self.history.nbytes + sum(event.nbytes for event in self.open)
        return own + self.model.nbytes + events

    @property
    def _forming(self) -> bool:
        return bool(self._counters[3])

    @property
    def _standing(self) -> list[NDArray[np.float64]]:
        """The directions of each standing event."""
        return [event.directions for event in self.open[: len(self.open) - int(self._forming)]]

    def take(self, samples: NDArray[np.float64], columns: Columns, at: int) -> None:
        """Judge samples and write their columns from row ``at`` on.

        Parameters
        ----------
        samples : ndarray of float64, shape (m, n)
            In channel units; NaN marks a missing value.
        columns : Columns
            Filled from row ``at`` on; its times are read.
        at : int
            Row of the first sample there.
        """
        port, starts = np.array([self.address]), np.zeros(1, np.int64)
        stops, due = np.array([len(samples)]), np.ones(1, np.bool_)
        rows = slice(at, at + len(samples))
        times, whole = columns.time[rows], columns.plain(rows)
        while True:
            plain.take_plain(port, starts, stops, _IN_PLACE, samples, times, whole, due)
            if not due[0]:
                return
            done = int(starts[0])
            starts[0] += self.step(samples[done:], columns, at + done)

    def step(self, samples: NDArray[np.float64], columns: Columns, at: int) -> int:
        """Do what is due once the kernel has gone as far as it can; return how many rows it judges.

        Parameters
        ----------
        samples, columns, at
            As for :meth:`take`: the samples that the kernel has left.
        """
        count = 0
        if self._fill < self.settings.block:
            count = self._take_others(samples, columns, at)
        if self._fill == self.settings.block:
            self._turn()
        return count

    def _take_others(self, samples: NDArray[np.float64], columns: Columns, at: int) -> int:
        """Judge the samples that the kernel leaves, as far as this block goes; return how many."""
        count = min(len(samples), self.settings.block - self._fill)
        if not self.open:
            # those with gaps that follow one another, or the one that is beyond its limit
            count = min(count, LOOKED_AT)
            whole = ~np.isnan(samples[:count]).any(axis=1)
            count = max(int(whole.argmax()) if whole.any() else count, 1)
        start = self.settings.window + self._fill
        rows = slice(start, start + count)
        before = self.model.runs()
        gaps = self.model.standard(samples[:count], self._z[rows], follow=True)
        self._number[rows] = np.arange(self.count, self.count + count)
        self._time[rows] = columns.time[at : at + count]
        done = 0
        while done < count:
            size = self._stretch(slice(start + done, rows.stop), gaps, columns, at)
            done += size
            at += size
            self._fill += size
            if not self.open and done < count:
                # the rest is for the kernel, which follows the runs of values itself
                self.model.set_runs(before)
                self.model.standard(samples[:done], np.empty((done, samples.shape[1])), follow=True)
                break
        return done

    def _stretch(self, rows: slice, gaps: bool, columns: Columns, at: int) -> int:
        """Judge rows of the buffer up to the next transition of an event; return how many."""
        scored = self._score(rows, gaps, columns, at)
        columns.sample[at : at + len(scored.z)] = self._number[rows]
        row, what, which = walk(
            self.count, scored.judged, scored.beyond, scored.shows, self._ring, self._counters,
            self._last, self._quiet, self._taken, self._walk,
        )  # fmt: skip
        size = len(scored.z) if what == NOTHING else row + 1
        rows = slice(rows.start, rows.start + size)
        columns.rank[at : at + size] = self.model.rank
        if self.open:
            columns.event[at : at + size] = self.open[-1].number
            self._gather(scored, rows)
        self._note(scored, rows)
        self.count += size
        if what == OPENED:
            self._begin(rows.stop)
            columns.event[at + size - 1] = self.open[-1].number
        elif what == COLLECTED:
            self._settle(which)
        elif what == CLOSED:
            self._close(which)
        return size

    def _score(self, rows: slice, gaps: bool, columns: Columns, at: int) -> Scored:
        """Score rows of the buffer straight into the columns, from row ``at`` on."""
        z = self._z[rows]
        out = slice(at, at + len(z))
        directions = len(self.model.projection.directions)
        judged, beyond = np.empty((2, len(z)), np.bool_)
        scored = Scored(
            z, np.empty((len(z), directions)), columns.spe[out], self._spe[rows], columns.t2[out],
            columns.limit[out], columns.t2_limit[out], judged, beyond,
            columns.novel[out], columns.extreme[out], np.zeros((len(z), 0), np.bool_),
        )  # fmt: skip
        return self.model.score(scored, gaps=gaps)

    def _gather(self, scored: Scored, rows: slice) -> None:
        """Give open events the rows that show them."""
        beyond = scored.beyond[: rows.stop - rows.start]
        parts = self.model.parts
        for j, event in enumerate(self.open):
            shown, part = beyond, NO_EVENT
            if j < len(parts):
                shown, part = scored.shows[: len(beyond), j] & ~beyond, parts[j]
            picked = np.flatnonzero(shown)
            if picked.size:
                self._give(event, scored, picked, part, rows.start + int(picked[-1]))

    def _give(
        self, event: OpenEvent, scored: Scored, picked: NDArray[np.int64], part: slice, last: int
    ) -> None:
        """Give an event the rows picked, of which the last is row ``last`` of the buffer."""
        residuals = self.model.residuals(scored, picked, part)
        ratios = np.sum(residuals**2, axis=1) / scored.limit[picked]
        event.collect(residuals, float(ratios.max()), int(self._time[last]))

    def _note(self, scored: Scored, rows: slice) -> None:
        """Keep what the end of the block needs of rows, and make them fit to be folded."""
        size = rows.stop - rows.start
        fold, loose, pool = self._fold[rows], self._loose[rows], self._pool[rows]
        chance, extreme = note_rows(
            scored.judged[:size], scored.beyond[:size], scored.extreme[:size], self._forming,
            fold, loose, pool,
        )  # fmt: skip
        if self.open:
            # with open events taken off, fewer dimensions are left for noise than the limit is for
            whole = self.model.free
            left = whole - sum(len(directions) for directions in self._standing)
            self._spe[rows] *= whole / max(left, 1)
        held = loose.copy() if chance else loose
        for i in scored.special:
            if i < size and scored.judged[i]:
                part = float(scored.limit[i]) / self.model.limit.value
                self._spe[rows.start + i] /= part
                if part < NEARLY_WHOLE:
                    pool[i] = False
                    if chance:
                        held[i] = False
        if chance and held.any():
            self.precursors.hold(self._number[rows][held], self._spe[rows][held])
        self.model.clean(scored, fold, extreme=extreme > 0)

    def _begin(self, stop: int) -> None:
        """Open an event on the last rows before ``stop`` of the buffer."""
        start = stop - self.settings.window
        rows = start + np.flatnonzero(self._loose[start:stop])
        first, last = int(rows[0]), int(rows[-1])
        event = OpenEvent(
            self.history.next, int(self._number[first]), int(self._time[first]), self._z.shape[1]
        )
        self.history.next += 1
        z = self._z[rows]
        room = Scored.room(z, len(self.model.projection.directions))
        scored = self.model.score(room, gaps=True)
        self._give(event, scored, np.arange(len(rows)), NO_EVENT, last)
        self._loose[rows] = False
        self._pool[first:stop] = False
        self.precursors.claim(event.start)
        at = len(self.open)
        self.open.append(event)
        self._last[at], self._quiet[at], self._taken[at] = self.count - 1, 0, len(rows)
        self._ring[:] = False
        self._counters[:] = (0, 0, at + 1, 1)
        self.port[plain.OPEN] = len(self.open)
        self._look(event)

    def _look(self, event: OpenEvent) -> bool:
        """Bring an event's directions up to what it has shown; return whether they explain it."""
        model = self.model
        explained = event.settle(model.basis.noise, model.free, model.limit.value)
        event.repeats, event.cosine = self.history.match(event.directions[0], event.number)
        return explained

    def _settle(self, which: int) -> None:
        """Bring the directions of an open event up to date, and let it stand if they explain it."""
        forming = self._forming and which == len(self.open) - 1
        event = self.open[which]
        if not forming and event.count > SURE and event.count // COLLECT % SELDOM:
            event.fold()
            return
        explained = self._look(event)
        if forming and explained:
            self._counters[3] = 0
        if explained or not forming:
            self._project()

    def _close(self, which: int) -> None:
        """Close an open event."""
        self._look(self.open[which])
        self.history.put(self.event(which, open=False))
        if self._forming and which == len(self.open) - 1:
            self._counters[3] = 0
        del self.open[which]
        self._counters[2] = len(self.open)
        for array in (self._last, self._quiet, self._taken):
            array[which:-1] = array[which + 1 :]
        self._project()

    def close_all(self) -> None:
        """Close every open event."""
        while self.open:
            self._close(0)

    def event(self, which: int, *, open: bool) -> Event:
        """Return an open event as it stands."""
        event, model = self.open[which], self.model
        parts = self._shares(event)
        names, label = model.names, event.label
        if label is None and event.repeats is not None:
            label = self.history.events[event.repeats]["label"]
        fields = {
            "event": event.number,
            "start": event.start,
            "end": int(self._last[which]),
            "start_time": iso(event.start_time),
            "end_time": iso(event.end_time),
            "peak": event.peak,
            "channels": [names[i] for i in leading(parts)],
            "contributions": {names[i]: float(parts[i]) for i in np.argsort(-parts, kind="stable")},
            "repeats": event.repeats,
            "cosine": event.cosine,
            "label": label,
        }
        return Event(fields, event.directions, open=open)

    def _shares(self, event: OpenEvent) -> NDArray[np.float64]:
        """Return each channel's share in an open event, found again only where something moved."""
        projection = self.model.projection
        asked = event.count, projection
        if event.shares is None or event.shares[:2] != asked:
            inside = projection.directions[: projection.first]
            rows = event.rows[: event.filled]
            event.shares = *asked, shares(rows, inside, event.count, self.model.basis.noise)
        found: NDArray[np.float64] = event.shares[2]
        return found

    @property
    def events(self) -> list[Event]:
        """The events so far, by number, open ones included."""
        closed = list(self.history.events.values())
        if not self.open:
            return closed
        still = [self.event(which, open=True) for which in range(len(self.open))]
        # of events that overlap, the later one may have closed first
        return sorted([*closed, *still], key=lambda event: int(event["event"]))

    def find(self, number: int) -> Event | OpenEvent:
        """Return an event, closed or open, by its number.

        Raises
        ------
        SettingError
            If there is none, or it was so long ago that it is no longer kept.
        """
        if number in self.history.events:
            return self.history.events[number]
        for event in self.open:
            if event.number == number:
                return event
        raise SettingError(f"event {number}: not among the events kept; they are listed in .events")

    def adopt(self, number: int) -> None:
        """Take an event's directions for known behaviour; it closes if it is open."""
        event = self.find(number)
        if isinstance(event, OpenEvent):
            self._close(self.open.index(event))
        if number not in self.model.adopted:
            self.model.adopt(number, event.directions)
            self._project()

    def _project(self) -> None:
        """Set up the directions that samples are split over, after events have changed."""
        self.model.project(self._standing)
        self._connect()

    def _turn(self) -> None:
        """End a block: learn from the rows now past the persistence window, move the rest up."""
        block, window = self.settings.block, self.settings.window
        fold = self._fold[:block]
        self.model.fold(self._z[:block] if fold.all() else self._z[:block][fold])
        limit, spe = self.model.limit, self._spe[:block]
        calm = limit.calm.tell(spe)
        self.precursors.drop(self._number[:block][~calm])
        chance = self.precursors.release(self.count)
        limit.take(np.concatenate([spe[self._pool[:block] & calm], chance]))
        for name in BUFFERED:
            array = getattr(self, f"_{name}")
            array[:window] = array[block : block + window].copy()
        self._fill = 0
        self.model.refresh(self._standing)
        self._connect()

    def to_state(self) -> State:
        """Hand over everything needed to go on."""
        held = self.settings.window + self._fill
        arrays = {name: owned(getattr(self, f"_{name}")[:held]) for name in BUFFERED}
        arrays |= {name: owned(getattr(self, f"_{name}")) for name in COUNTED}
        parts = {
            "core": self.model.to_state(),
            "history": self.history.to_state(),
            "precursors": self.precursors.to_state(),
        }
        parts |= {f"event_{i}": event.to_state() for i, event in enumerate(self.open)}
        facts: dict[str, Any] = {"count": self.count, "fill": self._fill, "open": len(self.open)}
        return State("Judge", facts, arrays, parts)

    @classmethod
    def from_state(cls, names: tuple[str, ...], settings: Settings, state: State) -> Judge:
        """Build a judge that goes on where the state was taken."""
        facts, parts = state.facts, state.parts
        judge = cls(Model.from_state(names, settings, parts["core"]), facts["count"])
        judge.history = History.from_state(parts["history"])
        judge.precursors = Precursors.from_state(parts["precursors"])
        judge.open = [OpenEvent.from_state(parts[f"event_{i}"]) for i in range(facts["open"])]
        judge._fill = facts["fill"]
        held = settings.window + judge._fill
        for name in BUFFERED:
            rows = getattr(judge, f"_{name}")
            rows[:held] = state.take(name, rows.dtype, (held, *rows.shape[1:]))
        for name in COUNTED:
            held_by = getattr(judge, f"_{name}")
            held_by[:] = state.take(name, held_by.dtype, held_by.shape)
        judge._check()
        judge._project()
        return judge

    def _check(self) -> None:
        """Refuse a state whose parts are of other channels or whose counters cannot be."""
        position, beyond, events, forming = self._counters.tolist()
        n = self._z.shape[1]
        if (
            {event.rows.shape[1] for event in self.open} - {n}
            or self.history.channels != n
            or not 0 <= self._fill < self.settings.block
            or not 0 <= position < self.settings.window
            or beyond != self._ring.sum()
            or events != len(self.open)
            or not 0 <= forming <= min(events, 1)
            or events > MOST_OPEN
        ):
            raise SnapshotError("the parts of a monitor do not fit each other")


def iso(time: int) -> str | None:
    """Return nanoseconds since the Unix epoch as ISO 8601 text, or None for no time."""
    return None if time == NO_TIME else str(np.datetime64(time, "ns"))
