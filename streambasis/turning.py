"""How a block turns the directions of a subspace: exactly, through its part outside them."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from streambasis.audit import LEAST_DIMENSION, unit_roundoff
from streambasis.core_svd import core_spectrum
from streambasis.kernels import principal as kernels

MOST_RENEWALS = 3
RENEWAL_LIMIT = 1.5
"""Loss of orthonormality, in units of the contract (which allows 3), at which the directions are
made orthonormal again."""


class Turn(NamedTuple):
    """New directions in terms of the rows of a stack, and their singular values.

    Attributes
    ----------
    singular : ndarray of float64, shape (q,)
        Singular values, descending; those beyond the directions kept are cut.
    rotation : ndarray, shape (q, rows)
        Each direction as a combination of the first rows of the stack.
    missed : float
        Squares of the block that are in none of the singular values.
    """

    singular: NDArray[np.float64]
    rotation: NDArray[Any]
    missed: float


class Stack(NamedTuple):
    """The rows that a fold works on: directions first, room for what lies outside them below.

    Attributes
    ----------
    rows : ndarray, shape (r, n)
    held : int
        How many of them are directions.
    residual, coefficients : ndarray, shapes (n,) and (r,)
        Workspace of the Gram-Schmidt kernel.
    """

    rows: NDArray[Any]
    held: int
    residual: NDArray[Any]
    coefficients: NDArray[Any]

    def orthonormalize(
        self, rows: NDArray[Any], floors: NDArray[np.float64]
    ) -> tuple[NDArray[Any], NDArray[Any]]:
        """Append to the directions what the rows, which are overwritten, have outside of them.

        Returns the change of the rows' coordinates and their factor in terms of what was
        appended; a row whose residual is at most its floor appends nothing.
        """
        m = len(rows)
        factor, more = np.zeros((m, m), rows.dtype), np.zeros((m, self.held), rows.dtype)
        width = kernels.orthonormal_rows(
            rows, floors, self.rows, self.held, more, factor, self.residual, self.coefficients
        )
        return more, factor[:, :width]


def exact_turn(
    stack: Stack,
    before: NDArray[np.float64],
    coordinates: NDArray[Any],
    rest: NDArray[Any],
    floors: NDArray[np.float64],
    limit: int,
) -> Turn:
    """Return the turn to the leading directions of the old factor with a block below it.

    Parameters
    ----------
    stack : Stack
        With ``rest`` right below the directions, where it is replaced.
    before : ndarray of float64, shape (k,)
        Singular values held, as the block finds them.
    coordinates : ndarray of float64 or complex128, shape (m, k)
        Coordinates of the block, weighted.
    rest : ndarray, shape (m, n)
        What lies outside the directions, weighted; no rows where they span everything.
    floors : ndarray of float64, shape (m,)
        Norm of a row of ``rest`` up to which it is rounding.
    limit : int
        How many directions are kept.
    """
    held = len(before)
    factor, change = np.zeros((len(coordinates), 0), coordinates.dtype), None
    if len(rest):
        factor, change = _factor_rest(stack, coordinates, rest, floors)
    whole = limit == stack.rows.shape[1]
    singular, rotation = core_spectrum(before, coordinates, factor, limit, whole)
    rotation = rotation[:limit]
    if change is not None:
        rotation = np.concatenate([rotation[:, :held], rotation[:, held:] @ change], axis=1)
    return Turn(singular, rotation, 0.0)


def _factor_rest(
    stack: Stack, coordinates: NDArray[Any], rest: NDArray[Any], floors: NDArray[np.float64]
) -> tuple[NDArray[Any], NDArray[Any] | None]:
    """Write the rows outside the directions as factor times orthonormal rows.

    Returns the factor and the matrix that turns ``rest`` into the orthonormal rows, None where
    they have replaced it in the workspace.
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
    more, factor = stack.orthonormalize(rest.copy(), floors)
    coordinates += more
    return factor.astype(coordinates.dtype), None


def renew(directions: NDArray[Any]) -> int:
    """Make directions orthonormal again where the last turn cost too much of it.

    Returns how often that took a step. The nearest orthonormal rows to U are (UUᴴ)^(-1/2) U; one
    step of its Newton iteration, U - (UUᴴ - I)U/2, squares the loss (Björck & Bowie 1971, SIAM J.
    Numerical Analysis 8). Where all directions are held the rounding of one turn alone comes near
    the limit, so every turn ends with a step, which is not counted.
    """
    held, count = directions.shape
    if not held:
        return 0
    limit = RENEWAL_LIMIT * max(count, LEAST_DIMENSION) * unit_roundoff(directions.dtype)
    due, steps = held == count, 0
    for _ in range(MOST_RENEWALS):
        loss = directions @ directions.conj().T
        size = kernels.subtract_identity(loss)
        if size <= limit and not due:
            break
        loss *= 0.5
        directions -= loss @ directions
        steps += not due
        due = False
        if size * size <= limit:
            break
    return steps
