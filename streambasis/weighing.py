"""What each sample of a block weighs when it is folded, and how the mean moves with it."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.kernels import principal as kernels


class Weights:
    """The weights of the samples of one block, and of what came before them.

    Parameters
    ----------
    count : int
        Samples in the block, oldest first.
    forget : float
        Forgetting factor: the weight of a sample falls by it with each later one.
    weight : float
        Weight of all earlier samples, as of the last of them.
    centred : bool
        Whether the scatter is taken about a running mean.

    Notes
    -----
    The scatter about the new mean is that about the old one less the mean shift, counted W times.
    With v the square roots of the weights and D = diag(v) this is the scatter of the rows L·B,
    L = (I - g·vvᵀ)·D, B the samples less the old mean, g = (1 - √(Wa/W))/Wb, where Wa, Wb and W
    are the weights before, of the block and after. (D. A. Ross, J. Lim, R.-S. Lin and M.-H. Yang
    (2008), Incremental learning for robust visual tracking, Int. J. Computer Vision 77, append
    the shift as one more row: the same scatter.)
    """

    __slots__ = ("added", "before", "decay", "plain", "roots", "shrink", "squares", "total")

    def __init__(self, count: int, forget: float, weight: float, centred: bool) -> None:
        self.plain = forget == 1.0
        self.decay = forget**count
        if self.plain:
            self.roots = np.ones(count)
            self.squares, self.added = self.roots, float(count)
        else:
            self.roots = math.sqrt(forget) ** np.arange(count - 1, -1, -1.0)
            self.squares = self.roots * self.roots
            self.added = float(self.squares.sum())
        self.before = self.decay * weight
        self.total = self.before + self.added
        self.shrink = (1.0 - math.sqrt(self.before / self.total)) / self.added if centred else 0.0

    def apply(self, rows: NDArray[Any]) -> NDArray[Any]:
        """Replace rows, (m, q), by L times them, and return them."""
        if self.shrink or not self.plain:
            kernels.weigh_rows(rows, self.roots, self.shrink, self._total(rows))
        return rows

    def apply_adjoint(self, rows: NDArray[Any]) -> NDArray[Any]:
        """Replace rows, (m, q), by Lᵀ times them, and return them."""
        if self.shrink or not self.plain:
            kernels.weigh_rows_back(rows, self.roots, self.shrink, self._total(rows))
        return rows

    def sum(self, rows: NDArray[Any]) -> NDArray[Any]:
        """Return the weighted sum of rows, (m, q), in their type."""
        total: NDArray[Any] = self.squares.astype(rows.real.dtype, copy=False) @ rows
        return total

    def scatter(self, squares: NDArray[np.float64], summed: NDArray[Any] | None = None) -> float:
        """Return the squared Frobenius norm of L·R from the rows' squares and weighted sum.

        Notes
        -----
        Σ w|r|² - (2g - g²·Wb)·|Σ w·r|²; the second term is at most Wb/W of the first. The sum is
        not needed where there is no mean.
        """
        every = float(self.squares @ squares)
        if summed is None:
            return every
        lever = (2.0 - self.shrink * self.added) * self.shrink
        return max(every - lever * float(np.vdot(summed, summed).real), 0.0)

    def _total(self, rows: NDArray[Any]) -> NDArray[Any]:
        """Return room for a sum of rows in double precision."""
        return np.empty(rows.shape[1], np.result_type(rows.dtype, np.float64))
