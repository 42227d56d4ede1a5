"""Projection of batches that change nothing: two passes, safe at any scale."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray


def two_passes(rows: NDArray[Any], directions: NDArray[Any]) -> tuple[NDArray[Any], NDArray[Any]]:
    """Return coordinates (m, k) of Euclidean rows (m, n) in directions (k, n), and their rests.

    Notes
    -----
    The second pass makes the rests orthogonal to the directions to working precision relative to
    their own size (classical Gram-Schmidt twice; Giraud, Langou, Rozložník & van den Eshof 2005,
    Numer. Math. 101). 8·m·n·k flops.
    """
    first = rows @ directions.conj().T
    rest = rows - first @ directions
    second = rest @ directions.conj().T
    return first + second, rest - second @ directions


def powers_taken_out(rows: NDArray[Any]) -> tuple[NDArray[Any], NDArray[np.int64]]:
    """Return rows with their largest part in [1/2, 1), and the exponents of two to scale back.

    Rows of ordinary size are returned as they are, with exponent 0: scaling changes no bit there.
    """
    parts = rows.view(rows.real.dtype)
    largest = np.abs(parts).max(axis=1, initial=0)
    powers = np.frexp(largest)[1].astype(np.int64)
    ordinary = np.finfo(rows.dtype).maxexp // 4
    powers[np.abs(powers) < ordinary] = 0
    return (scaled_rows(rows, -powers), powers) if powers.any() else (rows, powers)


def scaled_rows(rows: NDArray[Any], powers: NDArray[np.int64]) -> NDArray[Any]:
    """Return each row times two to its power; beyond the range that is infinite or 0."""
    if not powers.any():
        return rows
    parts = np.ascontiguousarray(rows).view(rows.real.dtype)
    with np.errstate(over="ignore", under="ignore"):
        scaled: NDArray[Any] = np.ldexp(parts, powers[:, None]).view(rows.dtype)
    return scaled


def shift_entries(entries: NDArray[Any], powers: NDArray[np.int64]) -> NDArray[Any]:
    """Multiply each entry by two to its own power, in place; beyond the range: infinite or 0."""
    with np.errstate(over="ignore", under="ignore"):
        entries.real = np.ldexp(entries.real, powers)
        if entries.dtype.kind == "c":
            entries.imag = np.ldexp(entries.imag, powers)
    return entries
