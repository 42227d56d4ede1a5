"""Samples with missing channels: coordinates by least squares on the channels observed."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.inner import Inner

LEAST_SINE = 0.1
"""The observed channels determine the coordinates when every direction keeps at least this part of
its length on them: noise in a coordinate then grows tenfold at most."""


class Gaps:
    """Fills the missing channels of a sample with what a subspace expects there.

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
        row: NDArray[Any],
        gaps: NDArray[np.bool_],
        mean: NDArray[Any],
        directions: NDArray[Any],
        centre: NDArray[Any],
    ) -> tuple[NDArray[Any], float, float, NDArray[Any]] | None:
        """Return coordinates, residual norm, norm and the filled sample, or None.

        Parameters
        ----------
        row : ndarray, shape (n,)
            The sample in Euclidean coordinates, entered with zeros in its gaps.
        gaps : ndarray of bool, shape (n,)
            Which channels are missing.
        mean : ndarray, shape (n,)
            What the coordinates are about.
        directions : ndarray, shape (k, n)
            The subspace.
        centre : ndarray, shape (n,)
            What the gaps are filled with where the subspace says nothing.

        Notes
        -----
        None where the observed channels do not determine the coordinates. With p channels
        missing O(n·k·p + k³) flops.
        """
        if gaps.all():
            return None
        lines = np.zeros((int(gaps.sum()), self._count), self._dtype)
        lines[np.arange(len(lines)), np.flatnonzero(gaps)] = 1
        if self._inner.kind == "matrix":
            lines = np.ascontiguousarray(np.linalg.qr(self._inner.enter(lines).T)[0].T)
        deviation = row - mean
        observed = deviation - (deviation @ lines.conj().T) @ lines
        hidden = directions @ lines.conj().T
        gram = np.eye(len(directions)) - hidden @ hidden.conj().T
        squared_sines, axes = np.linalg.eigh(gram) if len(gram) else (np.ones(1), gram)
        if squared_sines[0] < LEAST_SINE**2:
            return None
        right = observed @ directions.conj().T
        coordinates = ((right @ axes) / squared_sines) @ axes.conj().T if len(gram) else right
        kept = directions - hidden @ lines
        outside = float(np.linalg.norm(observed - coordinates @ kept))
        expected = centre + coordinates @ directions
        filled = row + ((expected - row) @ lines.conj().T) @ lines
        return coordinates, outside, float(np.linalg.norm(observed)), filled
