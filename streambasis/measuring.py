"""Samples measured against directions: what scoring reads, and what a fold goes on from."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from streambasis.kernels import principal as kernels

CLEAR = {32: 0.05, 64: 1e-3}
"""Part of a sample's square outside the directions, by the bits of a number, from which it is taken
as the difference of squares. That is off by some epsilons of the sample's square, so the residual
by some tens of epsilons of its norm."""


class Block(NamedTuple):
    """Samples about their mean, and how they lie to the directions.

    Attributes
    ----------
    deviations : ndarray, shape (m, n)
        The samples, less the mean where one is kept.
    coordinates : ndarray, shape (m, k)
        Their coordinates along all directions held.
    squares, outside : ndarray of float64, shape (m,)
        Their squared norms, and those of what lies outside the directions.
    """

    deviations: NDArray[Any]
    coordinates: NDArray[Any]
    squares: NDArray[np.float64]
    outside: NDArray[np.float64]


def measure(
    deviations: NDArray[Any], squares: NDArray[np.float64], directions: NDArray[Any]
) -> Block:
    """Measure samples against orthonormal directions.

    Parameters
    ----------
    deviations : ndarray, shape (m, n)
        Samples, less the mean where one is kept.
    squares : ndarray of float64, shape (m,)
        Their squared norms.
    directions : ndarray, shape (k, n)

    Notes
    -----
    The square outside is that of the sample less those of its coordinates, and where little is
    left of these that of the difference itself. 2n·k flops a sample, 4n·k there.
    """
    coordinates = deviations @ directions.conj().T
    if len(directions) == directions.shape[1]:
        return Block(deviations, coordinates, squares, np.zeros(len(squares)))
    outside, close = np.empty(len(squares)), np.empty(len(squares), np.int64)
    clear = CLEAR[np.finfo(deviations.dtype).bits]
    found = kernels.outside_squares(coordinates, squares, clear, outside, close)
    if found:
        rows = close[:found]
        rest = deviations[rows] - coordinates[rows] @ directions
        again = np.empty(found)
        kernels.row_squares(rest, 0.0, np.inf, again)
        outside[rows] = again
    return Block(deviations, coordinates, squares, outside)


def times_power(values: NDArray[Any], exponent: int) -> NDArray[Any]:
    """Return values times 2**exponent, exactly where they stay in range."""
    if exponent == 0:
        return values
    real = np.ldexp(values.view(np.finfo(values.dtype).dtype), exponent)
    out: NDArray[Any] = real.view(values.dtype)
    return out
