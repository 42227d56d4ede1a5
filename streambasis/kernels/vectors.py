"""Loops over vectors and over groups of directions that the window's kernels share.

Reordered sums are sound throughout: every bound used holds for any order of summation. Directions
are taken four at a time, so that what they are combined with is read and written a quarter as
often.
"""

from __future__ import annotations

from streambasis.kernels._jit import kernel

SHORT = 512
"""Up to this many channels four directions are written in one loop, which saves its start-up; on
longer ones the processor holds loads back behind stores to other rows at equal page offsets."""


@kernel(reassociate=True, internal=True)
def combine(directions, rank, u, out):
    """Set ``out`` to the combination of the first ``rank`` directions with the weights ``u``."""
    n = out.shape[0]
    for i in range(n):
        out[i] = 0
    j = 0
    while j + 4 <= rank:
        v0, v1, v2, v3 = directions[j], directions[j + 1], directions[j + 2], directions[j + 3]
        u0, u1, u2, u3 = u[j], u[j + 1], u[j + 2], u[j + 3]
        for i in range(n):
            out[i] += u0 * v0[i] + u1 * v1[i] + u2 * v2[i] + u3 * v3[i]
        j += 4
    while j < rank:
        v = directions[j]
        for i in range(n):
            out[i] += u[j] * v[i]
        j += 1


@kernel(reassociate=True, internal=True)
def take_out_and_combine(directions, rank, residual, coefficients, u, out):
    """Take the directions out of a residual and combine them, in one reading."""
    n = residual.shape[0]
    for i in range(n):
        out[i] = 0
    j = 0
    while j + 4 <= rank:
        v0, v1, v2, v3 = directions[j], directions[j + 1], directions[j + 2], directions[j + 3]
        u0, u1, u2, u3 = u[j], u[j + 1], u[j + 2], u[j + 3]
        c0 = c1 = c2 = c3 = residual[0] * 0
        for i in range(n):
            x = residual[i]
            c0 += v0[i].conjugate() * x
            c1 += v1[i].conjugate() * x
            c2 += v2[i].conjugate() * x
            c3 += v3[i].conjugate() * x
        for i in range(n):
            residual[i] -= c0 * v0[i] + c1 * v1[i] + c2 * v2[i] + c3 * v3[i]
            out[i] += u0 * v0[i] + u1 * v1[i] + u2 * v2[i] + u3 * v3[i]
        coefficients[j] += c0
        coefficients[j + 1] += c1
        coefficients[j + 2] += c2
        coefficients[j + 3] += c3
        j += 4
    while j < rank:
        v = directions[j]
        c0 = residual[0] * 0
        for i in range(n):
            c0 += v[i].conjugate() * residual[i]
        for i in range(n):
            residual[i] -= c0 * v[i]
            out[i] += u[j] * v[i]
        coefficients[j] += c0
        j += 1


@kernel(reassociate=True, internal=True)
def inner(a, b, count):
    """Return aᴴb over the first ``count`` entries."""
    total = a[0] * 0
    for i in range(count):
        total += a[i].conjugate() * b[i]
    return total


@kernel(reassociate=True, internal=True)
def add_multiple(out, factor, vector, count):
    """Add ``factor`` times ``vector`` to ``out`` over the first ``count`` entries."""
    for i in range(count):
        out[i] += factor * vector[i]


@kernel(reassociate=True, internal=True)
def spread(directions, count, factor, u, vector):
    """Add ``factor``·conj(u_j)·vector to each of the first ``count`` directions j."""
    n = vector.shape[0]
    j = 0
    while n <= SHORT and j + 4 <= count:
        v0, v1, v2, v3 = directions[j], directions[j + 1], directions[j + 2], directions[j + 3]
        u0, u1 = factor * u[j].conjugate(), factor * u[j + 1].conjugate()
        u2, u3 = factor * u[j + 2].conjugate(), factor * u[j + 3].conjugate()
        for i in range(n):
            x = vector[i]
            v0[i] += u0 * x
            v1[i] += u1 * x
            v2[i] += u2 * x
            v3[i] += u3 * x
        j += 4
    while j < count:
        add_multiple(directions[j], factor * u[j].conjugate(), vector, n)
        j += 1


@kernel(reassociate=True, internal=True)
def rotate(a, b, c, s, start, count, shift):
    """Replace a and b by c·a + s·b and c̄·b - s̄·a, b being read ``shift`` entries further on."""
    for j in range(start, count):
        x, y = a[j], b[j + shift]
        a[j] = c * x + s * y
        b[j] = c.conjugate() * y - s.conjugate() * x


@kernel(internal=True)
def square(h):
    """Return |h|²."""
    return h.real * h.real + h.imag * h.imag
