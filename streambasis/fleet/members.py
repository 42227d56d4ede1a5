"""The monitors of a fleet: which are in memory, which are parked, and how they change places."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Iterable, Iterator

from streambasis.errors import SnapshotError
from streambasis.fleet.parking import Parking, Place
from streambasis.fleet.rows import Key
from streambasis.monitor import NoveltyMonitor
from streambasis.snapshot import from_bytes, state_from_bytes, to_bytes
from streambasis.state import State

Before = tuple[State | Place | None, int]
"""What a feed was (in memory, parked, or not there), and what its baseline waited for."""


class Members:
    """A monitor for each key.

    Parameters
    ----------
    make : callable
        Makes the monitor of a new feed.
    limit : int or None
        Most monitors in memory.
    parking : Parking or None
        Where the others lie; needed where there is a limit.

    Attributes
    ----------
    live : dict of key to NoveltyMonitor
        Those in memory, the one that has waited longest first.
    places : dict of key to Place
        Where the newest snapshot of a feed lies, which counts unless the feed is among ``changed``.
    changed : set of key
        Feeds in memory that have gone on since.
    fresh : set of key
        Feeds whose snapshot has not been forced to the disk yet.
    unproven : set of key
        Feeds of which that has failed, so that their snapshots have to be put again.
    learning : dict of key to int
        Samples that the baseline of a feed still waits for, where it is not complete.
    trouble : str
        Why a feed could not be parked; empty while all is well.

    Notes
    -----
    Different threads may see to different keys at a time.
    """

    def __init__(
        self, make: Callable[[], NoveltyMonitor], limit: int | None, parking: Parking | None
    ) -> None:
        self._make, self._limit, self.parking = make, limit, parking
        self._numbers: dict[Key, int] = {}
        self.live: dict[Key, NoveltyMonitor] = {}
        self.places: dict[Key, Place] = {}
        self.changed: set[Key] = set()
        self.fresh: set[Key] = set()
        self.unproven: set[Key] = set()
        self.learning: dict[Key, int] = {}
        self.trouble = ""

    def __len__(self) -> int:
        return len(self._numbers)

    def __iter__(self) -> Iterator[Key]:
        return iter(self._numbers)

    def __contains__(self, key: object) -> bool:
        return key in self._numbers

    def know(self, key: Key, place: Place | None, left: int) -> None:
        """Add a feed, parked or new, whose baseline waits for ``left`` samples."""
        self._numbers[key] = len(self._numbers)
        if place is not None:
            self.places[key] = place
        if left:
            self.learning[key] = left

    def turns(self, keys: list[Key]) -> Iterator[list[Key]]:
        """Yield keys in such numbers as may be in memory at a time, those that are there first."""
        if self._limit is None or len(keys) <= self._limit:
            yield keys
            return
        ordered = sorted(keys, key=lambda key: key not in self.live)
        for start in range(0, len(ordered), self._limit):
            yield ordered[start : start + self._limit]

    def surplus(self, wanted: list[Key]) -> list[Key]:
        """Return the feeds to be parked so that those wanted have room."""
        if self._limit is None:
            return []
        coming = sum(key not in self.live for key in wanted)
        count = len(self.live) + coming - self._limit
        if count <= 0:
            return []
        kept = set(wanted)
        return [key for key in self.live if key not in kept][:count]

    def monitor(self, key: Key) -> NoveltyMonitor:
        """Return the monitor of a feed, brought back or made if it is not in memory.

        Raises
        ------
        SnapshotError
            If what was parked is not what comes back; the message names the feed.
        """
        monitor = self.live.get(key)
        if monitor is None:
            monitor = self._make() if key not in self.places else self.parked(key)
            self.live[key] = monitor
        return monitor

    def parked(self, key: Key) -> NoveltyMonitor:
        """Return a monitor built from the snapshot of a feed."""
        assert self.parking is not None
        try:
            monitor = from_bytes(self.parking.get(self.places[key]))
        except SnapshotError as error:
            raise SnapshotError(f"key {key!r}: {error}") from error
        assert isinstance(monitor, NoveltyMonitor)
        return monitor

    def store(self, key: Key) -> None:
        """Write the snapshot of a feed in memory, if it has changed.

        Raises
        ------
        OSError
            If it cannot be written.
        """
        if key in self.changed:
            assert self.parking is not None
            self.places[key] = self.parking.put(to_bytes(self.live[key]))
            self.fresh.add(key)
            self.unproven.discard(key)
            self.changed.discard(key)

    def park(self, key: Key) -> None:
        """Let a monitor out of memory; where the disk does not take it, it stays."""
        try:
            self.store(key)
        except OSError as error:
            self.trouble = f"key {key!r} cannot be parked ({error.strerror or error})"
            warnings.warn(f"{self.trouble}; it stays in memory", RuntimeWarning, stacklevel=2)
        else:
            del self.live[key]

    def used(self, keys: Iterable[Key]) -> None:
        """Note that these feeds were the last to go on."""
        for key in keys:
            self.live[key] = self.live.pop(key)
            self.changed.add(key)

    def note_learning(self, key: Key) -> None:
        """Note what the baseline of a feed in memory still waits for."""
        if key in self.learning:
            self.learning[key] = self.live[key].baseline_left
            if not self.learning[key]:
                del self.learning[key]

    def before(self, key: Key) -> Before:
        """Return what is needed to put a feed back to where it is now."""
        held = self.live[key].to_state() if key in self.live else self.places.get(key)
        return held, self.learning[key]

    def put_back(self, key: Key, before: Before) -> None:
        """Make a feed what it was."""
        held, left = before
        self.live.pop(key, None)
        self.changed.discard(key)
        self.learning[key] = left
        if isinstance(held, State):
            self.live[key] = NoveltyMonitor.from_state(held)
            self.changed.add(key)
        elif held is not None:
            self.places[key] = held

    def forget(self, key: Key) -> None:
        """Remove a feed that is not in memory."""
        del self._numbers[key]
        self.learning.pop(key, None)
        self.places.pop(key, None)

    def put_again(self, keys: Iterable[Key]) -> None:
        """Write the snapshots of feeds once more, elsewhere, as they are.

        Raises
        ------
        SnapshotError
            If one is damaged.
        OSError
            If one cannot be written.
        """
        for key in keys:
            assert self.parking is not None
            data = self.parking.get(self.places[key])
            try:
                state_from_bytes(data)
            except SnapshotError as error:
                raise SnapshotError(f"key {key!r}: {error}") from error
            self.places[key] = self.parking.put(data)
            self.fresh.add(key)
            self.unproven.discard(key)
