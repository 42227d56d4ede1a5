"""Sample after sample against what the baseline taught: scores, events, and what is learnt on."""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.basis import StreamBasis
from streambasis.errors import SettingError, SnapshotError
from streambasis.kernels.monitor import CLOSED, COLLECTED, NOTHING, OPENED, standardize, walk
from streambasis.monitor.contributions import leading, shares
from streambasis.monitor.events import COLLECT, Event, History, OpenEvent
from streambasis.monitor.learning import Learnt
from streambasis.monitor.limits import SpeLimit, t2_limit
from streambasis.monitor.precursors import Precursors
from streambasis.monitor.projection import NO_EVENT, Projection
from streambasis.monitor.quantiles import chi2_quantile
from streambasis.monitor.scaling import Scaling
from streambasis.monitor.verdict import NO_TIME, Columns
from streambasis.principal import WHOLE, PrincipalBasis
from streambasis.state import State, owned

MOST_OPEN = 8
"""Most events open at the same time."""

NEARLY = 0.01
"""An open event explains a sample within this squared sine of its directions, whatever the limit:
its directions are known no better than that when it suddenly grows."""

FOLLOW = 0.1
"""Relative change in the number of samples behind the basis at which the T² limit follows."""

MOST_PATTERNS = 16
"""Most patterns of missing channels whose directions are kept ready."""


REACH = 1e8
"""A value further than this many noise standard deviations is scored as if it stood there: no
answer depends on more, and no sum of squares can overflow."""

MOVED = 1.5
"""SPE over its limit that any movement of a constant channel alone makes. Its noise is unknown, so
that it moved is news, and how far says nothing."""

BUFFERED = ("z", "spe", "ratio", "number", "time", "loose", "fold", "pool")
COUNTED = ("ring", "counters", "last", "quiet", "taken")
"""The arrays that hold a row of the buffer each, and those of the walk."""


@dataclass(frozen=True, slots=True)
class Settings:
    """What a monitor goes by after its baseline; described at ``NoveltyMonitor``."""

    false_alarm: float
    limits: str
    half_life: float | None
    opens: int
    window: int
    quiet: int
    same: float
    block: int

    @property
    def memory(self) -> float:
        """Samples over which the limit remembers."""
        return math.inf if self.half_life is None else max(20_000.0, 20.0 * self.half_life)


@dataclass(slots=True)
class _Scored:
    """Rows of the buffer, scored; ``special`` holds the projection of each row with gaps."""

    z: NDArray[np.float64]
    coordinates: NDArray[np.float64]
    spe: NDArray[np.float64]
    rest: NDArray[np.float64]
    t2: NDArray[np.float64]
    limit: NDArray[np.float64]
    judged: NDArray[np.bool_]
    beyond: NDArray[np.bool_]
    shows: NDArray[np.bool_]
    special: dict[int, Projection]


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

    Parameters
    ----------
    names : tuple of str
        The channels.
    settings : Settings
        What to go by.
    learnt : Learnt
        What the baseline taught.
    first : int
        Number of the first sample to be judged.
    """

    def __init__(
        self, names: tuple[str, ...], settings: Settings, learnt: Learnt, first: int
    ) -> None:
        self.scaling = learnt.scaling
        self._set_up(names, settings)
        self.basis.take_many(learnt.z * self.scaling.scale + self.scaling.centre)
        self.basis.flush()
        self.limit.start(learnt.spe, learnt.roots)
        self.count = first
        self._refresh()
        self.first_vectors = self.vectors

    def _set_up(self, names: tuple[str, ...], settings: Settings) -> None:
        """Make everything that the scaling and the settings determine."""
        n = len(names)
        self.names = names
        self.settings = settings
        self.inverse = 1.0 / self.scaling.scale
        weights = self.inverse**2
        self.basis = PrincipalBasis(
            names,
            rank=max(self.scaling.rank, 1),
            centre=True,
            half_life=settings.half_life,
            block=settings.block if n <= WHOLE else None,
            inner=weights,
        )
        self.limit = SpeLimit(settings.limits, settings.false_alarm, settings.memory)
        self.history = History(n, settings.same)
        self.precursors = Precursors(settings.quiet)
        self.known = StreamBasis(names, inner=weights)
        self.adopted = np.zeros(0, np.int64)
        self.behaviour = np.zeros((0, n))
        self.open: list[OpenEvent] = []
        self._ring = np.zeros(settings.window, np.bool_)
        self._counters = np.zeros(4, np.int64)
        self._last, self._quiet, self._taken = (np.zeros(MOST_OPEN, np.int64) for _ in range(3))
        self._walk = np.array([settings.opens, settings.quiet, COLLECT, MOST_OPEN])
        self._reach = np.full(n, REACH)
        rows = settings.window + settings.block
        self._fill = 0
        self._z = np.zeros((rows, n))
        self._spe, self._ratio = np.zeros(rows), np.zeros(rows)
        self._number, self._time = np.full(rows, -1), np.full(rows, NO_TIME)
        self._loose, self._fold, self._pool = (np.zeros(rows, np.bool_) for _ in range(3))
        self._t2_value, self._t2_count = math.inf, 0.0

    @property
    def rank(self) -> int:
        """Directions of the basis; a feed whose channels share nothing has none."""
        return self.basis.rank if self.scaling.rank else 0

    @property
    def _forming(self) -> bool:
        return bool(self._counters[3])

    def _refresh(self) -> None:
        """Read the basis as it stands, and let the T² limit follow."""
        self.vectors = np.ascontiguousarray(self.basis.vectors[: self.rank] * self.inverse)
        self.energies = self.basis.energies[: self.rank]
        self.mean = (self.basis.mean - self.scaling.centre) * self.inverse
        self._reach[self.scaling.constant] = math.sqrt(MOVED * self.limit.value)
        count = self.basis.effective_count
        if abs(count - self._t2_count) > FOLLOW * self._t2_count:
            self._t2_value = t2_limit(self.rank, count, self.settings.false_alarm)
            self._t2_count = count
        self._project()

    def _project(self) -> None:
        """Set up the directions that samples are split over."""
        standing = self.open[: len(self.open) - int(self._forming)]
        ends = np.cumsum([0, *(len(event.directions) for event in standing)]).tolist()
        self._parts = [slice(a, b) for a, b in pairwise(ends)]
        self._taken_off = (
            np.ascontiguousarray(self.known.vectors * self.inverse),
            np.vstack([np.zeros((0, len(self.names))), *(e.directions for e in standing)]),
        )
        self._patterns: dict[bytes, tuple[Projection, float]] = {}
        self._projection = self._projection_for(None)

    def _projection_for(self, observed: NDArray[np.bool_] | None) -> Projection:
        known, events = self._taken_off
        return Projection(known, self.vectors, events, self.energies, self.mean, observed)

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
        done = 0
        while done < len(samples):
            start = self.settings.window + self._fill
            count = min(len(samples) - done, self.settings.block - self._fill)
            rows = slice(start, start + count)
            self._standardize(samples[done : done + count], self._z[rows])
            self._number[rows] = np.arange(self.count, self.count + count)
            self._time[rows] = columns.time[at + done : at + done + count]
            while start < rows.stop:
                size = self._stretch(slice(start, rows.stop), columns, at + done)
                start += size
                done += size
                self._fill += size
            if self._fill == self.settings.block:
                self._turn()

    def _stretch(self, rows: slice, columns: Columns, at: int) -> int:
        """Judge rows of the buffer up to the next transition of an event; return how many."""
        scored = self._scored(self._z[rows])
        row, what, which = walk(
            self.count, scored.judged, scored.beyond, scored.shows, self._ring, self._counters,
            self._last, self._quiet, self._taken, self._walk,
        )  # fmt: skip
        size = len(scored.z) if what == NOTHING else row + 1
        rows = slice(rows.start, rows.start + size)
        self._write(scored, size, columns, slice(at, at + size))
        self._gather(scored, size, rows)
        self._note(scored, size, rows)
        self.count += size
        if what == OPENED:
            self._begin(rows.stop)
            columns.event[at + size - 1] = self.open[-1].number
        elif what == COLLECTED:
            self._settle(which)
        elif what == CLOSED:
            self._close(which)
        return size

    def _scored(self, z: NDArray[np.float64]) -> _Scored:
        """Split rows over the directions and compare what is left with the limit."""
        m = len(z)
        coordinates = np.empty((m, len(self._projection.directions)))
        spe, rest, t2 = np.empty(m), np.empty(m), np.empty(m)
        self._projection.score(z, coordinates, spe, rest, t2)
        limit = np.full(m, self.limit.value)
        judged = np.ones(m, np.bool_)
        special: dict[int, Projection] = {}
        for i in np.flatnonzero(np.isnan(z).any(axis=1)).tolist():
            special[i], limit[i] = self._pattern(~np.isnan(z[i]))
            one = slice(i, i + 1)
            special[i].score(z[one], coordinates[one], spe[one], rest[one], t2[one])
            if np.isnan(limit[i]):
                judged[i] = False
                spe[i] = rest[i] = t2[i] = np.nan
        along = coordinates[:, self._projection.first :] ** 2
        beyond = rest > limit
        shows = np.zeros((m, len(self._parts)), np.bool_)
        if self._parts:
            beyond &= rest > NEARLY * along.sum(axis=1)
            floor = np.minimum(rest, self.limit.mean)
            for j, part in enumerate(self._parts):
                shows[:, j] = floor + along[:, part].sum(axis=1) > limit
        return _Scored(z, coordinates, spe, rest, t2, limit, judged, beyond, shows, special)

    def _pattern(self, observed: NDArray[np.bool_]) -> tuple[Projection, float]:
        """Return the directions as the observed channels show them, and the limit for those.

        The limit is that of all channels in proportion to the quantiles of chi-squared variables
        with the degrees of freedom left; NaN where fewer than half of the channels are observed or
        no freedom is left.
        """
        key = observed.tobytes()
        if key not in self._patterns:
            if len(self._patterns) == MOST_PATTERNS:
                self._patterns.clear()
            projection = self._projection_for(observed)
            moving = ~self.scaling.constant
            free = int(np.count_nonzero(observed & moving)) - projection.seen
            full = int(np.count_nonzero(moving)) - self._projection.seen
            value = math.nan
            if free > 0 and 2 * int(observed.sum()) >= len(observed):
                p = self.settings.false_alarm
                value = self.limit.value * chi2_quantile(p, free) / chi2_quantile(p, full)
            self._patterns[key] = projection, value
        return self._patterns[key]

    def _write(self, scored: _Scored, size: int, columns: Columns, out: slice) -> None:
        columns.spe[out], columns.t2[out] = scored.spe[:size], scored.t2[:size]
        columns.limit[out] = scored.limit[:size]
        columns.t2_limit[out] = np.where(scored.judged[:size], self._t2_value, np.nan)
        columns.novel[out] = scored.spe[:size] > scored.limit[:size]
        columns.extreme[out] = scored.t2[:size] > self._t2_value
        columns.rank[out] = self.rank
        if self.open:
            columns.event[out] = self.open[-1].number

    def _gather(self, scored: _Scored, size: int, rows: slice) -> None:
        """Give open events the rows that show them."""
        for j, event in enumerate(self.open):
            shown = scored.beyond[:size]
            part = NO_EVENT
            if j < len(self._parts):
                shown = scored.shows[:size, j] & ~shown
                part = self._parts[j]
            picked = np.flatnonzero(shown)
            if picked.size:
                self._give(event, scored, picked, rows.start, part)

    def _give(
        self, event: OpenEvent, scored: _Scored, picked: NDArray[Any], start: int, part: slice
    ) -> None:
        residuals = self._projection.residuals(scored.z[picked], scored.coordinates[picked], part)
        for position, i in enumerate(picked.tolist()):
            if i in scored.special:
                one = slice(i, i + 1)
                residuals[position] = scored.special[i].residuals(
                    scored.z[one], scored.coordinates[one], part
                )[0]
        ratios = np.sum(residuals**2, axis=1) / scored.limit[picked]
        event.collect(residuals, float(ratios.max()), int(self._time[start + picked[-1]]))

    def _note(self, scored: _Scored, size: int, rows: slice) -> None:
        """Keep what the end of the block needs of rows, and make them fit to be folded."""
        fold = scored.judged[:size] & ~scored.beyond[:size]
        self._spe[rows] = scored.spe[:size]
        self._ratio[rows] = scored.rest[:size] / scored.limit[:size]
        self._loose[rows] = scored.beyond[:size] & (not self._forming)
        self._fold[rows] = fold
        self._pool[rows] = scored.judged[:size] & (not self.open)
        special = np.zeros(size, np.bool_)
        special[[i for i in scored.special if i < size]] = True
        self._pool[rows] &= ~special
        early = self._pool[rows] & scored.beyond[:size]
        if early.any():
            self.precursors.hold(self._number[rows][early], scored.spe[:size][early])
            self._pool[rows] &= ~early
        if self._projection.known or self._parts:
            special[:] = True
        special |= scored.t2[:size] > self._t2_value
        for i in np.flatnonzero(fold & special).tolist():
            projection = scored.special.get(i, self._projection)
            scored.z[i] = projection.plain(
                scored.z[i], scored.coordinates[i], float(scored.t2[i]), self._t2_value
            )

    def _begin(self, stop: int) -> None:
        """Open an event on the last rows before ``stop`` of the buffer."""
        rows = np.flatnonzero(self._loose[stop - self.settings.window : stop])
        rows += stop - self.settings.window
        first = int(rows[0])
        event = OpenEvent(
            self.history.next, int(self._number[first]), int(self._time[first]), len(self.names)
        )
        self.history.next += 1
        scored = self._scored(self._z[rows])
        self._give(event, scored, np.arange(len(rows)), 0, NO_EVENT)
        event.peak = float(self._ratio[rows].max())
        event.end_time = int(self._time[rows[-1]])
        self._loose[rows] = False
        self._pool[first:stop] = False
        self.precursors.claim(event.start)
        self.open.append(event)
        at = len(self.open) - 1
        self._last[at], self._quiet[at], self._taken[at] = self.count - 1, 0, len(rows)
        self._ring[:] = False
        self._counters[:] = (0, 0, at + 1, 1)
        event.settle(self.basis.noise, self._free, self.limit.value)
        event.repeats, event.cosine = self.history.match(event.directions[0], event.number)

    @property
    def _free(self) -> int:
        return int(np.count_nonzero(~self.scaling.constant)) - self._projection.seen

    def _settle(self, which: int) -> None:
        """Bring the directions of an open event up to what it has shown."""
        event = self.open[which]
        explained = event.settle(self.basis.noise, self._free, self.limit.value)
        forming = self._forming and which == len(self.open) - 1
        if forming and explained:
            self._counters[3] = 0
        if explained or not forming:
            self._project()

    def _close(self, which: int) -> None:
        """Close an open event."""
        event = self.open[which]
        event.settle(self.basis.noise, self._free, self.limit.value)
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
        event = self.open[which]
        # a copy of what the event holds: looking at it must not change what it becomes
        rows, directions, peak = event.rows[: event.filled], event.directions, event.peak
        inside = self._projection.directions[: self._projection.first]
        parts = shares(rows, inside, event.count, self.basis.noise)
        order = leading(parts)
        repeats, cosine = self.history.match(directions[0], event.number)
        fields = {
            "event": event.number,
            "start": event.start,
            "end": int(self._last[which]),
            "start_time": iso(event.start_time),
            "end_time": iso(event.end_time),
            "peak": peak,
            "channels": [self.names[i] for i in order],
            "contributions": {
                self.names[i]: float(parts[i]) for i in np.argsort(-parts, kind="stable")
            },
            "repeats": repeats,
            "cosine": cosine,
            "label": event.label,
        }
        return Event(fields, directions, open=open)

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
        if number in self.adopted:
            return
        directions = event.directions
        for direction in directions:
            self.known.push(direction * self.scaling.scale)
        self.behaviour = np.vstack([self.behaviour, directions])
        self.adopted = np.concatenate([self.adopted, np.full(len(directions), number)])
        self._project()

    def loadings(self, z: NDArray[np.float64]) -> tuple[NDArray[Any], NDArray[Any]]:
        """Return how much of each adopted direction is in a sample, (n,), and its standard error.

        Least squares on the observed channels, together with the basis.
        """
        seen = ~np.isnan(z)
        rows = np.vstack([self.behaviour, self.vectors])[:, seen]
        inverse = np.linalg.pinv(rows.T, rcond=1e-6)[: len(self.behaviour)]
        return inverse @ (z - self.mean)[seen], np.sqrt(np.sum(inverse**2, axis=1))

    def shown(self, samples: NDArray[np.float64]) -> tuple[int, ...]:
        """Return the adopted events whose behaviour shows in a sample in channel units, (n,)."""
        if not len(self.adopted):
            return ()
        amounts, errors = self.loadings(self.standard(samples[None])[0])
        chance = self.settings.false_alarm / len(self.adopted)
        floor = errors * math.sqrt(self.basis.noise * chi2_quantile(chance, 1.0))
        return tuple(sorted(set(self.adopted[np.abs(amounts) > floor].tolist())))

    def standard(self, samples: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return samples, (m, n), about their centre and in noise units."""
        z = np.empty_like(samples)
        self._standardize(samples, z)
        return z

    def _standardize(self, samples: NDArray[np.float64], out: NDArray[np.float64]) -> None:
        standardize(samples, self.scaling.centre, self.inverse, self._reach, out)

    def shares(self, samples: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return each channel's share in the SPE of one sample in channel units, (1, n)."""
        z = self.standard(samples)
        observed = ~np.isnan(z[0])
        projection = self._projection if observed.all() else self._pattern(observed)[0]
        inside = projection.directions[: projection.first]
        residual = np.where(observed, z - self.mean, 0.0)
        residual -= (residual @ inside.T) @ inside
        return shares(residual, inside, 1, self.basis.noise)

    def _turn(self) -> None:
        """End a block: learn from the rows now past the persistence window, move the rest up."""
        block, window = self.settings.block, self.settings.window
        fold = self._fold[:block]
        if fold.any():
            z = self._z[:block][fold]
            self.basis.take_many(z * self.scaling.scale + self.scaling.centre)
            self.basis.flush()
        chance = self.precursors.release(self.count)
        self.limit.take(np.concatenate([self._spe[:block][self._pool[:block]], chance]))
        for name in BUFFERED:
            array = getattr(self, f"_{name}")
            array[:window] = array[block : block + window].copy()
        self._fill = 0
        self._refresh()

    def to_state(self) -> State:
        """Hand over everything needed to go on."""
        scaling = self.scaling
        facts: dict[str, Any] = {
            "rank": scaling.rank,
            "count": self.count,
            "fill": self._fill,
            "t2_limit": self._t2_value,
            "t2_count": self._t2_count,
            "open": len(self.open),
        }
        held = self.settings.window + self._fill
        arrays = {name: owned(getattr(self, f"_{name}")[:held]) for name in BUFFERED}
        arrays |= {name: owned(getattr(self, f"_{name}")) for name in COUNTED}
        arrays |= {
            name: owned(getattr(scaling, name))
            for name in ("centre", "scale", "constant", "nearly")
        }
        arrays |= {
            "adopted": owned(self.adopted),
            "behaviour": owned(self.behaviour),
            "first_vectors": owned(self.first_vectors),
            # what the samples of this block are judged by: later folds must not show before its end
            "vectors": owned(self.vectors),
            "energies": owned(self.energies),
            "mean": owned(self.mean),
        }
        parts = {
            "basis": self.basis.to_state(),
            "limit": self.limit.to_state(),
            "history": self.history.to_state(),
            "precursors": self.precursors.to_state(),
            "known": self.known.to_state(),
        }
        parts |= {f"event_{i}": event.to_state() for i, event in enumerate(self.open)}
        return State("Judge", facts, arrays, parts)

    @classmethod
    def from_state(cls, names: tuple[str, ...], settings: Settings, state: State) -> Judge:
        """Build a judge that goes on where the state was taken."""
        judge = cls.__new__(cls)
        facts, parts, n = state.facts, state.parts, len(names)
        judge.scaling = Scaling(
            state.take("centre", np.float64, (n,), finite=True),
            state.take("scale", np.float64, (n,), finite=True),
            facts["rank"],
            state.take("constant", np.bool_, (n,)),
            state.take("nearly", np.bool_, (n,)),
        )
        judge._set_up(names, settings)
        judge.basis = PrincipalBasis.from_state(parts["basis"])
        judge.limit = SpeLimit.from_state(parts["limit"])
        judge.history = History.from_state(parts["history"])
        judge.precursors = Precursors.from_state(parts["precursors"])
        judge.known = StreamBasis.from_state(parts["known"])
        judge.open = [OpenEvent.from_state(parts[f"event_{i}"]) for i in range(facts["open"])]
        judge.count, judge._fill = facts["count"], facts["fill"]
        judge._t2_value, judge._t2_count = facts["t2_limit"], facts["t2_count"]
        held = settings.window + judge._fill
        for name in BUFFERED:
            rows = getattr(judge, f"_{name}")
            rows[:held] = state.take(name, rows.dtype, (held, *rows.shape[1:]))
        for name in COUNTED:
            held_by = getattr(judge, f"_{name}")
            held_by[:] = state.take(name, held_by.dtype, held_by.shape)
        judge.adopted = state.take("adopted", np.int64, (None,))
        judge.behaviour = state.take("behaviour", np.float64, (len(judge.adopted), n))
        judge.first_vectors = state.take("first_vectors", np.float64, (None, n))
        judge.vectors = state.take("vectors", np.float64, (None, n))
        judge.energies = state.take("energies", np.float64, (len(judge.vectors),))
        judge.mean = state.take("mean", np.float64, (n,), finite=True)
        judge._check()
        judge._reach[judge.scaling.constant] = math.sqrt(MOVED * judge.limit.value)
        judge._project()
        return judge

    def _check(self) -> None:
        """Refuse a state whose parts are of other channels or whose counters cannot be."""
        position, beyond, events, forming = self._counters.tolist()
        if (
            {self.names} != {self.basis.channels, self.known.channels}
            or {event.rows.shape[1] for event in self.open} - {len(self.names)}
            or self.history.channels != len(self.names)
            or not (self.scaling.scale > 0).all()
            or not 0 <= self._fill < self.settings.block
            or not 0 <= position < self.settings.window
            or beyond != self._ring.sum()
            or events != len(self.open)
            or not 0 <= forming <= min(events, 1)
            or events > MOST_OPEN
        ):
            raise SnapshotError("the parts of a monitor do not fit each other")


def iso(time: int) -> str | None:
    """Return nanoseconds since the Unix epoch as ISO 8601 text; None stays None."""
    return None if time == NO_TIME else str(np.datetime64(time, "ns"))
