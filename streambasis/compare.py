"""Bases against one another: the angles between them, how far apart they are, and their union."""

from __future__ import annotations

from typing import Any, TypeVar

import numpy as np
from numpy.typing import ArrayLike, NDArray

from streambasis.basis import StreamBasis
from streambasis.errors import SampleError, SettingError
from streambasis.inner import Inner
from streambasis.kernels.growth import COUNT
from streambasis.principal import PrincipalBasis
from streambasis.samples import Channels, many_samples

Basis = TypeVar("Basis", StreamBasis, PrincipalBasis)
Comparable = StreamBasis | PrincipalBasis | ArrayLike

SPAN_TOLERANCE = 16.0
"""Rows of an array whose singular value is below this many machine epsilons times the larger
dimension, relative to the largest, add no direction."""


def principal_angles(a: Comparable, b: Comparable) -> NDArray[np.float64]:
    """Return the principal angles between two subspaces, ascending.

    Parameters
    ----------
    a, b : StreamBasis, PrincipalBasis or array_like of shape (k, n)
        Bases, or vectors in channel units as rows. Rows that are not orthonormal are
        orthonormalized first; dependent ones add nothing. The ranks may differ.

    Returns
    -------
    ndarray of float64, shape (min(rank a, rank b),)
        Radians, from 0 to pi/2.

    Raises
    ------
    SettingError
        If the channels or the inner products differ. An array takes the inner product of the
        basis it is compared with, and the Euclidean one where there is none.

    Notes
    -----
    Angles below pi/4 come from their sines, the singular values of the part of the smaller basis
    outside the larger one, all others from their cosines, the singular values of the inner
    products: each has an absolute error of a few machine epsilons in double precision, whatever
    the other angles are. O(n·k²) flops.

    References
    ----------
    Å. Björck and G. H. Golub (1973), Numerical methods for computing angles between linear
    subspaces, Mathematics of Computation 27, algorithms of sections 3 and 4.

    Examples
    --------
    >>> import numpy as np
    >>> from streambasis import principal_angles
    >>> principal_angles([[1.0, 0.0, 0.0]], [[1.0, 1.0, 0.0], [0.0, 0.0, 1.0]]) / np.pi
    array([0.25])
    """
    sines, cosines = _sines_and_cosines(*_rows_of_both(a, b))
    small = sines * sines < 0.5
    out: NDArray[np.float64]
    out = np.where(small, np.arcsin(np.minimum(sines, 1.0)), np.arccos(np.minimum(cosines, 1.0)))
    return out


def subspace_distance(a: Comparable, b: Comparable) -> float:
    """Return the distance of two subspaces: the sine of their largest principal angle.

    Parameters
    ----------
    a, b : StreamBasis, PrincipalBasis or array_like of shape (k, n)
        As for :func:`principal_angles`.

    Returns
    -------
    float
        The 2-norm of the difference of the two orthogonal projections, 0 to 1. It is 1 where the
        ranks differ: one of the two then has a direction at a right angle to all of the other.

    Raises
    ------
    SettingError
        If the channels or the inner products differ.

    References
    ----------
    G. H. Golub and C. F. Van Loan (2013), Matrix Computations, 4th edition, section 2.5.3.

    Examples
    --------
    >>> from streambasis import subspace_distance
    >>> round(subspace_distance([[1.0, 0.0]], [[4.0, 3.0]]), 3)
    0.6
    """
    first, second = _rows_of_both(a, b)
    if len(first) != len(second):
        return 1.0
    sines, _ = _sines_and_cosines(first, second)
    return float(min(sines[-1], 1.0)) if len(sines) else 0.0


def channel_shares(a: Comparable, b: Comparable) -> NDArray[np.float64]:
    """Return which channels two subspaces differ on.

    Parameters
    ----------
    a, b : StreamBasis, PrincipalBasis or array_like of shape (k, n)
        As for :func:`principal_angles`.

    Returns
    -------
    ndarray of float64, shape (n,)
        The share of each channel in the squares of what either basis has outside the other;
        they add up to 1, or are all 0 where the subspaces are the same up to rounding.

    Raises
    ------
    SettingError
        If the channels or the inner products differ.

    Notes
    -----
    The squares add up to twice the sum of sin² of the principal angles, and 1 for each direction
    that one has more: the squared Frobenius norm of the difference of the two projections. Counted
    in the coordinates of the inner product. O(n·k²) flops.
    """
    first, second = _rows_of_both(a, b)
    squares = np.zeros(first.shape[1])
    for rows, others in ((first, second), (second, first)):
        outside = rows
        for _ in range(2):  # the second time takes off what rounding left of the first
            outside = outside - (outside @ others.conj().T) @ others
        squares += (np.abs(outside) ** 2).sum(axis=0)
    total = float(squares.sum())
    rounding = len(squares) * float(np.finfo(np.float64).eps)
    return squares / total if total > rounding**2 * len(first) else np.zeros(len(squares))


def merge(a: Basis, b: Basis, *more: Basis) -> Basis:
    """Return one basis of what several have seen, as if the samples of each followed the last.

    Parameters
    ----------
    a, b, *more : StreamBasis or PrincipalBasis, all of one kind
        Bases of parts of a feed, in order. They stay as they are.

    Returns
    -------
    StreamBasis or PrincipalBasis
        A new basis with the settings of ``a``; its samples are numbered on from part to part.

    Raises
    ------
    TypeError
        If the kinds differ.
    SettingError
        If channels, dtype or inner product differ; for StreamBasis if one has a window or the
        union has more directions than the capacity of ``a``; for PrincipalBasis if forgetting or
        centring differ.

    Notes
    -----
    Merging is associative to rounding, so parts can be reduced in a tree. StreamBasis: the pivot
    samples of each part are pushed in turn, O(n·k²) flops; the span is that of the union.
    PrincipalBasis: weights, means and scatter add, the scatter through the singular value
    decomposition of the directions of both side by side, O(n·k²) flops; what waits for the next
    fold in either is folded first. It equals the basis of the whole as far as no direction was
    cut.

    References
    ----------
    T. F. Chan, G. H. Golub and R. J. LeVeque (1979), Updating formulae and a pairwise algorithm
    for computing sample variances, Stanford STAN-CS-79-773 (how means and scatter add).

    Examples
    --------
    >>> from streambasis import StreamBasis, merge
    >>> first, second = StreamBasis(3), StreamBasis(3)
    >>> first.push([1.0, 0.0, 0.0]).grew, second.push([1.0, 1.0, 0.0]).grew
    (True, True)
    >>> merge(first, second).rank
    2
    """
    merged, parts = a, [b]
    parts += more
    for part in parts:
        merged = _merged(merged, part)
    return merged


def _merged(a: Basis, b: Basis) -> Basis:
    """Return the basis of two parts."""
    if isinstance(a, StreamBasis) and isinstance(b, StreamBasis):
        _check_alike(a, b)
        return _merged_spans(a, b)
    if isinstance(a, PrincipalBasis) and isinstance(b, PrincipalBasis):
        _check_alike(a, b)
        return a.followed_by(b)
    raise TypeError(
        f"a {type(a).__name__} and a {type(b).__name__}: merge bases of one kind, "
        "StreamBasis or PrincipalBasis"
    )


def _merged_spans(a: StreamBasis, b: StreamBasis) -> StreamBasis:
    """Return a basis of the union of two spans, held up by the pivot samples of both."""
    state, other = a.to_state(), b.to_state().parts["core"]
    for part in (state.parts["core"], other):
        if part.kind != "Growth":
            raise SettingError("a basis with a window cannot be merged: it forgets on its own feed")
    merged = type(a).from_state(state)
    rows = other.arrays["factor"] @ other.arrays["vectors"]
    exponents = other.arrays["exponents"][:, None]
    samples = np.ldexp(rows.view(rows.real.dtype), exponents).view(rows.dtype)
    decisions = merged.push_many(merged._inner.leave(samples))
    if (decisions.reason == "full").any():
        raise SettingError(
            f"the union has more directions than the capacity of the first basis ({a.rank} held); "
            "make the bases with a larger capacity"
        )
    state = merged.to_state()
    core = state.parts["core"]
    pivots = core.arrays["pivots"]
    new = pivots >= a.count
    pivots[new] = a.count + other.arrays["pivots"][pivots[new] - a.count]
    core.arrays["header"][COUNT] = a.count + b.count
    return type(a).from_state(state)


def _check_alike(
    a: StreamBasis | PrincipalBasis, b: StreamBasis | PrincipalBasis, *, dtypes: bool = True
) -> None:
    """Refuse two bases whose directions do not live in the same space."""
    if a._channels != b._channels:
        raise SettingError(
            f"bases of different channels: {_listed(a.channels)} and {_listed(b.channels)}"
        )
    if dtypes and a.dtype != b.dtype:
        raise SettingError(f"bases of different dtype: {a.dtype} and {b.dtype}")
    first, second = a._inner.given, b._inner.given
    same = first is second  # both None
    if first is not None and second is not None:
        same = np.array_equal(first, second)
    if not same:
        raise SettingError(
            f"bases with different inner products: {_described(a._inner)} and "
            f"{_described(b._inner)}; make both with the same one"
        )


def _listed(names: tuple[str, ...]) -> str:
    shown = ", ".join(names[:4])
    return f"{len(names)} ({shown}{', ...' if len(names) > 4 else ''})"


def _described(inner: Inner) -> str:
    if inner.given is None:
        return "Euclidean"
    corner = ", ".join(f"{value:.6g}" for value in inner.given.ravel()[:3])
    return f"{inner.kind} ({corner}{', ...' if inner.given.size > 3 else ''})"


def _rows_of_both(a: Comparable, b: Comparable) -> tuple[NDArray[Any], NDArray[Any]]:
    """Return orthonormal rows of both in Euclidean coordinates, in double precision."""
    bases = [x for x in (a, b) if isinstance(x, StreamBasis | PrincipalBasis)]
    if len(bases) == 2:
        _check_alike(bases[0], bases[1], dtypes=False)
    like = bases[0] if bases else None
    first, second = _rows(a, like), _rows(b, like)
    if first.shape[1] != second.shape[1]:
        raise SettingError(f"vectors of {first.shape[1]} and of {second.shape[1]} channels")
    return first, second


def _rows(x: Comparable, like: StreamBasis | PrincipalBasis | None) -> NDArray[Any]:
    """Return orthonormal rows that span what x spans, entered into the inner product of like."""
    if isinstance(x, StreamBasis | PrincipalBasis):
        with x._lock:
            rows: NDArray[Any] = x._core.directions
            return rows.astype(np.complex128 if rows.dtype.kind == "c" else np.float64)
    array = np.atleast_2d(np.asarray(x))
    if array.ndim != 2 or array.shape[1] == 0:
        raise SampleError(f"vectors: shape {array.shape}, expected (vectors, channels)")
    wide = np.dtype(np.complex128 if array.dtype.kind == "c" else np.float64)
    rows = many_samples(array, like._channels if like else Channels(array.shape[1]), wide)
    if like is not None and like._inner.given is not None:
        rows = Inner(like._inner.given, rows.shape[1], np.dtype(np.complex128)).enter(rows)
    # powers of two bring every row to a length near 1, so that scale decides nothing
    lengths = np.abs(rows).max(axis=1, initial=0.0)
    rows = rows[lengths > 0]
    exponents = np.frexp(lengths[lengths > 0])[1][:, None]
    rows = np.ldexp(rows.view(np.float64), -exponents).view(rows.dtype)
    gram = rows @ rows.conj().T
    rounding = SPAN_TOLERANCE * float(np.finfo(np.float64).eps) * max(rows.shape)
    if np.abs(gram - np.eye(len(rows))).max(initial=0.0) <= rounding:
        return rows
    vectors: NDArray[Any]
    _, singular, vectors = np.linalg.svd(
        rows / np.sqrt(gram.diagonal().real)[:, None], full_matrices=False
    )
    rank = int(np.count_nonzero(singular > rounding * singular[0]))
    return vectors[:rank]


def _sines_and_cosines(
    a: NDArray[Any], b: NDArray[Any]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return sines and cosines of the principal angles, angles ascending."""
    large, small = (a, b) if len(a) >= len(b) else (b, a)
    if not len(small):
        return np.zeros(0), np.ones(0)
    inside = small @ large.conj().T
    outside = small - inside @ large
    # what one projection leaves inside by rounding would be taken for an angle
    outside -= (outside @ large.conj().T) @ large
    sines = np.linalg.svd(outside, compute_uv=False)[: len(small)][::-1]
    cosines = np.linalg.svd(inside, compute_uv=False)
    return sines, cosines
