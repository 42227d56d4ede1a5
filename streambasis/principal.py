"""PrincipalBasis: the principal subspace of a noisy feed, tracked one sample at a time."""

from __future__ import annotations

import math
import threading
from collections.abc import Iterable
from typing import Any, Self

import numpy as np
from numpy.typing import ArrayLike, DTypeLike, NDArray

from streambasis.audit import Audit, orthogonality
from streambasis.decisions import Score, Scores
from streambasis.errors import SampleError, SettingError
from streambasis.inner import Inner, inner_of
from streambasis.intake import Intake
from streambasis.principal_settings import Settings
from streambasis.samples import Channels, checked_dtype, many_samples, one_sample
from streambasis.state import Saveable, State, owned


class PrincipalBasis(Saveable):
    """The leading directions of a noisy feed, their energies, and the noise floor below them.

    Parameters
    ----------
    channels : int or sequence of str
        How many channels n, or their distinct names.
    rank : {"noise", "mdl"} or int
        How many directions are reported: those above the optimal hard threshold for the tracked
        noise variance (Gavish & Donoho 2014), those of minimum description length (Wax & Kailath
        1985), or a fixed number.
    max_rank : int, optional
        Most directions reported; by default ``rank`` where that is a number, otherwise 64 or the
        number of channels. Some more are held, so that weak ones can grow.
    forget : float
        Forgetting factor in (0, 1]: the weight of a sample falls by it with each later one.
    half_life : float, optional
        The same in samples: ``forget = 0.5 ** (1 / half_life)``. Give one of the two.
    block : int, optional
        Samples folded in at a time. Every sample is scored at once; the basis moves when a block
        is full and at :meth:`flush`. By default blocks start at 16 samples and double with the
        samples folded, up to 1,024, an eighth of the memory 1/(1 - forget), or a buffer of two
        million numbers.
    centre : bool
        Whether a running mean is kept, with the same forgetting, and everything is about it.
    dtype : str or dtype
        float32, float64, complex64 or complex128.
    inner : None, (n,) positive weights or (n, n) Hermitian positive definite matrix
        The inner product.

    Raises
    ------
    SettingError
        For a setting outside its range.

    Notes
    -----
    NaN is a missing value. It is projected out: coordinates come from the observed channels by
    least squares, norm and residual count those channels only, and the sample is folded with its
    gaps filled by what the basis expects there. Where the observed channels do not determine the
    coordinates the scores are NaN and the sample is counted but not folded.

    Memory is (2·held + block + 16)·n numbers. Energies, noise and SPE are squares: of samples
    beyond about 1e±154 they are infinite or zero in double precision, while norms, residuals,
    T², rank and directions stay right.

    Examples
    --------
    >>> import numpy as np
    >>> from streambasis import PrincipalBasis
    >>> rng = np.random.default_rng(0)
    >>> sources, noise = rng.normal(size=(2000, 2)), rng.normal(size=(2000, 8))
    >>> feed = sources @ rng.normal(size=(2, 8)) + 0.1 * noise
    >>> basis = PrincipalBasis(8)
    >>> scores = basis.push_many(feed)
    >>> basis.rank, round(basis.noise, 3)
    (2, 0.01)
    """

    __slots__ = ("_channels", "_core", "_inner", "_lock", "_shape", "dtype")

    def __init__(
        self,
        channels: int | Iterable[str],
        *,
        rank: str | int = "noise",
        max_rank: int | None = None,
        forget: float = 1.0,
        half_life: float | None = None,
        block: int | None = None,
        centre: bool = False,
        dtype: DTypeLike = "float64",
        inner: ArrayLike | None = None,
    ) -> None:
        named = Channels(channels)
        kind = checked_dtype(dtype)
        settings = Settings.checked(named.count, rank, max_rank, forget, half_life, block)
        self._set_up(named, settings, bool(centre), kind, inner)

    def _set_up(
        self,
        channels: Channels,
        settings: Settings,
        centre: bool,
        dtype: np.dtype[Any],
        inner: ArrayLike | None,
    ) -> None:
        self._channels = channels
        self.dtype = dtype
        self._inner = Inner(inner, channels.count, dtype)
        self._core = Intake(self._inner, channels.count, settings, centre, dtype)
        self._lock = threading.Lock()
        self._shape = (channels.count,)

    @property
    def channels(self) -> tuple[str, ...]:
        """Names of the channels."""
        return self._channels.names

    def __repr__(self) -> str:
        return (
            f"PrincipalBasis({len(self.channels)} channels, rank {self.rank}, {self.count} samples)"
        )

    @property
    def block(self) -> int:
        """Most samples folded in at a time."""
        return self._core.settings.block

    @property
    def forget(self) -> float:
        """Forgetting factor."""
        return self._core.settings.forget

    @property
    def centre(self) -> bool:
        """Whether a running mean is kept."""
        return self._core.core.centred

    @property
    def max_rank(self) -> int:
        """Most directions reported."""
        return self._core.settings.most

    @property
    def count(self) -> int:
        """Samples seen, those that wait for the next fold included."""
        return self._core.count

    @property
    def rank(self) -> int:
        """Directions reported, as of the last fold."""
        return self._core.rank

    @property
    def effective_count(self) -> float:
        """Effective number of samples folded: (Σw)²/Σw² of their weights."""
        return self._core.core.effective

    @property
    def nbytes(self) -> int:
        """Bytes held."""
        return self._core.nbytes

    @property
    def vectors(self) -> NDArray[Any]:
        """The directions in channel units, (rank, n), largest energy first, read-only."""
        with self._lock:
            out = self._inner.leave(self._core.directions.copy())
        out.setflags(write=False)
        return out

    @property
    def energies(self) -> NDArray[np.float64]:
        """Variance along each direction, descending, (rank,), read-only.

        The weighted sum of squares, about the mean where one is kept, over the sum of weights.
        """
        with self._lock, np.errstate(over="ignore", under="ignore"):
            out = np.ldexp(self._core.spreads, self._core.core.exponent) ** 2
        out.setflags(write=False)
        return out

    @property
    def noise(self) -> float:
        """Variance per residual dimension, corrected for what the leading directions absorb."""
        return self._core.noise

    @property
    def mean(self) -> NDArray[Any]:
        """The running mean in channel units, (n,), read-only; zero unless ``centre``."""
        with self._lock:
            out = self._inner.leave(self._core.core.mean.copy())
        out.setflags(write=False)
        return out

    def push(self, sample: ArrayLike) -> Score:
        """Score one sample, shape (n,), and take it.

        Raises
        ------
        SampleError, SampleTypeError
            If the sample is refused; the basis is unchanged.

        Notes
        -----
        4·n·rank flops, and a fold every ``block`` samples, which takes as long as some hundred
        pushes; smaller blocks make shorter folds, and cost more in all.
        """
        with self._lock:
            if not (
                sample.__class__ is np.ndarray
                and sample.dtype is self.dtype
                and sample.shape == self._shape
                and self._inner.kind == "euclidean"
            ):
                sample = one_sample(
                    sample, self._channels, self.dtype, number=self.count, missing=True
                )
                if np.isnan(sample).any():
                    return self._take(sample[None], fold=True)[0]
                sample = self._entered(sample)
            number, norm, residual, spe, t2, rank, position = self._core.push(sample)
            if position < 0:
                return Score(number, norm, residual, spe, t2, rank)
            checked = one_sample(
                sample, self._channels, self.dtype, number=self.count, missing=True
            )
            if np.isnan(checked).any():
                return self._take(checked[None], fold=True)[0]
            raise SampleError(
                f"sample {self.count}: a value above a quarter of what {self.dtype} holds "
                "cannot be taken about a mean; the sample was not taken"
            )

    def push_many(self, samples: Any) -> Scores:
        """Score a batch, (m, n) or Arrow, and take it, as if pushed one at a time.

        Raises
        ------
        SampleError, SampleTypeError
            If any sample is refused; none of the batch is taken.
        """
        with self._lock:
            return self._take(self._checked(samples), fold=True)

    def score_many(self, samples: Any) -> Scores:
        """Score a batch against the basis as it stands; nothing is taken, nothing changes."""
        with self._lock:
            return self._take(self._checked(samples), fold=False)

    def take_many(self, samples: Any) -> None:
        """Take a batch without asking for its scores."""
        with self._lock:
            checked = self._checked(samples)
            if _has_gap(checked):
                self._take(checked, fold=True)
            else:
                self._core.take_unscored(self._entered(checked))

    def take_entered(self, rows: NDArray[Any]) -> None:
        """Take finite samples, (m, n), that are in the inner product's Euclidean coordinates."""
        with self._lock:
            self._core.take_unscored(rows)

    def flush(self) -> None:
        """Fold the samples that wait for their block to fill."""
        with self._lock:
            self._core.fold()

    def _checked(self, samples: Any) -> NDArray[Any]:
        return many_samples(samples, self._channels, self.dtype, first=self.count, missing=True)

    def _entered(self, samples: NDArray[Any]) -> NDArray[Any]:
        entered = self._inner.enter(samples)
        euclidean = self._inner.kind == "euclidean"
        if (euclidean and not self._core.core.centred) or _squares_are_finite(entered):
            return entered
        if not euclidean and not np.isfinite(entered).all():
            raise SampleError(
                f"sample {self.count} or later: a value in the inner product is beyond "
                f"{self.dtype}; nothing was taken"
            )
        quarter = float(np.finfo(self.dtype).max) / 4
        parts = entered.view(np.finfo(self.dtype).dtype)
        if self._core.core.centred and np.abs(parts).max() > quarter:
            raise SampleError(
                f"sample {self.count} or later: a value above a quarter of what {self.dtype} "
                "holds cannot be taken about a mean; nothing was taken"
            )
        return entered

    def _take(self, samples: NDArray[Any], *, fold: bool) -> Scores:
        """Score checked samples, (m, n), and take them too where ``fold`` says so."""
        if _has_gap(samples):
            gaps = np.isnan(samples)
            return self._core.take(self._entered(np.where(gaps, 0, samples)), gaps, fold=fold)
        return self._core.take(self._entered(samples), None, fold=fold)

    def coordinates(self, x: ArrayLike) -> NDArray[Any]:
        """Return the inner products of x, (n,) or (m, n), less the mean, with the directions."""
        return self._split(x)[0]

    def project(self, x: ArrayLike) -> NDArray[Any]:
        """Return the mean plus the part of x inside the basis: x less its residual."""
        _, inside, _ = self._split(x)
        return self._inner.leave(inside)

    def residual(self, x: ArrayLike) -> NDArray[Any]:
        """Return the part of x, less the mean, outside the basis."""
        _, _, outside = self._split(x)
        return self._inner.leave(outside)

    def _split(self, x: ArrayLike) -> tuple[NDArray[Any], NDArray[Any], NDArray[Any]]:
        array = np.asarray(x)
        check = one_sample if array.ndim == 1 else many_samples
        entered = self._inner.enter(check(array, self._channels, self.dtype))
        with self._lock:
            directions, mean = self._core.directions, self._core.core.mean
            deviations = entered - mean
            first = deviations @ directions.conj().T
            rest = deviations - first @ directions
            second = rest @ directions.conj().T
            coordinates = first + second
            return coordinates, mean + coordinates @ directions, rest - second @ directions

    def followed_by(self, other: PrincipalBasis) -> PrincipalBasis:
        """Return the basis of this part of a feed and the part that follows.

        See :func:`streambasis.merge`, which also checks that both live in the same space.
        """
        first, second = (PrincipalBasis.from_state(part.to_state()) for part in (self, other))
        for name in ("forget", "centre"):
            mine, theirs = (getattr(basis, name) for basis in (first, second))
            if mine != theirs:
                raise SettingError(f"bases of different {name}: {mine} and {theirs}")
        first._core.absorb(second._core)
        return first

    def audit(self) -> Audit:
        """Measure the orthonormality of the directions.

        Returns
        -------
        Audit
            ``orthogonality`` over all directions held; ``coverage`` NaN (a noisy feed is not
            covered); ``condition`` largest over least standard deviation along the directions
            reported; ``renewals`` (beyond the step that ends every fold where all directions are
            held), ``rank`` and ``samples``.
        """
        with self._lock:
            spreads = self._core.spreads
            condition = float(spreads[0] / spreads[-1]) if len(spreads) else 1.0
            return Audit(
                orthogonality(self._core.core.directions),
                math.nan,
                condition,
                self._core.core.renewals,
                self.rank,
                self.count,
            )

    def _state(self) -> State:
        facts, arrays, core = self._core.to_state()
        facts |= {
            "channels": list(self._channels.names),
            "named": self._channels.named,
            "dtype": self.dtype.name,
            "inner": self._inner.kind,
        }
        if self._inner.given is not None:
            arrays["inner"] = owned(self._inner.given)
        return State("PrincipalBasis", facts, arrays, {"core": core})

    @classmethod
    def from_state(cls, state: State) -> Self:
        """Build a basis that goes on where the state was taken."""
        facts = state.facts
        names = facts["channels"]
        channels = Channels(names if facts["named"] else len(names))
        settings = Settings.kept(facts, channels.count)
        basis = cls.__new__(cls)
        basis._set_up(
            channels,
            settings,
            bool(facts["centre"]),
            checked_dtype(facts["dtype"]),
            inner_of(state),
        )
        basis._core.set_state(state)
        return basis


def _squares_are_finite(samples: NDArray[Any]) -> bool:
    """Say whether the squares add up to a finite number: no value is missing or near overflow."""
    flat = samples.reshape(-1)
    return math.isfinite(np.vdot(flat, flat).real)


def _has_gap(samples: NDArray[Any]) -> bool:
    return not _squares_are_finite(samples) and bool(np.isnan(samples).any())
