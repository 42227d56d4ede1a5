"""The basis over a sliding window: its arrays, its clock, and what is done between kernels."""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.decisions import Decisions, reason_names
from streambasis.errors import SampleError, SnapshotError, UnknownSampleError
from streambasis.kernels import exchange, growth
from streambasis.kernels import window as kernels
from streambasis.kernels._jit import entry
from streambasis.memory import aligned_zeros, mapped_zeros
from streambasis.projecting import shift_entries
from streambasis.state import State, owned
from streambasis.times import EARLIEST, many_nanoseconds, nanoseconds, shown

FIRST_ROWS = 8
FIRST_SLOTS = 64
FIRST_BLOCK, LEAST_BLOCK, MOST_BLOCK = 64, 8, 256
BLOCK_VALUES = 1 << 18
"""A block of a batch holds at most this many values, so that its copies stay small."""
RENEWAL_COLUMNS = 1024
"""Renewal works on this many channels at a time, so that it needs no second copy of V."""


class Window:
    """The arrays of a basis over a window, in Euclidean coordinates.

    Parameters
    ----------
    count : int
        Channels.
    capacity : int
        Most directions kept.
    rtol, atol : float
        The tolerance of a sample is ``max(atol, rtol·|sample|)``.
    policy : int
        Reorthogonalization policy of :mod:`streambasis.kernels.growth`.
    dtype : numpy.dtype
        One of the four.
    window : int or None
        Samples kept; None where only the span limits them.
    span : int or None
        Nanoseconds kept: a sample leaves when its time is at or before the newest time less this.

    Notes
    -----
    Memory: V (k, n), the coordinates of every sample in the window (W, k), the factorized block of
    the pivot samples (2, k, k), and 88 bytes a sample. Rows and slots are allocated as they are
    needed, at most doubling, up to the capacity and the window; they are not given back. Without
    ``window`` they grow to what the span holds. Samples that the capacity leaves uncovered are
    kept in full, n values each, because their place in the basis cannot be had otherwise.
    """

    __slots__ = (
        "_coordinates",
        "_directions",
        "_integers",
        "_members",
        "_pool",
        "_reals",
        "_scratch",
        "_sizes",
        "_small",
        "_span",
        "arrays",
        "step",
        "timed",
    )

    def __init__(
        self,
        count: int,
        capacity: int,
        rtol: float,
        atol: float,
        policy: int,
        dtype: np.dtype[Any],
        window: int | None,
        span: int | None,
    ) -> None:
        self.timed = span is not None
        self._span = span
        rows, slots = min(FIRST_ROWS, capacity), min(FIRST_SLOTS, window or FIRST_SLOTS)
        integers = np.zeros(exchange.HEADER + rows, np.int64)
        integers[growth.CAPACITY] = capacity
        integers[growth.POLICY] = policy
        integers[exchange.WINDOW] = window or 0
        integers[[exchange.OLDEST, exchange.NEWEST, exchange.FREE]] = exchange.NONE
        integers[exchange.HORIZON] = EARLIEST - 1
        self._integers = integers
        self._reals = np.array([rtol, atol, 0.0])
        self._scratch = aligned_zeros((2, count), dtype)
        self._directions = aligned_zeros((rows, count), dtype)
        self._small = aligned_zeros((2 * rows + exchange.WORK, rows), dtype)
        self._coordinates = aligned_zeros((slots, rows), dtype)
        self._members = np.zeros((slots, exchange.MEMBER), np.int64)
        self._sizes = np.zeros((slots, 3))
        self._pool = aligned_zeros((0, count), dtype)
        self._bind()

    def _bind(self) -> None:
        self.arrays = (
            self._scratch,
            self._small,
            self._directions,
            self._coordinates,
            self._members,
            self._sizes,
            self._pool,
            self._integers,
            self._reals,
        )
        sample = self._scratch[exchange.RESIDUAL]
        self.step = partial(entry(kernels.push_window, *self.arrays, sample), *self.arrays)

    @property
    def count(self) -> int:
        """Samples seen."""
        return int(self._integers[growth.COUNT])

    @property
    def rank(self) -> int:
        """Directions held."""
        return int(self._integers[growth.RANK])

    @property
    def capacity(self) -> int:
        """Most directions kept."""
        return int(self._integers[growth.CAPACITY])

    @property
    def version(self) -> tuple[int, int, int]:
        """What changes when a direction changes."""
        return self.rank, self.renewals, int(self._integers[exchange.WEAR])

    @property
    def uncovered(self) -> int:
        """Samples in the window that the capacity leaves uncovered."""
        return int(self._integers[growth.UNCOVERED])

    @property
    def live(self) -> int:
        """Samples in the window."""
        return int(self._integers[exchange.LIVE])

    @property
    def renewals(self) -> int:
        """How often the directions were re-orthonormalized."""
        return int(self._integers[growth.RENEWALS])

    @property
    def directions(self) -> NDArray[Any]:
        """The directions as rows, (rank, n), a view."""
        return self._directions[: self.rank]

    @property
    def pivots(self) -> NDArray[np.int64]:
        """Numbers of the pivot samples, one per direction."""
        numbers: NDArray[np.int64] = self._members[self._holders, exchange.ID]
        return numbers

    @property
    def _holders(self) -> NDArray[np.int64]:
        return self._integers[exchange.HEADER :][: self.rank]

    @property
    def _owners(self) -> NDArray[np.int64]:
        owners = self._integers[exchange.HEADER + len(self._directions) :]
        return owners[: self._integers[growth.UNCOVERED]]

    @property
    def _block(self) -> tuple[NDArray[Any], NDArray[Any]]:
        k, rows = self.rank, len(self._directions)
        return self._small[:k, :k], self._small[rows : rows + k, :k]

    @property
    def members(self) -> NDArray[np.int64]:
        """Numbers of the samples in the window, oldest first."""
        numbers = self._members[: self._integers[exchange.TOP], exchange.ID]
        return np.sort(numbers[numbers != exchange.NONE])

    @property
    def waiting(self) -> NDArray[np.int64]:
        """Numbers of the samples that the capacity leaves uncovered, oldest first."""
        return np.sort(self._members[self._owners, exchange.ID])

    @property
    def nbytes(self) -> int:
        """Bytes of all arrays."""
        return sum(array.nbytes for array in self.arrays)

    def make_room(self) -> None:
        """See to what the kernel asked for: more slots, rows or copies, or a renewal."""
        wanted = self._integers[exchange.WANTED]
        if wanted == exchange.RENEWAL:
            self.renew()
        elif wanted == exchange.SLOTS:
            window = int(self._integers[exchange.WINDOW])
            slots = 2 * len(self._members)
            self._allot_slots(min(slots, window) if window else slots)
        elif wanted == exchange.ROWS:
            rows = 2 * len(self._directions)
            self._allot_rows(min(rows, int(self._integers[growth.CAPACITY])))
        else:
            self._allot_copies(max(2 * len(self._pool), FIRST_ROWS))

    def _allot_rows(self, rows: int) -> None:
        slots, count = len(self._members), self._directions.shape[1]
        held = len(self._directions)
        small = aligned_zeros((2 * rows + exchange.WORK, rows), self._small.dtype)
        small[:held, :held] = self._small[:held]
        small[rows : rows + held, :held] = self._small[held : 2 * held]
        integers = np.zeros(len(self._integers) + rows - held, np.int64)
        integers[: exchange.HEADER + held] = self._integers[: exchange.HEADER + held]
        integers[exchange.HEADER + rows :] = self._integers[exchange.HEADER + held :]
        directions = _enlarged(self._directions, (rows, count))
        self._coordinates = _enlarged(self._coordinates, (slots, rows))
        self._directions, self._small, self._integers = directions, small, integers
        self._bind()

    def _allot_slots(self, slots: int) -> None:
        coordinates = _enlarged(self._coordinates, (slots, self._coordinates.shape[1]))
        members = _enlarged(self._members, (slots, exchange.MEMBER))
        self._sizes = _enlarged(self._sizes, (slots, 3))
        self._coordinates, self._members = coordinates, members
        self._bind()

    def _allot_copies(self, copies: int) -> None:
        end = exchange.HEADER + len(self._directions)
        integers = _enlarged(self._integers, (end + copies,))
        self._pool = _enlarged(self._pool, (copies, self._directions.shape[1]))
        self._integers = integers
        self._bind()

    def stamp(self, at: Any) -> None:
        """Set the clock to the time of the sample to come, None where it has none.

        Raises
        ------
        SampleError
            If the time runs backwards, is missing while there is a span, or some samples have a
            time and others have none; the sample must not be taken then.
        """
        now = None if at is None else nanoseconds(at)
        self._check_timed(now is not None)
        integers = self._integers
        if now is None:
            # a sample that was refused may have left its time
            integers[exchange.NOW : exchange.TIMED + 1] = 0, EARLIEST - 1, 0
            return
        if integers[exchange.STAMPED] and now < integers[exchange.LAST]:
            raise _backwards(self.count, now, int(integers[exchange.LAST]), at)
        integers[exchange.NOW : exchange.TIMED + 1] = now, self._horizon(now), 1
        self.timed = True

    def _check_timed(self, timed: bool) -> None:
        if self._span is not None and not timed:
            raise SampleError(
                f"sample {self.count}: a basis with span= needs the time of every sample; give at="
            )
        if self.count and timed != bool(self._integers[exchange.STAMPED]):
            this, others = ("a time", "none") if timed else ("no time", "one")
            raise SampleError(
                f"sample {self.count} has {this}, the samples before it have {others}: "
                "give at= for all samples or for none"
            )

    def _horizon(self, now: int) -> int:
        return EARLIEST - 1 if self._span is None else max(now - self._span, EARLIEST - 1)

    def _clocks(self, at: Any, count: int) -> NDArray[np.int64]:
        clocks = np.zeros((count, 3), np.int64)
        clocks[:, 1] = EARLIEST - 1
        if count == 0:
            return clocks
        self._check_timed(at is not None)
        if at is None:
            return clocks
        times = many_nanoseconds(at, count)
        first = self._integers[exchange.LAST] if self._integers[exchange.STAMPED] else times[0]
        before = np.concatenate([[first], times[:-1]])
        if (times < before).any():
            row = int((times < before).argmax())
            like = np.asarray(at)[row]
            raise _backwards(self.count + row, int(times[row]), int(before[row]), like)
        self.timed = True
        clocks[:, 0] = times
        clocks[:, 2] = 1
        if self._span is not None:
            # no wrap-around: times below the earliest plus the span have nothing before them
            far = times >= EARLIEST + self._span
            clocks[far, 1] = times[far] - self._span
        return clocks

    def push_block(self, samples: NDArray[Any], at: Any = None) -> Decisions:
        """Take Euclidean samples that are known to be finite, (m, n), one after another.

        While the basis does not change, whole blocks are projected by two matrix products; a
        sample that changes it is pushed by itself. The block grows again as samples are covered.
        """
        count = len(samples)
        clocks = self._clocks(at, count)
        first = self.count
        records = np.empty((count, 3))
        reasons = np.empty((count, 4), np.int64)
        grew = np.zeros(count, np.bool_)
        passes = np.ones(count, np.int64)
        most = max(LEAST_BLOCK, min(MOST_BLOCK, BLOCK_VALUES // samples.shape[1]))
        row, size = 0, FIRST_BLOCK
        while row < count:
            taken = 0
            if size >= LEAST_BLOCK:
                end = min(row + min(size, most), count)
                taken = self._push_covered(
                    samples[row:end], clocks[row:end], records[row:end], reasons[row:end]
                )
                row += taken
                if row == end:
                    size *= 2
                    continue
            self._integers[exchange.NOW : exchange.TIMED + 1] = clocks[row]
            answer = self.step(samples[row])
            while answer[5] == growth.NEEDS_ROOM:
                self.make_room()
                answer = self.step(samples[row])
            records[row] = answer[1:4]
            grew[row], passes[row] = answer[4], answer[7]
            reasons[row] = answer[5], answer[6], answer[8], answer[9]
            row += 1
            changed = answer[4] or answer[9]
            size = taken if taken or changed else 2 * size + 1
        norm, residual, tolerance = records.T.copy()
        reason, rank, expired, dropped = reasons.T.copy()
        return Decisions(
            np.arange(first, first + count),
            norm,
            residual,
            tolerance,
            grew,
            reason_names(reason),
            rank,
            passes,
            expired,
            dropped,
        )

    def _push_covered(
        self,
        samples: NDArray[Any],
        clocks: NDArray[np.int64],
        records: NDArray[np.float64],
        reasons: NDArray[np.int64],
    ) -> int:
        count = len(samples)
        scaled = np.empty_like(samples)
        exponents = np.empty(count, np.int64)
        lengths = np.empty(count)
        kernels.scale_rows(samples, scaled, exponents, lengths)
        coefficients = scaled @ self.directions.conj().T
        scaled -= coefficients @ self.directions
        taken: int = kernels.push_covered(
            *self.arrays, (coefficients, scaled), (exponents, lengths), clocks, records, reasons
        )
        return taken

    def retract(self, number: int) -> int:
        """Take one sample out of the window; return how many directions went with it.

        Raises
        ------
        UnknownSampleError
            If no sample of this number is in the window.
        """
        gone = 0 <= number < self.count
        slot = kernels.find(number, self._members, self._integers) if gone else exchange.NONE
        if slot == exchange.NONE:
            raise UnknownSampleError(
                f"sample {number} has already left the window"
                if gone
                else f"sample {number} was never given out; {self.count} samples were pushed"
            )
        return self._forget(int(slot), 0)[1]

    def expire(self, before: Any) -> tuple[int, int]:
        """Take out all samples stamped before a time; return how many, and how many directions.

        Raises
        ------
        SampleError
            If the samples have no times.
        """
        horizon = nanoseconds(before) - 1
        if self.live and not self._integers[exchange.STAMPED]:
            raise SampleError(
                "expire: the samples of this window have no times; push them with at="
            )
        return self._forget(exchange.NONE, horizon)

    def _forget(self, slot: int, horizon: int) -> tuple[int, int]:
        expired, dropped = kernels.forget(*self.arrays, slot, horizon)
        return int(expired), int(dropped)

    def renew(self) -> None:
        """Re-orthonormalize the directions and factorize the block of the pivot samples afresh.

        Notes
        -----
        One Newton-Schulz step, V - (V Vᴴ - I)V/2: the nearest orthonormal rows up to the square of
        the defect (Björck & Bowie 1971, SIAM J. Numer. Anal. 8:358), two matrix products of
        2·k²·n flops each. It takes out the symmetric part of what rounding did to V; the
        coordinates belong to the V without it and stay.
        """
        directions = self.directions
        k = len(directions)
        wide = np.dtype(np.complex128 if directions.dtype.kind == "c" else np.float64)
        parts = [
            slice(i, i + RENEWAL_COLUMNS) for i in range(0, directions.shape[1], RENEWAL_COLUMNS)
        ]
        defect: NDArray[Any] = -np.eye(k, dtype=wide)
        for part in parts:
            columns = directions[:, part].astype(wide)
            defect += columns @ columns.conj().T
        for part in parts:
            columns = directions[:, part].astype(wide)
            directions[:, part] = columns - 0.5 * (defect @ columns)
        integers = self._integers
        if not integers[exchange.VACANT]:
            orthogonal, triangular = np.linalg.qr(self._coordinates[self._holders, :k].T)
            q, r = self._block
            q[:], r[:] = orthogonal.T, triangular
        integers[exchange.WEAR] = 0
        integers[growth.RENEWALS] += 1

    @property
    def coverage(self) -> float:
        """Largest residual of a covered sample over its tolerance, what drops added included."""
        top = self._integers[exchange.TOP]
        held = (self._members[:top, exchange.ID] != exchange.NONE) & (
            self._members[:top, exchange.PLACE] == exchange.NONE
        )
        tolerance = self._sizes[:top, exchange.TOLERANCE][held]
        lost = self._sizes[:top, exchange.LOST][held]
        ratio = np.divide(lost, tolerance, out=np.zeros(len(lost)), where=lost > 0)
        return float(ratio.max(initial=0.0))

    @property
    def factor(self) -> NDArray[Any]:
        """A lower triangular factor of the coordinates of the pivot samples as rows, a view."""
        return self._block[1].T

    def weights(self, coordinates: NDArray[Any], powers: NDArray[np.int64]) -> NDArray[Any]:
        """Return the combinations of pivot samples with these coordinates times 2**powers, (m, k).

        A pivot sample may lie outside the span by up to its tolerance, which the combination then
        differs by, times its weight.
        """
        rotated = coordinates @ self._block[0].conj().T
        growth.solve_rows(np.ascontiguousarray(self.factor), self.rank, rotated)
        exponents = self._members[self._holders, exchange.EXPONENT]
        return shift_entries(rotated, powers[:, None] - exponents)

    def to_state(self) -> State:
        """Hand over the arrays as far as they are in use."""
        k, top = self.rank, int(self._integers[exchange.TOP])
        q, r = self._block
        chain = _chain(self._members[:top])
        stamped = chain if self._integers[exchange.STAMPED] else chain[:0]
        return State(
            "Window",
            arrays={
                "vectors": owned(self.directions),
                # these three are for readers of a snapshot; they follow from the others
                "pivots": self.pivots,
                "samples": self._members[chain, exchange.ID],
                "times": self._members[stamped, exchange.TIME],
                "orthogonal": owned(q),
                "triangular": owned(r),
                "holders": owned(self._holders),
                "coordinates": owned(self._coordinates[:top, :k]),
                "members": owned(self._members[:top]),
                "sizes": owned(self._sizes[:top]),
                "uncovered": owned(self._pool[: len(self._owners)]),
                "owners": owned(self._owners),
                "header": owned(self._integers[: exchange.KEPT]),
                "reals": owned(self._reals),
            },
        )

    def set_state(self, state: State) -> None:
        """Take over the arrays of a state made with the same channels and dtype.

        Raises
        ------
        SnapshotError
            If they do not fit each other.
        """
        dtype, channels = self._directions.dtype, self._directions.shape[1]
        header = state.take("header", np.int64, (exchange.KEPT,))
        k, top, uncovered = (int(header[i]) for i in (growth.RANK, exchange.TOP, growth.UNCOVERED))
        vectors = state.take("vectors", dtype, (k, channels))
        orthogonal = state.take("orthogonal", dtype, (k, k))
        triangular = state.take("triangular", dtype, (k, k))
        holders = state.take("holders", np.int64, (k,))
        coordinates = state.take("coordinates", dtype, (top, k))
        members = state.take("members", np.int64, (top, exchange.MEMBER))
        sizes = state.take("sizes", np.float64, (top, 3))
        pool = state.take("uncovered", dtype, (uncovered, channels))
        owners = state.take("owners", np.int64, (uncovered,))
        state.take("pivots", np.int64, (k,))
        live = len(state.take("samples", np.int64, (int(header[exchange.LIVE]),)))
        state.take("times", np.int64, (live if header[exchange.STAMPED] else 0,))
        reals = state.take("reals", np.float64, self._reals.shape, finite=True)
        slots = [header[[exchange.OLDEST, exchange.NEWEST, exchange.FREE]], holders, owners]
        slots += [members[:, exchange.OLDER], members[:, exchange.NEWER]]
        places = members[:, exchange.PLACE]
        if (
            any(((each < exchange.NONE) | (each >= top)).any() for each in slots)
            or ((places < exchange.NONE) | (places >= uncovered)).any()
            or not k <= header[growth.CAPACITY] <= channels
            or not _linked(header, members)
        ):
            raise SnapshotError(
                f"a window of {header[exchange.LIVE]} samples on {channels} channels, {k} "
                "directions: its parts do not fit each other"
            )
        self._integers[: exchange.KEPT] = header
        self._reals = reals
        self.timed = self._span is not None or bool(header[exchange.STAMPED])
        # an uncovered sample means that the rows have once reached the capacity
        rows = int(header[growth.CAPACITY]) if uncovered else k
        self._allot_rows(max(rows, len(self._directions)))
        self._allot_slots(max(top, len(self._members)))
        self._allot_copies(uncovered)
        q, r = self._block
        self.directions[:], q[:], r[:] = vectors, orthogonal, triangular
        self._holders[:], self._owners[:] = holders, owners
        self._coordinates[:top, :k] = coordinates
        self._members[:top], self._sizes[:top] = members, sizes
        self._pool[:] = pool


def _chain(members: NDArray[np.int64]) -> NDArray[np.intp]:
    """Return the slots in use, oldest sample first."""
    used = np.flatnonzero(members[:, exchange.ID] != exchange.NONE)
    return used[np.argsort(members[used, exchange.ID], kind="stable")]


def _linked(header: NDArray[np.int64], members: NDArray[np.int64]) -> bool:
    """Return whether the links lead from the oldest to the newest sample, and over free slots."""
    chain = _chain(members)
    free = np.flatnonzero(members[:, exchange.ID] == exchange.NONE)
    around = np.pad(chain, 1, constant_values=exchange.NONE)
    # each free slot is led to by exactly one other or by the header, the last one leads nowhere
    leads = np.concatenate([header[[exchange.FREE]], members[free, exchange.NEWER]])
    return bool(
        header[exchange.LIVE] == len(chain)
        and header[exchange.OLDEST] == around[1]
        and header[exchange.NEWEST] == around[-2]
        and (members[chain, exchange.OLDER] == around[:-2]).all()
        and (members[chain, exchange.NEWER] == around[2:]).all()
        and (np.sort(leads) == np.concatenate([[exchange.NONE], free])).all()
    )


def _enlarged(array: NDArray[Any], shape: tuple[int, ...]) -> NDArray[Any]:
    out = mapped_zeros(shape, array.dtype)
    out[tuple(slice(extent) for extent in array.shape)] = array
    return out


def _backwards(number: int, now: int, last: int, like: Any) -> SampleError:
    return SampleError(
        f"sample {number}: its time {shown(now, like)} is before {shown(last, like)}, the time of "
        "the sample before it; nothing was taken"
    )
