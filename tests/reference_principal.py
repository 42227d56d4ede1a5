"""Batch twins of the principal basis: what a tracked subspace must equal, in plain NumPy."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis import PrincipalBasis


def normal(rng: np.random.Generator, shape: tuple[int, ...], dtype: str) -> NDArray[Any]:
    """Return standard normal values of a dtype; complex ones have variance 1 in all."""
    kind = np.dtype(dtype)
    if kind.kind == "c":
        both = rng.standard_normal((2, *shape)) / np.sqrt(2)
        return (both[0] + 1j * both[1]).astype(kind)
    return rng.standard_normal(shape).astype(kind)


def noisy_feed(
    rng: np.random.Generator,
    samples: int,
    channels: int,
    sources: int,
    noise: float,
    dtype: str = "float64",
) -> tuple[NDArray[Any], NDArray[Any]]:
    """Return a feed of independent sources in white noise, and the sources' subspace as rows.

    The sources have variances 1, 1/2, 1/3, ... times the number of channels, so that their order
    is clear; ``noise`` is the standard deviation of the noise per channel.
    """
    rows = np.linalg.qr(normal(rng, (channels, sources), dtype))[0].T
    amplitudes = np.sqrt(channels / np.arange(1.0, sources + 1))
    feed = (normal(rng, (samples, sources), dtype) * amplitudes) @ rows
    feed = feed + noise * normal(rng, (samples, channels), dtype)
    return feed.astype(dtype), rows


def batch(
    samples: NDArray[Any], forget: float = 1.0, centre: bool = False
) -> tuple[NDArray[Any], NDArray[Any], NDArray[Any]]:
    """Return energies, directions as rows, and mean of weighted samples by one SVD of them all."""
    wide = samples.astype(np.complex128 if samples.dtype.kind == "c" else np.float64)
    weights = forget ** np.arange(len(wide) - 1, -1, -1.0)
    mean = weights @ wide / weights.sum() if centre else np.zeros(wide.shape[1])
    rows = np.sqrt(weights)[:, None] * (wide - mean)
    _, singular, vectors = np.linalg.svd(rows, full_matrices=False)
    return singular**2 / weights.sum(), vectors, mean


def sine(a: NDArray[Any], b: NDArray[Any]) -> float:
    """Return the sine of the largest principal angle between the spans of orthonormal rows."""
    return float(np.linalg.norm(b - (b @ a.conj().T) @ a, 2))


def scores(
    deviations: NDArray[Any], directions: NDArray[Any], spreads: NDArray[np.float64]
) -> tuple[NDArray[Any], NDArray[Any], NDArray[Any], NDArray[Any]]:
    """Return norm, residual, SPE and T² of samples about their mean, row by row."""
    wide = deviations.astype(np.complex128 if deviations.dtype.kind == "c" else np.float64)
    coordinates = wide @ directions.conj().T
    residual = np.linalg.norm(wide - coordinates @ directions, axis=1)
    t2 = (np.abs(coordinates / spreads) ** 2).sum(axis=1)
    return np.linalg.norm(wide, axis=1), residual, residual**2, t2


def row_squares(rows: NDArray[Any], least: float, most: float) -> tuple[NDArray[Any], bool]:
    """Return squared norms, and whether each is zero for a zero row or within the range."""
    wide = rows.astype(np.complex128 if rows.dtype.kind == "c" else np.float64)
    squares = (np.abs(wide) ** 2).sum(axis=1)
    return squares, bool((((squares > least) & (squares < most)) | ~rows.any(axis=1)).all())


def nystrom(
    rows: NDArray[Any], singular: NDArray[np.float64], samples: NDArray[Any]
) -> tuple[NDArray[np.float64], NDArray[Any], float]:
    """Return energies and directions of the Nyström approximation of a scatter, and its trace.

    The scatter is that of ``samples`` and of diag(singular) times the first ``rows``; it is
    approximated from its products with all the rows.
    """
    wide = rows.astype(samples.dtype)
    old = singular[:, None] * wide[: len(singular)]
    scatter = samples.conj().T @ samples + old.conj().T @ old
    across = wide @ scatter
    approximate = across.conj().T @ np.linalg.solve(across @ wide.conj().T, across)
    energies, columns = np.linalg.eigh(approximate)
    leading = slice(None, -len(rows) - 1, -1)
    return energies[leading], columns.conj().T[leading], float(np.trace(scatter).real)


def weighing(roots: NDArray[np.float64], shrink: float) -> NDArray[np.float64]:
    """Return the matrix that a block is multiplied by when it is folded."""
    return (np.eye(len(roots)) - shrink * np.outer(roots, roots)) * roots


def outside_squares(
    coordinates: NDArray[Any], squares: NDArray[np.float64], clear: float
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Return squares less those of the coordinates, and the samples of which little is left."""
    wide = coordinates.astype(np.complex128)
    left = squares - (np.abs(wide) ** 2).sum(axis=1)
    return left, np.flatnonzero(~(left > clear * squares))


def same(a: PrincipalBasis, b: PrincipalBasis) -> bool:
    """Say whether two bases are equal bit for bit in everything they go on from."""

    def flat(state: Any) -> Any:
        yield state.kind, state.facts
        yield from ((name, array.tobytes()) for name, array in sorted(state.arrays.items()))
        for name in sorted(state.parts):
            yield from flat(state.parts[name])

    return list(flat(a.to_state())) == list(flat(b.to_state()))
