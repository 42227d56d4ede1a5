"""What is ordinary for a feed: basis, limits and adopted behaviour, and scoring by them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.basis import StreamBasis
from streambasis.errors import SampleError, SnapshotError
from streambasis.kernels.monitor import standardize, take_off
from streambasis.memory import scratch
from streambasis.monitor.contributions import shares
from streambasis.monitor.learning import Learnt
from streambasis.monitor.limits import SpeLimit, t2_limit
from streambasis.monitor.projection import UNSEEN, Projection, Scored
from streambasis.monitor.quantiles import chi2_quantile
from streambasis.monitor.scaling import Scaling
from streambasis.principal import PrincipalBasis
from streambasis.principal_settings import WHOLE
from streambasis.state import State, owned

NEARLY = 0.01
"""An open event explains a sample within this squared sine of its directions, whatever the limit:
its directions are known no better than that when it suddenly grows."""

FOLLOW = 0.1
"""Relative change in the number of samples behind the basis at which the T² limit follows."""

LEAST_PATTERNS = 16
PATTERN_VALUES = 2**20
"""Patterns of missing channels whose directions are kept ready: as many as have so many numbers
between them, and so many at least."""

REACH = 1e8
"""A value further than this many noise standard deviations is scored as if it stood there: no
answer depends on more, and no sum of squares can overflow."""

LEAST_SCALE = 1e-150
"""Noise is squared, so it has to lie between this and its inverse."""

MOVED = 1.5
"""SPE over its limit that any movement of a constant channel alone makes, and a frozen channel at
least. The noise of neither is known: that it happened is news, how far it went says nothing."""


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


class Model:
    """What is ordinary, as learnt from the baseline and from explained samples since.

    Parameters
    ----------
    names : tuple of str
        The channels.
    settings : Settings
        What to go by.
    learnt : Learnt
        What the baseline taught.

    Raises
    ------
    SampleError
        If the noise of a channel cannot be squared.
    """

    def __init__(self, names: tuple[str, ...], settings: Settings, learnt: Learnt) -> None:
        self.scaling = learnt.scaling
        for name, scale in zip(names, self.scaling.scale, strict=True):
            if not LEAST_SCALE < scale < 1.0 / LEAST_SCALE:
                raise SampleError(
                    f"channel {name!r}: its noise in the baseline is {scale:.3g}, whose square is "
                    "beyond double precision; give the channel in another unit"
                )
        self._set_up(names, settings)
        self.basis.take_many(learnt.z * self.scaling.scale + self.scaling.centre)
        self.basis.flush()
        self.limit.start(learnt.spe, learnt.roots)
        self.refresh([])
        self.first_vectors, self.first_mean = self.vectors, self.mean

    def _set_up(self, names: tuple[str, ...], settings: Settings) -> None:
        """Make everything that the scaling and the settings determine."""
        n = len(names)
        self.names = names
        self.settings = settings
        self.inverse = 1.0 / self.scaling.scale
        self._entered_centre = self.scaling.centre * self.inverse
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
        self.known = StreamBasis(names, inner=weights)
        self.adopted = np.zeros(0, np.int64)
        self.behaviour = np.zeros((0, n))
        # normal quantile that an amount of adopted behaviour has to pass, found when first asked
        self._chance: float | None = None
        self.t2_limit, self._t2_count = math.inf, 0.0
        # values and lengths of the runs that channels are in
        self._held, self._runs = np.full(n, np.nan), np.zeros(n, np.int64)
        self._reach, self._freeze = np.full(n, REACH), np.zeros(n)

    @property
    def nbytes(self) -> int:
        """Bytes of what is held."""
        arrays = [self._held, self._runs, self.behaviour, self.first_vectors]
        arrays += [self.vectors, self.mean, self.first_mean, self.projection.directions]
        own: int = sum(array.nbytes for array in arrays)
        return own + self.basis.nbytes + self.known.nbytes

    @property
    def rank(self) -> int:
        """Directions of the basis; a feed whose channels share nothing has none."""
        return self.basis.rank if self.scaling.rank else 0

    @property
    def free(self) -> int:
        """Dimensions that a residual has with nothing but the basis and what is known taken off."""
        moving = int(np.count_nonzero(~self.scaling.constant))
        return moving - len(self.vectors) - self.known.rank

    @property
    def frozen(self) -> NDArray[np.bool_]:
        """Channels that have repeated one value far longer than ever in the baseline, (n,)."""
        return self._runs >= self.scaling.patience

    def refresh(self, standing: list[NDArray[np.float64]]) -> None:
        """Read the basis as it stands, and let what follows from it follow."""
        self.vectors = np.ascontiguousarray(self.basis.vectors[: self.rank] * self.inverse)
        self.energies = self.basis.energies[: self.rank]
        self.mean = (self.basis.mean - self.scaling.centre) * self.inverse
        count = self.basis.effective_count
        if abs(count - self._t2_count) > FOLLOW * self._t2_count:
            self.t2_limit = t2_limit(self.rank, count, self.settings.false_alarm)
            self._t2_count = count
        self._stand_out()
        self.project(standing)

    def _stand_out(self) -> None:
        """Find where constant channels that move, and channels that freeze, are put.

        A frozen channel is put beyond three standard deviations of what the basis may expect of
        it, so that it stands out whatever the other channels do.
        """
        squares = self.vectors**2
        own = np.maximum(1.0 - squares.sum(axis=0), 1e-6)
        # where nothing moved in the baseline the limit is zero
        floor = MOVED * max(self.limit.value, 1.0)
        self._freeze = self.mean + np.sqrt(floor / own) + 3.0 * np.sqrt(self.energies @ squares)
        if not self.scaling.firsts:
            self._reach[self.scaling.constant] = math.sqrt(floor)

    def project(self, standing: list[NDArray[np.float64]]) -> None:
        """Set up the directions that samples are split over, those of standing events last."""
        ends = np.cumsum([len(directions) for directions in standing]).tolist()
        # where the directions of each lie, counted from the first of them
        self.parts = [slice(e - len(d), e) for e, d in zip(ends, standing, strict=True)]
        known = np.ascontiguousarray(self.known.vectors * self.inverse)
        events = np.vstack([np.zeros((0, len(self.names))), *standing])
        self._directions = known, self.vectors, events, self.energies, self.mean
        self._patterns: dict[bytes, tuple[Projection, float]] = {}
        self._loading: NDArray[np.float64] | None = None
        self.projection = Projection(*self._directions)

    def standard(
        self, samples: NDArray[np.float64], out: NDArray[np.float64], *, follow: bool
    ) -> bool:
        """Write samples, (m, n), about their centre and in noise units to ``out``.

        ``follow`` says that they are the next of the feed, so that frozen channels are told.
        Returns whether a value is missing.
        """
        held, runs = (self._held, self._runs) if follow else (self._held.copy(), self._runs.copy())
        gaps: int = standardize(
            samples, self.scaling.centre, self.inverse, self._reach, self._freeze,
            self.scaling.patience, held, runs, out,
        )  # fmt: skip
        return gaps > 0

    @property
    def standard_parts(self) -> list[NDArray[Any]]:
        """What :meth:`standard` goes by: centre, inverse scale, reach, freeze, patience, runs."""
        scaling = self.scaling
        return [
            scaling.centre, self.inverse, self._reach, self._freeze, scaling.patience,
            self._held, self._runs,
        ]  # fmt: skip

    def runs(self) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
        """Return which value each channel repeats, and how many times it has come again."""
        return self._held.copy(), self._runs.copy()

    def set_runs(self, runs: tuple[NDArray[np.float64], NDArray[np.int64]]) -> None:
        """Put back what :meth:`runs` returned."""
        self._held[:], self._runs[:] = runs

    def score(self, out: Scored, *, gaps: bool) -> Scored:
        """Split samples over the directions and compare what is left with the limits."""
        projection, parts, t2_limit = self.projection, self.parts, self.t2_limit
        projection.score(out, (self.limit.value, t2_limit))
        for i in np.flatnonzero(np.isnan(out.z).any(axis=1)).tolist() if gaps else ():
            out.special[i], limit = self.pattern(~np.isnan(out.z[i]))
            out.special[i].score(out.row(i), (limit, t2_limit))
        if parts:
            along = out.coordinates[:, projection.first :] ** 2
            out.beyond &= out.rest > NEARLY * along.sum(axis=1)
            floor = np.minimum(out.rest, self.limit.mean)
            shows = [floor + along[:, part].sum(axis=1) > out.limit for part in parts]
            out.shows = np.array(shows).T.copy()
        return out

    def pattern(self, observed: NDArray[np.bool_]) -> tuple[Projection, float]:
        """Return the directions as the observed channels show them, and the limit for those.

        The limit is that of all channels in proportion to the quantiles of chi-squared variables
        with the degrees of freedom left; NaN where fewer than half of the channels are observed or
        no freedom is left.
        """
        key = observed.tobytes()
        if key not in self._patterns:
            size = self.projection.directions.size
            if len(self._patterns) >= max(LEAST_PATTERNS, PATTERN_VALUES // max(size, 1)):
                self._patterns.clear()
            projection = Projection(*self._directions, observed)
            moving = ~self.scaling.constant
            free = int(np.count_nonzero(observed & moving)) - projection.seen
            full = int(np.count_nonzero(moving)) - self.projection.seen
            value = math.nan
            if free > 0 and 2 * int(observed.sum()) >= len(observed):
                p = self.settings.false_alarm
                value = self.limit.value * chi2_quantile(p, free) / chi2_quantile(p, full)
            self._patterns[key] = projection, value
        return self._patterns[key]

    def residuals(
        self, scored: Scored, picked: NDArray[np.int64], event: slice
    ) -> NDArray[np.float64]:
        """Return what the rows picked have outside all directions but those of one event."""
        out = self.projection.residuals(scored.z[picked], scored.coordinates[picked], event)
        for position, i in enumerate(picked.tolist()) if scored.special else ():
            if i in scored.special:
                one = slice(i, i + 1)
                out[position] = scored.special[i].residuals(
                    scored.z[one], scored.coordinates[one], event
                )[0]
        return out

    def clean(self, scored: Scored, which: NDArray[np.bool_], *, extreme: bool) -> None:
        """Make the first rows of ``scored.z`` fit to be folded into the basis, in place.

        Adopted behaviour and standing events are taken off, missing values filled in with what the
        basis expects, and coordinates beyond the T² limit drawn in to it. ``extreme`` says whether
        there are such.
        """
        projection = self.projection
        count = len(projection.directions)
        if not (extreme or scored.special or projection.known or count > projection.first):
            return
        odd = which & scored.extreme[: len(which)]
        for i in scored.special:
            if i < len(which):
                odd[i] = which[i]
        if projection.known or count > projection.first:
            plain = np.flatnonzero(which & ~odd)
            z, coordinates = scored.z[plain], scored.coordinates[plain]
            take_off(z, coordinates, projection.directions, 0, projection.known)
            take_off(z, coordinates, projection.directions, projection.first, count)
            scored.z[plain] = z
        for i in np.flatnonzero(odd).tolist():
            scored.z[i] = scored.special.get(i, projection).plain(
                scored.z[i], scored.coordinates[i], float(scored.t2[i]), self.t2_limit
            )

    def fold(self, z: NDArray[np.float64]) -> None:
        """Take samples in noise units, fit to be folded, into the basis."""
        if len(z):
            rows = np.add(z, self._entered_centre, out=scratch(z.shape))
            self.basis.take_entered(rows)
            self.basis.flush()

    def adopt(self, number: int, directions: NDArray[np.float64]) -> None:
        """Take directions for known behaviour."""
        for direction in directions:
            self.known.push(direction * self.scaling.scale)
        self.behaviour = np.vstack([self.behaviour, directions])
        self.adopted = np.concatenate([self.adopted, np.full(len(directions), number)])
        self._chance = None

    def restart(self) -> None:
        """Begin another feed: no channel has repeated a value in it."""
        self._held[:] = np.nan
        self._runs[:] = 0

    def loadings(
        self, sample: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return how much of each adopted direction is in a sample, and the standard errors.

        Least squares on the observed channels, together with the basis.
        """
        z = np.empty((1, len(sample)))
        gaps = self.standard(sample[None], z, follow=False)
        if gaps or self._loading is None:
            seen = ~np.isnan(sample)
            rows = np.vstack([self.behaviour, self.vectors]) * seen
            inverse = np.linalg.pinv(rows.T, rcond=UNSEEN)[: len(self.behaviour)]
            if not gaps:
                self._loading = inverse
        else:
            inverse = self._loading
        amounts = inverse @ np.nan_to_num(z[0] - self.mean)
        return amounts, np.sqrt(np.sum(inverse**2, axis=1))

    def shown(self, sample: NDArray[np.float64]) -> tuple[int, ...]:
        """Return the adopted events whose behaviour shows in a sample, (n,)."""
        if not len(self.adopted):
            return ()
        amounts, errors = self.loadings(sample)
        if self._chance is None:
            chance = self.settings.false_alarm / len(self.adopted)
            self._chance = math.sqrt(chi2_quantile(chance, 1.0))
        floor = errors * (self._chance * math.sqrt(self.basis.noise))
        return tuple(sorted(set(self.adopted[np.abs(amounts) > floor].tolist())))

    def shares(self, sample: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return each channel's share in the SPE of a sample, (n,)."""
        z = np.empty((1, len(sample)))
        self.standard(sample[None], z, follow=False)
        observed = ~np.isnan(sample)
        projection = self.projection if observed.all() else self.pattern(observed)[0]
        inside = projection.directions[: projection.first]
        residual = np.where(observed, z - self.mean, 0.0)
        residual -= (residual @ inside.T) @ inside
        return shares(residual, inside, 1, self.basis.noise)

    def to_state(self) -> State:
        """Hand over everything needed to go on."""
        facts = {
            "shared": self.scaling.rank,
            "firsts": self.scaling.firsts,
            "t2_limit": self.t2_limit,
            "t2_count": self._t2_count,
        }
        given = ("centre", "scale", "constant", "nearly", "patience")
        arrays = {name: owned(getattr(self.scaling, name)) for name in given}
        # vectors, energies and mean may be older than the basis, which folds what waited for its
        # block when it is saved: the samples of this block are judged by these to its end
        held = (
            "adopted",
            "behaviour",
            "first_vectors",
            "vectors",
            "energies",
            "mean",
            "first_mean",
        )
        arrays |= {name: owned(getattr(self, name)) for name in held}
        arrays |= {"held": owned(self._held), "runs": owned(self._runs)}
        arrays["first_mean"] = owned(self.first_mean)
        parts = {
            "basis": self.basis.to_state(),
            "limit": self.limit.to_state(),
            "known": self.known.to_state(),
        }
        return State("Model", facts, arrays, parts)

    @classmethod
    def from_state(cls, names: tuple[str, ...], settings: Settings, state: State) -> Model:
        """Build a model that goes on where the state was taken; standing events are to follow."""
        model = cls.__new__(cls)
        facts, parts, n = state.facts, state.parts, len(names)
        # in older snapshots every first movement was news; levels count from the load on
        older = "rank" in facts
        model.scaling = Scaling(
            state.take("centre", np.float64, (n,), finite=True),
            state.take("scale", np.float64, (n,), finite=True),
            facts["rank" if older else "shared"],
            state.take("constant", np.bool_, (n,)),
            state.take("nearly", np.bool_, (n,)),
            False if older else facts["firsts"],
            state.take("patience", np.int64, (n,)),
        )
        if not (model.scaling.scale > 0).all():
            raise SnapshotError("a channel of the monitor has a scale that is not positive")
        model._set_up(names, settings)
        model.basis = PrincipalBasis.from_state(parts["basis"])
        model.limit = SpeLimit.from_state(parts["limit"])
        model.known = StreamBasis.from_state(parts["known"])
        if {names} != {model.basis.channels, model.known.channels}:
            raise SnapshotError("the bases of the monitor are of other channels")
        model.t2_limit, model._t2_count = facts["t2_limit"], facts["t2_count"]
        model.adopted = state.take("adopted", np.int64, (None,))
        model.behaviour = state.take("behaviour", np.float64, (len(model.adopted), n))
        model.first_vectors = state.take("first_vectors", np.float64, (None, n))
        model.vectors = state.take("vectors", np.float64, (None, n))
        model.energies = state.take("energies", np.float64, (len(model.vectors),))
        model.mean = state.take("mean", np.float64, (n,), finite=True)
        model.first_mean = model.mean
        if not older:
            model.first_mean = state.take("first_mean", np.float64, (n,), finite=True)
        model._held = state.take("held", np.float64, (n,))
        model._runs = state.take("runs", np.int64, (n,))
        model._stand_out()
        model.project([])
        return model
