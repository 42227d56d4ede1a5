"""The singular value decomposition of the small core that a fold comes down to."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

GRAM_RANGE = 1e-4
"""Least ratio of the energies kept at which the Gram matrix of the core serves for its singular
value decomposition. Forming it costs an error of one epsilon of the largest energy, so the least
energy kept stays right to 1e-12 at each fold, and to 1e-10 over the thousands that it takes for
rounding to build up."""
GRAM_RANGE_CUT = 1e-8
"""The same where directions are being cut: what the cut takes away from the least direction kept
is far above that error."""


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
    """
    held, width = len(before), factor.shape[1]
    wide = GRAM_RANGE if whole else GRAM_RANGE_CUT
    if held == limit and before[-1] ** 2 > wide * before[0] ** 2:
        gram = np.empty((held + width, held + width), factor.dtype)
        # the upper triangle is not read
        gram[:held, :held] = coordinates.conj().T @ coordinates
        gram.reshape(-1)[: held * len(gram) : len(gram) + 1] += before * before
        if width:
            gram[held:, :held] = factor.conj().T @ coordinates
            gram[held:, held:] = factor.conj().T @ factor
        energies, columns = np.linalg.eigh(gram, UPLO="L")
        if energies[-limit] > wide * energies[-1]:
            singular = np.sqrt(np.maximum(energies[::-1], 0.0))
            return singular, np.ascontiguousarray(columns.T[::-1]).conj()
    core = np.zeros((held + len(coordinates), held + width), factor.dtype)
    core[np.arange(held), np.arange(held)] = before
    core[held:, :held] = coordinates
    core[held:, held:] = factor
    _, singular, rows = np.linalg.svd(core, full_matrices=False)
    return singular, rows
