"""Events: what they are while they last, what is kept of them, and which one they repeat."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.errors import SnapshotError
from streambasis.state import State, owned

COLLECT = 32
"""Samples of an event between two updates of its directions."""

HELD = 8
"""Directions held of an event between updates; those that stand out of noise are its own."""

MOST_DIRECTIONS = 4
"""Most directions of an event. Shifts, ramps and a noisy channel need one, an oscillation two."""

STANDING_PART = 0.75
"""An event's directions stand when they explain this part of the samples just collected."""

STANDING_NOISE = 1.5
"""What an event's directions leave, on the average, may be so many times ordinary noise for them to
stand: beyond, the noise itself has grown, and whatever directions are taken off more would follow,
as events of their own."""

KEPT_EVENTS = 4096
"""Most events kept; beyond, the oldest is forgotten."""


class Event(dict[str, Any]):
    """An event, as the mapping that becomes one JSON line.

    The keys are ``event`` (its number, from 0), ``start`` and ``end`` (numbers of the first and
    the last sample that show it), ``start_time`` and ``end_time`` (ISO 8601 text or None),
    ``peak`` (largest SPE over the limit), ``channels`` (names, largest contribution first, that
    together make 90 %), ``contributions`` (name to share), ``repeats`` (number of the earlier
    event with the same direction, or None), ``cosine`` (of the angle to it, or None) and
    ``label`` (its own, or that of the event it repeats).

    Attributes
    ----------
    directions : ndarray of float64, shape (d, n)
        Orthonormal, in units of each channel's noise, the strongest first.
    open : bool
        Whether it still goes on.
    """

    __slots__ = ("directions", "open")

    def __init__(
        self, fields: dict[str, Any], directions: NDArray[np.float64], *, open: bool
    ) -> None:
        super().__init__(fields)
        self.directions = directions
        self.open = open

    @property
    def direction(self) -> NDArray[np.float64]:
        """The strongest direction, a unit vector in units of each channel's noise, (n,)."""
        return np.asarray(self.directions[0])

    @property
    def duration(self) -> int:
        """Samples from the first to the last that show it."""
        return int(self["end"] - self["start"] + 1)


class OpenEvent:
    """An event that still goes on: where it began, and the directions it has shown so far.

    Parameters
    ----------
    number, start : int
        Number of the event and of its first sample.
    start_time : int
        Time of that sample in nanoseconds, or ``NO_TIME``.
    channels : int
        Number of channels n.

    Notes
    -----
    Residuals are collected and folded, 32 at a time, into 8 directions with their weights by a
    singular value decomposition (Levy & Lindenbaum 2000), so an event of any length takes
    40·n numbers.
    """

    __slots__ = (
        "cosine",
        "count",
        "directions",
        "end_time",
        "filled",
        "label",
        "number",
        "peak",
        "repeats",
        "rows",
        "shares",
        "start",
        "start_time",
    )

    def __init__(self, number: int, start: int, start_time: int, channels: int) -> None:
        self.number = number
        self.start = start
        self.start_time = start_time
        self.end_time = start_time
        self.peak = 0.0
        self.count = 0
        self.filled = 0
        self.rows = np.zeros((HELD + COLLECT, channels))
        self.directions = np.zeros((0, channels))
        self.repeats: int | None = None
        self.cosine: float | None = None
        self.label: str | None = None
        # what was last asked for: after how many samples, with which directions, and the answer
        self.shares: tuple[int, object, NDArray[np.float64]] | None = None

    @property
    def nbytes(self) -> int:
        """Bytes of the arrays."""
        return self.rows.nbytes + self.directions.nbytes

    def collect(self, residuals: NDArray[np.float64], ratio: float, time: int) -> None:
        """Take residuals of samples that show the event.

        ``ratio`` is the largest SPE among them over its limit, ``time`` that of the last.
        """
        self.peak = max(self.peak, ratio)
        self.end_time = time
        for start in range(0, len(residuals), COLLECT):
            piece = residuals[start : start + COLLECT]
            if self.filled + len(piece) > len(self.rows):
                self.fold()
            self.rows[self.filled : self.filled + len(piece)] = piece
            self.filled += len(piece)
            self.count += len(piece)

    def fold(self) -> None:
        """Turn what was collected into weighted directions."""
        self.shares = None
        _, weights, axes = np.linalg.svd(self.rows[: self.filled], full_matrices=False)
        held = min(HELD, len(weights))
        self.rows[:held] = weights[:held, None] * axes[:held]
        self.filled = held

    def settle(self, noise: float, free: int, limit: float) -> bool:
        """Take as the event's own the directions that stand out of noise.

        Parameters
        ----------
        noise : float
            Variance of an ordinary residual per dimension.
        free : int
            Dimensions that residuals have.
        limit : float
            Control limit of the SPE.

        Returns
        -------
        bool
            Whether they explain what was collected last.

        Notes
        -----
        Noise alone reaches the Marchenko-Pastur edge, here allowed for twice.
        """
        fresh = (
            self.rows[-COLLECT:].copy()
            if self.filled == len(self.rows)
            else (self.rows[: self.filled].copy())
        )
        self.fold()
        powers = np.sum(self.rows[: self.filled] ** 2, axis=1) / self.count
        edge = 2.0 * noise * (1.0 + (free / self.count) ** 0.5) ** 2
        own = max(1, min(MOST_DIRECTIONS, int(np.sum(powers > edge))))
        lengths = np.sqrt(np.sum(self.rows[:own] ** 2, axis=1))
        self.directions = self.rows[:own] / lengths[:, None]
        fresh -= (fresh @ self.directions.T) @ self.directions
        left = np.sum(fresh * fresh, axis=1)
        ordinary = noise * max(free - own, 1)
        return bool(
            np.mean(left <= limit) >= STANDING_PART and left.mean() <= STANDING_NOISE * ordinary
        )

    def to_state(self) -> State:
        """Hand over everything needed to go on."""
        names = ("number", "start", "start_time", "end_time", "peak", "count")
        facts = {name: getattr(self, name) for name in (*names, "repeats", "cosine", "label")}
        arrays = {"rows": owned(self.rows[: self.filled]), "directions": owned(self.directions)}
        return State("OpenEvent", facts, arrays)

    @classmethod
    def from_state(cls, state: State) -> OpenEvent:
        """Build an event that goes on where the state was taken."""
        facts, rows = dict(state.facts), state.take("rows", np.float64, (None, None))
        event = cls(facts.pop("number"), facts.pop("start"), facts["start_time"], rows.shape[1])
        for name, value in facts.items():
            setattr(event, name, value)
        event.rows[: len(rows)] = rows
        event.filled = len(rows)
        event.directions = state.take("directions", np.float64, (None, rows.shape[1]))
        return event


class History:
    """The events so far, by number, and the search for the one that a direction repeats.

    Parameters
    ----------
    floor : float
        Least cosine of the angle between two directions that are taken for the same.
    """

    __slots__ = ("_directions", "events", "floor", "next")

    def __init__(self, channels: int, floor: float) -> None:
        self.floor = floor
        self.next = 0
        self.events: dict[int, Event] = {}
        self._directions = np.zeros((0, channels))

    @property
    def channels(self) -> int:
        """Channels of the directions."""
        return self._directions.shape[1]

    @property
    def nbytes(self) -> int:
        """Bytes of the directions."""
        kept = sum(event.directions.nbytes for event in self.events.values())
        return self._directions.nbytes + kept

    def put(self, event: Event) -> None:
        """Keep a closed event."""
        self.events[event["event"]] = event
        self.events = dict(sorted(self.events.items()))
        while len(self.events) > KEPT_EVENTS:
            del self.events[next(iter(self.events))]
        self._directions = np.array([e.direction for e in self.events.values()])

    def match(self, direction: NDArray[np.float64], before: int) -> tuple[int | None, float | None]:
        """Return the closed event before ``before`` with the nearest direction, and the cosine.

        A direction has no sign: a fault that comes back the other way round is the same.
        Cost 2·n flops per event kept.
        """
        numbers = [number for number in self.events if number < before]
        if not numbers:
            return None, None
        cosines = np.abs(self._directions[: len(numbers)] @ direction)
        best = int(np.argmax(cosines))
        if cosines[best] < self.floor:
            return None, None
        return numbers[best], float(min(cosines[best], 1.0))

    def to_state(self) -> State:
        """Hand over everything needed to go on."""
        events = list(self.events.values())
        width = self._directions.shape[1]
        arrays = {
            "directions": np.vstack([np.zeros((0, width)), *(e.directions for e in events)]),
            "counts": np.array([len(e.directions) for e in events], np.int64),
        }
        facts = {"floor": self.floor, "next": self.next, "events": [dict(e) for e in events]}
        return State("History", facts, arrays)

    @classmethod
    def from_state(cls, state: State) -> History:
        """Build a history that goes on where the state was taken."""
        directions = state.take("directions", np.float64, (None, None))
        counts = state.take("counts", np.int64, (len(state.facts["events"]),))
        if counts.min(initial=0) < 0 or counts.sum() != len(directions):
            raise SnapshotError(f"{len(directions)} directions for events of {counts.sum()}")
        history = cls(directions.shape[1], state.facts["floor"])
        history.next = state.facts["next"]
        ends = np.cumsum(counts)
        for fields, end, count in zip(state.facts["events"], ends, counts, strict=True):
            event = Event(dict(fields), owned(directions[end - count : end]), open=False)
            history.events[event["event"]] = event
        if history.events:
            history._directions = np.array([e.direction for e in history.events.values()])
        return history
