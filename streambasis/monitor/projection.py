"""The directions samples are split over: adopted behaviour, basis, open events; and the split."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray

from streambasis.kernels.monitor import score_rows, take_off

UNSEEN = 1e-6
"""A direction of which the observed channels show less than this part has no coordinate there."""

NO_EVENT = slice(0, 0)


@dataclass(slots=True)
class Scored:
    """Samples in noise units, split over the directions and compared with the limits.

    Attributes
    ----------
    z : ndarray of float64, shape (m, n)
        The samples.
    coordinates : ndarray of float64, shape (m, q)
        Along the directions of the projection.
    spe, rest, t2, limit, t2_limit : ndarray of float64, shape (m,)
        Squared prediction error, what of it standing events leave, T², and the limits; NaN for a
        sample that cannot be judged.
    judged, beyond, novel, extreme : ndarray of bool, shape (m,)
        Whether it can be, whether standing events leave something beyond the limit, whether the
        squared prediction error is beyond it, and T² beyond its own.
    shows : ndarray of bool, shape (m, events)
        Whether each standing event shows in the sample.
    special : dict of int to Projection
        The projection of each sample with gaps, by row.
    """

    z: NDArray[np.float64]
    coordinates: NDArray[np.float64]
    spe: NDArray[np.float64]
    rest: NDArray[np.float64]
    t2: NDArray[np.float64]
    limit: NDArray[np.float64]
    t2_limit: NDArray[np.float64]
    judged: NDArray[np.bool_]
    beyond: NDArray[np.bool_]
    novel: NDArray[np.bool_]
    extreme: NDArray[np.bool_]
    shows: NDArray[np.bool_]
    special: dict[int, Projection] = field(default_factory=dict)

    @classmethod
    def room(cls, z: NDArray[np.float64], directions: int) -> Self:
        """Return room for what becomes of samples, (m, n)."""
        m = len(z)
        spe, rest, t2, limit, t2_limit = np.empty((5, m))
        judged, beyond, novel, extreme = np.empty((4, m), np.bool_)
        return cls(
            z, np.empty((m, directions)), spe, rest, t2, limit, t2_limit,
            judged, beyond, novel, extreme, np.zeros((m, 0), np.bool_),
        )  # fmt: skip

    def row(self, i: int) -> Scored:
        """Return a view of one row."""
        one = slice(i, i + 1)
        return Scored(
            self.z[one], self.coordinates[one], self.spe[one], self.rest[one], self.t2[one],
            self.limit[one], self.t2_limit[one], self.judged[one], self.beyond[one],
            self.novel[one], self.extreme[one], self.shows[one],
        )  # fmt: skip


class Projection:
    """Orthonormal directions for scoring, ready for the kernel.

    Parameters
    ----------
    known, vectors, events : ndarray of float64, shapes (k, n), (r, n), (e, n)
        Adopted behaviour, the principal directions, and the directions of open events.
    energies : ndarray of float64, shape (r,)
        Variance along each principal direction.
    mean : ndarray of float64, shape (n,)
        What samples are taken about.
    observed : ndarray of bool, shape (n,), optional
        The channels to be seen; all where not given.

    Notes
    -----
    Least squares on the observed channels is the orthogonal projection on the directions as far
    as those channels show them, so one Gram-Schmidt run, O(n·q²), turns missing channels and
    directions that are not orthogonal into the plain case.
    """

    __slots__ = (
        "_limits",
        "_work",
        "basis",
        "directions",
        "first",
        "known",
        "mean",
        "seen",
        "spreads",
        "vectors",
        "whitening",
    )

    def __init__(
        self,
        known: NDArray[Any],
        vectors: NDArray[Any],
        events: NDArray[Any],
        energies: NDArray[Any],
        mean: NDArray[Any],
        observed: NDArray[np.bool_] | None = None,
    ) -> None:
        self.known = len(known)
        self.first = self.known + len(vectors)
        self.mean = mean
        self.vectors = vectors
        self.spreads = np.sqrt(energies)
        if self.known == 0 and len(events) == 0 and observed is None:
            self.directions = vectors
            self.whitening = np.diag(1.0 / self.spreads)
            self.seen = len(vectors)
        else:
            rows = np.vstack([known, vectors, events])
            if observed is not None:
                rows = rows * observed
            self.directions, upper = orthonormal(rows)
            self.whitening = _whitening(upper, self.known, self.first, self.spreads)
            self.seen = int(np.count_nonzero(np.diag(upper)))
        self._work, self._limits = np.zeros(mean.size), np.zeros(2)

    def score(self, out: Scored, limits: tuple[float, float]) -> None:
        """Split samples over the directions and compare with the limits of SPE and T²."""
        self._limits[:] = limits
        score_rows(
            out.z, self.mean, self.directions, self.first, self.whitening, self._limits, self._work,
            out.coordinates, out.spe, out.rest, out.t2, out.limit, out.t2_limit,
            out.judged, out.beyond, out.novel, out.extreme,
        )  # fmt: skip

    def residuals(
        self, z: NDArray[np.float64], coordinates: NDArray[np.float64], event: slice
    ) -> NDArray[np.float64]:
        """Return what rows have outside the directions, but for those of one event.

        ``event`` counts from the first direction of an open event.
        """
        rows: NDArray[np.float64] = np.nan_to_num(z - self.mean)
        take_off(rows, coordinates, self.directions, 0, self.first + event.start)
        take_off(rows, coordinates, self.directions, self.first + event.stop, len(self.directions))
        return rows

    def plain(
        self, row: NDArray[np.float64], coordinates: NDArray[np.float64], t2: float, most: float
    ) -> NDArray[np.float64]:
        """Return a row as the basis may take it.

        Adopted behaviour and open events are taken off, missing values filled in with what the
        basis expects, and coordinates with a T² beyond ``most`` drawn in to it.
        """
        out = row[None].copy()
        inside = coordinates[None]
        count = len(self.directions)
        take_off(out, inside, self.directions, 0, self.known)
        take_off(out, inside, self.directions, self.first, count)
        gaps = np.isnan(row)
        if gaps.any():
            along = (self.whitening @ coordinates[: self.first]) * self.spreads
            out[0, gaps] = (self.mean + along @ self.vectors)[gaps]
        if t2 > most:
            excess = inside * (1.0 - np.sqrt(most / t2))
            take_off(out, excess, self.directions, self.known, self.first)
        return np.asarray(out[0])


def orthonormal(rows: NDArray[Any]) -> tuple[NDArray[Any], NDArray[Any]]:
    """Orthonormalize rows in their order, leaving zeros for one that adds nothing.

    Returns
    -------
    directions : ndarray of float64, shape (q, n)
        Orthonormal rows, or zeros.
    upper : ndarray of float64, shape (q, q)
        ``rows = upperᵀ @ directions`` but for what was left out; a zero on the diagonal marks it.

    Notes
    -----
    Classical Gram-Schmidt twice over, 8·n·q² flops ("twice is enough", Parlett 1980). A Householder
    factorization would fill the place of a dependent row with a direction of its own choice, and
    later rows would lean on it.

    Examples
    --------
    >>> import numpy as np
    >>> orthonormal(np.array([[3.0, 4.0], [6.0, 8.0], [1.0, 0.0]]))[0].round(12) + 0.0
    array([[ 0.6,  0.8],
           [ 0. ,  0. ],
           [ 0.8, -0.6]])
    """
    directions = np.zeros_like(rows)
    upper = np.zeros((len(rows), len(rows)))
    for i, row in enumerate(rows):
        left = row.copy()
        for _ in range(2):
            coordinates = directions[:i] @ left
            left -= coordinates @ directions[:i]
            upper[:i, i] += coordinates
        length = float(np.sqrt(left @ left))
        if length > UNSEEN * max(1.0, float(np.abs(upper[:i, i]).max(initial=0.0))):
            directions[i] = left / length
            upper[i, i] = length
    return directions, upper


def _whitening(
    upper: NDArray[Any], known: int, first: int, spreads: NDArray[Any]
) -> NDArray[np.float64]:
    """Map coordinates along the orthonormal rows to whitened ones along the principal directions.

    The coefficients a of the original rows solve ``upper a = coordinates``; a row that was left
    out has none.
    """
    held = np.flatnonzero(np.diag(upper)[:first])
    inverse = np.zeros((first, first))
    inverse[np.ix_(held, held)] = np.linalg.inv(upper[np.ix_(held, held)])
    return np.ascontiguousarray(inverse[known:] / spreads[:, None])
