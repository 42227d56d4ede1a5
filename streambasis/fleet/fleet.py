"""Fleet: a monitor for each key, taken on by all cores, as many in memory as there is room for."""

from __future__ import annotations

import hashlib
import os
import threading
from collections.abc import Iterator, Mapping
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import numpy as np
import pyarrow as pa
from numpy.typing import ArrayLike

from streambasis.errors import FleetError, SampleTypeError, SettingError, StreambasisError
from streambasis.fleet.folder import Committed, Folder
from streambasis.fleet.members import Members
from streambasis.fleet.rows import FLOAT64, TIME, Key, Layout, Room, Rows, read_rows
from streambasis.fleet.workers import Workers
from streambasis.kernels.plain import take_plain
from streambasis.monitor import Event, NoveltyMonitor
from streambasis.monitor.verdict import Columns, Verdict
from streambasis.samples import Channels, one_sample
from streambasis.snapshot import to_bytes
from streambasis.state import State
from streambasis.times import nanoseconds

SHARES = 8
LEAST_SHARE = 1024
STEP = 256
"""Into how many shares the work of a thread is cut, so that all end at about the same time; and
rows of a share at least, so that threads do not wait for each other more than they work; and
rows that a monitor is handed at most where the kernel has left off."""


class Fleet:
    """Many feeds under one object: a :class:`NoveltyMonitor` for each key.

    Parameters
    ----------
    config : mapping
        The keywords of :class:`NoveltyMonitor`, ``channels`` included; they hold for every feed.
    key : str
        The column that tells the feeds apart: text or whole numbers.
    time : str, optional
        The column of times. By default one named ``time`` is taken, if a batch has it.
    threads : int, optional
        Threads that work at a time; by default one for each core.
    live : int, optional
        Most monitors in memory. Of more feeds the least recently used are parked on disk and
        brought back when they go on. By default all stay in memory.
    home : path, optional
        The folder that keeps the fleet. One that holds a fleet is gone on with from its last
        commit. By default nothing outlasts the process.

    Raises
    ------
    SettingError
        If the configuration is refused.
    HomeError
        If the folder is in use, cannot be written, or holds another fleet.

    Notes
    -----
    Advisory: not a protective or safety-instrumented function.

    A feed is there as soon as its key is. Its results are, bit for bit, those of a monitor of its
    own, however many threads there are, in whatever order the keys come, and whether it was
    parked in between. A matrix product may be rounded otherwise on another number of BLAS
    threads; threads of a fleet and of BLAS compete for the same cores, so leave BLAS one
    (``OPENBLAS_NUM_THREADS=1``).

    Examples
    --------
    >>> import numpy as np, pyarrow as pa
    >>> from streambasis import Fleet
    >>> rng = np.random.default_rng(0)
    >>> columns = {name: rng.normal(size=400) for name in ("flow", "speed", "power")}
    >>> table = pa.table({"pump": ["north", "south"] * 200, **columns})
    >>> with Fleet({"channels": list(columns), "baseline": 100}, key="pump") as fleet:
    ...     decisions = fleet.push_many(table)
    >>> decisions.column_names[:4], len(decisions), fleet.keys
    (['pump', 'sample', 'time', 'spe'], 400, ('north', 'south'))
    """

    def __init__(
        self,
        config: Mapping[str, Any],
        *,
        key: str,
        time: str | None = None,
        threads: int | None = None,
        live: int | None = None,
        home: str | os.PathLike[str] | None = None,
    ) -> None:
        if "channels" not in config:
            raise SettingError("config: the channels are missing")
        self._config = dict(config)
        if not isinstance(self._config["channels"], int | np.integer | str):
            self._config["channels"] = list(self._config["channels"])
        channels = Channels(self._config["channels"])
        _check_columns(channels, key, time)
        if live is not None and (isinstance(live, bool) or live < 1):
            raise SettingError(f"live={live}: at least one feed in memory, or None for all")
        self._layout = Layout(key, time, channels)
        try:
            first = NoveltyMonitor(**self._config)
        except TypeError as error:
            raise SettingError(f"config: {error}") from None
        self._template = first.to_state() if first.baseline_done else None
        self._left = first.baseline_left
        self._about = self._described()
        self._lock = threading.RLock()
        self._room = Room()
        self._closed, self._stopped = False, ""
        self._folder: Folder | None = None
        if home is not None or live is not None:
            self._folder = Folder(None if home is None else Path(home))
        try:
            self._workers = Workers(threads)
            parking = None if self._folder is None else self._folder.parking
            self._members = Members(self._make, live, parking)
            if self._folder is not None:
                self._go_on(self._folder)
        except BaseException:
            if self._folder is not None:
                self._folder.close()
            raise

    def _make(self) -> NoveltyMonitor:
        if self._template is not None:
            return NoveltyMonitor.from_state(self._template)
        return NoveltyMonitor(**self._config)

    def _described(self) -> dict[str, Any]:
        """Return what the fleet is of, as JSON holds it."""
        about: dict[str, Any] = {"key": self._layout.key, "time": self._layout.time}
        for name, value in self._config.items():
            about[name] = list(value) if isinstance(value, tuple) else value
        if self._template is not None:
            digest = hashlib.sha256(to_bytes(self._template)).hexdigest()
            about["baseline"] = f"samples, sha256:{digest}"
        return about

    def _go_on(self, folder: Folder) -> None:
        """Take over what was committed last, or commit that there is nothing yet."""
        folder.check(self._about)
        if folder.committed is None:
            self._commit(folder, None, {})
            return
        for key, place in folder.committed.places.items():
            self._members.know(key, place, folder.committed.learning.get(key, 0))

    @property
    def channels(self) -> tuple[str, ...]:
        """Names of the channels."""
        return self._layout.channels.names

    @property
    def keys(self) -> tuple[Key, ...]:
        """The feeds, in the order in which they appeared."""
        with self._lock:
            return tuple(self._members)

    def __len__(self) -> int:
        return len(self._members)

    def __iter__(self) -> Iterator[Key]:
        return iter(self.keys)

    def __contains__(self, key: object) -> bool:
        return key in self._members

    @property
    def live(self) -> int:
        """Monitors in memory."""
        return len(self._members.live)

    @property
    def threads(self) -> int:
        """Threads that work at a time."""
        return self._workers.count

    @property
    def nbytes(self) -> int:
        """Bytes of the monitors in memory, and of room for a batch."""
        with self._lock:
            held = sum(monitor.nbytes for monitor in self._members.live.values())
            return held + self._room.nbytes

    @property
    def learning(self) -> int:
        """Feeds whose baseline is not complete."""
        return len(self._members.learning)

    @property
    def parts(self) -> Mapping[str, State]:
        """What else was given to the last :meth:`commit`."""
        committed = None if self._folder is None else self._folder.committed
        return {} if committed is None else committed.parts

    @property
    def position(self) -> Any:
        """What was given to the last :meth:`commit`; None before the first."""
        committed = None if self._folder is None else self._folder.committed
        return None if committed is None else committed.position

    def push_many(self, table: Any, at: ArrayLike | None = None) -> pa.Table:
        """Judge a batch of rows of any feeds.

        Parameters
        ----------
        table : object of the Arrow PyCapsule protocol
            From pyarrow, polars, pandas, duckdb, ...: a column of keys, and one for each channel;
            others are left alone. NaN and null mark what is missing. Rows of a feed are in order
            of time.
        at : array_like of shape (m,), optional
            When they were taken, where no column says so: numbers of seconds or datetime64.

        Returns
        -------
        pyarrow.Table
            The key column, then the decision columns of :meth:`NoveltyMonitor.push_many`, one row
            per row of the batch, in its order. ``sample`` and ``event`` count within the feed.

        Raises
        ------
        SampleError, SampleTypeError
            If any row is refused; the message names row, key and channel, and no feed has changed.
        FleetError
            If the fleet is closed.

        Notes
        -----
        A call costs some 7 microseconds for each feed in it and 0.3 for each sample: rows of a
        feed that come together are cheaper than rows that come one by one. Every 2,048 samples
        (fewer with a short half-life) a feed learns from them, which takes most of a millisecond.
        """
        with self._lock:
            self._ready()
            rows = read_rows(table, self._layout, at, self._workers, self._room)
            columns = Columns(0, rows.times, len(rows))
            self._take(rows, columns)
            if self._folder is not None and self._folder.parking.begun:
                self._tidy(self._folder)
            key = pa.field(self._layout.key, rows.column.type)
            return columns.table().add_column(0, key, rows.column)

    def push(self, key: Key, sample: ArrayLike, at: Any = None) -> Verdict:
        """Judge one sample of a feed.

        Parameters
        ----------
        key : str or int
            The feed.
        sample, at
            As for :meth:`NoveltyMonitor.push`.

        Raises
        ------
        SampleError, SampleTypeError
            If key, sample or time is refused; no feed has changed.
        FleetError
            If the fleet is closed.
        """
        with self._lock:
            self._ready()
            if isinstance(key, bool) or not isinstance(key, str | int):
                raise SampleTypeError(f"key {key!r}: a key is text or a whole number")
            known = key in self._members
            if not known:
                one_sample(sample, self._layout.channels, FLOAT64, missing=True)
                if at is not None:
                    nanoseconds(at)
                self._members.know(key, None, self._left)
            monitor = self._brought(key)
            try:
                verdict = monitor.push(sample, at)
            except StreambasisError as error:
                raise type(error)(f"key {key!r}: {error}") from None
            self._members.note_learning(key)
            return verdict

    def _take(self, rows: Rows, columns: Columns) -> None:
        """Let every feed judge its rows, those first that can still refuse them."""
        members = self._members
        new = [key for key in rows.keys if key not in members]
        for key in new:
            members.know(key, None, self._left)
        # what a baseline teaches can be beyond double precision, which only learning it shows
        first = [
            key
            for key, (start, stop) in rows.spans.items()
            if 0 < members.learning.get(key, 0) <= stop - start
        ]
        before = {key: members.before(key) for key in first}
        try:
            self._judge(first, rows, columns)
        except StreambasisError:
            for key, was in before.items():
                members.put_back(key, was)
            for key in new:
                members.forget(key)
            raise
        except BaseException as error:
            self._stop(error)
            raise
        try:
            self._judge([key for key in rows.keys if key not in before], rows, columns)
        except BaseException as error:
            self._stop(error)
            raise

    def _judge(self, keys: list[Key], rows: Rows, columns: Columns) -> None:
        members = self._members
        whole = columns.plain(slice(None))

        def work(share: list[Key]) -> None:
            monitors = [members.monitor(key) for key in share]
            starts, stops = np.array([rows.spans[key] for key in share], np.int64).T.copy()
            ports = np.array([monitor.port for monitor in monitors], np.int64)
            waiting = np.flatnonzero(stops > starts)
            while len(waiting):
                there = waiting[ports[waiting] != 0]
                due = np.ones(len(share), np.bool_)
                begun, left = starts[there], due[there]
                take_plain(
                    ports[there], begun, stops[there], rows.order, rows.values, columns.time,
                    whole, left,
                )  # fmt: skip
                starts[there], due[there] = begun, left
                waiting = waiting[due[waiting]]
                for i in waiting.tolist():
                    start, stop = int(starts[i]), int(stops[i])
                    starts[i] += self._step(share[i], monitors[i], rows, columns, start, stop)
                    ports[i] = monitors[i].port
                waiting = waiting[starts[waiting] < stops[waiting]]

        for turn in members.turns(keys):
            self._workers(members.park, members.surplus(turn))
            self._workers(work, _shares(turn, rows, self._workers.count))
            members.used(turn)

    def _step(
        self, key: Key, monitor: NoveltyMonitor, rows: Rows, columns: Columns, start: int, stop: int
    ) -> int:
        """Let a monitor do what the kernel cannot; return how many rows that judges."""
        # often one row alone is not for the kernel: the others need not be copied again and again
        stop = min(stop, start + STEP)
        where = rows.where(start, stop)
        part = Columns(0, columns.time[where], stop - start)
        try:
            count = monitor.step(rows.values[where], part)
        except StreambasisError as error:
            text = f"key {key!r}: {error}; nothing of the batch was taken"
            raise type(error)(text) from None
        columns.put(where, part, count)
        self._members.note_learning(key)
        return count

    def monitor(self, key: Key) -> NoveltyMonitor:
        """Return a copy of the monitor of a feed as it stands: to look at, or to save.

        What is done to the copy does not change the fleet.

        Raises
        ------
        SettingError
            If there is no such feed.
        """
        with self._lock:
            self._ready()
            self._known(key)
            held = self._members.live.get(key)
            if held is None:
                return self._members.parked(key)
            return NoveltyMonitor.from_state(held.to_state())

    def __getitem__(self, key: Key) -> NoveltyMonitor:
        return self.monitor(key)

    @property
    def events(self) -> Mapping[Key, list[Event]]:
        """The events of each feed, looked up when they are asked for."""
        return _Events(self)

    def _events_of(self, key: Key) -> list[Event]:
        with self._lock:
            held = self._members.live.get(key)
            return self.monitor(key).events if held is None else held.events

    def label(self, key: Key, event: int, text: str | None) -> None:
        """Give an event of a feed a text that its recurrences name; None takes it away."""
        with self._lock:
            self._brought(key).label(event, text)

    def adopt(self, key: Key, event: int) -> None:
        """Take an event of a feed for known behaviour of that feed."""
        with self._lock:
            self._brought(key).adopt(event)

    def finish(self, key: Key | None = None) -> None:
        """Close what is open in one feed, or in every feed, at the end of it."""
        with self._lock:
            for each in self.keys if key is None else (key,):
                self._brought(each).finish()

    def _brought(self, key: Key) -> NoveltyMonitor:
        """Return the monitor of a feed, in memory and about to change."""
        self._ready()
        self._known(key)
        for other in self._members.surplus([key]):
            self._members.park(other)
        monitor = self._members.monitor(key)
        self._members.used([key])
        return monitor

    def _ready(self) -> None:
        if self._stopped:
            raise FleetError(self._stopped)

    def _known(self, key: Key) -> None:
        if key not in self._members:
            raise SettingError(f"key {key!r}: no feed of this fleet; they are listed in .keys")

    def _stop(self, error: BaseException) -> None:
        """Refuse everything from now on: some feeds are ahead of others."""
        way_out = "make it again"
        if self._folder is not None and not self._folder.temporary:
            way_out = "open its home again, to go on from the last commit"
        self._stopped = (
            f"the fleet stopped in the middle of a batch ({type(error).__name__}: {error}); "
            f"{way_out}"
        )

    def commit(self, position: Any = None, parts: Mapping[str, State] | None = None) -> None:
        """Make everything taken so far what a later process goes on from, in one step.

        Parameters
        ----------
        position : JSON things, optional
            Where the feed is to be gone on with; :attr:`position` gives it back.
        parts : mapping of str to State, optional
            What else has to be true at the same time.

        Raises
        ------
        HomeError
            If the disk does not take it; the last commit still stands, and the fleet can go on.
        SettingError
            If the fleet has no home.

        Notes
        -----
        Writes a snapshot of each feed that has gone on since the last commit, one after another
        into a few large files, forces those to the disk, and then replaces the one file that names
        them.
        """
        with self._lock:
            self._ready()
            if self._folder is None or self._folder.temporary:
                raise SettingError("commit: the fleet has no home; give one with home=")
            self._commit(self._folder, position, parts or {})

    def _commit(self, folder: Folder, position: Any, parts: Mapping[str, State]) -> None:
        members = self._members
        try:
            members.put_again(members.unproven - members.changed)
            self._workers(members.store, list(members.changed))
            try:
                folder.parking.sync()
            except OSError:
                members.unproven |= members.fresh
                raise
            members.fresh.clear()
            places = {key: members.places[key] for key in members}
            learning = dict(members.learning)
            folder.commit(Committed(self._about, places, learning, position, dict(parts)))
            self._tidy(folder)
        except OSError as error:
            raise folder.named(error) from None

    def _tidy(self, folder: Folder) -> None:
        """Remove files that nobody needs, and write again what is left in those hardly needed."""
        places = self._members.places
        little = folder.parking.keep(folder.needed(places.values()))
        if little:
            members = self._members
            stay = [key for key, place in places.items() if place.file in little]
            members.put_again(key for key in stay if key not in members.changed)

    def close(self) -> None:
        """Let go of threads, memory and folder; what was not committed is lost."""
        with self._lock:
            if self._closed:
                return
            self._closed = True
            self._stopped = self._stopped or "the fleet is closed"
            self._workers.close()
            self._members.live.clear()
            if self._folder is not None:
                self._folder.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()


class _Events(Mapping[Key, list[Event]]):
    """The events of each feed, by key."""

    def __init__(self, fleet: Fleet) -> None:
        self._fleet = fleet

    def __getitem__(self, key: Key) -> list[Event]:
        if key not in self._fleet:
            raise KeyError(key)
        return self._fleet._events_of(key)

    def __iter__(self) -> Iterator[Key]:
        return iter(self._fleet.keys)

    def __len__(self) -> int:
        return len(self._fleet)


def _shares(keys: list[Key], rows: Rows, threads: int) -> Iterator[list[Key]]:
    """Yield the keys in shares of about the same number of rows; one thread takes them as one."""
    if threads == 1 and keys:
        yield keys
        return
    lengths = [rows.spans[key][1] - rows.spans[key][0] for key in keys]
    most = max(sum(lengths) / (SHARES * threads), LEAST_SHARE)
    share: list[Key] = []
    held = 0
    for key, length in zip(keys, lengths, strict=True):
        share.append(key)
        held += length
        if held >= most:
            yield share
            share, held = [], 0
    if share:
        yield share


def _check_columns(channels: Channels, key: str, time: str | None) -> None:
    """Refuse columns that would be two things at once."""
    taken = Columns.__slots__
    if key in taken:
        raise SettingError(f"key={key!r}: a column of that name is among the decisions")
    for name, what in ((key, "key"), (time, "time")):
        if channels.named and name in channels.names:
            raise SettingError(f"{what}={name!r}: the {what} cannot be a channel as well")
    if key == (time or TIME):
        raise SettingError(f"time={time!r}: the key cannot be the time as well")
