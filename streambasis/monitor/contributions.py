"""Which channels carry what the basis does not explain."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.monitor.quantiles import chi2_quantile

MOST_STEPS = 32
"""Most channels that the greedy selection takes."""

ENOUGH = 0.9
"""The channels named are those that together make this part of the contributions."""

CHANCE = 0.01
"""Probability with which noise alone would add one more channel."""

HIDDEN = 1e-8
"""A channel of whose movements the residual shows less than this part cannot be reconstructed."""

FAINT = 1e-2
"""A channel that is a direction but for less than this part is not selected. What the residual
shows of it is the error of that direction: n/K over its squared strength in noise units, a few
thousandths where a weak event of K = 1,000 samples was adopted. Divided by so small a part it would
take the blame for whatever comes after."""


def reconstruction_based(
    residual: NDArray[np.float64], directions: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return the drop in SPE when each channel alone is reconstructed from the others.

    Parameters
    ----------
    residual : ndarray of float64, shape (n,) or (s, n)
        Residuals of one or more samples; the drops of several add up.
    directions : ndarray of float64, shape (q, n)
        Orthonormal directions that the residual is orthogonal to.

    Returns
    -------
    ndarray of float64, shape (n,)
        (residual_i)² / M_ii with M the projection on the residual space; zero for a channel that
        the residual does not show.

    References
    ----------
    Alcala & Qin (2009), Reconstruction-based contribution for process monitoring, Automatica
    45:1593.

    Examples
    --------
    >>> import numpy as np
    >>> direction = np.array([[0.6, 0.8]])
    >>> residual = np.array([1.0, 0.0]) - 0.6 * direction[0]
    >>> reconstruction_based(residual, direction).round(12)
    array([0.64, 0.64])
    """
    rows = np.atleast_2d(residual)
    return _drops(np.sum(rows * rows, axis=0), 1.0 - np.sum(directions**2, axis=0))


def _drops(power: NDArray[Any], open_part: NDArray[Any]) -> NDArray[Any]:
    fine = open_part > HIDDEN
    return np.where(fine, power / np.where(fine, open_part, 1.0), 0.0)


def shares(
    residuals: NDArray[np.float64],
    directions: NDArray[np.float64],
    count: int,
    noise: float = 1.0,
) -> NDArray[np.float64]:
    """Share an SPE out over the channels.

    Parameters
    ----------
    residuals : ndarray of float64, shape (s, n)
        Residuals, or rows with the same sum of outer products as the residuals of ``count``
        samples.
    directions : ndarray of float64, shape (q, n)
        Orthonormal directions that they are orthogonal to.
    count : int
        Samples that they stand for.
    noise : float
        Variance of an ordinary residual per dimension.

    Returns
    -------
    ndarray of float64, shape (n,)
        Non-negative, sum 1 (all zero for residuals of zero).

    Notes
    -----
    Channels are selected one by one, each time the one whose reconstruction takes most off the
    SPE, until no other does so beyond what noise would; the fault is then reconstructed on all of
    them together by least squares, and a channel's share is its part of the reconstructed sum of
    squares. A plain squared residual smears a fault over channels that only share a direction
    with the faulty one. What a fault of very many channels leaves beyond noise, when no more
    channel stands out or 32 are selected, is shared out by squared residual. Cost O(n·(s + q)) per
    channel selected.
    """
    rows = residuals.copy()
    n = rows.shape[1]
    open_part = 1.0 - np.sum(directions**2, axis=0)
    total = float(np.sum(rows * rows))
    if total == 0.0:
        return np.zeros(n)
    faint = open_part < FAINT
    threshold = noise * chi2_quantile(CHANCE / n, count)
    taken = [directions]
    chosen: list[int] = []
    while len(chosen) < min(MOST_STEPS, n - len(directions)):
        drops = np.where(faint, 0.0, _drops(np.sum(rows * rows, axis=0), open_part))
        best = int(np.argmax(drops))
        if drops[best] <= (threshold if chosen else 0.0) or best in chosen:
            break
        # the part of the channel's axis that is still free, made orthogonal twice over
        axis = np.zeros(n)
        axis[best] = 1.0
        for _ in range(2):
            for block in taken:
                axis -= (block @ axis) @ block
        length = math.sqrt(float(axis @ axis))
        if length * length <= HIDDEN:
            break
        axis /= length
        rows -= np.outer(rows @ axis, axis)
        open_part -= axis * axis
        taken.append(axis[None])
        chosen.append(best)
    energy = np.zeros(n)
    if chosen:
        energy[chosen] = _reconstructed(residuals, directions, chosen)
    left = np.sum(rows * rows, axis=0)
    free = n - len(directions) - len(chosen)
    if free > 0 and left.sum() > noise * chi2_quantile(CHANCE, count * free):
        energy += np.maximum(left - count * noise * np.maximum(open_part, 0.0), 0.0)
    whole = float(energy.sum())
    return energy / whole if whole > 0.0 else np.sum(residuals * residuals, axis=0) / total


def _reconstructed(
    residuals: NDArray[Any], directions: NDArray[Any], chosen: list[int]
) -> NDArray[Any]:
    """Return the sum of squares of the fault reconstructed on each chosen channel."""
    loadings = directions[:, chosen]
    gram = np.eye(len(chosen)) - loadings.T @ loadings
    fault = np.linalg.lstsq(gram, residuals[:, chosen].T, rcond=HIDDEN)[0]
    return np.asarray(np.sum(fault * fault, axis=1))


def leading(values: NDArray[np.float64], part: float = ENOUGH) -> NDArray[np.int64]:
    """Return the fewest positions, largest share first, that together make ``part``.

    Examples
    --------
    >>> import numpy as np
    >>> leading(np.array([0.05, 0.7, 0.0, 0.25]))
    array([1, 3])
    """
    order = np.argsort(-values, kind="stable")
    needed = int(np.searchsorted(np.cumsum(values[order]), part - 1e-12)) + 1
    return order[: min(needed, int(np.count_nonzero(values)))]
