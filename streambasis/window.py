"""The basis over a sliding window: what is done to it between kernels."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.decisions import Decisions, reason_names
from streambasis.errors import SampleError, UnknownSampleError
from streambasis.kernels import exchange, growth
from streambasis.kernels import window as kernels
from streambasis.projecting import shift_entries
from streambasis.times import nanoseconds
from streambasis.window_arrays import WindowArrays
from streambasis.window_clock import clock_of, clocks_of

FIRST_BLOCK, LEAST_BLOCK, MOST_BLOCK = 64, 8, 256
BLOCK_VALUES = 1 << 18
"""A block of a batch holds at most this many values, so that its copies stay small."""
RENEWAL_COLUMNS = 1024
"""Renewal works on this many channels at a time, so that it needs no second copy of V."""


class Window(WindowArrays):
    """A basis over a window, in Euclidean coordinates; see :class:`WindowArrays` for its making."""

    __slots__ = ()

    def stamp(self, at: Any) -> None:
        """Set the clock to the time of the sample to come, None where it has none.

        Raises
        ------
        SampleError
            If the sample must not be taken at that time; see :func:`clock_of`.
        """
        # also where it has none: a sample that was refused may have left its time
        self._integers[exchange.NOW : exchange.TIMED + 1] = clock_of(self._integers, self._span, at)
        self.timed = self.timed or at is not None

    def make_room(self) -> None:
        """See to what the kernel asked for: more room, or a renewal."""
        wanted = int(self._integers[exchange.WANTED])
        if wanted == exchange.RENEWAL:
            self.renew()
        else:
            self.allot(wanted)

    def push_block(
        self, samples: NDArray[Any], at: Any, alone: Callable[[int], NDArray[Any]]
    ) -> Decisions:
        """Take Euclidean samples that are known to be finite, (m, n), one after another.

        ``alone(row)`` is the sample of a row as :meth:`step` would have been given it.

        While the basis does not change, whole blocks are projected by two matrix products; a
        sample that changes it is pushed by itself. The block grows again as samples are covered.
        """
        count = len(samples)
        clocks = clocks_of(self._integers, self._span, at, count)
        self.timed = self.timed or (at is not None and count > 0)
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
            sample = alone(row)
            answer = self.step(sample)
            while answer[5] == growth.NEEDS_ROOM:
                self.make_room()
                answer = self.step(sample)
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
