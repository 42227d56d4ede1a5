"""A sliding window the slow way: keep the samples, factorize them from scratch.

``Schedule`` says which samples a window holds, in a dozen lines; ``factorize`` is the singular
value decomposition with a tolerance; ``laid_open`` takes a state apart and asserts every invariant
that the kernels rely on.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from streambasis import StreamBasis
from streambasis.audit import orthogonality, unit_roundoff
from streambasis.kernels import exchange, growth


@dataclass
class Schedule:
    """Which samples are in a window by count, by time or both."""

    window: int | None = None
    span: float | None = None
    samples: dict[int, tuple[NDArray, float | None]] = field(default_factory=dict)
    count: int = 0

    def push(self, sample: NDArray, at: float | None = None) -> int:
        """Let one sample in and return how many left for it."""
        before = len(self.samples)
        if self.span is not None:
            self.expire_to(at - self.span)
        while self.window is not None and len(self.samples) >= self.window:
            del self.samples[next(iter(self.samples))]
        self.samples[self.count] = (sample, at)
        self.count += 1
        return before + 1 - len(self.samples)

    def expire_to(self, horizon: float) -> int:
        """Let the samples stamped at or before a time out and return how many they were."""
        gone = [i for i, (_, at) in self.samples.items() if at <= horizon]
        for i in gone:
            del self.samples[i]
        return len(gone)

    def matrix(self, channels: int, dtype: str = "float64") -> NDArray:
        """Return the samples as rows."""
        rows = [sample for sample, _ in self.samples.values()]
        return np.array(rows, dtype).reshape(len(rows), channels)


def unit_rows(samples: NDArray) -> NDArray:
    """Return the rows in double precision, each at norm 1; zero rows stay zero."""
    wide = samples.astype(np.complex128 if samples.dtype.kind == "c" else np.float64)
    largest = np.abs(wide).max(axis=-1, keepdims=True, initial=0.0)
    wide = wide / np.where(largest > 0, largest, 1.0)
    lengths = np.linalg.norm(wide, axis=-1, keepdims=True)
    return wide / np.where(lengths > 0, lengths, 1.0)


def factorize(samples: NDArray, tolerance: float) -> NDArray:
    """Return an orthonormal basis of the rows, each scaled to norm 1, down to a singular value."""
    _, values, vectors = np.linalg.svd(unit_rows(samples), full_matrices=False)
    return vectors[values > tolerance]


def distance(a: NDArray, b: NDArray) -> float:
    """Return the sine of the largest angle between two subspaces of one dimension, given as rows.

    Björck & Golub (1973), Math. Comp. 27:579: the norm of (I - P_a) applied to a basis of b.
    """
    assert len(a) == len(b)
    return float(np.linalg.norm(b - (b @ a.conj().T) @ a, 2)) if len(b) else 0.0


def laid_open(basis: StreamBasis) -> dict[str, NDArray]:
    """Return the numbers, coordinates, exponents and losses of the samples, oldest first.

    Asserts what the kernels rely on: one list of all samples from oldest to newest and one of all
    free slots; one pivot per direction; coordinates of pivots that Q R reproduces with orthonormal
    Q and triangular R; orthonormal directions.
    """
    core = basis.to_state().parts["core"]
    arrays = core.arrays
    header, members = arrays["header"], arrays["members"]
    k = len(arrays["vectors"])
    order, slot, newer = [], int(header[exchange.NEWEST]), exchange.NONE
    while slot != exchange.NONE:
        assert members[slot, exchange.NEWER] == newer
        order.append(slot)
        newer, slot = slot, int(members[slot, exchange.OLDER])
    assert newer == header[exchange.OLDEST]
    order.reverse()
    free, slot = [], int(header[exchange.FREE])
    while slot != exchange.NONE:
        free.append(slot)
        slot = int(members[slot, exchange.NEWER])
    assert sorted(order + free) == list(range(header[exchange.TOP]))
    assert len(order) == header[exchange.LIVE]
    numbers = members[order, exchange.ID]
    assert (np.diff(numbers) > 0).all()
    holders = arrays["holders"].astype(int)
    assert sorted(holders) == sorted(s for s in order if members[s, exchange.PIVOT] == 1)
    assert header[growth.RANK] == len(holders) == k
    owners = arrays["owners"].astype(int)
    assert [members[s, exchange.PLACE] for s in owners] == list(range(len(owners)))
    assert not set(owners) & set(holders)
    unit = unit_roundoff(arrays["vectors"].dtype)
    q, r = arrays["orthogonal"].T, arrays["triangular"]
    block = arrays["coordinates"][holders].T
    assert not np.tril(r, -1).any()
    assert np.abs(q.conj().T @ q - np.eye(k)).max(initial=0.0) < 300 * unit
    assert np.abs(q @ r - block).max(initial=0.0) < 300 * unit * max(
        1.0, np.abs(block).max(initial=0)
    )
    assert orthogonality(arrays["vectors"]) < 3.0
    return {
        "numbers": numbers,
        "coordinates": arrays["coordinates"][order],
        "exponents": members[order, exchange.EXPONENT],
        "lengths": arrays["sizes"][order, exchange.LENGTH],
        "tolerances": arrays["sizes"][order, exchange.TOLERANCE],
        "lost": arrays["sizes"][order, exchange.LOST],
        "vectors": arrays["vectors"],
    }


def reproduction(basis: StreamBasis, entered: NDArray) -> float:
    """Return how far samples differ from their coordinates times the directions.

    Parameters
    ----------
    entered : ndarray, shape (W, n)
        The samples of the window, in Euclidean coordinates, oldest first.

    Returns
    -------
    float
        Largest error over the sample's norm, beyond what it is known to have lost, in units of
        max(n, 16)·roundoff: the ratio that contract 2 uses.
    """
    held = laid_open(basis)
    unit = unit_roundoff(held["vectors"].dtype)
    wide = np.complex128 if entered.dtype.kind == "c" else np.float64
    scaled = entered.astype(wide) * np.ldexp(1.0, -held["exponents"].astype(int))[:, None]
    made = held["coordinates"].astype(wide) @ held["vectors"].astype(wide)
    lengths = np.where(held["lengths"] > 0, held["lengths"], 1.0)
    error = np.linalg.norm(scaled - made, axis=1)
    beyond = np.maximum(error - held["lost"], 0.0)
    return float((beyond / lengths).max(initial=0.0) / (max(entered.shape[1], 16) * unit))
