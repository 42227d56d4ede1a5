"""The standing proof that a basis is still what it claims to be."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

LEAST_DIMENSION = 16
"""The ratio is taken over at least this many channels, so that a handful of roundings in a short
vector does not look like a loss."""

ORTHOGONALITY_LIMIT = 3.0
"""Ten times stricter than the threshold of LAPACK's own test programs (30)."""


class Audit(NamedTuple):
    """What an audit found.

    Attributes
    ----------
    orthogonality : float
        |V Vᴴ - I|₁ / (max(n, 16)·eps) with eps the unit roundoff; contract: below 3.
    coverage : float
        Largest residual of a sample that the basis answers for, over its tolerance; contract:
        at most 1. NaN where it is not tracked.
    condition : float
        2-norm condition number of the factor that ties the pivot samples to the directions, each
        pivot sample scaled to norm 1; 1 for an empty basis.
    renewals : int
        How often the basis was re-orthonormalized.
    rank : int
        Directions held.
    samples : int
        Samples seen.
    uncovered : int
        Samples beyond their tolerance that the basis does not answer for, since its capacity was
        reached when they came: all of them, or those still in the window where there is one.
    """

    orthogonality: float
    coverage: float
    condition: float
    renewals: int
    rank: int
    samples: int
    uncovered: int = 0


def unit_roundoff(dtype: np.dtype[Any]) -> float:
    """Return 2**-53 for double precision, 2**-24 for single."""
    return float(np.finfo(dtype).eps) / 2


def orthogonality(directions: NDArray[Any]) -> float:
    """Return the orthogonality ratio of Euclidean directions held as rows.

    Parameters
    ----------
    directions : ndarray, shape (k, n)

    Returns
    -------
    float
        |V Vᴴ - I|₁ / (max(n, 16)·eps), the 1-norm being the largest column sum; computed in double
        precision. 0 for no directions.

    References
    ----------
    LAPACK, TESTING/LIN/dqrt01.f: the same ratio with threshold 30.
    """
    k, n = directions.shape
    if k == 0:
        return 0.0
    wide = directions.astype(np.complex128 if directions.dtype.kind == "c" else np.float64)
    gram = wide @ wide.conj().T
    gram[np.diag_indices(k)] -= 1
    loss = np.abs(gram).sum(axis=0).max()
    return float(loss / (max(n, LEAST_DIMENSION) * unit_roundoff(directions.dtype)))
