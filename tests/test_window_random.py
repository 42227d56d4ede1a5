"""200,000 random operations on windows, held against factorizations from scratch.

The contracts of a window (DESIGN words: orthonormality, coverage, support, same span as starting
over) are checked after every operation. Checks are gathered and made in stacks, since a singular
value decomposition at a time would take longer than all operations together.
"""

from __future__ import annotations

import numpy as np
import pytest
import reference_window as reference

from streambasis import StreamBasis
from streambasis.audit import ORTHOGONALITY_LIMIT, unit_roundoff

OPERATIONS = 17_000
"""For each of the twelve kinds of window, 204,000 in all."""
CHANNELS, SOURCES, KEPT = 7, 5, 6
DISTANCE = {"float64": 1e-10, "complex128": 1e-10, "float32": 1e-3, "complex64": 1e-3}
"""Bounds on the sine of the largest angle to the subspace from scratch: rounding of the dtype
times the condition of the samples drawn here."""
GAP = {"float64": (1e-11, 1e-3), "complex128": (1e-11, 1e-3),
       "float32": (1e-5, 1e-3), "complex64": (1e-5, 1e-3)}  # fmt: skip
"""No singular value of a window of unit samples lies between."""


class Checks:
    """States of a window, gathered and held against factorizations from scratch in stacks."""

    def __init__(self, dtype: str, into: np.ndarray, kept: int) -> None:
        self.dtype, self.into = dtype, into
        wide = np.complex128 if np.dtype(dtype).kind == "c" else np.float64
        self.samples = np.zeros((400, kept, CHANNELS), wide)
        self.vectors = np.zeros((400, CHANNELS, CHANNELS), wide)
        self.pivots = np.zeros((400, CHANNELS, CHANNELS), wide)
        self.ranks = np.zeros(400, int)
        self.count = self.total = 0

    def add(self, basis: StreamBasis, schedule: reference.Schedule) -> None:
        """Take note of a window after an operation, check what needs no factorization."""
        numbers = basis.members.tolist()
        assert numbers == list(schedule.samples)
        i, rank = self.count, basis.rank
        pivots = basis.pivots.tolist()
        assert len(set(pivots)) == rank
        assert set(pivots) <= set(numbers)
        self.samples[i] = 0
        self.vectors[i] = 0
        self.pivots[i] = 0
        if numbers:
            rows = schedule.matrix(CHANNELS, self.samples.dtype)
            self.samples[i, : len(rows)] = rows
            self.pivots[i, :rank] = rows[np.searchsorted(numbers, pivots)]
        self.vectors[i, :rank] = basis.vectors
        self.ranks[i] = rank
        self.count += 1
        if self.count == len(self.ranks):
            self.flush()

    def flush(self) -> None:
        """Factorize all windows noted and compare."""
        some = slice(0, self.count)
        rows = reference.unit_rows(self.samples[some] @ self.into)
        vectors = self.vectors[some] @ self.into
        low, high = GAP[self.dtype]
        _, values, right = np.linalg.svd(rows, full_matrices=False)
        assert not ((values > low) & (values < high)).any(), "the stream has no gap"
        taken = values > high
        np.testing.assert_array_equal(self.ranks[some], taken.sum(axis=1))
        scratch = np.swapaxes(right.conj(), 1, 2) @ (taken[:, :, None] * right)
        ours = np.swapaxes(vectors.conj(), 1, 2) @ vectors
        assert np.linalg.norm(scratch - ours, axis=(1, 2)).max() < DISTANCE[self.dtype]
        gram = vectors @ np.swapaxes(vectors.conj(), 1, 2)
        held = np.arange(CHANNELS) < self.ranks[some, None]
        gram -= held[:, :, None] * np.eye(CHANNELS)
        loss = np.abs(gram).sum(axis=1).max() / (16 * unit_roundoff(np.dtype(self.dtype)))
        # an inner product rounds the directions once on their way out and once on their way in
        assert loss < ORTHOGONALITY_LIMIT * (1 if self.into.shape == (1, 1) else 3)
        support = np.linalg.svd(
            reference.unit_rows(self.pivots[some] @ self.into), compute_uv=False
        )
        np.testing.assert_array_equal((support > high).sum(axis=1), self.ranks[some])
        self.total += self.count
        self.count = 0


def inner_product(shape: str, rng: np.random.Generator, dtype: str):
    """Return an inner product and the map of rows into Euclidean coordinates."""
    if shape == "euclidean":
        return None, np.eye(CHANNELS)
    if shape == "weights":
        weights = rng.uniform(0.5, 2.0, CHANNELS)
        return weights, np.diag(np.sqrt(weights))
    root = rng.standard_normal((CHANNELS, CHANNELS))
    if np.dtype(dtype).kind == "c":
        root = root + 1j * rng.standard_normal((CHANNELS, CHANNELS))
    matrix = root @ root.conj().T / CHANNELS + np.eye(CHANNELS)
    return matrix, np.linalg.cholesky(matrix).conj()


def samples_with_a_gap(rng: np.random.Generator, count: int, dtype: str) -> np.ndarray:
    """Return small integer combinations of fixed directions, in many sizes, some with dust.

    Determinants of integers are integers, so that no two samples are nearly but not quite
    dependent; the dust lies four orders of magnitude below the tolerance.
    """
    fixed = np.random.default_rng(1)
    sources = fixed.standard_normal((SOURCES, CHANNELS))
    if np.dtype(dtype).kind == "c":
        sources = sources + 1j * fixed.standard_normal((SOURCES, CHANNELS))
    weights = rng.integers(-1, 3, (count, SOURCES)) * (rng.random((count, SOURCES)) < 0.3)
    out = weights @ sources
    dust = 1e-8 if np.finfo(dtype).bits == 32 else 1e-13
    dusty = (rng.random(count) < 0.3) & weights.any(axis=1)  # dust alone would be a direction
    out = out + dust * rng.standard_normal(out.shape) * dusty[:, None]
    return (out * 2.0 ** rng.integers(-30, 30, (count, 1))).astype(dtype)


@pytest.mark.parametrize("shape", ["euclidean", "weights", "matrix"])
@pytest.mark.parametrize("dtype", ["float64", "float32", "complex128", "complex64"])
def test_every_window_is_what_starting_over_would_give(dtype, shape):
    """Rank, span, orthonormality, pivots and members hold after each of 17,000 operations."""
    seed = sum(map(ord, dtype + shape))
    rng = np.random.default_rng(seed)
    inner, into = inner_product(shape, rng, dtype)
    by_time = shape != "weights"
    setting = {"span": 8.0, "window": KEPT + 3} if by_time else {"window": KEPT}
    basis = StreamBasis(CHANNELS, dtype=dtype, inner=inner, **setting)
    schedule = reference.Schedule(setting["window"], setting.get("span"))
    checks = Checks(dtype, into, setting["window"])
    samples = samples_with_a_gap(rng, 2 * OPERATIONS, dtype)
    following = iter(samples)
    choice = rng.random(OPERATIONS)
    clock = 0
    for draw in choice:
        if draw < 0.68:
            clock += int(rng.integers(0, 3))
            sample, at = next(following), float(clock) if by_time else None
            decision = basis.push(sample, at=at)
            assert decision.expired == schedule.push(sample, at)
        elif draw < 0.75:
            block = np.array([next(following) for _ in range(int(rng.integers(0, 9)))], dtype)
            block = block.reshape(-1, CHANNELS)
            times = clock + np.cumsum(rng.integers(0, 3, len(block)), dtype=float)
            clock = int(times[-1]) if len(block) else clock
            decisions = basis.push_many(block, at=times if by_time else None)
            stamps = times if by_time else [None] * len(block)
            expired = [schedule.push(x, t) for x, t in zip(block, stamps, strict=True)]
            assert decisions.expired.tolist() == expired
        elif draw < 0.97:
            if schedule.samples:
                numbers = list(schedule.samples)
                number = numbers[int(rng.integers(0, len(numbers)))]
                basis.retract(number)
                del schedule.samples[number]
        elif by_time:
            horizon = clock - int(rng.integers(0, 8))
            assert basis.expire(before=horizon) == schedule.expire_to(horizon - 0.5)
        checks.add(basis, schedule)
    checks.flush()
    assert checks.total == OPERATIONS
    audit = basis.audit()
    assert audit.coverage <= 1.0
    assert audit.renewals > 0
    reference.laid_open(basis)


@pytest.mark.parametrize("dtype", ["float64", "float32", "complex128", "complex64"])
@pytest.mark.parametrize("kept", [4, 11, 40])
def test_without_a_gap_coverage_and_support_hold_at_every_step(dtype, kept):
    """Noise right at the tolerance: each sample stays within its own, each pivot in the window."""
    rng = np.random.default_rng(kept)
    rtol = float(np.finfo(dtype).eps) ** 0.5
    basis = StreamBasis(CHANNELS, dtype=dtype, window=kept)
    schedule = reference.Schedule(kept)
    sources = rng.standard_normal((2, CHANNELS))
    for _ in range(3000):
        sample = rng.standard_normal(2) @ sources
        noise = rng.standard_normal(CHANNELS)
        size = rtol * rng.uniform(0.0, 3.0) * np.linalg.norm(sample) / np.linalg.norm(noise)
        sample = (sample + size * noise).astype(dtype)
        basis.push(sample)
        schedule.push(sample)
        if rng.random() < 0.1:
            number = int(rng.choice(list(schedule.samples)))
            basis.retract(number)
            del schedule.samples[number]
        rows = reference.unit_rows(schedule.matrix(CHANNELS, dtype))
        vectors = basis.vectors.astype(rows.dtype)
        outside = np.linalg.norm(rows - rows @ vectors.conj().T @ vectors, axis=1)
        assert outside.max(initial=0.0) <= rtol * (1 + 1e-6) + 50 * np.finfo(dtype).eps
        pivots = basis.pivots.tolist()
        assert len(set(pivots)) == basis.rank
        assert set(pivots) <= set(schedule.samples)
    assert basis.audit().coverage <= 1.0 + 1e-6
    reference.laid_open(basis)
