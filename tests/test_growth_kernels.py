"""The growth kernels do what their plain twins do, on every dtype and at every size."""

from __future__ import annotations

import math

import numba
import numpy as np
import pytest

from streambasis.kernels import block, growth, projection, scaling
from tests.reference import (
    DTYPES,
    epsilon,
    one_pass,
    orthonormal_rows,
    random_rows,
    scaled_copy,
)

pytestmark = pytest.mark.kernels

# as plain Python the large ones would take minutes
SHAPES = [(1, 16), (16, 64), (64, 64)]
if not numba.config.DISABLE_JIT:
    SHAPES += [(128, 1024), (600, 1500)]

ROUNDINGS = 16
"""Difference allowed between two orders of summation, in epsilons of the largest norm."""


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("power", [-1060, -400, -140, -126, -3, 0, 1, 100, 127, 1000, 1023])
def test_scaling_is_exact_and_brings_the_largest_part_below_one(dtype: str, power: int) -> None:
    """A sample is its scaled copy times the power of two, bit for bit, subnormal or huge."""
    rng = np.random.default_rng(power + 2000)
    kind = np.dtype(dtype)
    real = random_rows(rng, 1, 2 * 7, "float64")[0].astype(kind.type(0).real.dtype)
    with np.errstate(over="ignore"):
        sample = np.ldexp(real / 4, power).view(kind)[: 7 if kind.kind == "c" else 14]
    if not np.isfinite(sample).all() or not sample.any():
        return  # beyond the range of this dtype
    out = np.empty_like(sample)
    position, exponent = growth.scaled_copy(sample, out)
    expected_position, expected_exponent, expected = scaled_copy(sample)
    assert (position, exponent) == (expected_position, expected_exponent)
    np.testing.assert_array_equal(out, expected)
    parts = np.abs(out.view(out.real.dtype))
    assert 0.5 <= parts.max() < 1
    np.testing.assert_array_equal(np.ldexp(out.view(out.real.dtype), exponent).view(kind), sample)


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf])
def test_scaling_finds_the_first_value_that_is_not_finite(dtype: str, value: float) -> None:
    """The position of the first NaN or infinity comes back, wherever it is."""
    for place in range(9):
        sample = np.ones(9, dtype)
        sample[place:] = value
        assert growth.scaled_copy(sample, np.empty_like(sample))[0] == place


def test_zero_and_the_least_subnormal_number() -> None:
    """Zero has exponent 0; the least subnormal number is scaled to one half."""
    out = np.empty(3)
    assert growth.scaled_copy(np.zeros(3), out) == (-1, 0)
    assert growth.scaled_copy(np.array([0.0, 5e-324, 0.0]), out) == (-1, -1073)
    assert out[1] == 0.5
    single = np.empty(1, np.float32)
    assert growth.scaled_copy(np.array([1e-45], np.float32), single) == (-1, -148)


@pytest.mark.parametrize("dtype", DTYPES)
def test_norms_are_summed_in_double_precision(dtype: str) -> None:
    """The norm of a long vector is right to double precision whatever its dtype."""
    vector = random_rows(np.random.default_rng(1), 1, 10_007, dtype)[0]
    wide = vector.astype("complex128" if vector.dtype.kind == "c" else "float64")
    assert scaling.norm(vector) == pytest.approx(np.linalg.norm(wide), rel=1e-13)


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("rank", [0, 1, 2, 3, 4, 5, 7, 8, 13])
@pytest.mark.parametrize("backward", [False, True])
def test_a_pass_is_a_pass_in_groups_or_one_by_one(dtype: str, rank: int, backward: bool) -> None:
    """Grouped passes leave what modified Gram-Schmidt leaves, to rounding, in either order."""
    rng = np.random.default_rng(rank)
    for count in (13, 16, 37):
        held = np.zeros((rank + 2, count), dtype)
        held[:rank] = orthonormal_rows(rng, rank, count, dtype)
        held[rank:] = 1e30  # rows beyond the rank must not matter
        sample = random_rows(rng, 1, count, dtype)[0]
        expected, left = one_pass(held[:rank], sample)
        bound = ROUNDINGS * epsilon(dtype) * np.linalg.norm(sample)
        for run in (
            lambda r, c, held=held: projection.pass_over(held, rank, r, c, backward),
            lambda r, c, held=held: projection.take_out(held, 0, rank, r, c),
            lambda r, c, held=held: projection.mgs_pass(held, rank, r, c),
        ):
            residual, coefficients = sample.copy(), np.zeros(rank + 1, dtype)
            taken = run(residual, coefficients)
            assert np.abs(coefficients[:rank] - expected).max(initial=0) <= bound
            assert coefficients[rank] == 0
            assert np.abs(residual - left).max() <= bound
            assert taken == pytest.approx(np.abs(expected).sum(), rel=1e-5)


def test_long_rows_are_taken_out_like_short_ones() -> None:
    """Rows longer than LONG_ROW take another way to the same residual."""
    rng = np.random.default_rng(12)
    count = projection.LONG_ROW // 8 + 5
    held = orthonormal_rows(rng, 9, count)
    sample = random_rows(rng, 1, count)[0]
    expected, left = one_pass(held, sample)
    bound = ROUNDINGS * epsilon("float64") * np.linalg.norm(sample)
    for backward in (False, True):
        residual, coefficients = sample.copy(), np.zeros(9)
        projection.take_out_groups(held, 2, residual, coefficients, backward)
        projection.take_out_real(held, 8, 9, residual, coefficients)
        assert np.abs(coefficients - expected).max() <= bound
        assert np.abs(residual - left).max() <= bound


def test_a_dependent_sample_leaves_less_than_a_third_of_the_rounding_floor() -> None:
    """One pass leaves less than 0.34·max(8, sqrt(rank)) epsilons of a sample in the span."""
    rng = np.random.default_rng(3)
    share = 0.34
    for dtype in ("float32", "float64", "complex128"):
        for rank, count in SHAPES:
            held = orthonormal_rows(rng, rank, count, dtype)
            worst = 0.0
            for row in random_rows(rng, 10, rank, dtype):
                residual = row @ held
                size = np.linalg.norm(residual)
                projection.pass_over(held, rank, residual, np.zeros(rank, dtype), False)
                projection.pass_over(held, rank, residual, np.zeros(rank, dtype), True)
                worst = max(worst, scaling.norm(residual) / size)
            floor = projection.rounding_floor(rank) * epsilon(dtype)
            assert worst <= share * floor, (dtype, rank, count, worst / floor)


def test_a_residual_near_its_tolerance_gets_a_second_pass() -> None:
    """Clear rejections and clear growths cost one pass, a residual within rounding of it two."""
    rng = np.random.default_rng(4)
    held = orthonormal_rows(rng, 4, 32)
    beside = orthonormal_rows(rng, 5, 32)[4]
    beside -= held.T @ (held @ beside)
    beside /= np.linalg.norm(beside)
    sample = held.sum(axis=0) + 1e-6 * beside

    def passes(tolerance: float) -> int:
        return growth.orthogonalize(
            held, 4, sample.copy(), np.zeros(4), tolerance, growth.CRITERION
        )[1]

    assert passes(2e-6) == 1
    assert passes(1e-6 * (1 + 1e-12)) == 2
    assert passes(1e-6 * (1 - 1e-12)) == 2
    assert growth.orthogonalize(held, 4, beside.copy(), np.zeros(4), 0.5, growth.CRITERION)[1] == 1


def test_the_criterion_divides_by_the_norm_after_projection() -> None:
    """A second pass is made just when sum |c| exceeds 0.99 times what is left (Giraud & Langou)."""
    held = np.eye(1, 8)
    for ratio, expected in ((0.98, 1), (1.0, 2)):
        sample = np.zeros(8)
        sample[0], sample[1] = ratio, 1.0
        coefficients = np.zeros(1)
        left, passes = growth.orthogonalize(held, 1, sample, coefficients, 1e-9, growth.CRITERION)
        assert (left, passes, coefficients[0]) == (1.0, expected, ratio)


@pytest.mark.parametrize("dtype", DTYPES)
def test_measures_of_a_block_are_those_of_its_rows(dtype: str) -> None:
    """Rests, square sums and absolute coefficients agree with NumPy."""
    rng = np.random.default_rng(6)
    samples = random_rows(rng, 5, 19, dtype)
    inside = random_rows(rng, 5, 19, dtype)
    coefficients = random_rows(rng, 5, 3, dtype)
    rests, measures = inside.copy(), np.empty((3, 5))
    block.measure_block(samples, rests, coefficients, measures)
    np.testing.assert_array_equal(rests, samples - inside)
    for row, values in (
        (block.SQUARE, np.square(np.abs(samples)).sum(axis=1)),
        (block.LEFT, np.square(np.abs(rests)).sum(axis=1)),
        (block.TAKEN, np.abs(coefficients).sum(axis=1)),
    ):
        np.testing.assert_allclose(measures[row], values, rtol=1e-5 if "32" in dtype else 1e-6)


@pytest.mark.parametrize("dtype", DTYPES)
def test_rows_are_solved_by_the_lower_factor(dtype: str) -> None:
    """Each row y of the result satisfies y L = c."""
    rng = np.random.default_rng(7)
    factor = np.tril(random_rows(rng, 6, 6, dtype)) + 4 * np.eye(6, dtype=dtype)
    right = random_rows(rng, 3, 6, dtype)
    rows = right.copy()
    growth.solve_rows(factor, 6, rows)
    np.testing.assert_allclose(rows @ factor, right, atol=100 * epsilon(dtype))


def test_the_floor_grows_with_the_root_of_the_rank() -> None:
    """Eight epsilons up to rank 64, the root of the rank beyond."""
    assert [projection.rounding_floor(k) for k in (0, 64, 100)] == [8.0, 8.0, 10.0]
    assert math.isclose(projection.rounding_floor(10_000), 100.0)
