"""What can be asked of a StreamBasis: nothing here changes it."""

from __future__ import annotations

import threading
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.audit import Audit, orthogonality
from streambasis.errors import SettingError
from streambasis.growth import Growth
from streambasis.inner import Inner
from streambasis.projecting import powers_taken_out, scaled_rows, two_passes
from streambasis.samples import Channels, many_samples, one_sample
from streambasis.window import Window


class Inspectable:
    """The questions that a :class:`~streambasis.StreamBasis` answers, over the core that it owns.

    Whoever pushes is kept out while an answer is put together; nothing is changed by asking.
    """

    __slots__ = (
        "_channels",
        "_core",
        "_dtype",
        "_inner",
        "_lock",
        "_plain",
        "_span",
        "_vectors",
        "_window",
    )

    _channels: Channels
    _core: Growth | Window
    _dtype: np.dtype[Any]
    _inner: Inner
    _lock: threading.Lock
    _plain: bool
    _span: int | None
    _vectors: tuple[Any, NDArray[Any]] | None
    _window: int | None

    @property
    def channels(self) -> tuple[str, ...]:
        """Names of the channels."""
        return self._channels.names

    @property
    def dtype(self) -> np.dtype[Any]:
        """Type of the samples and directions."""
        return self._dtype

    @property
    def rank(self) -> int:
        """Directions held."""
        return self._core.rank

    @property
    def capacity(self) -> int:
        """Most directions that are kept."""
        return self._core.capacity

    @property
    def window(self) -> int | None:
        """Most samples kept, None where their number is not limited."""
        return self._window

    @property
    def span(self) -> np.timedelta64 | None:
        """Length of time kept, None where it is not limited."""
        return None if self._span is None else np.timedelta64(self._span, "ns")

    @property
    def members(self) -> NDArray[np.int64]:
        """Numbers of the samples in the window, oldest first.

        Raises
        ------
        SettingError
            Without a window, since no single sample is kept.
        """
        with self._lock:
            return self._windowed("members").members

    @property
    def uncovered(self) -> NDArray[np.int64]:
        """Numbers of the samples of the window that the capacity leaves outside the span.

        Oldest first, which is the order in which they take their place when a direction is
        dropped; they are among the pivots, or covered, from then on.

        Raises
        ------
        SettingError
            Without a window, since no single sample is kept; the audit counts them.
        """
        with self._lock:
            return self._windowed("uncovered").waiting

    def _windowed(self, what: str) -> Window:
        if isinstance(self._core, Window):
            return self._core
        raise SettingError(
            f"{what}: a basis without a window keeps no samples and cannot forget; "
            "make it with window= or span="
        )

    @property
    def count(self) -> int:
        """Samples seen."""
        return self._core.count

    @property
    def nbytes(self) -> int:
        """Bytes of the arrays held; push_many takes its workspace anew and gives it back."""
        return self._core.nbytes + self._inner.nbytes

    @property
    def vectors(self) -> NDArray[Any]:
        """The directions in channel units, (rank, n), read-only; rows orthonormal in ``inner``.

        Notes
        -----
        Without an inner product and a window this is a view, and costs nothing; otherwise one of
        n·rank entries is computed when the directions have changed, and kept.
        """
        with self._lock:
            version = self._core.version
            if self._vectors is None or self._vectors[0] != version:
                held = self._core.directions
                if not self._plain:
                    out = self._inner.leave(held)
                else:
                    # the directions of a window are rotated where they are
                    out = held.copy() if isinstance(self._core, Window) else held.view()
                out.setflags(write=False)
                self._vectors = version, out
            return self._vectors[1]

    @property
    def pivots(self) -> NDArray[np.int64]:
        """Number of the pivot sample of each direction, (rank,)."""
        with self._lock:
            return self._core.pivots.copy()

    @property
    def triangular(self) -> NDArray[Any]:
        """The lower triangular factor L, (rank, rank), with ``pivot samples = L @ vectors``.

        Notes
        -----
        Its transpose is the R of a QR factorization of the pivot samples as columns; the diagonal
        is positive. An entry beyond the range of the dtype is infinite or 0.

        Raises
        ------
        SettingError
            With a window, whose directions are not in the order of its pivot samples.
        """
        with self._lock:
            if isinstance(self._core, Window):
                raise SettingError(
                    "triangular: the directions of a window are not in the order of its pivot "
                    "samples; coordinates(pivot samples) is what ties them together"
                )
            return self._core.triangular()

    def coordinates(self, x: Any) -> NDArray[Any]:
        """Return the inner products of the directions with x.

        Parameters
        ----------
        x : array_like of shape (n,) or (m, n), or an Arrow table
            In channel units. Nothing of the basis changes.

        Returns
        -------
        ndarray, shape (rank,) or (m, rank)
            With ``x ≈ coordinates @ vectors`` for an x in the span.

        Notes
        -----
        Two passes, 8·n·rank flops for each row; the error is of the order of eps·|x|.

        Examples
        --------
        >>> from streambasis import StreamBasis
        >>> basis = StreamBasis(2)
        >>> _ = basis.push([0.0, 2.0])
        >>> basis.coordinates([[3.0, 4.0], [4.0, 0.0]])
        array([[4.],
               [0.]])
        """
        rows, powers, single = self._rows(x)
        coordinates, _, _ = self._split(rows)
        out = scaled_rows(coordinates, powers)
        return out[0] if single else out

    def project(self, x: Any) -> NDArray[Any]:
        """Return the part of x inside the span, in channel units; parameters as for coordinates."""
        rows, powers, single = self._rows(x)
        coordinates, _, directions = self._split(rows)
        out = self._inner.leave(scaled_rows(coordinates @ directions, powers))
        return out[0] if single else out

    def residual(self, x: Any) -> NDArray[Any]:
        """Return the part of x outside the span, in channel units; parameters as for coordinates.

        Notes
        -----
        Its norm agrees with the one that push reports to within rounding of |x|.
        """
        rows, powers, single = self._rows(x)
        out = self._inner.leave(scaled_rows(self._split(rows)[1], powers))
        return out[0] if single else out

    def explain(self, x: Any) -> tuple[NDArray[np.int64], NDArray[Any], NDArray[Any]]:
        """Write x as a combination of the pivot samples, and what they cannot explain.

        Parameters
        ----------
        x : array_like of shape (n,) or (m, n), or an Arrow table
            In channel units. Nothing of the basis changes.

        Returns
        -------
        sample_ids : ndarray of int64, shape (rank,)
            Numbers of the pivot samples.
        weights : ndarray, shape (rank,) or (m, rank)
            With ``x = weights @ pivot_samples + residual``, in the units of the samples as they
            were pushed.
        residual : ndarray, shape of x
            The part of x outside the span.

        Notes
        -----
        The coordinates are divided by the triangular factor, rank² flops for each row. Weights of
        nearly dependent pivot samples are as uncertain as the condition that audit reports says;
        the combination itself is not.

        Examples
        --------
        >>> from streambasis import StreamBasis
        >>> basis = StreamBasis(3)
        >>> for sample in ([2.0, 0.0, 0.0], [4.0, 0.0, 0.0], [1.0, 1.0, 0.0]):
        ...     _ = basis.push(sample)
        >>> basis.explain([5.0, 3.0, 7.0])
        (array([0, 2]), array([1., 3.]), array([0., 0., 7.]))
        """
        rows, powers, single = self._rows(x)
        with self._lock:
            coordinates, rest = two_passes(rows, self._core.directions)
            samples, weights = self._core.pivots.copy(), self._core.weights(coordinates, powers)
        residual = self._inner.leave(scaled_rows(rest, powers))
        return (samples, weights[0], residual[0]) if single else (samples, weights, residual)

    def _rows(self, x: Any) -> tuple[NDArray[Any], NDArray[np.int64], bool]:
        """Return x as checked Euclidean rows below 1, the powers of two taken out, and if one."""
        arrow = hasattr(x, "__arrow_c_stream__") or hasattr(x, "__arrow_c_array__")
        single = not arrow and np.ndim(x) == 1
        if single:
            array = one_sample(x, self._channels, self._dtype)[None, :]
        else:
            array = many_samples(x, self._channels, self._dtype)
        rows, powers = powers_taken_out(array)
        return self._inner.enter(rows), powers, single

    def _split(self, rows: NDArray[Any]) -> tuple[NDArray[Any], NDArray[Any], NDArray[Any]]:
        """Return the coordinates of rows, their rests, and the directions they refer to."""
        with self._lock:
            directions = self._core.directions
            return *two_passes(rows, directions), directions

    def audit(self) -> Audit:
        """Measure the orthonormality, coverage and condition of the basis as it is.

        Notes
        -----
        2·n·rank² + O(rank³) flops.

        Examples
        --------
        >>> from streambasis import StreamBasis
        >>> basis = StreamBasis(3)
        >>> _ = basis.push_many([[1.0, 1.0, 1.0], [1.0, 1.0, 1.001], [5.0, 5.0, 5.0]])
        >>> audit = basis.audit()
        >>> audit.orthogonality < 3, audit.coverage < 1, audit.rank
        (True, True, 2)
        """
        with self._lock:
            core = self._core
            k = core.rank
            condition = 1.0
            if k:
                factor = core.factor
                scaled = factor / np.linalg.norm(factor, axis=1)[:, None]
                condition = float(np.linalg.cond(scaled))
            return Audit(
                orthogonality(core.directions),
                core.coverage,
                condition,
                core.renewals,
                k,
                core.count,
                core.uncovered,
            )
