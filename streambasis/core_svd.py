"""The singular value decomposition of the small core that a fold comes down to."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.errors import NumericalError
from streambasis.kernels import principal as kernels

GRAM_RANGE = 1e-4
"""Least ratio of the energies kept at which the Gram matrix of the core serves for its singular
value decomposition. Forming it costs an error of one epsilon of the largest energy, so the least
energy kept stays right to 1e-12 at each fold, and to 1e-10 over the thousands that it takes for
rounding to build up."""
GRAM_RANGE_CUT = 1e-8
"""The same where directions are being cut: what the cut takes away from the least direction kept
is far above that error."""
MOST_SWEEPS = 60
"""Jacobi's rotations converge within about ten sweeps; with this many they have met what is not a
matrix of finite numbers."""


def core_spectrum(
    before: NDArray[np.float64],
    coordinates: NDArray[Any],
    factor: NDArray[Any],
    limit: int,
    whole: bool,
) -> tuple[NDArray[np.float64], NDArray[Any]]:
    """Return singular values, descending, and right singular vectors as rows, of the core.

    Parameters
    ----------
    before : ndarray of float64, shape (k,)
        Singular values before the fold, descending.
    coordinates, factor : ndarray, shapes (m, k) and (m, q)
        The core is diag(before) and zeros above the two side by side.
    limit : int
        How many singular values are kept.
    whole : bool
        Whether nothing is ever cut.

    Raises
    ------
    NumericalError
        If no method converges, which a core of finite numbers does not bring about.
    """
    held, width = len(before), factor.shape[1]
    wide = GRAM_RANGE if whole else GRAM_RANGE_CUT
    if held == limit and before[-1] ** 2 > wide * before[0] ** 2:
        found = _by_gram(before, coordinates, factor)
        if found is not None and found[0][limit - 1] ** 2 > wide * found[0][0] ** 2:
            return found
    core = np.zeros((held + len(coordinates), held + width), factor.dtype)
    core[np.arange(held), np.arange(held)] = before
    core[held:, :held] = coordinates
    core[held:, held:] = factor
    try:
        _, singular, rows = np.linalg.svd(core, full_matrices=False)
    except np.linalg.LinAlgError:
        # divide and conquer can fail to converge where rotations do not
        return by_rotations(core)
    return (singular, rows) if math.isfinite(singular.sum()) else by_rotations(core)


def _by_gram(
    before: NDArray[np.float64], coordinates: NDArray[Any], factor: NDArray[Any]
) -> tuple[NDArray[np.float64], NDArray[Any]] | None:
    """Return the same through the Gram matrix of the core, or None where that fails."""
    held, width = len(before), factor.shape[1]
    if width:
        gram = np.empty((held + width, held + width), factor.dtype)
        # the upper triangle is not read
        gram[:held, :held] = coordinates.conj().T @ coordinates
        gram[held:, :held] = factor.conj().T @ coordinates
        gram[held:, held:] = factor.conj().T @ factor
    else:
        gram = coordinates.conj().T @ coordinates
    gram.reshape(-1)[: held * len(gram) : len(gram) + 1] += before * before
    try:
        energies, columns = np.linalg.eigh(gram, UPLO="L")
    except np.linalg.LinAlgError:
        return None
    # NumPy has no fast product of an array with a negative stride
    rows = np.ascontiguousarray(columns.T[::-1]).conj()
    return np.sqrt(np.maximum(energies[::-1], 0.0)), rows


def by_rotations(core: NDArray[Any]) -> tuple[NDArray[np.float64], NDArray[Any]]:
    """Return singular values, descending, and right singular vectors as rows, by rotations.

    Notes
    -----
    One-sided Jacobi: some ten times slower than LAPACK's divide and conquer, at least as accurate
    (J. Demmel and K. Veselić (1992), Jacobi's method is more accurate than QR, SIAM J. Matrix
    Analysis and Applications 13), and it does not depend on anything converging but itself.
    """
    turned = np.ascontiguousarray(core.T)
    rows = np.eye(len(turned), dtype=core.dtype)
    if kernels.rotate_orthogonal(turned, rows, MOST_SWEEPS) == kernels.UNUSUAL:
        raise NumericalError(
            f"the singular values of a core of shape {core.shape} did not converge: it holds "
            "numbers that are not finite, or samples of a range that no scaling can hold"
        )
    singular = np.linalg.norm(turned, axis=1)
    order = np.argsort(-singular, kind="stable")[: min(core.shape)]
    return singular[order], rows[order].conj()


def definite_eigen(matrix: NDArray[Any]) -> tuple[NDArray[Any], NDArray[Any]]:
    """Return eigenvalues and eigenvectors, as columns, of a positive semidefinite matrix."""
    try:
        values, columns = np.linalg.eigh(matrix)
    except np.linalg.LinAlgError:
        values, rows = by_rotations(matrix.astype(np.result_type(matrix.dtype, np.float64)))
        columns = rows.conj().T
    return values, columns
