"""Push one sample to a basis that grows for ever."""

from __future__ import annotations

import math

from streambasis.kernels._jit import kernel
from streambasis.kernels.projection import (
    ALWAYS,
    CRITERION,
    NEVER,
    mgs_pass,
    orthogonalize,
    rounding_floor,
)
from streambasis.kernels.scaling import epsilon_of, norm, scaled_copy

__all__ = ["ALWAYS", "CRITERION", "NEVER", "mgs_pass", "norm", "orthogonalize", "scaled_copy"]

# entries of the integer header that every basis kernel shares; pivots and exponents follow
COUNT, RANK, CAPACITY, POLICY, UNCOVERED, RENEWALS = range(6)
HEADER = 6
# entries of the real header
RTOL, ATOL, COVERAGE, INEXACT = range(4)
# reasons, in the order of streambasis.decisions.REASONS, and what a caller must see to first
INDEPENDENT, DEPENDENT, FULL, ZERO = range(4)
NOT_FINITE, NEEDS_ROOM = -1, -2


@kernel()
def push_growing(directions, factor, work, integers, reals, sample):
    """Push one sample to a basis without a window.

    ``work`` holds the residual, then the coefficients; ``integers`` the header, then the pivot
    samples, then their exponents; ``reals`` the tolerances, the largest residual of a rejected
    sample over its tolerance, and the largest over its norm since the last growth. Every second
    sample walks the directions backwards, and so finds in cache what the one before it left there.

    Returns ``(sample number, norm, residual, tolerance, grew, reason, rank, passes, 0, 0)``; a
    negative reason says that nothing was changed: NOT_FINITE or NEEDS_ROOM.
    """
    rank = integers[RANK]
    number = integers[COUNT]
    rows, channels = directions.shape
    residual = work[:channels]
    coefficients = work[channels:]
    position, exponent = scaled_copy(sample, residual)
    if position >= 0:
        return number, 0.0, 0.0, 0.0, False, NOT_FINITE, rank, 0, 0, 0
    length = norm(residual)
    rtol = max(reals[RTOL], rounding_floor(rank) * epsilon_of(residual))
    tolerance = max(rtol * length, math.ldexp(reals[ATOL], -exponent))
    left, passes = orthogonalize(
        directions, rank, residual, coefficients, tolerance, integers[POLICY], number & 1 == 1
    )
    grew = False
    if length == 0.0:
        reason = ZERO
    elif left <= tolerance:
        reason = DEPENDENT
        reals[COVERAGE] = max(reals[COVERAGE], left / tolerance)
        reals[INEXACT] = max(reals[INEXACT], left / length)
    elif rank >= integers[CAPACITY]:
        reason = FULL
        reals[INEXACT] = 1.0
        integers[UNCOVERED] += 1
    elif rank >= rows:
        return number, 0.0, 0.0, 0.0, False, NEEDS_ROOM, rank, 0, 0, 0
    else:
        reason = INDEPENDENT
        reals[INEXACT] = 0.0
        grew = True
        for i in range(channels):
            directions[rank, i] = residual[i] / left
        for j in range(rank):
            factor[rank, j] = coefficients[j]
        factor[rank, rank] = left
        integers[HEADER + rank] = number
        integers[HEADER + rows + rank] = exponent
        rank += 1
        integers[RANK] = rank
    integers[COUNT] = number + 1
    return (
        number,
        math.ldexp(length, exponent),
        math.ldexp(left, exponent),
        math.ldexp(tolerance, exponent),
        grew,
        reason,
        rank,
        passes,
        0,
        0,
    )


@kernel()
def solve_rows(factor, rank, rows):
    """Overwrite each row c of ``rows`` with the solution y of ``y L = c``, L the lower factor."""
    for i in range(rows.shape[0]):
        row = rows[i]
        for j in range(rank - 1, -1, -1):
            row[j] = row[j] / factor[j, j]
            for k in range(j):
                row[k] -= row[j] * factor[j, k]


@kernel()
def orthonormalize_rows(directions, rank, out, between):
    """Orthonormalize the first ``rank`` rows of ``directions`` into ``out``, in their order.

    ``between`` is filled with the lower triangular factor of ``directions = between @ out``.
    """
    for j in range(rank):
        row = out[j]
        for i in range(row.shape[0]):
            row[i] = directions[j, i]
        left, _ = orthogonalize(out, j, row, between[j], 0.0, ALWAYS)
        for i in range(row.shape[0]):
            row[i] = row[i] / left
        between[j, j] = left
