"""The principal subspace in Euclidean coordinates, and how a block of samples is folded into it.

The subspace stands for a matrix diag(s)·U whose scatter is that of all samples so far, weighted
and, where a mean is kept, taken about it. Folding stacks the weighted samples of a block below
it and takes the leading singular vectors again: exactly, through a core matrix that is as small
as the directions held and the block together (:mod:`streambasis.turning`), or in one pass over
the block where that is as good (:mod:`streambasis.one_pass`).
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.errors import SnapshotError
from streambasis.kernels import principal as kernels
from streambasis.measuring import Block, measure, times_power
from streambasis.one_pass import NEWCOMERS, one_pass_turn
from streambasis.ranks import Spectrum
from streambasis.state import State, owned
from streambasis.turning import Stack, Turn, exact_turn, renew
from streambasis.weighing import Weights

ROUNDING_FLOOR = 16.0
"""A residual below this many machine epsilons of its sample is rounding: projecting by matrix
products leaves a dependent sample with one or a few epsilons."""
REACH = 400
"""Powers of two that squares may be away from 1 before the unit is moved: LAPACK then never scales
a matrix by factors of its own, which are no powers of two."""
LEAST_PIECE, LARGEST_PIECE = 16, 96
"""Samples folded at a time where the fold is exact: near the directions held they cost least."""
SUSPECT = 1e-6
"""Part in the first direction below which a channel may be silent."""
COLUMNS = 1024
"""Channels turned at a time, which bounds the workspace of a turn."""


class Subspace:
    """The arrays of a principal subspace, and the fold.

    Parameters
    ----------
    count : int
        Number of channels n.
    limit : int
        Most directions held.
    block : int
        Most samples of one fold.
    forget : float
        Forgetting factor: the weight of a sample falls by it with each later sample.
    centred : bool
        Whether a running mean is kept and the scatter taken about it.
    dtype : numpy.dtype
        Type of samples and directions. The core is computed in double precision for all.

    Notes
    -----
    Singular values, ``outside`` and ``power`` are held in units of 2**exponent, which is 1
    unless the samples are so large or small that their squares leave the range of the type.

    A fold computes everything it changes before it changes anything.

    References
    ----------
    A. Levy and M. Lindenbaum (2000), Sequential Karhunen-Loeve basis extraction, IEEE Trans.
    Image Processing 9. M. Brand (2006), Fast low-rank modifications of the thin singular value
    decomposition, Linear Algebra and its Applications 415.
    """

    __slots__ = (
        "centred",
        "coefficients",
        "exponent",
        "forget",
        "held",
        "limit",
        "mean",
        "outside",
        "piece",
        "power",
        "renewals",
        "residual",
        "rounding",
        "safe",
        "singular",
        "stack",
        "tiny",
        "weight",
        "weight_squares",
    )

    def __init__(
        self,
        count: int,
        limit: int,
        block: int,
        forget: float,
        centred: bool,
        dtype: np.dtype[Any],
    ) -> None:
        self.limit, self.forget, self.centred = limit, forget, centred
        self.piece = min(block, max(LEAST_PIECE, min(limit, LARGEST_PIECE)))
        # the directions, then what a fold puts below them
        room = self.piece if limit == count else max(self.piece, limit + 2 * NEWCOMERS)
        self.stack = np.zeros((limit + room, count), dtype)
        self.held = 0
        self.singular = np.zeros(0)
        self.mean = np.zeros(count, dtype)
        self.weight = self.weight_squares = 0.0
        self.outside = self.power = 0.0
        self.exponent = self.renewals = 0
        self.residual = np.zeros(count, dtype)
        self.coefficients = np.zeros(limit + room, dtype)
        real = np.finfo(dtype)
        reach = 2.0 ** min(0.8 * real.maxexp, REACH)
        self.safe = (1.0 / reach, reach)
        self.tiny = float(real.tiny)
        self.rounding = ROUNDING_FLOOR * float(real.eps)

    @property
    def directions(self) -> NDArray[Any]:
        """The directions as rows, (held, n), a view."""
        return self.stack[: self.held]

    @property
    def nbytes(self) -> int:
        """Bytes of all arrays."""
        arrays = (self.singular, self.mean, self.stack, self.residual, self.coefficients)
        return sum(array.nbytes for array in arrays)

    @property
    def effective(self) -> float:
        """Effective number of samples, (Σw)²/Σw², less one where a mean is kept."""
        if self.weight_squares == 0.0:
            return 0.0
        return self.weight**2 / self.weight_squares - (1.0 if self.centred else 0.0)

    def spectrum(self) -> Spectrum:
        """Return what the rank rules read, in units of 4**exponent."""
        weight = self.weight or 1.0
        return Spectrum(
            self.singular**2 / weight,
            self.outside / weight,
            self._alive(),
            self.effective,
            self.stack.dtype.kind == "c",
        )

    def _alive(self) -> int:
        """Return the number of channels that show more than rounding: those that carry noise."""
        count = int(self.stack.shape[1])
        if not self.held:
            return count
        # a channel that has a part in the first direction needs no closer look
        if kernels.least_magnitude(self.stack[0]) >= SUSPECT:
            return count
        suspects = np.flatnonzero(np.abs(self.stack[0]) < SUSPECT)
        parts = self.singular[:, None] * np.abs(self.directions[:, suspects])
        levels = np.sqrt((parts * parts).sum(axis=0))
        silent = levels <= self.rounding * math.sqrt(self.power)
        return max(count - int(np.count_nonzero(silent)), self.held)

    def spreads(self, rank: int) -> NDArray[np.float64]:
        """Return the standard deviations along the first directions, in units of 2**exponent."""
        return self.singular[:rank] / math.sqrt(self.weight or 1.0)

    def measure(self, samples: NDArray[Any]) -> Block | None:
        """Return samples, (m, n), in units of 2**exponent, as measured against the directions.

        None where squares are near the end of the range.
        """
        deviations, squares = self._deviations(samples), np.empty(len(samples))
        if kernels.row_squares(deviations, *self.safe, squares) == kernels.UNUSUAL:
            return None
        return measure(deviations, squares, self.directions)

    def _measure_any(self, samples: NDArray[Any]) -> Block:
        """Return the same where squares have the range that the unit was chosen for."""
        deviations, squares = self._deviations(samples), np.empty(len(samples))
        kernels.row_squares(deviations, 0.0, np.inf, squares)
        return measure(deviations, squares, self.directions)

    def _deviations(self, samples: NDArray[Any]) -> NDArray[Any]:
        return samples - times_power(self.mean, -self.exponent) if self.centred else samples

    def fold(self, samples: NDArray[Any], measured: Block | None, reported: int) -> None:
        """Fold samples, (m, n), into the subspace.

        Parameters
        ----------
        samples : ndarray, shape (m, n)
            Finite samples in Euclidean coordinates, oldest first.
        measured : Block, optional
            What :meth:`measure` has just returned for the same samples.
        reported : int
            How many of the directions are asked for.

        Raises
        ------
        NumericalError
            If the core has no singular values, which finite samples do not bring about. What was
            folded by then stays; nothing of the rest has left a trace.

        Notes
        -----
        For m samples, k directions held and n channels: 4n·k·m + 10n·k² flops in one pass; exactly
        2n(2km + m² + k(k + m) + 2k²) in matrix products and about 10(k + m)³ in the core.
        """
        before = self.exponent
        squares, status = np.empty(len(samples)), kernels.USUAL
        if measured is None or self.centred or before != 0:
            status = kernels.row_squares(samples, *self.safe, squares)
        else:
            squares = measured.squares
        self._fit_exponent(samples, status)
        if self.exponent != 0:
            samples = times_power(samples, -self.exponent)
            kernels.row_squares(samples, 0.0, np.inf, squares)
        if measured is None or self.exponent != before:
            measured = self._measure_any(samples)
        if self.centred:
            # a difference is as uncertain as the larger of the two
            mean = times_power(self.mean, -self.exponent)
            squares += float(np.vdot(mean, mean).real)
        whole = self.limit == self.stack.shape[1]
        if self.held < self.limit or whole or not self._fold_at_once(measured, squares, reported):
            self._fold_exactly(samples, measured, squares)
        self._forget_the_vanished()

    def _fold_at_once(self, block: Block, squares: NDArray[np.float64], reported: int) -> bool:
        """Fold a block in one pass, or say that it takes an exact fold."""
        weights = Weights(len(squares), self.forget, self.weight, self.centred)
        turn = one_pass_turn(
            self._stack(),
            math.sqrt(weights.decay) * self.singular,
            block,
            weights,
            self.rounding * np.sqrt(squares),
            reported,
        )
        if turn is not None:
            self._turn(turn, weights, block.deviations, squares)
        return turn is not None

    def _fold_exactly(
        self, samples: NDArray[Any], block: Block, squares: NDArray[np.float64]
    ) -> None:
        """Fold samples piece by piece, each through its part outside the directions."""
        start = 0
        while start < len(samples):
            every = self.held == self.stack.shape[1]
            stop = len(samples) if every else min(start + self.piece, len(samples))
            if start or stop < len(samples):
                block = self._measure_any(samples[start:stop])
            self._fold_piece(block, squares[start:stop])
            start = stop

    def _fold_piece(self, block: Block, squares: NDArray[np.float64]) -> None:
        """Fold the samples of a block exactly."""
        weights = Weights(len(squares), self.forget, self.weight, self.centred)
        coordinates = block.coordinates
        rest = self.stack[self.held : self.held]
        if self.held < self.stack.shape[1]:
            rest = self.stack[self.held : self.held + len(squares)]
            np.matmul(coordinates, self.directions, out=rest)
            np.subtract(block.deviations, rest, out=rest)
            weights.apply(rest)
        wide = np.complex128 if coordinates.dtype.kind == "c" else np.float64
        turn = exact_turn(
            self._stack(),
            math.sqrt(weights.decay) * self.singular,
            weights.apply(coordinates.astype(wide)),
            rest,
            self.rounding * np.sqrt(weights.squares * squares),
            self.limit,
        )
        self._turn(turn, weights, block.deviations, squares)

    def _stack(self) -> Stack:
        return Stack(self.stack, self.held, self.residual, self.coefficients)

    def _turn(
        self,
        turn: Turn,
        weights: Weights,
        deviations: NDArray[Any],
        squares: NDArray[np.float64],
    ) -> None:
        """Take over a turn, and count its samples."""
        if self.centred:
            shift = weights.sum(deviations) / weights.total
            self.mean += times_power(shift.astype(self.mean.dtype), self.exponent)
            if self.forget < 1.0 and np.abs(self.mean).max() < self.tiny:
                # rounding would hold it at a subnormal number for ever
                self.mean[:] = 0
        self.weight = weights.total
        self.weight_squares *= weights.decay**2
        self.weight_squares += float(weights.squares @ weights.squares)
        self.power = weights.decay * self.power + float(weights.squares @ squares)
        self.outside *= weights.decay
        self._rotate(turn)

    def _rotate(self, turn: Turn) -> None:
        """Replace the directions by those of a turn, and cut what is beyond the limit."""
        singular = turn.singular
        floor = self.rounding * math.sqrt(self.power)
        keep = min(self.limit, int(np.count_nonzero(singular > floor)))
        self.outside += max(turn.missed + float(singular[keep:] @ singular[keep:]), 0.0)
        rotation = turn.rotation[:keep].astype(self.stack.dtype, copy=False)
        rows = self.stack[: rotation.shape[1]]
        for start in range(0, rows.shape[1], COLUMNS):
            columns = slice(start, start + COLUMNS)
            self.stack[:keep, columns] = rotation @ rows[:, columns]
        self.held, self.singular = keep, singular[:keep].copy()
        self.renewals += renew(self.directions)

    def absorb(self, other: Subspace, folded: int) -> None:
        """Add the scatter of a subspace whose ``folded`` samples followed those of this one.

        Notes
        -----
        The rows diag(s)·U of the other, and the difference of the means times √(Wa·Wb/W), stand
        for its samples.
        """
        if other.weight == 0.0:
            return
        decay = self.forget**folded
        before, added = decay * self.weight, other.weight
        total = before + added
        self._set_exponent(max(self.exponent, other.exponent) if before else other.exponent)
        down = other.exponent - self.exponent
        singular = np.ldexp(other.singular, down)
        rows = singular.astype(np.finfo(self.stack.dtype).dtype)[:, None] * other.directions
        squares = singular**2
        if self.centred:
            means = [times_power(part.mean, -self.exponent) for part in (self, other)]
            lever = math.sqrt(before * added / total)
            rows = np.concatenate([rows, (lever * (means[1] - means[0]))[None]])
            level = sum(float(np.linalg.norm(mean)) ** 2 for mean in means)
            squares = np.append(squares, lever**2 * level)
            self.mean += (added / total) * (other.mean - self.mean)
        self.weight = total
        self.weight_squares = decay**2 * self.weight_squares + other.weight_squares
        self.power = decay * self.power + math.ldexp(other.power, 2 * down)
        self.outside = decay * self.outside + math.ldexp(other.outside, 2 * down)
        self.renewals += other.renewals
        held, usual = self.held, self.stack
        self.stack = np.zeros((self.limit + len(rows), rows.shape[1]), rows.dtype)
        self.stack[:held] = usual[:held]
        coordinates = rows @ self.directions.conj().T
        rest = self.stack[held : held + (len(rows) if held < rows.shape[1] else 0)]
        if len(rest):
            np.subtract(rows, coordinates @ self.directions, out=rest)
        wide = np.complex128 if rows.dtype.kind == "c" else np.float64
        turn = exact_turn(
            Stack(self.stack, held, self.residual, np.zeros(len(self.stack), rows.dtype)),
            math.sqrt(decay) * self.singular,
            coordinates.astype(wide),
            rest,
            self.rounding * np.sqrt(squares),
            self.limit,
        )
        self._rotate(turn)
        usual[: self.held] = self.directions
        self.stack = usual

    def _fit_exponent(self, block: NDArray[Any], status: int) -> None:
        """Choose the unit so that neither the block nor the spectrum leaves the range."""
        top = float(self.singular[0]) if self.held else 0.0
        level = math.frexp(top)[1] + self.exponent if top else 0
        wanted = 0
        if status == kernels.UNUSUAL or abs(level) > math.frexp(self.safe[1])[1] // 2:
            largest = float(max(abs(block.real).max(), abs(block.imag).max()))
            levels = [level] if top else []
            wanted = max([*levels, math.frexp(largest)[1]] if largest else levels)
        self._set_exponent(wanted)

    def _set_exponent(self, wanted: int) -> None:
        """Hold the spectrum in units of 2**wanted."""
        change = self.exponent - wanted
        if change:
            self.singular = np.ldexp(self.singular, change)
            self.outside = math.ldexp(self.outside, 2 * change)
            self.power = math.ldexp(self.power, 2 * change)
            self.exponent = wanted

    def _forget_the_vanished(self) -> None:
        """Drop every direction once silence has brought them below the smallest number."""
        least = np.finfo(self.stack.dtype)
        if self.held and (
            math.frexp(self.singular[0])[1] + self.exponent < least.minexp - least.nmant
        ):
            self.held, self.singular = 0, self.singular[:0]
            self.outside = self.power = 0.0
            self.exponent = 0

    def to_state(self) -> State:
        """Hand over everything needed to go on."""
        with np.errstate(over="ignore"):
            # for readers of a snapshot; it follows from the others
            energies = np.ldexp(self.singular**2 / (self.weight or 1.0), 2 * self.exponent)
        return State(
            "Subspace",
            {"exponent": self.exponent, "renewals": self.renewals},
            {
                "vectors": owned(self.directions),
                "singular": owned(self.singular),
                "energies": energies,
                "mean": owned(self.mean),
                "sums": np.array([self.weight, self.weight_squares, self.outside, self.power]),
            },
        )

    def set_state(self, state: State) -> None:
        """Take over a state made with the same settings."""
        dtype, count = self.stack.dtype, self.stack.shape[1]
        directions = state.take("vectors", dtype, (None, count))
        if len(directions) > self.limit:
            raise SnapshotError(f"{len(directions)} directions where at most {self.limit} are held")
        singular = state.take("singular", np.float64, (len(directions),), finite=True)
        state.take("energies", np.float64, singular.shape)
        mean = state.take("mean", dtype, (count,), finite=True)
        sums = state.take("sums", np.float64, (4,), finite=True)
        if (sums < 0).any() or (singular < 0).any():
            raise SnapshotError("a weight, a sum of squares or a spread is negative")
        self.exponent, self.renewals = int(state.facts["exponent"]), int(state.facts["renewals"])
        self.held = len(directions)
        self.stack[: self.held] = directions
        self.singular, self.mean = singular, mean
        self.weight, self.weight_squares, self.outside, self.power = sums.tolist()
