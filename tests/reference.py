"""Plain NumPy twins of the growth kernels, and a slow basis in extended precision."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

DTYPES = ("float32", "float64", "complex64", "complex128")


def random_rows(
    rng: np.random.Generator, rows: int, count: int, dtype: str = "float64"
) -> NDArray[Any]:
    """Return Gaussian samples of a dtype, (rows, count)."""
    out = rng.standard_normal((rows, count))
    if np.dtype(dtype).kind == "c":
        out = out + 1j * rng.standard_normal((rows, count))
    return out.astype(dtype)


def orthonormal_rows(
    rng: np.random.Generator, rows: int, count: int, dtype: str = "float64"
) -> NDArray[Any]:
    """Return orthonormal rows of a dtype, (rows, count)."""
    wide = "complex128" if np.dtype(dtype).kind == "c" else "float64"
    q = np.linalg.qr(random_rows(rng, rows, count, wide).T)[0]
    return np.ascontiguousarray(q.T.astype(dtype))


def epsilon(dtype: Any) -> float:
    """Return the machine epsilon of a dtype."""
    return float(np.finfo(dtype).eps)


def scaled_copy(sample: NDArray[Any]) -> tuple[int, int, NDArray[Any]]:
    """Twin of the kernel: position of what is not finite or -1, exponent, scaled sample."""
    parts = np.ascontiguousarray(sample).view(sample.real.dtype)
    finite = np.isfinite(sample)
    if not finite.all():
        return int(np.argmin(finite)), 0, sample
    exponent = int(np.frexp(np.abs(parts).max())[1])
    return -1, exponent, np.ldexp(parts, -exponent).view(sample.dtype)


def one_pass(directions: NDArray[Any], residual: NDArray[Any]) -> tuple[NDArray[Any], NDArray[Any]]:
    """Twin of a pass: coefficients and what is left, by modified Gram-Schmidt."""
    left = residual.copy()
    coefficients = np.zeros(len(directions), residual.dtype)
    for j, direction in enumerate(directions):
        coefficients[j] = np.vdot(direction, left)
        left = left - coefficients[j] * direction
    return coefficients, left


class SlowBasis:
    """The growing basis as a page of text has it, in extended precision."""

    def __init__(self, count: int, rtol: float, atol: float, capacity: int) -> None:
        self.count, self.rtol, self.atol, self.capacity = count, rtol, atol, capacity
        self.directions: list[NDArray[Any]] = []

    def push(self, sample: NDArray[Any]) -> tuple[str, float, float]:
        """Return the reason, the residual and the tolerance, in extended precision."""
        wide = np.clongdouble if sample.dtype.kind == "c" else np.longdouble
        rest = sample.astype(wide)
        norm = np.sqrt(np.sum(np.abs(rest) ** 2))
        for _ in range(2):
            for direction in self.directions:
                rest = rest - np.sum(direction.conj() * rest) * direction
        left = np.sqrt(np.sum(np.abs(rest) ** 2))
        floor = epsilon(sample.dtype) * max(8.0, np.sqrt(len(self.directions)))
        tolerance = max(self.atol, max(self.rtol, floor) * norm)
        if norm == 0:
            return "zero", 0.0, float(tolerance)
        if left <= tolerance:
            return "dependent", float(left), float(tolerance)
        if len(self.directions) == self.capacity:
            return "full", float(left), float(tolerance)
        self.directions.append(rest / left)
        return "independent", float(left), float(tolerance)
