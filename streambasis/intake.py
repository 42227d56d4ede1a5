"""Samples on their way into a principal subspace: scored at once, folded block by block."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.decisions import Scores
from streambasis.errors import NumericalError, SnapshotError
from streambasis.folding import Subspace
from streambasis.gaps import Gaps
from streambasis.inner import Inner
from streambasis.kernels import principal as kernels
from streambasis.measuring import Block, times_power
from streambasis.principal_settings import RULES, Settings
from streambasis.state import State, owned

FIRST_BLOCK = 16


class Intake:
    """A subspace, the block that waits to be folded into it, and the rank as of the last fold.

    Parameters
    ----------
    inner : Inner
        The inner product; all samples come in entered.
    count : int
        Number of channels n.
    settings : Settings
        What was asked for.
    centred : bool
        Whether a running mean is kept.
    dtype : numpy.dtype
        Type of the samples.

    Notes
    -----
    Folds come at fixed numbers of samples however these arrive, and compute from the samples of
    the block alone: pushing singly and in batches leaves the same basis bit for bit.
    """

    __slots__ = ("block", "core", "gaps", "header", "noise", "settings", "spreads", "work")

    def __init__(
        self, inner: Inner, count: int, settings: Settings, centred: bool, dtype: np.dtype[Any]
    ) -> None:
        self.settings = settings
        self.core = Subspace(count, settings.limit, settings.block, settings.forget, centred, dtype)
        self.gaps = Gaps(inner, count, dtype)
        self.block = np.zeros((settings.block, count), dtype)
        self.header = np.zeros(kernels.HEADER, np.int64)
        self.header[kernels.CENTRED] = centred
        self.work = (np.zeros(count, dtype), np.zeros(settings.most, dtype))
        self.settle()

    @property
    def count(self) -> int:
        """Samples seen."""
        return int(self.header[kernels.COUNT])

    @property
    def rank(self) -> int:
        """Directions reported."""
        return int(self.header[kernels.RANK])

    @property
    def directions(self) -> NDArray[Any]:
        """The directions reported as rows, (rank, n), a view."""
        return self.core.stack[: self.rank]

    @property
    def nbytes(self) -> int:
        """Bytes of all arrays."""
        own = (self.block, self.spreads, self.header, *self.work)
        return sum(array.nbytes for array in own) + self.core.nbytes

    def push(self, sample: NDArray[Any]) -> tuple[int, float, float, float, float, int, int]:
        """Score one sample and take it; the last number is that of a bad value's channel, or -1."""
        core = self.core
        scored: tuple[int, float, float, float, float, int, int]
        scored = kernels.push_principal(
            sample, core.mean, core.directions, self.spreads, self.header, *self.work, self.block
        )
        if self.header[kernels.FILL] == self.header[kernels.DUE]:
            self.fold()
        return scored

    def take(self, entered: NDArray[Any], gaps: NDArray[np.bool_] | None, *, fold: bool) -> Scores:
        """Score samples, (m, n), and take them too where ``fold`` says so.

        Parameters
        ----------
        entered : ndarray, shape (m, n)
            Finite samples in Euclidean coordinates, entered with zeros in their gaps.
        gaps : ndarray of bool, shape (m, n), or None
            Which channels are missing; None where none is.
        """
        m = len(entered)
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
            room = int(self.header[kernels.DUE] - self.header[kernels.FILL])
            rows = slice(start, min(start + (room if fold else len(self.block)), m))
            piece = entered[rows]
            out.rank[rows] = self.rank
            if gaps is not None and gaps[rows].any():
                filled, known = self._fill_gaps(piece, gaps[rows], out, rows)
                piece, measured = filled[known], None
            else:
                measured = self._score(piece, out, rows)
            if fold:
                self.header[kernels.COUNT] += rows.stop - rows.start
                self._append(piece, measured)
            start = rows.stop
        return out

    def take_unscored(self, entered: NDArray[Any]) -> None:
        """Take finite samples in Euclidean coordinates, (m, n), without scoring them."""
        start = 0
        while start < len(entered):
            room = int(self.header[kernels.DUE] - self.header[kernels.FILL])
            piece = entered[start : start + room]
            self.header[kernels.COUNT] += len(piece)
            self._append(piece, None)
            start += len(piece)

    def _append(self, piece: NDArray[Any], measured: Block | None) -> None:
        """Put rows into the block, which has room for them, and fold it when it is full."""
        due = int(self.header[kernels.DUE])
        if len(piece) == due:
            self.fold(piece, measured)
            return
        fill = int(self.header[kernels.FILL])
        self.block[fill : fill + len(piece)] = piece
        self.header[kernels.FILL] = fill + len(piece)
        if fill + len(piece) == due:
            self.fold()

    def _score(
        self, piece: NDArray[Any], out: Scores, rows: slice | NDArray[np.int64]
    ) -> Block | None:
        """Score complete rows; return them as measured where the fold may use that again."""
        core = self.core
        if core.exponent == 0:
            block = core.measure(piece)
        else:
            with np.errstate(over="ignore", under="ignore"):
                # samples far from the unit leave the range here, and are then not in reach
                block = core.measure(times_power(piece, -core.exponent))
        if block is None:
            scored = [
                kernels.score_sample(
                    row, core.mean, core.directions, self.spreads, self.header, *self.work
                )
                for row in piece
            ]
            norms, residuals, spes, t2s, _ = np.array(scored).T
            _write(out, rows, norms, residuals, spes, t2s)
            return None
        norms = np.sqrt(block.squares)
        residuals, spes, t2s = np.empty((3, len(piece)))
        kernels.score_rows(
            block.coordinates, self.spreads, self.rank, block.outside, residuals, spes, t2s
        )
        if core.exponent:
            with np.errstate(over="ignore", under="ignore"):
                norms, residuals = (np.ldexp(field, core.exponent) for field in (norms, residuals))
                spes = np.ldexp(spes, 2 * core.exponent)
        _write(out, rows, norms, residuals, spes, t2s)
        return block

    def _fill_gaps(
        self, piece: NDArray[Any], gaps: NDArray[np.bool_], out: Scores, rows: slice
    ) -> tuple[NDArray[Any], NDArray[np.bool_]]:
        """Score rows of which some have gaps; return them filled, and which are determined."""
        core = self.core
        filled, known = piece.copy(), np.ones(len(piece), np.bool_)
        expected = core.mean
        for group in self._alike(gaps):
            at, pattern = rows.start + group, gaps[group[0]]
            if not pattern.any():
                self._score(piece[group], out, at)
                continue
            if not core.weight:
                # nothing is known yet: expect what this first block has shown so far
                waiting = self.block[: int(self.header[kernels.FILL])]
                earlier = np.concatenate([waiting, filled[: group[0]][known[: group[0]]]])
                expected = earlier.mean(axis=0) if len(earlier) else core.mean
            found = self.gaps.fill(piece[group], pattern, core.mean, self.directions, expected)
            if found is None:
                known[group] = False
                _write(out, at, *[np.full(len(group), np.nan)] * 4)
                continue
            filled[group], coordinates, norms, residuals = found
            ratios = np.ldexp(np.abs(coordinates) / self.spreads, -core.exponent)
            t2s = (ratios * ratios).sum(axis=1)
            _write(out, at, norms, residuals, residuals * residuals, t2s)
        return filled, known

    def _alike(self, gaps: NDArray[np.bool_]) -> list[NDArray[np.int64]]:
        """Return groups of row numbers with the same gaps; each row alone in the first block."""
        if not self.core.weight:
            return list(np.arange(len(gaps))[:, None])
        groups: dict[bytes, list[int]] = {}
        for i, row in enumerate(gaps):
            groups.setdefault(row.tobytes(), []).append(i)
        return [np.array(group) for group in groups.values()]

    def fold(self, rows: NDArray[Any] | None = None, measured: Block | None = None) -> None:
        """Fold rows, or what the block holds, and settle the rank."""
        if rows is None:
            rows = self.block[: int(self.header[kernels.FILL])]
        if not len(rows):
            return
        # whatever happens: a block that cannot be folded must not be in the way of the next
        self.header[kernels.FILL] = 0
        try:
            self.core.fold(rows, measured, self.rank)
        except NumericalError as error:
            raise NumericalError(
                f"the {len(rows)} samples up to number {self.count - 1} are left out of the "
                f"basis, which goes on without them: {error}"
            ) from error
        self.header[kernels.FOLDED] += len(rows)
        self.settle()

    def absorb(self, other: Intake) -> None:
        """Take over what another has seen, as if its samples had followed."""
        self.fold()
        other.fold()
        folded = int(other.header[kernels.FOLDED])
        self.core.absorb(other.core, folded)
        self.header[kernels.FOLDED] += folded
        self.header[kernels.COUNT] += other.count
        self.settle()

    def settle(self) -> None:
        """Apply the rank rule to the spectrum as it stands, and say when the next fold is due."""
        settings, core = self.settings, self.core
        due = settings.block
        if settings.growing:
            due = min(due, max(FIRST_BLOCK, int(self.header[kernels.FOLDED])))
        self.header[kernels.DUE] = due
        spectrum = core.spectrum()
        if isinstance(settings.rule, int):
            rank = min(settings.rule, len(spectrum.energies))
        else:
            rank = RULES[settings.rule](spectrum, settings.most)
        self.header[kernels.RANK] = rank
        self.header[kernels.EXPONENT] = core.exponent
        self.spreads = core.spreads(rank)
        try:
            self.noise = math.ldexp(spectrum.noise(rank), 2 * core.exponent)
        except OverflowError:
            self.noise = math.inf

    def to_state(self) -> tuple[dict[str, Any], dict[str, NDArray[Any]], State]:
        """Hand over facts, arrays and the state of the subspace."""
        settings = self.settings
        facts = {
            "rank": settings.rule,
            "max_rank": settings.most,
            "forget": settings.forget,
            "limit": settings.limit,
            "block": settings.block,
            "growing": settings.growing,
            "centre": self.core.centred,
            "count": self.count,
            "folded": int(self.header[kernels.FOLDED]),
        }
        waiting = owned(self.block[: int(self.header[kernels.FILL])])
        return facts, {"block": waiting}, self.core.to_state()

    def set_state(self, state: State) -> None:
        """Take over a state made with the same settings."""
        facts = state.facts
        self.core.set_state(state.parts["core"])
        waiting = state.take("block", self.block.dtype, (None, self.block.shape[1]), finite=True)
        if not len(waiting) < len(self.block) or not len(waiting) <= facts["count"]:
            raise SnapshotError(
                f"{len(waiting)} of {facts['count']} samples wait for a block of "
                f"{len(self.block)} to fill"
            )
        self.block[: len(waiting)] = waiting
        self.header[kernels.FILL] = len(waiting)
        self.header[kernels.COUNT] = facts["count"]
        self.header[kernels.FOLDED] = facts["folded"]
        self.settle()


def _write(out: Scores, rows: slice | NDArray[np.int64], *fields: NDArray[np.float64]) -> None:
    """Write norms, residuals, squared prediction errors and T² of some rows."""
    for column, values in zip((out.norm, out.residual, out.spe, out.t2), fields, strict=True):
        column[rows] = values
