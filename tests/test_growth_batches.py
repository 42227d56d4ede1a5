"""Batches of a feed that is exact are interpolated from a few channels, and decide the same."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from streambasis import StreamBasis
from streambasis.growth import EXACT, MOST_SPREAD, PATIENCE, interpolation
from streambasis.kernels import block
from streambasis.kernels import growth as kernels
from tests.reference import orthonormal_rows, random_rows

DOUBLES = ("float64", "complex128")
BATCH_TOLERANCE = 1e-12
"""Difference allowed between a batch and single pushes, of the norm."""


def exact_feed(dtype: str, length: int, count: int = 48, rank: int = 6) -> NDArray:
    """Return samples without noise."""
    rng = np.random.default_rng(1)
    return random_rows(rng, length, rank, dtype) @ random_rows(rng, rank, count, dtype)


@pytest.mark.kernels
@pytest.mark.parametrize("dtype", DOUBLES)
@pytest.mark.parametrize(("rank", "count"), [(1, 1), (1, 9), (7, 7), (12, 40), (5, 400)])
def test_picked_channels_tell_the_others(dtype: str, rank: int, count: int) -> None:
    """Any x of the span is x[picked] @ rows, with entries that do not magnify rounding."""
    rng = np.random.default_rng(rank)
    directions = orthonormal_rows(rng, rank, count, dtype)
    picked, rows = interpolation(directions)
    assert len(set(picked)) == rank
    assert np.abs(rows).max() <= MOST_SPREAD
    x = random_rows(rng, 20, rank, dtype) @ directions
    rest = np.linalg.norm(x[:, picked] @ rows - x, axis=1)
    assert (rest <= EXACT / 16 * np.linalg.norm(x, axis=1)).all()


@pytest.mark.kernels
def test_directions_that_few_channels_carry_are_found() -> None:
    """Channels are picked where the directions are, however few of many those are."""
    directions = np.zeros((3, 5000))
    directions[[0, 1, 2], [17, 4321, 2]] = 1
    assert sorted(interpolation(directions)[0]) == [2, 17, 4321]


@pytest.mark.kernels
def test_what_cannot_be_interpolated_is_not() -> None:
    """Rows without an interpolation that keeps rounding small give none."""
    rows = np.ones((2, 8)) / np.sqrt(8)
    picked, found = interpolation(rows)
    assert len(picked) == len(found) == 0
    picked = np.zeros(2, np.int64)
    block.pick_columns(np.array([[1.0, 1e-3, 0.5], [0.5, 1.0, 0.25]]), picked)
    assert list(picked) == [0, 1]


@pytest.mark.parametrize("dtype", DOUBLES)
def test_an_exact_feed_is_interpolated_and_decides_the_same(dtype: str) -> None:
    """After some samples an exact feed is interpolated; every decision is that of single pushes."""
    samples = exact_feed(dtype, 1500)
    samples[700] = 0
    samples[800] *= 1e-290
    samples[900, 3] += 1e-6 * np.linalg.norm(samples[900])
    samples[1000, 5] += 1e-10 * np.linalg.norm(samples[1000])
    one, other = (StreamBasis(48, dtype=dtype, rtol=1e-8) for _ in range(2))
    singles = [one.push(sample) for sample in samples]
    batch = other.push_many(samples[:20])
    assert other._core.interpolation is None
    batches = [*batch, *other.push_many(samples[20:])]
    assert other._core.interpolation is not None
    for single, found in zip(singles, batches, strict=True):
        assert (single.sample, single.reason, single.rank) == (
            found.sample,
            found.reason,
            found.rank,
        )
        assert abs(single.residual - found.residual) <= BATCH_TOLERANCE * single.norm
        assert single.norm == pytest.approx(found.norm, rel=1e-13)
    assert singles[700].reason == "zero"
    assert singles[900].reason == "independent"
    assert singles[1000].reason == "dependent"
    assert abs(np.vdot(one.vectors[-1], other.vectors[-1])) == pytest.approx(1, abs=1e-9)


@pytest.mark.kernels
def test_a_feed_with_noise_is_projected_instead() -> None:
    """One sample with something outside the span ends interpolation until the next growth."""
    samples = exact_feed("float64", 2000)
    basis = StreamBasis(48, rtol=1e-3)
    basis.push_many(samples[:1000])
    basis.push_many(samples[1000:1500])
    assert basis._core._exact()
    noisy = samples[1500].copy()
    noisy[7] += 1e-5 * np.linalg.norm(noisy)
    assert basis.push(noisy).reason == "dependent"
    assert not basis._core._exact()
    basis.push(random_rows(np.random.default_rng(2), 1, 48)[0])
    assert basis.rank == 7
    basis.push_many(samples[: PATIENCE * 7 + 1])
    assert basis._core._exact()


@pytest.mark.kernels
def test_interpolation_that_decides_too_little_is_given_up() -> None:
    """When most samples of a block have to be pushed one by one, the next block is projected."""
    samples = exact_feed("float64", 1200)
    basis = StreamBasis(48, rtol=1e-3)
    basis.push_many(samples[:600])
    picked, rows = interpolation(basis._core.directions)
    wrong = np.nextafter(rows, 2) + 1e-10
    basis._core.interpolation = basis._core.version, picked, wrong
    decisions = basis.push_many(samples[600:])
    assert set(decisions.reason) == {"dependent"}
    assert (decisions.residual <= BATCH_TOLERANCE * decisions.norm).all()
    assert basis._core.reals[kernels.INEXACT] == 1.0


@pytest.mark.kernels
@pytest.mark.parametrize("dtype", ["float64", "complex128", "float32"])
def test_a_restart_within_an_exact_feed_is_invisible(dtype: str) -> None:
    """Contract 9 where samples are interpolated: what follows is the same bit for bit."""
    samples = exact_feed(dtype, 900)
    basis = StreamBasis(48, dtype=dtype)
    basis.push_many(samples[:300])
    basis.push_many(samples[300:600])
    other = StreamBasis.from_state(basis.to_state())
    expected, found = basis.push_many(samples[600:]), other.push_many(samples[600:])
    for name in ("residual", "norm", "tolerance", "rank"):
        np.testing.assert_array_equal(getattr(expected, name), getattr(found, name))
    assert basis.audit() == other.audit()


def test_bytes_of_an_interpolation_are_told() -> None:
    """The memory that interpolation takes shows in nbytes, and is bounded by the directions'."""
    samples = exact_feed("float64", 400)
    basis = StreamBasis(48)
    basis.push_many(samples[:20])
    before = basis.nbytes
    basis.push_many(samples[20:200])
    basis.push_many(samples[200:])
    assert before < basis.nbytes <= before + 2 * 6 * 48 * 8


@pytest.mark.parametrize("dtype", ["float32", "float64", "complex128"])
def test_no_batch_makes_a_feed_wait_for_a_compiler(dtype: str) -> None:
    """Read-only, short, long and Fortran-ordered batches run the kernels that are there."""
    samples = exact_feed(dtype, 700)
    StreamBasis(48, dtype=dtype).push_many(samples)
    kernels_used = (block.decide_block, block.measure_block, block.measure_interpolated)
    known = [len(kernel.overloads) for kernel in kernels_used]
    frozen = samples.copy()
    frozen.setflags(write=False)
    basis = StreamBasis(48, dtype=dtype)
    for batch in (frozen, frozen[:5], samples[:100], np.asfortranarray(samples), samples[::2]):
        assert len(basis.push_many(batch)) == len(batch)
    assert [len(kernel.overloads) for kernel in kernels_used] == known
