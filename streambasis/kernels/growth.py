"""Gram-Schmidt: project a sample on the directions held, decide, and grow.

Reordered sums are sound throughout: every bound used here (Björck 1967; Giraud, Langou, Rozložník
& van den Eshof 2005) holds for any order of summation.
"""

from __future__ import annotations

import math

from streambasis.kernels._jit import kernel

# entries of the integer header that every basis kernel shares
COUNT, RANK, CAPACITY, POLICY = range(4)
HEADER = 4
# entries of the real header
RTOL, ATOL = range(2)
REALS = 2
# reorthogonalization policies
CRITERION, NEVER, ALWAYS = range(3)
# reasons, in the order of streambasis.decisions.REASONS, and what a caller must see to first
INDEPENDENT, DEPENDENT, FULL, ZERO = range(4)
NOT_FINITE, NEEDS_ROOM = -1, -2

LOSS_LIMIT = 0.99
"""L of Giraud & Langou (2003): any value below 1 makes the criterion sound."""
MOST_PASSES = 4
"""Two suffice (Kahan, in Parlett 1980) unless the residual is at the rounding floor."""


@kernel(reassociate=True)
def scaled_copy(sample, out):
    """Copy ``sample`` times the power of two that brings its largest part into [0.5, 1).

    Returns ``(position, exponent)``: the position of the first value that is not finite or -1,
    and the exponent e with ``sample = out · 2**e``. The product is exact, so that decisions do not
    depend on the scale. A zero sample has exponent 0.
    """
    largest = 0.0
    for i in range(sample.shape[0]):
        part = max(abs(sample[i].real), abs(sample[i].imag))
        if not math.isfinite(part):
            return i, 0
        largest = max(largest, part)
    if largest == 0.0:
        out[:] = 0
        return -1, 0
    exponent = math.frexp(largest)[1]
    # two factors: 2**-exponent alone overflows for subnormal samples
    half = -exponent // 2
    first = sample.real.dtype.type(math.ldexp(1.0, half))
    second = sample.real.dtype.type(math.ldexp(1.0, -exponent - half))
    for i in range(sample.shape[0]):
        out[i] = sample[i] * first * second
    return -1, exponent


@kernel(reassociate=True)
def norm(vector):
    """Return the Euclidean norm of a vector whose squares neither overflow nor underflow."""
    total = 0.0
    for i in range(vector.shape[0]):
        total += vector[i].real * vector[i].real + vector[i].imag * vector[i].imag
    return math.sqrt(total)


@kernel(reassociate=True)
def mgs_pass(directions, rank, residual, coefficients):
    """Take the parts along the first ``rank`` directions out of ``residual``, in place.

    Adds what was taken out to ``coefficients`` and returns the sum of its absolute values. Each
    direction is read once from memory: its update finds it in cache.
    """
    taken = 0.0
    for j in range(rank):
        direction = directions[j]
        c = residual[0] * 0
        for i in range(residual.shape[0]):
            c += direction[i].conjugate() * residual[i]
        for i in range(residual.shape[0]):
            residual[i] -= c * direction[i]
        coefficients[j] += c
        taken += abs(c)
    return taken


@kernel()
def orthogonalize(directions, rank, residual, coefficients, tolerance, policy):
    """Make ``residual`` orthogonal to the first ``rank`` directions to working precision.

    ``coefficients[:rank]`` is set to the sum over all passes. Returns ``(residual norm, passes)``.
    A residual at or below ``tolerance`` after the first pass is left there. Otherwise a pass
    follows while the sum of the absolute coefficients of the last one exceeds
    ``LOSS_LIMIT`` times the norm it left (Giraud & Langou 2003).
    """
    for j in range(rank):
        coefficients[j] = 0
    passes = 0
    while True:
        taken = mgs_pass(directions, rank, residual, coefficients)
        passes += 1
        left = norm(residual)
        if left <= tolerance or passes == MOST_PASSES or policy == NEVER:
            return left, passes
        if policy == ALWAYS:
            if passes == 2:
                return left, passes
        elif taken <= LOSS_LIMIT * left:
            return left, passes


@kernel()
def push_growing(sample, directions, factor, integers, reals):
    """Push one sample to a basis without a window.

    The residual is computed in the row of ``directions`` after the last direction, its
    coefficients in that row of ``factor``: where they stay if the sample grows the basis.
    ``integers`` is the header, then the pivot samples, then their exponents.

    Returns ``(sample number, norm, residual, tolerance, grew, reason, rank, passes, 0, 0)``; a
    negative reason says that nothing was changed: NOT_FINITE or NEEDS_ROOM.
    """
    rank = integers[RANK]
    number = integers[COUNT]
    rows = directions.shape[0]
    if rank >= rows:
        return number, 0.0, 0.0, 0.0, False, NEEDS_ROOM, rank, 0, 0, 0
    residual = directions[rank]
    coefficients = factor[rank]
    position, exponent = scaled_copy(sample, residual)
    if position >= 0:
        return number, 0.0, 0.0, 0.0, False, NOT_FINITE, rank, 0, 0, 0
    length = norm(residual)
    tolerance = max(reals[RTOL] * length, math.ldexp(reals[ATOL], -exponent))
    left, passes = orthogonalize(
        directions, rank, residual, coefficients, tolerance, integers[POLICY]
    )
    grew = False
    if length == 0.0:
        reason = ZERO
    elif left <= tolerance:
        reason = DEPENDENT
    elif rank >= integers[CAPACITY]:
        reason = FULL
    else:
        reason = INDEPENDENT
        grew = True
        for i in range(residual.shape[0]):
            residual[i] = residual[i] / left
        coefficients[rank] = left
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
