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
    INDEPENDENT,
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
    directions, factor, work, integers, reals, samples, rests, measures, start, floats, whole
):
    """Decide the samples of a block from row ``start`` on, in order.

    A sample whose decision the measures leave no doubt about, and that does not change the basis,
    is decided by them. Any other goes through :func:`push_growing`: one near its tolerance, one
    whose squares may have overflown or underflown, and one that grows the basis, whereafter the
    rests of the following samples are corrected by the new direction. Without measures (no rows of
    ``rests``) every sample goes that way.

    Returns the row to go on from: the number of samples, or less where a growth needs room.
    """
    epsilon = epsilon_of(samples)
    # within these no square and no product that matters leaves the range of the type
    largest = 2.0**800 if samples.real.itemsize == 8 else 2.0**120
    channels = directions.shape[1]
    measured = rests.shape[0] > 0 and integers[POLICY] == CRITERION
    for i in range(start, samples.shape[0]):
        rank = integers[RANK]
        if measured and 1.0 / largest < measures[SQUARE, i] < largest:
            length = math.sqrt(measures[SQUARE, i])
            left = math.sqrt(measures[LEFT, i])
            doubt = epsilon * measures[TAKEN, i]
            rtol = max(reals[RTOL], rounding_floor(rank) * epsilon)
            tolerance = max(rtol * length, reals[ATOL])
            dependent = left + doubt <= tolerance
            if dependent or (rank == integers[CAPACITY] and left - doubt > tolerance):
                integers[COUNT] += 1
                floats[NORM, i], floats[RESIDUAL, i] = length, left
                floats[TOLERANCE, i] = tolerance
                whole[RANK_AFTER, i], whole[PASSES, i] = rank, 1
                if dependent:
                    whole[REASON, i] = DEPENDENT
                    reals[COVERAGE] = max(reals[COVERAGE], left / tolerance)
                else:
                    whole[REASON, i] = FULL
                    integers[UNCOVERED] += 1
                continue
        record = push_growing(directions, factor, work, integers, reals, samples[i])
        if record[5] == NEEDS_ROOM:
            return i
        floats[NORM, i], floats[RESIDUAL, i], floats[TOLERANCE, i] = record[1:4]
        whole[REASON, i], whole[RANK_AFTER, i], whole[PASSES, i] = record[5:8]
        if measured and record[5] == INDEPENDENT:
            correct_block(directions, rank, rests, i + 1, measures, work[channels:])
    return samples.shape[0]
