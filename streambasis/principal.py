"""PrincipalBasis: the principal subspace of a noisy feed, tracked one sample at a time."""

from __future__ import annotations

import math
import threading
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from typing import Any, Final, Self

import numpy as np
from numpy.typing import ArrayLike, DTypeLike, NDArray

from streambasis.audit import Audit, orthogonality
from streambasis.decisions import Score, Scores
from streambasis.errors import SampleError, SettingError, SnapshotError
from streambasis.folding import Subspace
from streambasis.gaps import Gaps
from streambasis.inner import Inner, inner_of
from streambasis.kernels import principal as kernels
from streambasis.ranks import rank_by_mdl, rank_by_noise
from streambasis.samples import Channels, checked_dtype, many_samples, one_sample
from streambasis.state import State, lending, owned

RULES = {"noise": rank_by_noise, "mdl": rank_by_mdl}

WHOLE = 64
"""Up to this many channels every direction is held: the core is then as small as a truncated one
would be, and nothing is ever cut."""
DEFAULT_MAX_RANK = 64
LEAST_RESERVE = 8
FIRST_BLOCK = 16
LEAST_BLOCK, LARGEST_BLOCK = 16, 96
WHOLE_BLOCK = 256


class PrincipalBasis:
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
        samples folded, up to what costs least per sample or an eighth of the memory 1/(1 - forget).
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

    Memory is (2·held + block + work)·n numbers. Energies, noise and SPE are squares: of samples
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

    __slots__ = (
        "_block",
        "_channels",
        "_core",
        "_gaps",
        "_growing",
        "_header",
        "_inner",
        "_lock",
        "_most",
        "_noise",
        "_rule",
        "_shape",
        "_spreads",
        "_work",
        "dtype",
    )

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
        self._channels = Channels(channels)
        count = self._channels.count
        self.dtype: Final = checked_dtype(dtype)
        self._rule, self._most = _checked_rank(rank, max_rank, count)
        forget = _checked_forgetting(forget, half_life)
        limit = self._most + max(LEAST_RESERVE, self._most // 4)
        limit = count if count <= WHOLE else min(count, limit)
        growing = block is None
        block = _default_block(count, limit, forget) if block is None else _checked_block(block)
        self._inner = Inner(inner, count, self.dtype)
        self._core = Subspace(count, limit, block, forget, bool(centre), self.dtype)
        self._gaps = Gaps(self._inner, count, self.dtype)
        self._block = np.zeros((block, count), self.dtype)
        self._header = np.zeros(kernels.HEADER, np.int64)
        self._header[kernels.CENTRED] = bool(centre)
        self._work = (np.zeros(count, self.dtype), np.zeros(self._most, self.dtype))
        self._growing = growing
        self._lock = threading.Lock()
        self._shape = (count,)
        self._settle()

    @property
    def channels(self) -> tuple[str, ...]:
        """Names of the channels."""
        return self._channels.names

    @property
    def block(self) -> int:
        """Most samples folded in at a time."""
        return len(self._block)

    @property
    def forget(self) -> float:
        """Forgetting factor."""
        return self._core.forget

    @property
    def centre(self) -> bool:
        """Whether a running mean is kept."""
        return self._core.centred

    @property
    def max_rank(self) -> int:
        """Most directions reported."""
        return self._most

    @property
    def count(self) -> int:
        """Samples seen, those that wait for the next fold included."""
        return int(self._header[kernels.COUNT])

    @property
    def rank(self) -> int:
        """Directions reported, as of the last fold."""
        return int(self._header[kernels.RANK])

    @property
    def effective_count(self) -> float:
        """Effective number of samples folded: (Σw)²/Σw² of their weights."""
        return self._core.effective

    @property
    def nbytes(self) -> int:
        """Bytes held."""
        own = (self._block, self._spreads, self._header, *self._work)
        return sum(array.nbytes for array in own) + self._core.nbytes

    @property
    def vectors(self) -> NDArray[Any]:
        """The directions in channel units, (rank, n), largest energy first, read-only."""
        with self._lock:
            out = self._inner.leave(self._core.directions[: self.rank].copy())
        out.setflags(write=False)
        return out

    @property
    def energies(self) -> NDArray[np.float64]:
        """Variance along each direction, descending, (rank,), read-only.

        The weighted sum of squares, about the mean where one is kept, over the sum of weights.
        """
        with self._lock, np.errstate(over="ignore", under="ignore"):
            out = np.ldexp(self._spreads, self._core.exponent) ** 2
        out.setflags(write=False)
        return out

    @property
    def noise(self) -> float:
        """Variance per residual dimension, corrected for what the leading directions absorb."""
        return self._noise

    @property
    def mean(self) -> NDArray[Any]:
        """The running mean in channel units, (n,), read-only; zero unless ``centre``."""
        with self._lock:
            out = self._inner.leave(self._core.mean.copy())
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
        4·n·rank flops, and a fold every ``block`` samples.
        """
        with self._lock:
            if not (
                sample.__class__ is np.ndarray
                and sample.dtype is self._block.dtype
                and sample.shape == self._shape
                and self._inner.kind == "euclidean"
            ):
                sample = one_sample(
                    sample, self._channels, self.dtype, number=self.count, missing=True
                )
                if np.isnan(sample).any():
                    return self._take(sample[None], fold=True)[0]
                sample = self._entered(sample)
            core = self._core
            number, norm, residual, spe, t2, rank, position = kernels.push_principal(
                sample, core.mean, core.directions, self._spreads, self._header, *self._work,
                self._block,
            )  # fmt: skip
            if position >= 0:
                checked = one_sample(
                    sample, self._channels, self.dtype, number=self.count, missing=True
                )
                if not np.isnan(checked).any():
                    raise SampleError(
                        f"sample {self.count}: a value above a quarter of what {self.dtype} holds "
                        "cannot be taken about a mean; the sample was not taken"
                    )
                return self._take(checked[None], fold=True)[0]
            if self._header[kernels.FILL] == self._header[kernels.DUE]:
                self._fold()
            return Score(number, norm, residual, spe, t2, rank)

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
            if np.isnan(checked).any():
                self._take(checked, fold=True)
                return
            entered = self._entered(checked)
            start = 0
            while start < len(entered):
                room = int(self._header[kernels.DUE] - self._header[kernels.FILL])
                piece = entered[start : start + room]
                self._header[kernels.COUNT] += len(piece)
                self._append(piece, None)
                start += len(piece)

    def flush(self) -> None:
        """Fold the samples that wait for their block to fill."""
        with self._lock:
            if self._header[kernels.FILL]:
                self._fold()

    def _checked(self, samples: Any) -> NDArray[Any]:
        return many_samples(samples, self._channels, self.dtype, first=self.count, missing=True)

    def _entered(self, samples: NDArray[Any]) -> NDArray[Any]:
        entered = self._inner.enter(samples)
        if self._inner.kind != "euclidean" and not np.isfinite(entered).all():
            raise SampleError(
                f"sample {self.count} or later: a value in the inner product is beyond "
                f"{self.dtype}; nothing was taken"
            )
        if self._core.centred:
            with np.errstate(over="ignore"):
                small = np.isfinite(4 * entered).all()
            if not small:
                raise SampleError(
                    f"sample {self.count} or later: a value above a quarter of what {self.dtype} "
                    "holds cannot be taken about a mean; nothing was taken"
                )
        return entered

    def _take(self, samples: NDArray[Any], *, fold: bool) -> Scores:
        """Score samples, (m, n), and take them too where ``fold`` says so."""
        gaps = np.isnan(samples)
        gappy = gaps.any(axis=1)
        some = bool(gappy.any())
        entered = self._entered(np.where(gaps, 0, samples) if some else samples)
        m = len(samples)
        out = Scores(
            sample=np.arange(self.count, self.count + m),
            norm=np.empty(m),
            residual=np.empty(m),
            spe=np.empty(m),
            t2=np.empty(m),
            rank=np.empty(m, np.int64),
        )
        start = 0
        while start < m:
            room = int(self._header[kernels.DUE] - self._header[kernels.FILL])
            room = room if fold else len(self._block)
            rows = slice(start, min(start + room, m))
            piece = entered[rows]
            out.rank[rows] = self.rank
            known = None
            if some and gappy[rows].any():
                piece, known = self._fill_gaps(piece, gaps[rows], out, rows)
                coordinates = None
            else:
                coordinates = self._score(piece, out, rows)
            if fold:
                self._header[kernels.COUNT] += len(piece)
                self._append(piece if known is None else piece[known], coordinates)
            start = rows.stop
        return out

    def _append(self, piece: NDArray[Any], coordinates: NDArray[Any] | None) -> None:
        """Put rows into the block, which has room for them, and fold it when it is full."""
        due = int(self._header[kernels.DUE])
        if len(piece) == due:
            self._fold(piece, coordinates)
            return
        fill = int(self._header[kernels.FILL])
        self._block[fill : fill + len(piece)] = piece
        self._header[kernels.FILL] = fill + len(piece)
        if fill + len(piece) == due:
            self._fold()

    def _score(self, piece: NDArray[Any], out: Scores, rows: slice) -> NDArray[Any] | None:
        """Score rows; return their coordinates where the fold may use them again."""
        core = self._core
        deviations = piece - core.mean if core.centred else piece
        squares = np.empty(len(piece))
        status = kernels.row_squares(deviations, *core.safe, squares)
        if status == kernels.UNUSUAL or core.exponent != 0:
            for i, row in enumerate(piece, rows.start):
                out.norm[i], out.residual[i], out.spe[i], out.t2[i], _ = kernels.score_sample(
                    row, core.mean, core.directions, self._spreads, self._header, *self._work
                )
            return None
        out.norm[rows] = np.sqrt(squares)
        coordinates, rest = core.split(deviations)
        if len(rest):
            kernels.row_squares(rest, 0.0, np.inf, squares)
        else:
            squares[:] = 0.0
        kernels.score_rows(
            coordinates, self._spreads, self.rank, squares,
            out.residual[rows], out.spe[rows], out.t2[rows],
        )  # fmt: skip
        return coordinates

    def _fill_gaps(
        self, piece: NDArray[Any], gaps: NDArray[np.bool_], out: Scores, rows: slice
    ) -> tuple[NDArray[Any], NDArray[np.bool_]]:
        """Score rows of which some have gaps; return them filled, and which are determined."""
        core, rank = self._core, self.rank
        fill = int(self._header[kernels.FILL])
        filled, known = piece.copy(), np.ones(len(piece), np.bool_)
        for i, row in enumerate(piece):
            at = rows.start + i
            if not gaps[i].any():
                self._score(row[None], out, slice(at, at + 1))
                continue
            if core.weight:
                centre = core.mean
            else:
                # nothing is known yet: expect what this first block has shown so far
                earlier = np.concatenate([self._block[:fill], filled[:i][known[:i]]])
                centre = earlier.mean(axis=0) if len(earlier) else core.mean
            found = self._gaps.fill(row, gaps[i], core.mean, core.directions[:rank], centre)
            if found is None:
                known[i] = False
                out.norm[at] = out.residual[at] = out.spe[at] = out.t2[at] = np.nan
                continue
            coordinates, outside, norm, filled[i] = found
            out.norm[at], out.residual[at], out.spe[at] = norm, outside, outside * outside
            ratios = np.ldexp(np.abs(coordinates) / self._spreads, -core.exponent)
            out.t2[at] = float(ratios @ ratios)
        return filled, known

    def _fold(
        self, rows: NDArray[Any] | None = None, coordinates: NDArray[Any] | None = None
    ) -> None:
        """Fold rows, or what the block holds, and settle the rank."""
        if rows is None:
            rows = self._block[: int(self._header[kernels.FILL])]
        self._core.fold(rows, coordinates)
        self._header[kernels.FOLDED] += len(rows)
        self._header[kernels.FILL] = 0
        self._settle()

    def _settle(self) -> None:
        """Apply the rank rule to the spectrum as it stands, and say when the next fold is due."""
        folded = int(self._header[kernels.FOLDED])
        due = min(len(self._block), max(FIRST_BLOCK, folded)) if self._growing else len(self._block)
        self._header[kernels.DUE] = due
        spectrum = self._core.spectrum()
        if isinstance(self._rule, int):
            rank = min(self._rule, len(spectrum.energies))
        else:
            rank = RULES[self._rule](spectrum, self._most)
        self._header[kernels.RANK] = rank
        self._header[kernels.EXPONENT] = self._core.exponent
        self._spreads = self._core.spreads(rank)
        try:
            self._noise = math.ldexp(spectrum.noise(rank), 2 * self._core.exponent)
        except OverflowError:
            self._noise = math.inf

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
            directions, mean = self._core.directions[: self.rank], self._core.mean
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
        for part in (first, second):
            part.flush()
        folded = int(second._header[kernels.FOLDED])
        first._core.absorb(second._core, folded)
        first._header[kernels.COUNT] += second.count
        first._header[kernels.FOLDED] += folded
        first._settle()
        return first

    def audit(self) -> Audit:
        """Measure the orthonormality of the directions.

        Returns
        -------
        Audit
            ``orthogonality`` over all directions held; ``coverage`` NaN (a noisy feed is not
            covered); ``condition`` largest over least standard deviation along the directions
            reported; ``renewals``, ``rank`` and ``samples``.
        """
        with self._lock:
            spreads = self._spreads
            condition = float(spreads[0] / spreads[-1]) if len(spreads) else 1.0
            return Audit(
                orthogonality(self._core.directions),
                math.nan,
                condition,
                self._core.renewals,
                self.rank,
                self.count,
            )

    def to_state(self) -> State:
        """Hand over everything needed to go on, the unfinished block included."""
        with self._lock:
            return self._state()

    @contextmanager
    def lent_state(self) -> Iterator[State]:
        """Lend the state without a copy; no push gets in before it is handed back."""
        with self._lock, lending():
            yield self._state()

    def _state(self) -> State:
        core = self._core
        facts = {
            "channels": list(self._channels.names),
            "named": self._channels.named,
            "dtype": self.dtype.name,
            "inner": self._inner.kind,
            "rank": self._rule,
            "max_rank": self._most,
            "forget": core.forget,
            "block": len(self._block),
            "growing": self._growing,
            "centre": core.centred,
            "count": self.count,
            "folded": int(self._header[kernels.FOLDED]),
        }
        arrays = {"block": owned(self._block[: int(self._header[kernels.FILL])])}
        if self._inner.given is not None:
            arrays["inner"] = owned(self._inner.given)
        return State("PrincipalBasis", facts, arrays, {"core": core.to_state()})

    @classmethod
    def from_state(cls, state: State) -> Self:
        """Build a basis that goes on where the state was taken."""
        facts = state.facts
        names = facts["channels"]
        settings = {
            key: facts[key] for key in ("rank", "max_rank", "forget", "block", "centre", "dtype")
        }
        basis = cls(names if facts["named"] else len(names), inner=inner_of(state), **settings)
        basis._core.set_state(state.parts["core"])
        waiting = state.take("block", basis.dtype, (None, len(names)), finite=True)
        if not len(waiting) < len(basis._block) or not len(waiting) <= facts["count"]:
            raise SnapshotError(
                f"{len(waiting)} of {facts['count']} samples wait for a block of "
                f"{len(basis._block)} to fill"
            )
        basis._block[: len(waiting)] = waiting
        basis._header[kernels.FILL] = len(waiting)
        basis._header[kernels.COUNT] = facts["count"]
        basis._header[kernels.FOLDED] = facts["folded"]
        basis._growing = facts["growing"]
        basis._settle()
        return basis


def _checked_rank(rank: Any, max_rank: Any, count: int) -> tuple[str | int, int]:
    """Return the rank rule and the most directions reported."""
    fixed = isinstance(rank, int | np.integer) and not isinstance(rank, bool)
    if not fixed and rank not in RULES:
        raise SettingError(f'rank={rank!r}: "noise", "mdl" or a whole number')
    if fixed and not 1 <= rank <= count:
        raise SettingError(f"rank={rank}: from 1 to the number of channels ({count})")
    if max_rank is None:
        max_rank = rank if fixed else min(DEFAULT_MAX_RANK, count)
    elif not isinstance(max_rank, int | np.integer) or not 1 <= max_rank <= count:
        raise SettingError(f"max_rank={max_rank!r}: from 1 to the number of channels ({count})")
    if fixed and rank > max_rank:
        raise SettingError(f"rank={rank} is above max_rank={max_rank}")
    return (int(rank) if fixed else str(rank)), int(max_rank)


def _checked_forgetting(forget: float, half_life: float | None) -> float:
    """Return the forgetting factor."""
    if half_life is not None:
        if forget != 1.0:
            raise SettingError(f"forget={forget} and half_life={half_life}: give one of the two")
        if not half_life > 0.0:
            raise SettingError(f"half_life={half_life}: a number of samples above 0")
        return float(0.5 ** (1.0 / half_life))
    if not 0.0 < forget <= 1.0:
        raise SettingError(f"forget={forget}: a factor above 0 and at most 1")
    return float(forget)


def _checked_block(block: Any) -> int:
    """Return the number of samples folded at a time."""
    if not isinstance(block, int | np.integer) or isinstance(block, bool) or block < 1:
        raise SettingError(f"block={block!r}: a whole number of samples, at least 1")
    return int(block)


def _default_block(count: int, limit: int, forget: float) -> int:
    """Return the block that costs least per sample, as far as the memory allows."""
    if limit == count:
        # the core stays as it is however many samples are folded
        block = min(max(8 * count, LEAST_BLOCK), WHOLE_BLOCK)
    else:
        # the core grows with the block: it costs least per sample near the directions held
        block = min(max(limit, LEAST_BLOCK), LARGEST_BLOCK)
    if forget < 1.0:
        # a basis that lags by more than an eighth of its memory forgets out of step
        block = min(block, max(1, int(0.125 / (1.0 - forget))))
    return block
