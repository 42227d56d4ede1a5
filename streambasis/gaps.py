"""Samples with missing channels: coordinates by least squares on the channels observed."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.core_svd import definite_eigen
from streambasis.inner import Inner

LEAST_SINE = 0.1
"""The observed channels determine the coordinates when every direction keeps at least this part of
its length on them: noise in a coordinate then grows tenfold at most."""


class Gaps:
    """Fills the missing channels of samples with what a subspace expects there.

    Parameters
    ----------
    inner : Inner
        The inner product of the samples.
    count : int
        Number of channels n.
    dtype : numpy.dtype
        Type of the samples.

    Notes
    -----
    What a missing channel may hold is a line in the space of samples; leaving that line free is
    projecting it out of sample and directions alike. With E orthonormal rows that span the lines
    of the missing channels and F = U·Eᴴ, the directions keep the Gram matrix I - F·Fᴴ, whose
    least eigenvalue is the squared sine of the smallest angle between the subspace and the
    missing channels. In the Euclidean inner product this is least squares on the observed
    channels (J. Nocedal and S. Wright (2006), Numerical Optimization, section 10.2).
    """

    __slots__ = ("_count", "_dtype", "_inner")

    def __init__(self, inner: Inner, count: int, dtype: np.dtype[Any]) -> None:
        self._inner, self._count, self._dtype = inner, count, dtype

    def fill(
        self,
        rows: NDArray[Any],
        gaps: NDArray[np.bool_],
        mean: NDArray[Any],
        directions: NDArray[Any],
        expected: NDArray[Any],
    ) -> tuple[NDArray[Any], NDArray[Any], NDArray[np.float64], NDArray[np.float64]] | None:
        """Return the filled samples, their coordinates, norms and residual norms, or None.

        Parameters
        ----------
        rows : ndarray, shape (m, n)
            Samples with the same gaps in Euclidean coordinates, entered with zeros there.
        gaps : ndarray of bool, shape (n,)
            Which channels are missing.
        mean : ndarray, shape (n,)
            What the coordinates are about.
        directions : ndarray, shape (k, n)
            The subspace.
        expected : ndarray, shape (n,)
            What the gaps are filled with where the subspace says nothing.

        Notes
        -----
        None where the observed channels do not determine the coordinates. With p channels
        missing O(n·k·p + k³ + m·n·(k + p)) flops.
        """
        if gaps.all():
            return None
        lines = np.zeros((int(gaps.sum()), self._count), self._dtype)
        lines[np.arange(len(lines)), np.flatnonzero(gaps)] = 1
        if self._inner.kind == "matrix":
            lines = np.ascontiguousarray(np.linalg.qr(self._inner.enter(lines).T)[0].T)
        hidden = directions @ lines.conj().T
        kept = directions - hidden @ lines
        squared_sines, axes = definite_eigen(np.eye(len(kept)) - hidden @ hidden.conj().T)
        if (squared_sines < LEAST_SINE**2).any():
            return None
        deviations = rows - mean
        observed = deviations - (deviations @ lines.conj().T) @ lines
        along = (observed @ directions.conj().T) @ axes
        coordinates = (along / squared_sines) @ axes.conj().T
        residuals = np.linalg.norm(observed - coordinates @ kept, axis=1)
        missing = expected + coordinates @ directions - rows
        filled = rows + (missing @ lines.conj().T) @ lines
        return filled, coordinates, np.linalg.norm(observed, axis=1), residuals
