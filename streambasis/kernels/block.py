"""Decide a block of samples whose projections were computed by matrix products."""

from __future__ import annotations

import math

import numpy as np

from streambasis.kernels._jit import by_kind, kernel
from streambasis.kernels.growth import (
    ATOL,
    CAPACITY,
    COUNT,
    COVERAGE,
    CRITERION,
    DEPENDENT,
    FULL,
    INEXACT,
    NEEDS_ROOM,
    POLICY,
    RANK,
    RTOL,
    UNCOVERED,
    push_growing,
)
from streambasis.kernels.projection import rounding_floor, take_out
from streambasis.kernels.scaling import epsilon_of

# columns of the measures of a block, and of its decisions
SQUARE, LEFT, TAKEN = range(3)
NORM, RESIDUAL, TOLERANCE = range(3)
REASON, RANK_AFTER, PASSES = range(3)


@kernel(reassociate=True)
def square_sum(reals):
    """Return the sum of squares of real numbers, in double precision."""
    total = 0.0
    for i in range(reals.shape[0]):
        part = np.float64(reals[i])
        total += part * part
    return total


@kernel(reassociate=True)
def subtract_row(sample, inside):
    """Set ``inside`` to ``sample - inside``; return the square sums of both, real numbers."""
    square = 0.0
    left = 0.0
    for i in range(sample.shape[0]):
        whole = np.float64(sample[i])
        rest = sample[i] - inside[i]
        inside[i] = rest
        part = np.float64(rest)
        square += whole * whole
        left += part * part
    return square, left


@kernel(reassociate=True)
def absolute_sum_real(coefficients):
    """Return the sum of absolute values of real numbers."""
    total = 0.0
    for i in range(coefficients.shape[0]):
        total += abs(coefficients[i])
    return total


@kernel()
def absolute_sum_complex(coefficients):
    """Return the sum of absolute values of complex numbers."""
    total = 0.0
    for i in range(coefficients.shape[0]):
        total += math.hypot(coefficients[i].real, coefficients[i].imag)
    return total


absolute_sum = by_kind(absolute_sum_real, absolute_sum_complex)
"""Return the sum of the absolute values of coefficients."""


@kernel()
def measure_block(samples, rests, coefficients, measures):
    """Turn the parts inside the basis into the parts outside, and measure them.

    ``rests`` comes in as ``coefficients @ directions``. ``measures`` (3, m) is filled with the
    squared norms of the samples and of their rests and the sums of absolute coefficients.
    """
    kind = samples.real.dtype
    for i in range(samples.shape[0]):
        square, left = subtract_row(samples[i].view(kind), rests[i].view(kind))
        measures[SQUARE, i] = square
        measures[LEFT, i] = left
        measures[TAKEN, i] = absolute_sum(coefficients[i])


@kernel(reassociate=True)
def distance(sample, inside):
    """Return the square sums of ``sample`` and of ``sample - inside``, real numbers."""
    square = 0.0
    left = 0.0
    for i in range(sample.shape[0]):
        whole = sample[i]
        rest = whole - inside[i]
        square += whole * whole
        left += rest * rest
    return square, left


@kernel()
def measure_interpolated(samples, inside, measures):
    """Measure samples and their distance from interpolated ones, in double precision."""
    kind = samples.real.dtype
    for i in range(samples.shape[0]):
        square, left = distance(samples[i].view(kind), inside[i].view(kind))
        measures[SQUARE, i] = square
        measures[LEFT, i] = left


@kernel()
def pick_columns(rows, picked):
    """Pick as many columns of ``rows`` as there are rows, such that their square is well-behaved.

    Gaussian elimination that pivots over columns; ``rows`` is overwritten. ``picked`` is filled
    with the columns in the order in which they were picked.
    """
    count, width = rows.shape
    for j in range(count):
        row = rows[j]
        largest = -1.0
        for i in range(width):
            size = abs(row[i])
            if size > largest:
                largest = size
                picked[j] = i
        pivot = row[picked[j]]
        if pivot == 0:
            return
        for other in range(j + 1, count):
            factor = rows[other, picked[j]] / pivot
            for i in range(width):
                rows[other, i] -= factor * row[i]


@kernel()
def correct_block(directions, last, rests, start, measures, work):
    """Take one more direction, in row ``last``, out of the rests from row ``start`` on."""
    kind = rests.real.dtype
    for i in range(start, rests.shape[0]):
        work[last] = 0
        measures[TAKEN, i] += take_out(directions, last, last + 1, rests[i], work)
        measures[LEFT, i] = square_sum(rests[i].view(kind))


@kernel()
def decide_block(
    directions,
    factor,
    work,
    integers,
    reals,
    samples,
    rests,
    measures,
    exactness,
    start,
    floats,
    whole,
):
    """Decide the samples of a block from row ``start`` on, in order.

    A sample whose decision the measures leave no doubt about, and that does not change the basis,
    is decided by them. Any other goes through :func:`push_growing`: one near its tolerance, and one
    whose squares may have overflown or underflown. Without measures (no rows of ``rests``) every
    sample goes that way.

    With an ``exactness`` above 0 the rests are distances from interpolated samples, which are
    bounds of the residuals; they decide where they are below that share of the norm, and need no
    correction, since a span that grows comes no farther from a sample.

    Returns the row of a sample that grows the basis, or the number of samples. Its growth is left
    to the caller: compiled into this kernel, :func:`push_growing` rounds otherwise than by itself,
    and a direction just above its tolerance turns with the last digits, so that from then on a
    batch would have another basis than single pushes.
    """
    epsilon = epsilon_of(samples)
    # within these no square and no product that matters leaves the range of the type
    largest = 2.0**800 if samples.real.itemsize == 8 else 2.0**120
    measured = rests.shape[0] > 0 and integers[POLICY] == CRITERION
    doubted = 0
    for i in range(start, samples.shape[0]):
        rank = integers[RANK]
        if measured and 1.0 / largest < measures[SQUARE, i] < largest:
            length = math.sqrt(measures[SQUARE, i])
            left = math.sqrt(measures[LEFT, i])
            doubt = epsilon * measures[TAKEN, i]
            rtol = max(reals[RTOL], rounding_floor(rank) * epsilon)
            tolerance = max(rtol * length, reals[ATOL])
            if exactness > 0.0:
                dependent = left <= exactness * length
                full = False
            else:
                dependent = left + doubt <= tolerance
                full = rank == integers[CAPACITY] and left - doubt > tolerance
            if dependent or full:
                integers[COUNT] += 1
                floats[NORM, i], floats[RESIDUAL, i] = length, left
                floats[TOLERANCE, i] = tolerance
                whole[RANK_AFTER, i], whole[PASSES, i] = rank, 1
                if dependent:
                    whole[REASON, i] = DEPENDENT
                    reals[COVERAGE] = max(reals[COVERAGE], left / tolerance)
                    reals[INEXACT] = max(reals[INEXACT], left / length)
                else:
                    whole[REASON, i] = FULL
                    integers[UNCOVERED] += 1
                    reals[INEXACT] = 1.0
                continue
        doubted += 1
        # without a row to spare, what would grow the basis changes nothing
        record = push_growing(directions[:rank], factor, work, integers, reals, samples[i])
        if record[5] == NEEDS_ROOM:
            return i
        floats[NORM, i], floats[RESIDUAL, i], floats[TOLERANCE, i] = record[1:4]
        whole[REASON, i], whole[RANK_AFTER, i], whole[PASSES, i] = record[5:8]
    if exactness > 0.0 and 4 * doubted > samples.shape[0]:
        # interpolation decides too few to be worth it
        reals[INEXACT] = 1.0
    return samples.shape[0]
