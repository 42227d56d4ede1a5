"""The basis that grows for ever: its arrays, and how they are made larger."""

from __future__ import annotations

from collections.abc import Callable
from functools import cache, partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.basis_settings import Settings
from streambasis.decisions import Decisions, reason_names
from streambasis.errors import SnapshotError
from streambasis.kernels import block as blocks
from streambasis.kernels import growth as kernels
from streambasis.kernels._jit import entry
from streambasis.memory import aligned_zeros
from streambasis.projecting import scaled_rows, shift_entries
from streambasis.state import State, owned

FIRST_ROWS = 8
BLOCK_BYTES = 2**21
"""Size of a block of samples that push_many projects at once, if that is at least LEAST_ROWS."""
LEAST_ROWS = 64
"""Samples that are projected at once however long they are: fewer would leave a matrix product as
slow as reading the directions."""
MOST_ROWS = 512
EXACT = 2.0**-42
"""A sample this close, relative to its norm, to what a few of its channels say it should be is in
the span: the distance bounds its residual, and is reported as such. Rounding is a few epsilons as
a rule, and ``rank`` epsilons times ``MOST_SPREAD`` at the very worst, which is still far below
LEAST_RTOL."""
LEAST_RTOL = 2.0**-30
MOST_SPREAD = 16.0
"""Largest entry of an interpolation that is used: it multiplies rounding. Partial pivoting leaves
entries below 4 as a rule."""
REACHED = 4
"""Channels among which those of an interpolation are picked, in ranks."""
PATIENCE = 4
"""Samples since the last growth, in ranks, after which an interpolation is worth its making."""
SPARSE = 4
"""A block is projected if at most one in this many samples before it grew the basis."""


class Growth:
    """The arrays of a basis without a window, in Euclidean coordinates.

    Parameters
    ----------
    count : int
        Channels.
    settings : Settings
        What was asked for.
    dtype : numpy.dtype
        One of the four.

    Notes
    -----
    A basis of rank k holds V (k, n) row by row and the lower triangular factor L (k, k) with
    ``pivot samples = L V``, each pivot sample scaled by its own power of two. Rows are allocated
    as they are needed, at most doubling, never beyond the capacity.

    ``step(sample)`` is the kernel bound to the arrays, and is made anew whenever they are.
    """

    timed = False
    """Whether every sample must be stamped before it is taken."""

    __slots__ = (
        "arrays",
        "directions_held",
        "factor_held",
        "integers",
        "interpolation",
        "reals",
        "step",
        "work",
    )

    def __init__(self, count: int, settings: Settings, dtype: np.dtype[Any]) -> None:
        rows = min(FIRST_ROWS, settings.capacity)
        self.directions_held = aligned_zeros((rows, count), dtype)
        self.factor_held = np.zeros((rows, rows), dtype)
        self.integers = np.zeros(kernels.HEADER + 2 * rows, np.int64)
        self.integers[kernels.CAPACITY] = settings.capacity
        self.integers[kernels.POLICY] = settings.policy
        self.reals = np.array([settings.rtol, settings.atol, 0.0, 0.0])
        self.interpolation: tuple[Any, NDArray[np.int64], NDArray[Any]] | None = None
        self._bind()

    def _bind(self) -> None:
        rows, count = self.directions_held.shape
        dtype = self.directions_held.dtype
        self.work = aligned_zeros(count + rows, dtype)
        self.arrays = (
            self.directions_held,
            self.factor_held,
            self.work,
            self.integers,
            self.reals,
        )
        compiled = entry(kernels.push_growing, *self.arrays, np.zeros(count, dtype))
        self.step = partial(compiled, *self.arrays)

    def make_room(self) -> None:
        """Allocate more rows; everything held stays as it is."""
        rows = self.directions_held.shape[0]
        more = min(2 * rows, int(self.integers[kernels.CAPACITY]))
        count, dtype = self.directions_held.shape[1], self.directions_held.dtype
        directions = aligned_zeros((more, count), dtype)
        directions[:rows] = self.directions_held
        factor = np.zeros((more, more), directions.dtype)
        factor[:rows, :rows] = self.factor_held
        integers = np.zeros(kernels.HEADER + 2 * more, np.int64)
        integers[: kernels.HEADER + rows] = self.integers[: kernels.HEADER + rows]
        integers[kernels.HEADER + more :][:rows] = self.integers[kernels.HEADER + rows :]
        self.directions_held, self.factor_held, self.integers = directions, factor, integers
        self._bind()

    @property
    def count(self) -> int:
        """Samples seen."""
        return int(self.integers[kernels.COUNT])

    @property
    def rank(self) -> int:
        """Directions held."""
        return int(self.integers[kernels.RANK])

    @property
    def directions(self) -> NDArray[Any]:
        """The directions as rows, (rank, n), a view."""
        return self.directions_held[: self.rank]

    @property
    def factor(self) -> NDArray[Any]:
        """The lower triangular factor, (rank, rank), of the scaled pivot samples, a view."""
        return self.factor_held[: self.rank, : self.rank]

    @property
    def pivots(self) -> NDArray[np.int64]:
        """Numbers of the pivot samples, one per direction, a view."""
        return self.integers[kernels.HEADER :][: self.rank]

    @property
    def exponents(self) -> NDArray[np.int64]:
        """Exponents of two by which the pivot samples were divided, a view."""
        return self.integers[kernels.HEADER + len(self.directions_held) :][: self.rank]

    @property
    def capacity(self) -> int:
        """Most directions that are kept."""
        return int(self.integers[kernels.CAPACITY])

    @property
    def version(self) -> tuple[int, int]:
        """What changes when a direction changes."""
        return self.rank, self.renewals

    @property
    def renewals(self) -> int:
        """How often the directions were orthonormalized afresh."""
        return int(self.integers[kernels.RENEWALS])

    @property
    def uncovered(self) -> int:
        """Samples that were independent when the capacity was reached."""
        return int(self.integers[kernels.UNCOVERED])

    @property
    def coverage(self) -> float:
        """Largest residual of a rejected sample over its tolerance.

        Samples that grew the basis are in its span, and spans are nested: what a rejected sample
        had outside when it came can only have become less.
        """
        return float(self.reals[kernels.COVERAGE])

    @property
    def nbytes(self) -> int:
        """Bytes of all arrays."""
        extra = 0 if self.interpolation is None else self.interpolation[2].nbytes
        return sum(array.nbytes for array in self.arrays) + extra

    def stamp(self, at: Any) -> None:
        """Take note of the time of the next sample; a basis that never forgets has no use."""

    def triangular(self) -> NDArray[Any]:
        """Return the lower triangular factor in the units of the pivot samples."""
        return scaled_rows(owned(self.factor), self.exponents)

    def weights(self, coordinates: NDArray[Any], powers: NDArray[np.int64]) -> NDArray[Any]:
        """Return the combinations of pivot samples with these coordinates times 2**powers, (m, k).

        ``coordinates`` is overwritten.
        """
        kernels.solve_rows(self.factor_held, self.rank, coordinates)
        return shift_entries(coordinates, powers[:, None] - self.exponents)

    def renew(self) -> None:
        """Orthonormalize the directions afresh, in their order."""
        rows, count = self.directions_held.shape
        directions = aligned_zeros((rows, count), self.directions_held.dtype)
        between = np.zeros((rows, rows), directions.dtype)
        kernels.orthonormalize_rows(self.directions_held, self.rank, directions, between)
        # old directions = between @ new directions, both factors lower triangular
        self.factor_held = np.tril(self.factor_held @ between)
        self.directions_held = directions
        self.integers[kernels.RENEWALS] += 1
        self._bind()

    def push_block(
        self, samples: NDArray[Any], _at: Any, alone: Callable[[int], NDArray[Any]]
    ) -> Decisions:
        """Take Euclidean samples that are known to be finite, (m, n), as if one after another.

        Parameters
        ----------
        samples : ndarray, shape (m, n)
        alone : callable
            Returns the sample of a row as :meth:`step` would have been given it.

        Notes
        -----
        Blocks of samples are projected by two matrix products, 4·n·rank flops a sample like a
        single push, but at the speed of a matrix product. A sample that grows the basis costs a
        push and a correction of the rest of its block by the new direction; while more than one in
        ``SPARSE`` samples grows it, samples are pushed one by one. The workspace is bounded by
        ``BLOCK_BYTES``, or ``LEAST_ROWS`` samples.

        Where a feed is exact (double precision, nothing but rounding outside the span since the
        last growth) half of that will do: as many channels as there are directions, picked by
        Gaussian elimination, tell what the others should be (the empirical interpolation of
        Chaturantabut & Sorensen 2010, SIAM J. Sci. Comput. 32), and what differs from that by
        less than ``EXACT`` of its norm is in the span. Anything else goes through the one-sample
        kernel, and the next block is projected.
        """
        count = len(samples)
        first = self.count
        floats = np.empty((3, count))
        whole = np.empty((3, count), np.int64)
        rows = BLOCK_BYTES // max(1, samples.itemsize * samples.shape[1])
        rows = min(max(rows, LEAST_ROWS), MOST_ROWS)
        room: NDArray[Any] = np.empty((min(rows, count), samples.shape[1]), samples.dtype)
        start, rank, dense = 0, self.rank, self.rank == 0
        with np.errstate(all="ignore"):  # what leaves the range is pushed one by one
            while start < count:
                stop = min(count, start + (LEAST_ROWS if dense else rows))
                self._push_rows(
                    samples[start:stop],
                    room[: 0 if dense else stop - start],
                    floats[:, start:stop],
                    whole[:, start:stop],
                    alone,
                    start,
                )
                dense = (self.rank - rank) * SPARSE > stop - start
                start, rank = stop, self.rank
        nothing = np.zeros(count, np.int64)
        return Decisions(
            sample=np.arange(first, first + count),
            norm=floats[blocks.NORM],
            residual=floats[blocks.RESIDUAL],
            tolerance=floats[blocks.TOLERANCE],
            grew=whole[blocks.REASON] == kernels.INDEPENDENT,
            reason=reason_names(whole[blocks.REASON]),
            rank=whole[blocks.RANK_AFTER],
            passes=whole[blocks.PASSES],
            expired=nothing,
            dropped=nothing.copy(),
        )

    def _push_rows(
        self,
        samples: NDArray[Any],
        room: NDArray[Any],
        floats: NDArray[Any],
        whole: NDArray[Any],
        alone: Callable[[int], NDArray[Any]],
        first: int,
    ) -> None:
        """Take one block, with its projections if there is room for them.

        Its row 0 is row ``first`` to ``alone``.
        """
        measures = np.zeros((3, len(room)))
        exactness = 0.0
        if len(room) and self._exact():
            assert self.interpolation is not None
            _, picked, rows = self.interpolation
            np.matmul(samples.take(picked, axis=1), rows, out=room)
            measure_interpolated(samples.dtype)(samples, room, measures)
            exactness = EXACT
        elif len(room):
            coefficients = self._projected(samples, room)
            measure_block(samples.dtype)(samples, room, coefficients, measures)
        start = 0
        while True:
            start = decide_block(samples.dtype)(
                *self.arrays, samples, room, measures, exactness, start, floats, whole
            )
            if start == len(samples):
                return
            sample = alone(first + start)
            answer = self.step(sample)
            while answer[5] == kernels.NEEDS_ROOM:
                self.make_room()
                answer = self.step(sample)
            floats[:, start], whole[:, start] = answer[1:4], answer[5:8]
            start += 1
            if answer[4] and exactness == 0.0 and len(room):
                coefficients = self.work[samples.shape[1] :]
                correct_block(samples.dtype)(
                    self.directions_held, self.rank - 1, room, start, measures, coefficients
                )

    def _projected(self, samples: NDArray[Any], room: NDArray[Any]) -> NDArray[Any]:
        """Fill ``room`` with the parts of the samples in the span; return their coordinates."""
        directions = self.directions
        coefficients: NDArray[Any]
        if samples.dtype.kind == "c":
            # a conjugated copy of the samples is smaller than one of the directions
            np.conjugate(samples, out=room)
            coefficients = room @ directions.T
            np.conjugate(coefficients, out=coefficients)
        else:
            coefficients = samples @ directions.T
        np.matmul(coefficients, directions, out=room)
        return coefficients

    def _exact(self) -> bool:
        """Whether samples are interpolated from some channels first, which halves the work.

        So it is while the feed has been exact since the last growth, long enough to make up for
        the elimination. All that this depends on is in the state: a restart does not change it.
        """
        rank = self.rank
        if (
            rank == 0
            or self.directions_held.real.dtype.itemsize != 8
            or float(self.reals[kernels.INEXACT]) > EXACT
            or float(self.reals[kernels.RTOL]) < LEAST_RTOL
            or self.integers[kernels.POLICY] != kernels.CRITERION
            or self.count - int(self.pivots[-1]) <= PATIENCE * rank
        ):
            return False
        if self.interpolation is None or self.interpolation[0] != self.version:
            self.interpolation = self.version, *interpolation(self.directions)
        return len(self.interpolation[1]) > 0

    def to_state(self) -> State:
        """Hand over the arrays as far as they are in use."""
        return State(
            "Growth",
            arrays={
                "vectors": owned(self.directions),
                "factor": owned(self.factor),
                "pivots": owned(self.pivots),
                "exponents": owned(self.exponents),
                "header": owned(self.integers[: kernels.HEADER]),
                "reals": owned(self.reals),
            },
        )

    def set_state(self, state: State) -> None:
        """Take over the arrays of a state made with the same channels and dtype.

        Raises
        ------
        SnapshotError
            If they do not fit each other.
        """
        dtype, channels = self.directions_held.dtype, self.directions_held.shape[1]
        header = state.take("header", np.int64, (kernels.HEADER,))
        k = int(header[kernels.RANK])
        vectors = state.take("vectors", dtype, (k, channels))
        factor = state.take("factor", dtype, (k, k))
        pivots = state.take("pivots", np.int64, (k,))
        exponents = state.take("exponents", np.int64, (k,))
        reals = state.take("reals", np.float64, self.reals.shape, finite=True)
        if not k <= header[kernels.CAPACITY] <= channels or not k <= header[kernels.COUNT]:
            raise SnapshotError(
                f"{k} directions of {header[kernels.COUNT]} samples on {channels} channels, where "
                f"at most {header[kernels.CAPACITY]} are kept"
            )
        if k:
            # without a spare row: until it grows, a large basis stays the page of the file that
            # it was read from
            self.directions_held, self.factor_held = vectors, factor
            self.integers = np.concatenate([header, pivots, exponents])
        else:
            self.integers[: kernels.HEADER] = header
        self.reals = reals
        self._bind()


# The kernels of a block are taken as compiled for arrays of one kind: a read-only batch or a part
# of the answer would otherwise be a kind of its own, and compile for seconds amid a feed.


@cache
def measure_block(dtype: np.dtype[Any]) -> Callable[..., Any]:
    """Return the compiled kernel that measures projected samples of a dtype."""
    rows = np.zeros((1, 1), dtype)
    return entry(blocks.measure_block, rows, rows, rows, np.zeros((3, 1)))


@cache
def measure_interpolated(dtype: np.dtype[Any]) -> Callable[..., Any]:
    """Return the compiled kernel that measures interpolated samples of a dtype."""
    rows = np.zeros((1, 1), dtype)
    return entry(blocks.measure_interpolated, rows, rows, np.zeros((3, 1)))


@cache
def correct_block(dtype: np.dtype[Any]) -> Callable[..., Any]:
    """Return the compiled kernel that takes a new direction out of a block of a dtype."""
    rows = np.zeros((1, 1), dtype)
    return entry(blocks.correct_block, rows, 0, rows, 0, np.zeros((3, 1)), rows[0])


@cache
def decide_block(dtype: np.dtype[Any]) -> Callable[..., Any]:
    """Return the compiled kernel that decides the samples of a block of a dtype."""
    rows = np.zeros((1, 1), dtype)
    part, whole_part = np.zeros((3, 2))[:, :1], np.zeros((3, 2), np.int64)[:, :1]
    return entry(
        blocks.decide_block,
        *(rows, rows, rows[0], np.zeros(1, np.int64), np.zeros(1)),
        *(rows, rows, np.zeros((3, 1)), 0.0, 0, part, whole_part),
    )


def interpolation(directions: NDArray[Any]) -> tuple[NDArray[np.int64], NDArray[Any]]:
    """Return channels that tell all others in the span, and how.

    Parameters
    ----------
    directions : ndarray, shape (k, n)

    Returns
    -------
    picked : ndarray of int64, shape (k,), or (0,) where no such channels were found
    rows : ndarray, shape (k, n)
        With ``x = x[picked] @ rows`` for every x in the span, no entry above ``MOST_SPREAD``.

    Notes
    -----
    The channels are picked by Gaussian elimination among those that the directions reach most;
    2·k²·n flops, nearly all of them in a matrix product.

    References
    ----------
    Chaturantabut & Sorensen (2010), "Nonlinear model reduction via discrete empirical
    interpolation", SIAM J. Sci. Comput. 32:2737.
    """
    rank, count = directions.shape
    some = np.arange(count)
    if count > REACHED * rank:
        reach = np.square(np.abs(directions)).sum(axis=0)
        some = np.sort(np.argpartition(reach, -REACHED * rank)[-REACHED * rank :])
    picked = np.zeros(rank, np.int64)
    blocks.pick_columns(np.ascontiguousarray(directions[:, some]), picked)
    picked = some[picked]
    try:
        rows = np.linalg.solve(directions[:, picked], directions)
    except np.linalg.LinAlgError:
        return picked[:0], directions[:0]
    if not np.abs(rows).max() <= MOST_SPREAD:
        return picked[:0], directions[:0]
    return picked, rows
