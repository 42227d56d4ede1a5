"""Power-of-two scaling, norms, and how kernels look at numbers of any of the four types."""

from __future__ import annotations

import math

import numpy as np

from streambasis.kernels._jit import by_width, kernel

EPSILON = 2.0**-52
SINGLE_EPSILON = 2.0**-23


@kernel()
def epsilon_of(array):
    """Return the machine epsilon of the entries of an array, a constant when compiled."""
    return EPSILON if array.real.itemsize == 8 else SINGLE_EPSILON


@kernel()
def exponent_of_bits(largest, mantissa, bias, top):
    """Return ``(e, finite)`` of :func:`binary_exponent` from the largest pattern without sign."""
    power = largest >> mantissa
    if power == top:
        return 0, False
    if largest == 0:
        return 0, True
    exponent = power - bias
    if power == 0:
        # subnormal: the leading bit says how far below the least normal number
        while largest >> (mantissa - 1) == 0:
            largest = largest << 1
            exponent -= 1
    # as plain Python, where this is a NumPy integer, math.ldexp would refuse it
    return int(exponent), True


@kernel()
def exponent_single(reals):
    """Return :func:`binary_exponent` of single-precision numbers."""
    bits = reals.view(np.int32)
    largest = np.int64(0)
    for i in range(bits.shape[0]):
        largest = max(largest, np.int64(bits[i]) & 0x7FFFFFFF)
    return exponent_of_bits(largest, 23, 126, 255)


@kernel()
def exponent_double(reals):
    """Return :func:`binary_exponent` of double-precision numbers."""
    bits = reals.view(np.int64)
    largest = np.int64(0)
    for i in range(bits.shape[0]):
        largest = max(largest, bits[i] & 0x7FFFFFFFFFFFFFFF)
    return exponent_of_bits(largest, 52, 1022, 2047)


binary_exponent = by_width(exponent_single, exponent_double)
"""Return e with the largest absolute value in [2**(e-1), 2**e), and whether all are finite.

Bit patterns without their sign are ordered like absolute values, with infinity and NaN above every
finite number, and a maximum of integers vectorizes where one of floats may not.
"""


@kernel()
def scale(reals, exponent):
    """Multiply by 2**exponent, rounding only what becomes subnormal."""
    # two factors, since a single one overflows where subnormal numbers are scaled up
    half = exponent // 2
    first = reals.dtype.type(math.ldexp(1.0, half))
    second = reals.dtype.type(math.ldexp(1.0, exponent - half))
    for i in range(reals.shape[0]):
        reals[i] = (reals[i] * first) * second


@kernel()
def scaled_copy(sample, out):
    """Copy ``sample`` times the power of two that brings its largest part into [0.5, 1).

    Returns ``(position, exponent)``: the position of the first value that is not finite or -1,
    and the exponent e with ``sample = out · 2**e``. The product is exact but for parts 2**-1022
    times smaller than the largest (2**-126 in single precision), so that decisions do not depend
    on the scale. A zero sample has exponent 0. ``out`` is copied first and looked at afterwards:
    a thread that meanwhile writes to ``sample`` cannot slip a NaN past the check.
    """
    for i in range(sample.shape[0]):
        out[i] = sample[i]
    reals = out.view(out.real.dtype)
    exponent, finite = binary_exponent(reals)
    if not finite:
        position = 0
        while math.isfinite(out[position].real) and math.isfinite(out[position].imag):
            position += 1
        return position, 0
    scale(reals, -exponent)
    return -1, exponent


@kernel(reassociate=True)
def norm(vector):
    """Return the Euclidean norm of a vector whose squares neither overflow nor underflow.

    The sum is kept in double precision whatever the type.
    """
    reals = vector.view(vector.real.dtype)
    total = 0.0
    for i in range(reals.shape[0]):
        part = np.float64(reals[i])
        total += part * part
    return math.sqrt(total)
