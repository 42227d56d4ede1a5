"""The principal subspace in Euclidean coordinates, and how a block of samples is folded into it.

The subspace stands for a matrix diag(s)·U whose scatter is that of all samples so far, weighted
and, where a mean is kept, taken about it. Folding stacks the weighted samples of a block below
it and takes the singular value decomposition again, through a core matrix that is as small as
the directions held and the block together (Levy & Lindenbaum 2000; Brand 2006).
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.audit import LEAST_DIMENSION, unit_roundoff
from streambasis.core_svd import core_spectrum
from streambasis.errors import SnapshotError
from streambasis.kernels import principal as kernels
from streambasis.ranks import Spectrum
from streambasis.state import State, owned

ROUNDING_FLOOR = 16.0
"""A residual below this many machine epsilons of its sample is rounding: projecting by matrix
products leaves a dependent sample with one or a few epsilons."""
MOST_RENEWALS = 3
RENEWAL_LIMIT = 1.5
"""Loss of orthonormality, in units of the contract (which allows 3), at which the directions are
made orthonormal again."""
LEVEL_RANGE = 64
"""Powers of two from 1 within which a core is left as it is."""
SUSPECT = 1e-6
"""Part in the first direction below which a channel may be silent."""


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

    References
    ----------
    A. Levy and M. Lindenbaum (2000), Sequential Karhunen-Loeve basis extraction, IEEE Trans.
    Image Processing 9. M. Brand (2006), Fast low-rank modifications of the thin singular value
    decomposition, Linear Algebra and its Applications 415. D. A. Ross, J. Lim, R.-S. Lin and
    M.-H. Yang (2008), Incremental learning for robust visual tracking, Int. J. Computer Vision
    77.
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
        "power",
        "renewals",
        "residual",
        "roots",
        "safe",
        "singular",
        "stack",
        "typed_roots",
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
        # the directions, then room for the rows of a block outside them
        self.stack = np.zeros((limit + block, count), dtype)
        self.held = 0
        self.singular = np.zeros(0)
        self.mean = np.zeros(count, dtype)
        self.weight = self.weight_squares = 0.0
        self.outside = self.power = 0.0
        self.exponent = self.renewals = 0
        self._weigh(block)
        self.residual = np.zeros(count, dtype)
        self.coefficients = np.zeros(limit + block, dtype)
        reach = 2.0 ** (0.8 * np.finfo(dtype).maxexp)
        self.safe = (1.0 / reach, reach)

    @property
    def directions(self) -> NDArray[Any]:
        """The directions as rows, (held, n), a view."""
        return self.stack[: self.held]

    @property
    def nbytes(self) -> int:
        """Bytes of all arrays."""
        arrays = (
            self.singular,
            self.mean,
            self.stack,
            self.residual,
            self.coefficients,
            self.roots,
            self.typed_roots,
        )
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
        rounding = ROUNDING_FLOOR * float(np.finfo(self.stack.dtype).eps)
        silent = levels <= rounding * math.sqrt(self.power)
        return max(count - int(np.count_nonzero(silent)), self.held)

    def spreads(self, rank: int) -> NDArray[np.float64]:
        """Return the standard deviations along the first directions, in units of 2**exponent."""
        return self.singular[:rank] / math.sqrt(self.weight or 1.0)

    def split(self, deviations: NDArray[Any]) -> tuple[NDArray[Any], NDArray[Any]]:
        """Return coordinates along all directions held, and what lies outside, (m, n).

        What lies outside is a view of the workspace, valid until the next call; it has no rows
        where the directions span the whole space.
        """
        directions = self.directions
        coordinates = deviations @ directions.conj().T
        rest = self._room(len(deviations))
        if len(rest):
            np.matmul(coordinates, directions, out=rest)
            np.subtract(deviations, rest, out=rest)
        return coordinates, rest

    def _room(self, rows: int) -> NDArray[Any]:
        """Return the rows of the workspace for what lies outside the directions."""
        whole = self.held == self.stack.shape[1]
        return self.stack[self.held : self.held + (0 if whole else rows)]

    def fold(self, block: NDArray[Any], coordinates: NDArray[Any] | None = None) -> None:
        """Fold samples, (m, n), into the subspace.

        Parameters
        ----------
        block : ndarray, shape (m, n)
            Finite samples in Euclidean coordinates, oldest first.
        coordinates : ndarray, shape (m, held), optional
            What :meth:`split` has just returned for the same samples less the mean; its second
            result is then taken from the workspace.

        Notes
        -----
        For m samples, k directions held and n channels: 2n(2km + m² + k(k + m) + 2k²) flops in
        matrix products and about 10(k + m)³ in the core.
        """
        if len(block) != len(self.roots):
            self._weigh(len(block))
        roots, weights = self.roots, self.roots * self.roots
        decay = self.forget ** len(block)
        before, added = decay * self.weight, float(weights.sum())
        total = before + added

        squares = np.empty(len(block))
        status = kernels.row_squares(block, *self.safe, squares)
        self._fit_exponent(block, status)
        if self.exponent != 0:
            block = _times_power(block, -self.exponent)
            kernels.row_squares(block, 0.0, np.inf, squares)
        deviations = block
        if self.centred:
            mean = _times_power(self.mean, -self.exponent)
            deviations = block - mean
            # a difference is as uncertain as the larger of the two
            squares += float(np.linalg.norm(mean)) ** 2
        if coordinates is None or self.exponent != 0:
            coordinates, rest = self.split(deviations)
        else:
            rest = self._room(len(block))

        wide = np.complex128 if block.dtype.kind == "c" else np.float64
        coordinates = coordinates.astype(wide, copy=False)
        typed = self.typed_roots
        if self.forget < 1.0:
            coordinates *= roots[:, None]
            rest *= typed[: len(rest)]
        if self.centred:
            self._move_mean(deviations, coordinates, rest, before, added)
        self.weight = total
        self.weight_squares = decay**2 * self.weight_squares + float(weights @ weights)
        self.power = decay * self.power + float(weights @ squares)
        self.outside *= decay
        self._refactor(math.sqrt(decay), coordinates, rest, squares * weights)
        self._forget_the_vanished()

    def _move_mean(
        self,
        deviations: NDArray[Any],
        coordinates: NDArray[Any],
        rest: NDArray[Any],
        before: float,
        added: float,
    ) -> None:
        """Move the mean, and turn weighted rows about the old one into rows about the new one.

        Notes
        -----
        The scatter about the new mean is that about the old one less the mean shift, counted W
        times. With v the square roots of the weights this is the scatter of the weighted rows
        times I - g·vvᵀ, g = (1 - √(Wa/W))/Wb, where Wa, Wb and W are the weights before, of the
        block and after. (Ross et al. 2008 append the shift as one more row: the same scatter.)
        """
        roots, typed = self.roots, self.typed_roots
        total = before + added
        factor = (1.0 - math.sqrt(before / total)) / added
        coordinates -= (factor * roots)[:, None] * (roots @ coordinates)
        if len(rest):
            rest -= (factor * typed) * (typed.T @ rest)
        shift = (typed * typed).T @ deviations / total
        self.mean += _times_power(shift[0].astype(self.mean.dtype), self.exponent)
        if self.forget < 1.0 and np.abs(self.mean).max() < np.finfo(self.mean.dtype).tiny:
            # rounding would hold it at a subnormal number for ever
            self.mean[:] = 0

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
            means = [_times_power(part.mean, -self.exponent) for part in (self, other)]
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
        usual = self.stack, self.coefficients
        self.stack = np.zeros((self.limit + len(rows), rows.shape[1]), rows.dtype)
        self.stack[: self.held] = usual[0][: self.held]
        self.coefficients = np.zeros(len(self.stack), rows.dtype)
        coordinates, rest = self.split(rows)
        wide = np.complex128 if rows.dtype.kind == "c" else np.float64
        self._refactor(math.sqrt(decay), coordinates.astype(wide), rest, squares)
        usual[0][: self.held] = self.directions
        self.stack, self.coefficients = usual

    def _weigh(self, m: int) -> None:
        """Compute the roots of the weights of a block of m samples, as a column too."""
        self.roots = math.sqrt(self.forget) ** np.arange(m - 1, -1, -1)
        self.typed_roots = self.roots.astype(np.finfo(self.stack.dtype).dtype)[:, None]

    def _fit_exponent(self, block: NDArray[Any], status: int) -> None:
        """Choose the unit so that neither the block nor the spectrum leaves the range."""
        top = float(self.singular[0]) if self.held else 0.0
        level = math.frexp(top)[1] + self.exponent if top else 0
        wanted = 0
        if status == kernels.UNUSUAL or abs(level) > 0.4 * np.finfo(block.dtype).maxexp:
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

    def _refactor(
        self,
        decay: float,
        coordinates: NDArray[Any],
        rest: NDArray[Any],
        squares: NDArray[np.float64],
    ) -> None:
        """Take the SVD of the old factor, decayed, with the rows of the block below it."""
        held = self.held
        rounding = ROUNDING_FLOOR * float(np.finfo(rest.dtype).eps)
        if len(rest):
            factor, change = self._factor_rest(coordinates, rest, rounding * np.sqrt(squares))
        else:
            factor, change = np.zeros((len(coordinates), 0), coordinates.dtype), None
        # LAPACK's own scaling is by no power of two: bring a core far from 1 there first
        top = max(math.sqrt(squares.max()), float(self.singular[0]) if held else 0.0)
        level = math.frexp(top)[1]
        if abs(level) > LEVEL_RANGE:
            down = math.ldexp(1.0, -level)
            coordinates, factor = down * coordinates, down * factor
        else:
            level, down = 0, 1.0
        singular, rotation = core_spectrum(
            (down * decay) * self.singular,
            coordinates,
            factor,
            self.limit,
            self.limit == self.stack.shape[1],
        )
        if level:
            singular = np.ldexp(singular, level)
        floor = rounding * math.sqrt(self.power)
        keep = min(self.limit, int(np.count_nonzero(singular > floor)))
        self.outside += float(singular[keep:] @ singular[keep:])
        rotation = rotation[:keep]
        if change is not None:
            rotation = np.concatenate([rotation[:, :held], rotation[:, held:] @ change], axis=1)
        rows = self.stack[: rotation.shape[1]]
        self.stack[:keep] = rotation.astype(rows.dtype, copy=False) @ rows
        self.held, self.singular = keep, singular[:keep].copy()
        self._renew()

    def _factor_rest(
        self, coordinates: NDArray[Any], rest: NDArray[Any], floors: NDArray[np.float64]
    ) -> tuple[NDArray[Any], NDArray[Any] | None]:
        """Write the rows outside the directions as factor times orthonormal rows.

        Returns the factor and the matrix that turns ``rest`` into the orthonormal rows, None
        where they have replaced it in the workspace.
        """
        m = len(rest)
        squares = np.empty(m)
        kernels.row_squares(rest, 0.0, np.inf, squares)
        if (squares <= floors * floors).all():
            return np.zeros((m, 0), coordinates.dtype), None
        gram = (rest @ rest.conj().T).astype(coordinates.dtype, copy=False)
        # Cholesky-QR loses orthogonality by epsilon times the condition number squared, which
        # a renewal squares: the fourth root of epsilon, and no worse than 1e-2 for the energies
        narrowest = max(float(np.finfo(rest.dtype).eps) ** 0.25, 1e-2)
        try:
            lower = np.linalg.cholesky(gram)
        except np.linalg.LinAlgError:
            lower = None
        if lower is not None:
            diagonal = lower.diagonal().real
            if diagonal.min() > narrowest * diagonal.max():
                return lower, np.linalg.inv(lower)
        factor, more = np.zeros((m, m), rest.dtype), np.zeros((m, self.held), rest.dtype)
        width = kernels.orthonormal_rows(
            rest.copy(),
            floors,
            self.stack,
            self.held,
            more,
            factor,
            self.residual,
            self.coefficients,
        )
        coordinates += more
        return factor[:, :width].astype(coordinates.dtype), None

    def _renew(self) -> None:
        """Make the directions orthonormal again where the last step cost too much of it.

        The nearest orthonormal rows to U are (UUᴴ)^(-1/2) U; one step of its Newton iteration,
        U - (UUᴴ - I)U/2, squares the loss.
        """
        directions = self.directions
        count = directions.shape[1]
        limit = RENEWAL_LIMIT * max(count, LEAST_DIMENSION) * unit_roundoff(directions.dtype)
        for _ in range(MOST_RENEWALS):
            loss = directions @ directions.conj().T
            if not self.held or kernels.subtract_identity(loss) <= limit:
                break
            loss *= 0.5
            directions -= loss @ directions
            self.renewals += 1

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


def _times_power(values: NDArray[Any], exponent: int) -> NDArray[Any]:
    """Return values times 2**exponent, exactly where they stay in range."""
    if exponent == 0:
        return values
    real = np.ldexp(values.view(np.finfo(values.dtype).dtype), exponent)
    out: NDArray[Any] = real.view(values.dtype)
    return out
