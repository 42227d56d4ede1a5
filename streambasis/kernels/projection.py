"""Gram-Schmidt passes: take out of a residual what lies along the directions held.

Directions are taken in groups of four. Within a group the coefficients come from the same residual
(classical Gram-Schmidt), from group to group the residual is updated first (modified
Gram-Schmidt). For directions with ``V Vᴴ = I + E`` the two differ by ``|E|·|residual|`` at most,
which is rounding as long as V is kept orthonormal to working precision, as the bases do. One
sweep over the entries takes out one group and meets the next, so that the residual is read and
written once per group, and directions come from memory once: what takes them out finds them in
cache.

Sums are reordered so that they vectorize: every bound used here (Björck 1967; Giraud & Langou 2003;
Giraud, Langou, Rozložník & van den Eshof 2005) holds for any order of summation.
"""

from __future__ import annotations

import math

from streambasis.kernels._jit import by_kind, kernel
from streambasis.kernels.scaling import epsilon_of, norm

# reorthogonalization policies
CRITERION, NEVER, ALWAYS = range(3)

LOSS_LIMIT = 0.99
"""L of Giraud & Langou (2003): any value below 1 makes the criterion sound."""
MOST_PASSES = 4
"""Two suffice (Kahan, in Parlett 1980) unless the residual is near the rounding floor."""
LONG_ROW = 2**17
"""Bytes of a direction above which a group is taken out before the next one is met. In one sweep
nine rows are read at once, from two levels of the memory: measured a tenth slower for long rows, a
tenth faster for short ones."""
ROUNDING_FLOOR = 8.0
"""No relative tolerance is below this many epsilons, nor below ``sqrt(rank)`` epsilons.

A pass takes ``rank`` multiples out of the residual, and each subtraction rounds every entry by at
most half an epsilon: independent errors with root mean square ``epsilon/sqrt(12)`` times the norm,
which add up to less than ``0.29·sqrt(rank)·epsilon`` for a dependent sample. The floor is more than
three times that, and 8 covers the dot products with the first few directions.
"""


@kernel()
def rounding_floor(rank):
    """Return the least relative tolerance at a rank, in epsilons."""
    return max(ROUNDING_FLOOR, math.sqrt(rank))


@kernel(reassociate=True)
def take_out_real(directions, start, stop, residual, coefficients):
    """Take real directions out one at a time, from ``start`` up to ``stop``.

    Adds the coefficients to ``coefficients`` and returns the sum of their absolute values.
    """
    taken = 0.0
    for j in range(start, stop):
        direction = directions[j]
        c = residual[0] * 0
        for i in range(residual.shape[0]):
            c += direction[i] * residual[i]
        for i in range(residual.shape[0]):
            residual[i] -= c * direction[i]
        coefficients[j] += c
        taken += abs(c)
    return taken


@kernel(reassociate=True)
def take_out_complex(directions, start, stop, residual, coefficients):
    """Take complex directions out one at a time, like :func:`take_out_real`.

    Real and imaginary parts are summed apart: products of complex numbers do not vectorize.
    """
    taken = 0.0
    for j in range(start, stop):
        direction = directions[j]
        p = residual[0].real * 0
        q = p
        for i in range(residual.shape[0]):
            v, x = direction[i], residual[i]
            p += v.real * x.real + v.imag * x.imag
            q += v.real * x.imag - v.imag * x.real
        for i in range(residual.shape[0]):
            v, x = direction[i], residual[i]
            residual[i] = complex(
                x.real - (p * v.real - q * v.imag), x.imag - (p * v.imag + q * v.real)
            )
        coefficients[j] += complex(p, q)
        taken += math.hypot(p, q)
    return taken


@kernel(reassociate=True)
def group_dots(directions, j, residual):
    """Return the inner products of four real directions with the residual."""
    v0, v1, v2, v3 = directions[j], directions[j + 1], directions[j + 2], directions[j + 3]
    c0 = residual[0] * 0
    c1 = c2 = c3 = c0
    for i in range(residual.shape[0]):
        x = residual[i]
        c0 += v0[i] * x
        c1 += v1[i] * x
        c2 += v2[i] * x
        c3 += v3[i] * x
    return c0, c1, c2, c3


@kernel(reassociate=True)
def group_update(directions, j, residual, c0, c1, c2, c3):
    """Take four real directions out of the residual."""
    v0, v1, v2, v3 = directions[j], directions[j + 1], directions[j + 2], directions[j + 3]
    for i in range(residual.shape[0]):
        residual[i] -= c0 * v0[i] + c1 * v1[i] + c2 * v2[i] + c3 * v3[i]


@kernel(reassociate=True)
def group_update_dots(directions, j, following, residual, c0, c1, c2, c3):
    """Take one group out of the residual and return the inner products with the following one."""
    v0, v1, v2, v3 = directions[j], directions[j + 1], directions[j + 2], directions[j + 3]
    w0, w1 = directions[following], directions[following + 1]
    w2, w3 = directions[following + 2], directions[following + 3]
    d0 = residual[0] * 0
    d1 = d2 = d3 = d0
    for i in range(residual.shape[0]):
        x = residual[i] - (c0 * v0[i] + c1 * v1[i] + c2 * v2[i] + c3 * v3[i])
        d0 += w0[i] * x
        d1 += w1[i] * x
        d2 += w2[i] * x
        d3 += w3[i] * x
        residual[i] = x
    return d0, d1, d2, d3


@kernel()
def take_out_groups(directions, groups, residual, coefficients, backward):
    """Take the first ``groups`` groups of four real directions out, the last first if backward."""
    step = -4 if backward else 4
    j = 4 * (groups - 1) if backward else 0
    apart = residual.shape[0] * residual.itemsize > LONG_ROW
    c0, c1, c2, c3 = group_dots(directions, j, residual)
    taken = 0.0
    for left in range(groups - 1, -1, -1):
        coefficients[j] += c0
        coefficients[j + 1] += c1
        coefficients[j + 2] += c2
        coefficients[j + 3] += c3
        taken += abs(c0) + abs(c1) + abs(c2) + abs(c3)
        if left == 0 or apart:
            group_update(directions, j, residual, c0, c1, c2, c3)
        if left > 0:
            following = j + step
            if apart:
                c0, c1, c2, c3 = group_dots(directions, following, residual)
            else:
                c0, c1, c2, c3 = group_update_dots(
                    directions, j, following, residual, c0, c1, c2, c3
                )
            j = following
    return taken


@kernel(reassociate=True)
def take_out_pairs(directions, pairs, residual, coefficients, backward):
    """Take the first ``pairs`` pairs of complex directions out, the last first if backward."""
    taken = 0.0
    zero = residual[0].real * 0
    for pair in range(pairs):
        j = 2 * (pairs - 1 - pair) if backward else 2 * pair
        v0, v1 = directions[j], directions[j + 1]
        p0 = q0 = p1 = q1 = zero
        for i in range(residual.shape[0]):
            x, v, w = residual[i], v0[i], v1[i]
            p0 += v.real * x.real + v.imag * x.imag
            q0 += v.real * x.imag - v.imag * x.real
            p1 += w.real * x.real + w.imag * x.imag
            q1 += w.real * x.imag - w.imag * x.real
        for i in range(residual.shape[0]):
            x, v, w = residual[i], v0[i], v1[i]
            residual[i] = complex(
                x.real - (p0 * v.real - q0 * v.imag + p1 * w.real - q1 * w.imag),
                x.imag - (p0 * v.imag + q0 * v.real + p1 * w.imag + q1 * w.real),
            )
        coefficients[j] += complex(p0, q0)
        coefficients[j + 1] += complex(p1, q1)
        taken += math.hypot(p0, q0) + math.hypot(p1, q1)
    return taken


@kernel()
def pass_real(directions, rank, residual, coefficients, backward):
    """Take the first ``rank`` real directions out; see :func:`pass_over`."""
    groups = rank // 4
    taken = 0.0
    if backward:
        taken += take_out_real(directions, 4 * groups, rank, residual, coefficients)
    if groups > 0:
        taken += take_out_groups(directions, groups, residual, coefficients, backward)
    if not backward:
        taken += take_out_real(directions, 4 * groups, rank, residual, coefficients)
    return taken


@kernel()
def pass_complex(directions, rank, residual, coefficients, backward):
    """Take the first ``rank`` complex directions out; see :func:`pass_over`."""
    pairs = rank // 2
    taken = 0.0
    if backward:
        taken += take_out_complex(directions, 2 * pairs, rank, residual, coefficients)
    taken += take_out_pairs(directions, pairs, residual, coefficients, backward)
    if not backward:
        taken += take_out_complex(directions, 2 * pairs, rank, residual, coefficients)
    return taken


take_out = by_kind(take_out_real, take_out_complex)
"""Modified Gram-Schmidt as it stands in the books, one direction at a time."""

pass_over = by_kind(pass_real, pass_complex)
"""Take the parts along the first ``rank`` directions out of ``residual``, in place.

Called with ``(directions, rank, residual, coefficients, backward)``. Adds what was taken out to
``coefficients`` and returns the sum of its absolute values. A pass that runs backward meets first
what the last forward pass left in cache.
"""


@kernel()
def mgs_pass(directions, rank, residual, coefficients):
    """Take the parts along the first ``rank`` directions out; see :func:`pass_over`."""
    return pass_over(directions, rank, residual, coefficients, False)


@kernel()
def orthogonalize(directions, rank, residual, coefficients, tolerance, policy, backward=False):
    """Make ``residual`` orthogonal to the first ``rank`` directions to working precision.

    ``coefficients[:rank]`` is set to the sum over all passes. Returns ``(residual norm, passes)``.

    A residual clearly at or below ``tolerance`` after the first pass is left there; one within
    rounding of it gets a second pass, so that no decision hangs on the rounding of the first.
    Otherwise a pass follows while the sum of the absolute coefficients of the last one exceeds
    ``LOSS_LIMIT`` times the norm that it left (Giraud & Langou 2003). For study, the policy NEVER
    does one pass of modified Gram-Schmidt and ALWAYS does two passes, whatever they leave.
    """
    for j in range(rank):
        coefficients[j] = 0
    if policy == NEVER:
        take_out(directions, 0, rank, residual, coefficients)
        return norm(residual), 1
    taken = pass_over(directions, rank, residual, coefficients, backward)
    left = norm(residual)
    passes = 1
    if policy == ALWAYS:
        pass_over(directions, rank, residual, coefficients, not backward)
        return norm(residual), 2
    # one pass takes rank multiples out: its rounding is at most about epsilon times their sum
    doubt = epsilon_of(residual) * taken
    if left + doubt <= tolerance or (left - doubt > tolerance and taken <= LOSS_LIMIT * left):
        return left, passes
    while True:
        backward = not backward
        taken = pass_over(directions, rank, residual, coefficients, backward)
        left = norm(residual)
        passes += 1
        if left <= tolerance or taken <= LOSS_LIMIT * left or passes == MOST_PASSES:
            return left, passes
