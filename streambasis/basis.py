"""StreamBasis: an orthonormal basis of what a feed has shown, one sample at a time."""

from __future__ import annotations

import threading
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from operator import index
from typing import Any, Self

import numpy as np
from numpy import ndarray
from numpy.typing import ArrayLike, DTypeLike, NDArray

from streambasis.audit import Audit, orthogonality
from streambasis.decisions import REASONS, Decision, Decisions
from streambasis.errors import SampleError, SettingError
from streambasis.growth import Growth
from streambasis.inner import Inner, inner_of
from streambasis.kernels import growth as kernels
from streambasis.projecting import powers_taken_out, scaled_rows, two_passes
from streambasis.samples import Channels, checked_dtype, many_samples, one_sample
from streambasis.state import State, lending
from streambasis.times import span_nanoseconds
from streambasis.window import Window

POLICIES = {
    "criterion": kernels.CRITERION,
    "never": kernels.NEVER,
    "always": kernels.ALWAYS,
}

_new = tuple.__new__


class StreamBasis:
    """An orthonormal basis of all samples so far, or of those in a sliding window.

    Parameters
    ----------
    channels : int or sequence of str
        How many channels, or their distinct names.
    rtol : float, optional
        A sample grows the basis when ``|residual| > max(atol, rtol·|sample|)``; 0 <= rtol < 1.
        None stands for the square root of the machine epsilon. A value below the rounding floor,
        ``max(8, sqrt(rank))`` machine epsilons, acts as that: a residual there is rounding.
    atol : float
        In the units of the norm.
    capacity : int, optional
        Most directions kept; where not given the number of channels, or ``window`` if that is
        less. A sample beyond it is rejected with reason ``"full"`` and counted in the audit as
        uncovered; in a window it takes its place when a direction is dropped.
    window : int, optional
        Samples kept: the oldest leaves when one more is pushed, and a direction that only samples
        outside the window needed goes with it. None keeps what was learned for ever.
    span : float, datetime.timedelta or numpy.timedelta64, optional
        Length of time kept, seconds where it is a number: a sample leaves when its time is at or
        before that of the newest less the span. Both limits may be given; whichever comes first
        holds. With a span every sample needs its time.
    dtype : str or dtype
        float32, float64, complex64 or complex128.
    inner : None, (n,) positive weights or (n, n) Hermitian positive definite matrix
        The inner product in which norms, residuals and tolerances are measured and directions are
        orthonormal.
    reorthogonalize : {"criterion", "never", "always"}
        For study. "criterion" makes a second pass where rounding would show (Giraud & Langou 2003),
        "never" is plain modified Gram-Schmidt, which loses orthogonality on near dependent samples,
        "always" makes two passes over every sample.

    Raises
    ------
    SettingError
        For a setting outside its range.

    Notes
    -----
    A push costs 4·n·rank flops and reads the directions once; one that grows the basis, or comes
    within rounding of its tolerance, twice that. Directions take n·rank entries, nothing grows with
    the number of samples.

    The directions satisfy ``|V Vᴴ - I|₁ < 3·n·u`` (u the unit roundoff, n at least 16) at any
    condition number, the first k of them span what the first k accepted samples span, and every
    rejected sample lies within its tolerance of the span.

    Each sample is first multiplied by the power of two that brings its largest part into [1/2, 1),
    and results are scaled back. So decisions do not depend on the scale, up to the ends of the
    range: subnormal samples are samples like others, with the precision that they have left; a
    norm beyond the largest number is reported as infinity (and decided rightly), one below the
    smallest as 0; parts of a sample 2**1022 times smaller than its largest part (2**126 in single
    precision) may be rounded.

    Threads may share an object: each push is a whole. Kernels release the interpreter lock.

    With a window, every sample in it lies within its tolerance of the span at every moment, and
    each direction is held up by a pivot sample in it. The coordinates of all samples in the window
    are kept: rank entries and 88 bytes each, in rows and slots that are allocated as they are
    needed, at most doubling, and not given back. A span alone holds as many samples as fall
    into it; ``window`` caps them. Samples that the capacity leaves uncovered are kept in full.
    A sample that leaves costs nothing unless it is a pivot; then the window is searched for
    one to take over, usually a few samples, at most rank entries of each, and rank² flops; a drop
    rotates the directions and all coordinates, 4·rank·(n + window) flops.

    References
    ----------
    .. [1] L. Giraud and J. Langou, "A robust criterion for the modified Gram-Schmidt algorithm with
       selective reorthogonalization", SIAM J. Sci. Comput. 25 (2003), 417-441.
    .. [2] Å. Björck, "Solving linear least squares problems by Gram-Schmidt orthogonalization",
       BIT 7 (1967), 1-21.

    Examples
    --------
    >>> from streambasis import StreamBasis
    >>> basis = StreamBasis(3)
    >>> basis.push([1.0, 1.0, 0.0]).grew, basis.push([2.0, 2.0, 0.0]).grew
    (True, False)
    >>> basis
    StreamBasis(3 channels, rank 1 of at most 3, 2 samples, float64)
    """

    __slots__ = (
        "_acquire",
        "_channels",
        "_core",
        "_dtype",
        "_inner",
        "_lock",
        "_plain",
        "_release",
        "_shape",
        "_span",
        "_step",
        "_vectors",
        "_window",
    )

    def __init__(
        self,
        channels: int | Iterable[str],
        *,
        rtol: float | None = None,
        atol: float = 0.0,
        capacity: int | None = None,
        window: int | None = None,
        span: Any = None,
        dtype: DTypeLike = "float64",
        inner: ArrayLike | None = None,
        reorthogonalize: str = "criterion",
    ) -> None:
        self._channels = Channels(channels)
        count = self._channels.count
        self._dtype = checked_dtype(dtype)
        if reorthogonalize not in POLICIES:
            raise SettingError(f"reorthogonalize={reorthogonalize!r}: one of {', '.join(POLICIES)}")
        self._inner = Inner(inner, count, self._dtype)
        self._window = None if window is None else _checked_window(window)
        self._span = None if span is None else span_nanoseconds(span)
        settings = (
            count,
            _checked_capacity(capacity, count, self._window),
            *_checked_tolerances(rtol, atol, float(np.finfo(self._dtype).eps)),
            POLICIES[reorthogonalize],
            self._dtype,
        )
        self._core: Growth | Window = (
            Growth(*settings)
            if window is None and span is None
            else Window(*settings, self._window, self._span)
        )
        self._lock = threading.Lock()
        self._acquire, self._release = self._lock.acquire, self._lock.release
        self._shape = (count,)
        self._plain = self._inner.kind == "euclidean"
        self._vectors: tuple[Any, NDArray[Any]] | None = None
        self._bind()

    def _bind(self) -> None:
        self._step = self._core.step

    def __repr__(self) -> str:
        return (
            f"StreamBasis({len(self._channels)} channels, rank {self.rank} of at most "
            f"{self.capacity}, {self.count} samples, {self._dtype})"
        )

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self).from_state, (self.to_state(),)

    @property
    def channels(self) -> tuple[str, ...]:
        """Names of the channels."""
        return self._channels.names

    @property
    def dtype(self) -> np.dtype[Any]:
        """Type of the samples and directions."""
        return self._dtype

    @property
    def rank(self) -> int:
        """Directions held."""
        return self._core.rank

    @property
    def capacity(self) -> int:
        """Most directions that are kept."""
        return self._core.capacity

    @property
    def window(self) -> int | None:
        """Most samples kept, None where their number is not limited."""
        return self._window

    @property
    def span(self) -> np.timedelta64 | None:
        """Length of time kept, None where it is not limited."""
        return None if self._span is None else np.timedelta64(self._span, "ns")

    @property
    def members(self) -> NDArray[np.int64]:
        """Numbers of the samples in the window, oldest first.

        Raises
        ------
        SettingError
            Without a window, since no single sample is kept.
        """
        with self._lock:
            return self._windowed("members").members

    @property
    def uncovered(self) -> NDArray[np.int64]:
        """Numbers of the samples of the window that the capacity leaves outside the span.

        Oldest first, which is the order in which they take their place when a direction is
        dropped; they are among the pivots, or covered, from then on.

        Raises
        ------
        SettingError
            Without a window, since no single sample is kept; the audit counts them.
        """
        with self._lock:
            return self._windowed("uncovered").waiting

    def _windowed(self, what: str) -> Window:
        if isinstance(self._core, Window):
            return self._core
        raise SettingError(
            f"{what}: a basis without a window keeps no samples and cannot forget; "
            "make it with window= or span="
        )

    @property
    def count(self) -> int:
        """Samples seen."""
        return self._core.count

    @property
    def nbytes(self) -> int:
        """Bytes of the arrays held; push_many takes its workspace anew and gives it back."""
        return self._core.nbytes + self._inner.nbytes

    @property
    def vectors(self) -> NDArray[Any]:
        """The directions in channel units, (rank, n), read-only; rows orthonormal in ``inner``.

        Notes
        -----
        Without an inner product and a window this is a view, and costs nothing; otherwise one of
        n·rank entries is computed when the directions have changed, and kept.
        """
        with self._lock:
            version = self._core.version
            if self._vectors is None or self._vectors[0] != version:
                held = self._core.directions
                if not self._plain:
                    out = self._inner.leave(held)
                else:
                    # the directions of a window are rotated where they are
                    out = held.copy() if isinstance(self._core, Window) else held.view()
                out.setflags(write=False)
                self._vectors = version, out
            return self._vectors[1]

    @property
    def pivots(self) -> NDArray[np.int64]:
        """Number of the pivot sample of each direction, (rank,)."""
        with self._lock:
            return self._core.pivots.copy()

    @property
    def triangular(self) -> NDArray[Any]:
        """The lower triangular factor L, (rank, rank), with ``pivot samples = L @ vectors``.

        Notes
        -----
        Its transpose is the R of a QR factorization of the pivot samples as columns; the diagonal
        is positive. An entry beyond the range of the dtype is infinite or 0.

        Raises
        ------
        SettingError
            With a window, whose directions are not in the order of its pivot samples.
        """
        with self._lock:
            if isinstance(self._core, Window):
                raise SettingError(
                    "triangular: the directions of a window are not in the order of its pivot "
                    "samples; coordinates(pivot samples) is what ties them together"
                )
            return self._core.triangular()

    def push(self, sample: ArrayLike, at: Any = None) -> Decision:
        """Take one sample and decide whether it adds a direction.

        Parameters
        ----------
        sample : array_like, shape (n,)
            One finite value per channel. An array of the dtype of the basis, contiguous and
            writable, is read where it lies; anything else is converted first. It is neither
            written to nor kept.
        at : float, int, datetime.datetime or numpy.datetime64, optional
            Time of the sample, where there is a window; plain numbers are seconds.

        Returns
        -------
        Decision
            Sample number, norm, residual, tolerance, whether it grew the basis and why (not).

        Raises
        ------
        SampleError
            If the length is wrong, a value is not finite, or the time runs backwards; the message
            names sample, channel and value. The basis is as it was, bit for bit.
        SampleTypeError
            If the values are not numbers, or complex ones for a real basis.

        Notes
        -----
        4·n·rank flops; allocates nothing but the answer, and more rows when the basis outgrows
        them.

        Examples
        --------
        >>> from streambasis import StreamBasis
        >>> basis = StreamBasis(["inlet", "outlet"])
        >>> decision = basis.push([3.0, 4.0])
        >>> decision.norm, decision.grew, decision.reason, decision.rank
        (5.0, True, 'independent', 1)
        """
        # a with statement costs 70 ns more than this, and a push of 16 channels 1 us in all
        self._acquire()
        try:
            if at is not None or self._core.timed:
                self._core.stamp(at)
            if not (
                sample.__class__ is ndarray
                and sample.dtype is self._dtype
                and sample.shape == self._shape
                and sample.flags.carray
                and self._plain
            ):
                sample = self._entered(sample)
            number, norm, residual, tolerance, grew, reason, rank, passes, expired, dropped = (
                self._step(sample)
            )
            if reason < 0:
                return self._again(sample, reason)
        finally:
            self._release()
        return _new(
            Decision,
            (
                number,
                norm,
                residual,
                tolerance,
                grew,
                REASONS[reason],
                rank,
                passes,
                expired,
                dropped,
            ),
        )

    def _entered(self, sample: ArrayLike) -> NDArray[Any]:
        checked = one_sample(sample, self._channels, self._dtype, number=self._core.count)
        entered = np.ascontiguousarray(self._inner.enter(checked))
        if not np.isfinite(entered).all():
            raise SampleError(self._beyond(self._core.count))
        return entered

    def _beyond(self, number: int) -> str:
        return f"sample {number}: its size in the inner product is beyond {self._dtype}"

    def _again(self, sample: NDArray[Any], reason: int) -> Decision:
        """Answer a kernel that took nothing: refuse the sample, or make room and go on."""
        record: tuple[Any, ...] = ()
        if reason == kernels.NOT_FINITE:
            # a copy: another thread that writes to the sample may have made it finite meanwhile
            sample = one_sample(sample.copy(), self._channels, self._dtype, number=self._core.count)
            record = self._step(sample)
            reason = record[5]
        while reason < 0:
            self._core.make_room()
            self._bind()
            record = self._step(sample)
            reason = record[5]
        return _new(Decision, (*record[:5], REASONS[reason], *record[6:]))

    def push_many(self, samples: Any, at: Any = None) -> Decisions:
        """Take a batch of samples as if they were pushed one at a time.

        Parameters
        ----------
        samples : array_like of shape (m, n), or an Arrow table or batch
            All of it is checked before any of it is taken. Arrow columns (pyarrow, polars, pandas,
            duckdb, ...) are matched to named channels by name.
        at : array_like of m times, optional
            Times of the samples, where there is a window.

        Returns
        -------
        Decisions
            The decisions, one array per field; ``to_arrow()`` makes a record batch of them.

        Raises
        ------
        SampleError, SampleTypeError
            As for push; a column that is missing or doubled is named. The basis is as it was.

        Notes
        -----
        At the speed of matrix products while the basis does not change. Residuals agree with
        those of single pushes to 1e-12 of the norm (the same number of roundings in single
        precision), so a decision differs only where the residual is that close to its tolerance.

        Examples
        --------
        >>> from streambasis import StreamBasis
        >>> decisions = StreamBasis(2).push_many([[1.0, 0.0], [2.0, 0.0], [0.0, 0.5]])
        >>> decisions.grew
        array([ True, False,  True])
        """
        with self._lock:
            first = self._core.count
            checked = many_samples(samples, self._channels, self._dtype, first=first)
            entered = np.ascontiguousarray(self._inner.enter(checked))
            if not self._plain:
                fine = np.isfinite(entered).all(axis=1)
                if not fine.all():
                    raise SampleError(self._beyond(first + int(np.argmin(fine))))
            try:
                return self._core.push_block(entered, at)
            finally:
                self._bind()

    def coordinates(self, x: Any) -> NDArray[Any]:
        """Return the inner products of the directions with x.

        Parameters
        ----------
        x : array_like of shape (n,) or (m, n), or an Arrow table
            In channel units. Nothing of the basis changes.

        Returns
        -------
        ndarray, shape (rank,) or (m, rank)
            With ``x ≈ coordinates @ vectors`` for an x in the span.

        Notes
        -----
        Two passes, 8·n·rank flops for each row; the error is of the order of eps·|x|.

        Examples
        --------
        >>> from streambasis import StreamBasis
        >>> basis = StreamBasis(2)
        >>> _ = basis.push([0.0, 2.0])
        >>> basis.coordinates([[3.0, 4.0], [4.0, 0.0]])
        array([[4.],
               [0.]])
        """
        rows, powers, single = self._rows(x)
        coordinates, _, _ = self._split(rows)
        out = scaled_rows(coordinates, powers)
        return out[0] if single else out

    def project(self, x: Any) -> NDArray[Any]:
        """Return the part of x inside the span, in channel units; parameters as for coordinates."""
        rows, powers, single = self._rows(x)
        coordinates, _, directions = self._split(rows)
        out = self._inner.leave(scaled_rows(coordinates @ directions, powers))
        return out[0] if single else out

    def residual(self, x: Any) -> NDArray[Any]:
        """Return the part of x outside the span, in channel units; parameters as for coordinates.

        Notes
        -----
        Its norm agrees with the one that push reports to within rounding of |x|.
        """
        rows, powers, single = self._rows(x)
        out = self._inner.leave(scaled_rows(self._split(rows)[1], powers))
        return out[0] if single else out

    def explain(self, x: Any) -> tuple[NDArray[np.int64], NDArray[Any], NDArray[Any]]:
        """Write x as a combination of the pivot samples, and what they cannot explain.

        Parameters
        ----------
        x : array_like of shape (n,) or (m, n), or an Arrow table
            In channel units. Nothing of the basis changes.

        Returns
        -------
        sample_ids : ndarray of int64, shape (rank,)
            Numbers of the pivot samples.
        weights : ndarray, shape (rank,) or (m, rank)
            With ``x = weights @ pivot_samples + residual``, in the units of the samples as they
            were pushed.
        residual : ndarray, shape of x
            The part of x outside the span.

        Notes
        -----
        The coordinates are divided by the triangular factor, rank² flops for each row. Weights of
        nearly dependent pivot samples are as uncertain as the condition that audit reports says;
        the combination itself is not.

        Examples
        --------
        >>> from streambasis import StreamBasis
        >>> basis = StreamBasis(3)
        >>> for sample in ([2.0, 0.0, 0.0], [4.0, 0.0, 0.0], [1.0, 1.0, 0.0]):
        ...     _ = basis.push(sample)
        >>> basis.explain([5.0, 3.0, 7.0])
        (array([0, 2]), array([1., 3.]), array([0., 0., 7.]))
        """
        rows, powers, single = self._rows(x)
        with self._lock:
            coordinates, rest = two_passes(rows, self._core.directions)
            samples, weights = self._core.pivots.copy(), self._core.weights(coordinates, powers)
        residual = self._inner.leave(scaled_rows(rest, powers))
        return (samples, weights[0], residual[0]) if single else (samples, weights, residual)

    def _rows(self, x: Any) -> tuple[NDArray[Any], NDArray[np.int64], bool]:
        """Return x as checked Euclidean rows below 1, the powers of two taken out, and if one."""
        arrow = hasattr(x, "__arrow_c_stream__") or hasattr(x, "__arrow_c_array__")
        single = not arrow and np.ndim(x) == 1
        if single:
            array = one_sample(x, self._channels, self._dtype)[None, :]
        else:
            array = many_samples(x, self._channels, self._dtype)
        rows, powers = powers_taken_out(array)
        return self._inner.enter(rows), powers, single

    def _split(self, rows: NDArray[Any]) -> tuple[NDArray[Any], NDArray[Any], NDArray[Any]]:
        """Return the coordinates of rows, their rests, and the directions they refer to."""
        with self._lock:
            directions = self._core.directions
            return *two_passes(rows, directions), directions

    def retract(self, sample_id: int) -> int:
        """Take one sample of the window back, whether it is a pivot or not.

        Parameters
        ----------
        sample_id : int
            Number of the sample, as its decision gave it.

        Returns
        -------
        int
            Directions that went with it.

        Raises
        ------
        UnknownSampleError
            If the number was never given out or its sample has left the window; nothing changes.
        SettingError
            Without a window: what a sample taught the basis for ever cannot be told apart.

        Notes
        -----
        Finding the sample reads the numbers of the window. From then on it costs what its expiry
        would have cost: nothing, unless it is a pivot.

        Examples
        --------
        >>> from streambasis import StreamBasis
        >>> basis = StreamBasis(2, window=10)
        >>> first, second = basis.push([1.0, 0.0]), basis.push([1.0, 1.0])
        >>> basis.retract(first.sample), basis.vectors.round(3).tolist()
        (1, [[0.707, 0.707]])
        """
        with self._lock:
            return self._windowed("retract").retract(index(sample_id))

    def expire(self, *, before: Any) -> int:
        """Forget all samples of the window stamped before a time.

        Parameters
        ----------
        before : float, int, datetime.datetime or numpy.datetime64
            Samples with a time below this leave; one stamped just then stays.

        Returns
        -------
        int
            Samples that left.

        Raises
        ------
        SampleError
            If the samples of the window have no times.
        SettingError
            Without a window.

        Examples
        --------
        >>> from streambasis import StreamBasis
        >>> basis = StreamBasis(2, window=10)
        >>> for second in range(5):
        ...     _ = basis.push([1.0, 0.0], at=second)
        >>> basis.expire(before=3), basis.members.tolist()
        (3, [3, 4])
        """
        with self._lock:
            return self._windowed("expire").expire(before)[0]

    def renew(self) -> None:
        """Orthonormalize the directions afresh; span, order and pivot samples stay.

        Notes
        -----
        4·n·rank² flops. The basis keeps itself within its bound without this.
        """
        with self._lock:
            self._core.renew()
            self._bind()

    def audit(self) -> Audit:
        """Measure the orthonormality, coverage and condition of the basis as it is.

        Notes
        -----
        2·n·rank² + O(rank³) flops.

        Examples
        --------
        >>> from streambasis import StreamBasis
        >>> basis = StreamBasis(3)
        >>> _ = basis.push_many([[1.0, 1.0, 1.0], [1.0, 1.0, 1.001], [5.0, 5.0, 5.0]])
        >>> audit = basis.audit()
        >>> audit.orthogonality < 3, audit.coverage < 1, audit.rank
        (True, True, 2)
        """
        with self._lock:
            core = self._core
            k = core.rank
            condition = 1.0
            if k:
                factor = core.factor
                scaled = factor / np.linalg.norm(factor, axis=1)[:, None]
                condition = float(np.linalg.cond(scaled))
            return Audit(
                orthogonality(core.directions),
                core.coverage,
                condition,
                core.renewals,
                k,
                core.count,
                core.uncovered,
            )

    def to_state(self) -> State:
        """Hand over everything needed to go on."""
        with self._lock:
            return self._state()

    @contextmanager
    def lent_state(self) -> Iterator[State]:
        """Lend the state without a copy; no push gets in before it is handed back."""
        with self._lock, lending():
            yield self._state()

    def _state(self) -> State:
        facts = {
            "channels": list(self._channels.names),
            "named": self._channels.named,
            "dtype": self.dtype.name,
            "inner": self._inner.kind,
            "window": self._window,
            "span": self._span,
        }
        arrays = {} if self._inner.given is None else {"inner": self._inner.given}
        return State("StreamBasis", facts, arrays, {"core": self._core.to_state()})

    @classmethod
    def from_state(cls, state: State) -> Self:
        """Build a basis that goes on where the state was taken."""
        facts = state.facts
        names = facts["channels"]
        basis = cls(
            names if facts["named"] else len(names),
            dtype=facts["dtype"],
            inner=inner_of(state),
            window=facts["window"],
            span=None if facts["span"] is None else np.timedelta64(facts["span"], "ns"),
        )
        basis._core.set_state(state.parts["core"])
        basis._bind()
        return basis


def _checked_window(window: Any) -> int:
    try:
        number = index(window)
    except TypeError:
        number = 0
    if not 1 <= number < 2**62 or isinstance(window, bool):
        raise SettingError(f"window={window!r}: a whole number of samples, from 1 to below 2**62")
    return number


def _checked_capacity(capacity: int | None, count: int, window: int | None) -> int:
    if capacity is None:
        return count if window is None else min(count, window)
    try:
        number = index(capacity)
    except TypeError:
        number = 0
    if not 1 <= number <= count:
        raise SettingError(
            f"capacity={capacity!r}: a whole number from 1 to the number of channels ({count})"
        )
    return number


def _checked_tolerances(rtol: Any, atol: Any, epsilon: float) -> tuple[float, float]:
    try:
        relative = epsilon**0.5 if rtol is None else float(rtol)
        absolute = float(atol)
    except (TypeError, ValueError):
        raise SettingError(f"rtol={rtol!r}, atol={atol!r}: tolerances are numbers") from None
    if not 0.0 <= relative < 1.0:
        raise SettingError(f"rtol={rtol}: a relative tolerance is at least 0 and below 1")
    if not 0.0 <= absolute < np.inf:
        raise SettingError(f"atol={atol}: an absolute tolerance is at least 0 and finite")
    return relative, absolute
