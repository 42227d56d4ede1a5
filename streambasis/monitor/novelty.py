"""NoveltyMonitor: is this sample explained by what the feed has shown, and if not, what is new."""

from __future__ import annotations

import math
import threading
from collections.abc import Iterable
from dataclasses import asdict
from typing import TYPE_CHECKING, Any, Self

import numpy as np
from numpy.typing import ArrayLike, NDArray

from streambasis.audit import Audit, orthogonality
from streambasis.basis import StreamBasis
from streambasis.errors import SampleError, SettingError, SnapshotError
from streambasis.monitor.events import Event
from streambasis.monitor.judging import Judge
from streambasis.monitor.learning import learn
from streambasis.monitor.limits import METHODS
from streambasis.monitor.model import Model, Settings
from streambasis.monitor.verdict import Columns, Verdict
from streambasis.principal import PrincipalBasis
from streambasis.samples import Channels, many_samples, one_sample
from streambasis.state import State, owned
from streambasis.times import many_nanoseconds, nanoseconds

if TYPE_CHECKING:
    import pyarrow as pa

LEAST_BASELINE = 32
"""Fewer samples give no tail to fit a limit to."""

LARGEST_BLOCK = 2048
BLOCK_VALUES = 2**18
"""Samples between two refinements: as many as make the matrix products of a refinement cheap, as
long as the block stays below these numbers of samples and of values."""

LAG = 0.125
"""Largest part of the half-life that a block may span, so that the basis does not lag behind."""

FLOAT64 = np.dtype(np.float64)


class NoveltyMonitor:
    """Novelty of each sample of a feed, the events it makes, and which earlier ones they repeat.

    Parameters
    ----------
    channels : int or sequence of str
        How many channels, or their distinct names.
    baseline : int, array_like of shape (m, n), or Arrow
        Samples that set centre and noise of each channel, the basis and the limits; they should
        show ordinary running. As a number: so many at the start of the feed, which are not
        judged. As samples: these, such as the rows of a file, and the feed is judged from its
        first sample. A sample with fewer than half of its channels is not counted.
    false_alarm : float
        Probability with which an ordinary sample exceeds a limit.
    limits : {"tail", "box", "jackson-mudholkar"}
        How the limit of the squared prediction error is set.
    rank : int, optional
        Directions of the basis; found from the baseline where not given.
    max_rank : int, optional
        Most directions that are found.
    half_life : float, optional
        Samples after which what the basis has learnt counts half; by default it never forgets.
    persistence : (int, int)
        An event opens when so many of so many consecutive samples are beyond the limit.
    quiet : int
        An event closes after so many consecutive samples that do not show it.
    same : float
        Least cosine of the angle between directions of events that count as the same.

    Raises
    ------
    SettingError
        For a setting outside its range.

    Notes
    -----
    Advisory: not a protective or safety-instrumented function.

    A sample costs 4·n·rank flops. Basis and limits are refined at the end of each block of up to
    2,048 samples (fewer for many channels or a short half-life) by the samples that they explain,
    so results do not depend on how the feed is cut into batches. An event costs 40·n numbers while
    it is open and up to 4·n afterwards; 4,096 of them are kept. With a frozen, a missing or a
    faulty channel the others stay watched: it is projected out.

    Examples
    --------
    >>> import numpy as np
    >>> from streambasis import NoveltyMonitor
    >>> rng = np.random.default_rng(0)
    >>> feed = rng.normal(size=(3000, 2)) @ rng.normal(size=(2, 8)) + rng.normal(size=(3000, 8))
    >>> feed[2500:2600, 3] += 8.0
    >>> monitor = NoveltyMonitor(8, baseline=2000)
    >>> table = monitor.push_many(feed)
    >>> [(e["start"], e["end"], e["channels"]) for e in monitor.events]
    [(2500, 2599, ['3'])]
    """

    def __init__(
        self,
        channels: int | Iterable[str],
        *,
        baseline: int | Any = 2000,
        false_alarm: float = 1e-4,
        limits: str = "tail",
        rank: int | None = None,
        max_rank: int | None = None,
        half_life: float | None = None,
        persistence: tuple[int, int] = (4, 8),
        quiet: int = 100,
        same: float = 0.8,
    ) -> None:
        self._channels = Channels(channels)
        n = self._channels.count
        given = None
        if not isinstance(baseline, int | np.integer):
            given = many_samples(baseline, self._channels, FLOAT64, missing=True)
            given = given[_usable(given)]
            baseline = len(given)
        if isinstance(baseline, bool) or baseline < LEAST_BASELINE:
            raise SettingError(
                f"baseline={baseline}: at least {LEAST_BASELINE} samples, or those of a file"
            )
        if not 0.0 < false_alarm <= 0.2:
            raise SettingError(f"false_alarm={false_alarm}: a probability above 0 and up to 0.2")
        if limits not in METHODS:
            raise SettingError(f"limits={limits!r}: one of {', '.join(METHODS)}")
        for name, value in (("rank", rank), ("max_rank", max_rank)):
            if value is not None and not 0 <= value < n:
                raise SettingError(
                    f"{name}={value}: from 0 to the number of channels less one ({n - 1}); "
                    "with as many directions as channels nothing is ever new"
                )
        opens, window = persistence
        if not 1 <= opens <= window:
            raise SettingError(f"persistence={persistence}: m of n samples with 1 <= m <= n")
        if quiet < 1:
            raise SettingError(f"quiet={quiet}: at least one sample")
        if not 0.0 < same <= 1.0:
            raise SettingError(f"same={same}: a cosine above 0 and up to 1")
        if half_life is not None and not 1.0 <= half_life < math.inf:
            raise SettingError(f"half_life={half_life}: at least one sample, or None")
        block = min(LARGEST_BLOCK, max(64, BLOCK_VALUES // n))
        if half_life is not None:
            block = min(block, int(LAG * half_life))
        block = max(block, window)
        self._settings = Settings(
            float(false_alarm), limits, half_life, opens, window, quiet, float(same), block
        )
        self._baseline, self._rank, self._most = int(baseline), rank, max_rank
        self._first, self._waiting = np.zeros((0, n)), 0
        self._waited = 0
        self._judge: Judge | None = None
        self._lock = threading.Lock()
        if given is not None:
            self._learn(given, 0)

    @property
    def channels(self) -> tuple[str, ...]:
        """Names of the channels."""
        return self._channels.names

    def __repr__(self) -> str:
        stage = f"rank {self.rank}" if self.baseline_done else f"baseline of {self.baseline}"
        return f"NoveltyMonitor({len(self.channels)} channels, {stage}, {self.count} samples)"

    @property
    def baseline(self) -> int:
        """Samples of the baseline."""
        return self._baseline

    @property
    def baseline_done(self) -> bool:
        """Whether the baseline is complete and samples are judged."""
        return self._judge is not None

    @property
    def baseline_left(self) -> int:
        """Samples that the baseline still waits for."""
        return 0 if self._judge else self._baseline - self._waiting

    @property
    def count(self) -> int:
        """Samples seen."""
        return self._judge.count if self._judge else self._waited

    @property
    def nbytes(self) -> int:
        """Bytes held."""
        return self._first.nbytes + (self._judge.nbytes if self._judge else 0)

    @property
    def rank(self) -> int:
        """Directions of the basis; 0 during the baseline."""
        return self._judge.model.rank if self._judge else 0

    @property
    def noise(self) -> float:
        """Variance per residual dimension in units of each channel's noise; NaN at first."""
        return self._judge.model.basis.noise if self._judge else math.nan

    @property
    def drift(self) -> float:
        """Largest principal angle between the baseline's subspace and today's, in radians.

        A level that creeps turns no subspace: see :attr:`moved`.
        """
        with self._lock:
            if self._judge is None or self._judge.model.rank == 0:
                return 0.0
            model = self._judge.model
            return _largest_angle(model.first_vectors, model.vectors)

    @property
    def moved(self) -> dict[str, float]:
        """How far the mean of each channel has moved since the baseline, farthest first.

        In standard deviations of the channel's noise. A change so slow that the basis follows it
        makes no event; it is told here, and by :attr:`drift` where it turns the subspace.
        """
        with self._lock:
            if self._judge is None:
                return dict.fromkeys(self.channels, 0.0)
            model = self._judge.model
            far = model.mean - model.first_mean
        return {self.channels[i]: float(far[i]) for i in np.argsort(-np.abs(far), kind="stable")}

    @property
    def basis(self) -> PrincipalBasis:
        """The basis, in channel units and orthonormal in units of each channel's noise."""
        return self._need().model.basis

    @property
    def known(self) -> StreamBasis:
        """The basis of adopted behaviour, in the same units."""
        return self._need().model.known

    @property
    def events(self) -> list[Event]:
        """The events so far, by number, open ones included."""
        with self._lock:
            return [] if self._judge is None else self._judge.events

    def audit(self) -> Audit:
        """Measure the orthonormality of all directions that samples are judged by.

        Returns
        -------
        Audit
            As of :attr:`basis`, but for ``orthogonality``, the largest of the basis, of adopted
            behaviour and of the directions in use until the block ends; NaN where a number that
            samples are judged by is not finite.

        Notes
        -----
        8·n·q² flops for q directions.
        """
        with self._lock:
            model = self._need().model
            found = model.basis.audit()
            used = model.projection.directions
            # a direction that adds nothing to those before it is held as zeros
            ratios = [
                found.orthogonality,
                model.known.audit().orthogonality,
                orthogonality(model.vectors),
                orthogonality(used[used.any(axis=1)]),
            ]
            finite = all(np.isfinite(x).all() for x in (model.mean, model.energies))
            return found._replace(orthogonality=float(np.max(ratios)) if finite else math.nan)

    def push(self, sample: ArrayLike, at: Any = None) -> Verdict:
        """Judge one sample.

        Parameters
        ----------
        sample : array_like of shape (n,)
            Values in the order of the channels; NaN marks a missing one.
        at : float, int, datetime.datetime or numpy.datetime64, optional
            When it was taken; plain numbers are seconds.

        Returns
        -------
        Verdict
            What became of it.

        Raises
        ------
        SampleError, SampleTypeError
            If sample or time is refused; the monitor is unchanged.

        Notes
        -----
        4·n·rank flops, and a refinement at the end of each block.
        """
        checked = one_sample(sample, self._channels, FLOAT64, number=self.count, missing=True)
        time = None if at is None else np.array([nanoseconds(at)])
        with self._lock:
            columns = self._take(checked[None], time)
            known = self._judge.model.shown(checked) if self._judge else ()
        gaps = np.flatnonzero(np.isnan(checked))
        return columns.verdict(tuple(self.channels[i] for i in gaps), known)

    def push_many(self, samples: Any, at: ArrayLike | None = None) -> pa.Table:
        """Judge a batch: the same decisions, to the last bit, as one sample at a time.

        Parameters
        ----------
        samples : array_like of shape (m, n), or Arrow
            Arrow columns are matched to named channels by name; NaN and null mark what is missing.
        at : array_like of shape (m,), optional
            When they were taken, as numbers of seconds or datetime64.

        Returns
        -------
        pyarrow.Table
            The decision columns, one row per sample: ``sample``, ``time``, ``spe``, ``t2``,
            ``limit``, ``t2_limit``, ``novel``, ``extreme``, ``rank``, ``event``. Null where there
            is nothing to tell: during the baseline, for a sample that cannot be judged, outside
            events.

        Raises
        ------
        SampleError, SampleTypeError
            If any sample or time is refused; the monitor is unchanged.
        """
        checked = many_samples(samples, self._channels, FLOAT64, first=self.count, missing=True)
        times = None if at is None else many_nanoseconds(at, len(checked))
        with self._lock:
            return self._take(checked, times).table()

    def judge_rows(self, samples: NDArray[np.float64], columns: Columns, first: int) -> None:
        """Judge a batch into columns that hold the decisions of others as well.

        Parameters
        ----------
        samples : ndarray of float64, shape (m, n)
            Checked, in the order of the channels; NaN marks a missing value.
        columns : Columns
            Rows ``first`` to ``first + m`` are filled; the times there are read.
        first : int
            The first of these rows.
        """
        with self._lock:
            self._fill(samples, columns, first)

    @property
    def port(self) -> int:
        """Address of what :func:`streambasis.kernels.plain.take_plain` needs; 0 before that.

        Whoever gives it to the kernel lets nobody else push meanwhile.
        """
        return self._judge.address if self._judge else 0

    def step(self, samples: NDArray[np.float64], columns: Columns) -> int:
        """Do what is due where the kernel has left off; return how many samples that judges.

        Parameters
        ----------
        samples : ndarray of float64, shape (m, n)
            Checked, in the order of the channels; NaN marks a missing value.
        columns : Columns
            As many rows are filled; the times there are read.
        """
        with self._lock:
            if self._judge is not None:
                return self._judge.step(samples, columns, 0)
            self._fill(samples, columns, 0)
            return len(samples)

    def _take(self, samples: NDArray[np.float64], times: NDArray[np.int64] | None) -> Columns:
        columns = Columns(0, times, len(samples))
        self._fill(samples, columns, 0)
        return columns

    def _fill(self, samples: NDArray[np.float64], columns: Columns, first: int) -> None:
        start = 0
        if self._judge is None:
            numbers = np.arange(self._waited, self._waited + len(samples))
            columns.sample[first : first + len(samples)] = numbers
            start = self._learn_from(samples)
        if self._judge is not None:
            self._judge.take(samples[start:], columns, first + start)
        else:
            self._waited += len(samples)

    def _learn_from(self, samples: NDArray[np.float64]) -> int:
        """Take samples for the baseline; return how many."""
        needed = self._baseline - self._waiting
        positions = np.flatnonzero(_usable(samples))[:needed]
        if not len(self._first):
            self._first = np.empty((self._baseline, samples.shape[1]))
        self._first[self._waiting : self._waiting + len(positions)] = samples[positions]
        if len(positions) < needed:
            self._waiting += len(positions)
            return len(samples)
        stop = int(positions[-1]) + 1
        self._learn(self._first, self._waited + stop)
        self._first, self._waiting = np.zeros((0, samples.shape[1])), 0
        return stop

    def _learn(self, samples: NDArray[np.float64], first: int) -> None:
        """Learn from a baseline; sample ``first`` is the first to be judged."""
        learnt = learn(samples, self._rank, self._most)
        self._judge = Judge(Model(self.channels, self._settings, learnt), first)

    def fresh(self) -> Self:
        """Return a monitor that has learnt what this one has, at the start of another feed.

        Basis, limits and adopted behaviour are taken over; samples are counted from 0, events on
        from here, and the events so far are not compared with. With :func:`~streambasis.load` a
        snapshot so serves as the baseline of another run.
        """
        state = self.to_state()
        with self._lock:
            number = self._need().history.next
        core = state.parts.pop("core")
        state.facts["count"] = 0
        monitor = type(self).from_state(state)
        model = Model.from_state(self.channels, self._settings, core.parts["core"])
        model.restart()
        monitor._judge = Judge(model, 0)
        monitor._judge.history.next = number
        return monitor

    def finish(self) -> None:
        """Close what is open, at the end of a feed."""
        with self._lock:
            if self._judge is not None:
                self._judge.close_all()

    def label(self, event: int, text: str | None) -> None:
        """Give an event, by its number, a text that its recurrences name; None takes it away."""
        with self._lock:
            found = self._need().find(event)
            if isinstance(found, Event):
                found["label"] = text
            else:
                found.label = text

    def adopt(self, event: int) -> None:
        """Take an event for known behaviour: its directions are explained from now on.

        An open event is closed. The directions grow :attr:`known`; :attr:`Verdict.known` says in
        which later samples they show, :meth:`loadings` how much.
        """
        with self._lock:
            self._need().adopt(event)

    @property
    def adopted(self) -> tuple[int, ...]:
        """The event that each adopted direction comes from, one per column of the loadings."""
        return tuple(self._judge.model.adopted.tolist()) if self._judge else ()

    def loadings(self, samples: Any) -> NDArray[np.float64]:
        """Return how much of each adopted direction is in samples.

        Parameters
        ----------
        samples : array_like of shape (m, n), or Arrow
            As for :meth:`push_many`; nothing changes.

        Returns
        -------
        ndarray of float64, shape (m, adopted directions)
            In noise standard deviations; found by least squares together with the basis.
        """
        checked = many_samples(samples, self._channels, FLOAT64, missing=True)
        with self._lock:
            model = self._need().model
            rows = [model.loadings(row)[0] for row in checked]
        return np.array(rows).reshape(len(checked), len(model.adopted))

    def contributions(self, sample: ArrayLike) -> dict[str, float]:
        """Return each channel's share in the SPE of one sample, largest first; nothing changes."""
        checked = one_sample(sample, self._channels, FLOAT64, missing=True)
        with self._lock:
            parts = self._need().model.shares(checked)
        return {self.channels[i]: float(parts[i]) for i in np.argsort(-parts, kind="stable")}

    @property
    def scale(self) -> NDArray[np.float64]:
        """Standard deviation of each channel's noise, in its units, (n,)."""
        return owned(self._need().model.scaling.scale)

    @property
    def constant(self) -> tuple[str, ...]:
        """Channels that held one value all through the baseline; any movement is novel."""
        return self._named(self._need().model.scaling.constant)

    @property
    def nearly_constant(self) -> tuple[str, ...]:
        """Channels that held one value for half of the baseline or more, or moved by rounding."""
        return self._named(self._need().model.scaling.nearly)

    @property
    def frozen(self) -> tuple[str, ...]:
        """Channels that now repeat one value, far longer than ever in the baseline."""
        with self._lock:
            return self._named(self._judge.model.frozen) if self._judge else ()

    def _named(self, which: NDArray[np.bool_]) -> tuple[str, ...]:
        return tuple(self.channels[i] for i in np.flatnonzero(which))

    def to_state(self) -> State:
        """Hand over everything needed to go on."""
        with self._lock:
            facts = {
                "channels": list(self.channels),
                "named": self._channels.named,
                "baseline": self._baseline,
                "rank": self._rank,
                "max_rank": self._most,
                "settings": asdict(self._settings),
                "count": self.count,
            }
            parts = {} if self._judge is None else {"core": self._judge.to_state()}
            return State(
                "NoveltyMonitor", facts, {"first": owned(self._first[: self._waiting])}, parts
            )

    @classmethod
    def from_state(cls, state: State) -> Self:
        """Build a monitor that goes on where the state was taken."""
        facts = state.facts
        names, settings = facts["channels"], Settings(**facts["settings"])
        monitor = cls(
            names if facts["named"] else len(names),
            baseline=facts["baseline"],
            false_alarm=settings.false_alarm,
            limits=settings.limits,
            rank=facts["rank"],
            max_rank=facts["max_rank"],
            half_life=settings.half_life,
            persistence=(settings.opens, settings.window),
            quiet=settings.quiet,
            same=settings.same,
        )
        monitor._settings = settings
        monitor._waited = facts["count"]
        first = state.take("first", np.float64, (None, len(names)))
        if settings.block < 1 or len(first) >= monitor._baseline:
            raise SnapshotError("the block or the baseline is of no possible length")
        if len(first):
            monitor._first = np.empty((monitor._baseline, len(names)))
            monitor._first[: len(first)] = first
            monitor._waiting = len(first)
        if "core" in state.parts:
            monitor._judge = Judge.from_state(monitor.channels, settings, state.parts["core"])
        return monitor

    def _need(self) -> Judge:
        if self._judge is None:
            raise SampleError(
                f"the baseline is not complete: {self._waiting} of {self._baseline} samples"
            )
        return self._judge


def _usable(samples: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Return which samples have half of their channels or more."""
    return np.asarray(2 * np.count_nonzero(~np.isnan(samples), axis=1) >= samples.shape[1])


def _largest_angle(a: NDArray[Any], b: NDArray[Any]) -> float:
    """Return the largest principal angle between two sets of orthonormal rows."""
    cosine = float(np.linalg.svd(a @ b.T, compute_uv=False)[-1])
    sine = float(np.linalg.norm(b - (b @ a.T) @ a, 2))
    return math.atan2(sine, cosine)
