"""Inner products, applied at the door so that one set of kernels serves them all.

With a Hermitian positive definite ``M = L Lᴴ`` the inner product of channel-unit vectors is
``<a, b> = aᴴ M b = (Lᴴ a)ᴴ (Lᴴ b)``: ``y = Lᴴ x`` enters the Euclidean world in which every kernel
works, and ``x = L⁻ᴴ y`` leaves it again. Weights are the diagonal case.
"""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from streambasis.errors import SettingError, SnapshotError
from streambasis.state import State


class Inner:
    """An inner product on the channels, as a pair of linear maps.

    Parameters
    ----------
    inner : None, array_like of shape (n,) or (n, n)
        None for the Euclidean inner product, positive weights, or a Hermitian positive definite
        matrix.
    count : int
        Number of channels n.
    dtype : numpy.dtype
        Type of the samples. A complex matrix needs a complex dtype.

    Raises
    ------
    SettingError
        If the shape is neither, a weight is not positive and finite, or the matrix is not
        Hermitian positive definite, or the range of the dtype does not hold their square roots.

    Notes
    -----
    The Cholesky factor and its inverse are taken once in double precision; each passage of m
    samples costs 2·m·n² flops with a matrix, m·n with weights and nothing without.
    """

    __slots__ = ("_into", "_out", "dtype", "given", "kind")

    def __init__(self, inner: ArrayLike | None, count: int, dtype: np.dtype[Any]) -> None:
        self.dtype: Final = dtype
        self.given: NDArray[Any] | None = None
        if inner is None:
            self.kind = "euclidean"
            return
        array = np.array(inner)
        if array.dtype.kind not in "biufc" or not np.isfinite(array).all():
            raise SettingError("inner: weights or matrix entries must be finite numbers")
        array = array.astype(np.complex128 if array.dtype.kind == "c" else np.float64)
        if array.shape == (count,):
            self.kind = "weights"
            if array.dtype.kind == "c" or not (array > 0).all():
                channel = int(np.argmax(~(array.real > 0)))
                raise SettingError(
                    f"inner: weight {array[channel]} of channel {channel}; weights are positive"
                )
            roots = np.sqrt(array)
            self._into, self._out = self._typed(roots), self._typed(1.0 / roots)
        elif array.shape == (count, count):
            self.kind = "matrix"
            if array.dtype.kind == "c" and dtype.kind != "c":
                raise SettingError(f"inner: a complex matrix needs a complex dtype, not {dtype}")
            gap = np.abs(array - array.conj().T).max()
            if gap > 64 * np.finfo(np.float64).eps * np.abs(array).max():
                raise SettingError(
                    f"inner: the matrix differs from its conjugate transpose by {gap:.3g}; "
                    "give a Hermitian one, such as (M + M.conj().T) / 2"
                )
            try:
                lower = np.linalg.cholesky(array)
            except np.linalg.LinAlgError:
                least = float(np.linalg.eigvalsh(array)[0])
                raise SettingError(
                    f"inner: the matrix is not positive definite (least eigenvalue {least:.3g})"
                ) from None
            # samples are rows here: (Lᴴ x)ᵀ = xᵀ conj(L)
            rows = np.ascontiguousarray(lower.conj())
            self._into, self._out = self._typed(rows), self._typed(np.linalg.inv(rows))
        else:
            raise SettingError(
                f"inner: shape {array.shape}, expected None, ({count},) or ({count}, {count})"
            )
        self.given = array
        self.given.setflags(write=False)

    @property
    def nbytes(self) -> int:
        """Bytes held."""
        if self.given is None:
            return 0
        return self.given.nbytes + self._into.nbytes + self._out.nbytes

    def _typed(self, array: NDArray[Any]) -> NDArray[Any]:
        real = array.dtype.kind != "c" and self.kind == "weights"
        with np.errstate(over="ignore", under="ignore"):
            typed = array.astype(np.finfo(self.dtype).dtype if real else self.dtype)
        if not np.isfinite(typed).all() or (real and not typed.all()):
            raise SettingError(
                f"inner: the {self.kind} go beyond the range of {self.dtype}; scale them, "
                "or take a wider dtype"
            )
        return typed

    def enter(self, samples: NDArray[Any]) -> NDArray[Any]:
        """Take channel-unit samples, (n,) or (m, n), into Euclidean coordinates."""
        if self.kind == "euclidean":
            return samples
        out: NDArray[Any]
        with np.errstate(over="ignore", invalid="ignore"):  # the kernels refuse what overflows
            out = samples * self._into if self.kind == "weights" else samples @ self._into
        return out

    def leave(self, vectors: NDArray[Any]) -> NDArray[Any]:
        """Take Euclidean vectors, (n,) or (m, n), back into channel units."""
        if self.kind == "euclidean":
            return vectors
        out: NDArray[Any]
        out = vectors * self._out if self.kind == "weights" else vectors @ self._out
        return out


def inner_of(state: State) -> NDArray[Any] | None:
    """Return the weights or the matrix that a state with the fact ``inner`` holds, or None.

    Raises
    ------
    SnapshotError
        If the fact and the array disagree.
    """
    dimensions = {"euclidean": 0, "weights": 1, "matrix": 2}
    given = state.arrays.get("inner")
    if dimensions.get(state.facts["inner"]) != (0 if given is None else given.ndim):
        raise SnapshotError(f"the inner product of a {state.kind} is not as its facts say")
    return given
