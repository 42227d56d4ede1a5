"""Scoring samples against a principal subspace, and orthonormalizing the rows it is folded with.

Reordered sums are sound here for the reason given in :mod:`streambasis.kernels.growth`.
"""

from __future__ import annotations

import math

from streambasis.kernels._jit import kernel
from streambasis.kernels.growth import CRITERION, mgs_pass, norm, orthogonalize, scaled_copy

# entries of the integer header
COUNT, RANK, FILL, DUE, FOLDED, EXPONENT, CENTRED = range(7)
HEADER = 7
# whether the squares of rows stay in range
USUAL, UNUSUAL = 0, 1
ORTHOGONAL = 1e-15
"""Cosine of rows that count as orthogonal, a few roundings."""


@kernel(reassociate=True)
def score_sample(sample, mean, directions, spreads, header, residual, coefficients):
    """Score one sample against the first ``header[RANK]`` directions; nothing held is changed.

    ``spreads`` are the standard deviations along the directions in units of 2**EXPONENT. Returns
    ``(norm, residual, spe, t2, position)``: the position of the first value that is not finite,
    or -1. Values beyond the range of a double come back as infinity, never as NaN.
    """
    if header[CENTRED]:
        for i in range(sample.shape[0]):
            # a value within a quarter of the range has a finite distance from any mean of such
            twice = sample[i] + sample[i]
            residual[i] = twice + twice
        position, _ = scaled_copy(residual, residual)
        if position >= 0:
            return 0.0, 0.0, 0.0, 0.0, position
        for i in range(sample.shape[0]):
            residual[i] = sample[i] - mean[i]
        position, exponent = scaled_copy(residual, residual)
    else:
        position, exponent = scaled_copy(sample, residual)
    if position >= 0:
        return 0.0, 0.0, 0.0, 0.0, position
    rank = header[RANK]
    length = norm(residual)
    for j in range(rank):
        coefficients[j] = 0
    mgs_pass(directions, rank, residual, coefficients)
    left = norm(residual)
    t2 = 0.0
    for j in range(rank):
        ratio = math.ldexp(abs(coefficients[j]) / spreads[j], int(exponent - header[EXPONENT]))
        t2 += ratio * ratio
    return (
        math.ldexp(length, exponent),
        math.ldexp(left, exponent),
        math.ldexp(left * left, 2 * exponent),
        t2,
        -1,
    )


@kernel()
def push_principal(sample, mean, directions, spreads, header, residual, coefficients, block):
    """Score one sample, put it into the block and count it.

    Returns ``(sample number, norm, residual, spe, t2, rank, position)``; with a position that is
    not negative nothing was changed. The caller folds the block when it holds ``header[DUE]``.
    """
    length, left, spe, t2, position = score_sample(
        sample, mean, directions, spreads, header, residual, coefficients
    )
    number = header[COUNT]
    if position < 0:
        fill = header[FILL]
        for i in range(sample.shape[0]):
            block[fill, i] = sample[i]
        header[FILL] = fill + 1
        header[COUNT] = number + 1
    return number, length, left, spe, t2, header[RANK], position


@kernel(reassociate=True)
def row_squares(rows, least, most, out):
    """Write the squared norm of each row to ``out``.

    Returns USUAL when every squared norm is zero for a zero row or strictly between ``least`` and
    ``most``, so that products of the rows neither overflow nor underflow; UNUSUAL otherwise.
    """
    status = USUAL
    for i in range(rows.shape[0]):
        row = rows[i]
        total = 0.0
        for j in range(row.shape[0]):
            total += row[j].real * row[j].real + row[j].imag * row[j].imag
        out[i] = total
        if not least < total < most:
            for j in range(row.shape[0]):
                if row[j] != 0:
                    status = UNUSUAL
    return status


@kernel()
def weigh_rows(rows, roots, shrink, total):
    """Multiply rows by D = diag(roots), then by I - shrink·(roots)(roots)ᵀ, in place.

    ``total``, of the length of a row, is workspace.
    """
    for j in range(rows.shape[1]):
        total[j] = 0
    for i in range(rows.shape[0]):
        root = roots[i]
        for j in range(rows.shape[1]):
            rows[i, j] = root * rows[i, j]
            total[j] += root * rows[i, j]
    if shrink != 0:
        for i in range(rows.shape[0]):
            lever = shrink * roots[i]
            for j in range(rows.shape[1]):
                rows[i, j] -= lever * total[j]


@kernel()
def weigh_rows_back(rows, roots, shrink, total):
    """Multiply rows by the transpose of what :func:`weigh_rows` multiplies by, in place."""
    for j in range(rows.shape[1]):
        total[j] = 0
    for i in range(rows.shape[0]):
        for j in range(rows.shape[1]):
            total[j] += roots[i] * rows[i, j]
    for i in range(rows.shape[0]):
        root = roots[i]
        lever = shrink * root
        for j in range(rows.shape[1]):
            rows[i, j] = root * (rows[i, j] - lever * total[j])


@kernel()
def score_rows(coordinates, spreads, rank, outside, residuals, spes, t2s):
    """Turn coordinates along all directions held into residual, SPE and T², row by row.

    ``outside`` are the squared norms of what lies outside all of them. Directions beyond ``rank``
    are held but not reported: what lies along them is residual, added as a sum of squares, so
    that nothing cancels.
    """
    for i in range(coordinates.shape[0]):
        spe = outside[i]
        t2 = 0.0
        for j in range(rank):
            ratio = abs(coordinates[i, j]) / spreads[j]
            t2 += ratio * ratio
        for j in range(rank, coordinates.shape[1]):
            part = abs(coordinates[i, j])
            spe += part * part
        spes[i] = spe
        residuals[i] = math.sqrt(spe)
        t2s[i] = t2


@kernel(reassociate=True)
def outside_squares(coordinates, squares, clear, outside, close):
    """Write to ``outside`` what the squares of coordinates leave of the squares of samples.

    Returns how many samples keep less than the part ``clear`` of theirs, so that the difference
    is not sharp; their numbers are in ``close``.
    """
    found = 0
    for i in range(coordinates.shape[0]):
        row = coordinates[i]
        total = 0.0
        for j in range(row.shape[0]):
            total += row[j].real * row[j].real + row[j].imag * row[j].imag
        outside[i] = squares[i] - total
        if not outside[i] > clear * squares[i]:
            close[found] = i
            found += 1
    return found


@kernel()
def orthonormal_rows(rows, floors, stack, held, coordinates, factor, residual, coefficients):
    """Orthonormalize rows against the first ``held`` rows of ``stack`` and one another.

    Row i of ``rows`` equals the change of ``coordinates[i]`` times the held rows plus
    ``factor[i]`` times the appended ones; a row whose residual is at most ``floors[i]`` appends
    none. Returns the number of rows appended.
    """
    added = 0
    for i in range(rows.shape[0]):
        total = held + added
        for j in range(rows.shape[1]):
            residual[j] = rows[i, j]
        left, _ = orthogonalize(stack, total, residual, coefficients, floors[i], CRITERION)
        for j in range(held):
            coordinates[i, j] += coefficients[j]
        for j in range(added):
            factor[i, j] = coefficients[held + j]
        if left > floors[i] and total < min(stack.shape[0], stack.shape[1]):
            for j in range(rows.shape[1]):
                stack[total, j] = residual[j] / left
            factor[i, added] = left
            added += 1
    return added


@kernel()
def rotate_orthogonal(rows, also, sweeps):
    """Rotate rows in pairs until they are orthogonal to each other, and ``also`` likewise.

    Returns USUAL, or UNUSUAL where that many sweeps over all pairs do not suffice, as where a
    value is not finite. A row that is rounding beside the whole is orthogonal to all others.
    """
    total = 0.0
    for p in range(rows.shape[0]):
        for j in range(rows.shape[1]):
            x = rows[p, j]
            total += x.real * x.real + x.imag * x.imag
    if not total < math.inf:
        return UNUSUAL
    least = ORTHOGONAL * ORTHOGONAL * total
    for _ in range(sweeps):
        status = USUAL
        for p in range(rows.shape[0] - 1):
            for q in range(p + 1, rows.shape[0]):
                a, b, inner = 0.0, 0.0, rows[p, 0] * 0
                for j in range(rows.shape[1]):
                    x, y = rows[p, j], rows[q, j]
                    a += x.real * x.real + x.imag * x.imag
                    b += y.real * y.real + y.imag * y.imag
                    inner += x * y.conjugate()
                size = abs(inner)
                if min(a, b) <= least or size <= ORTHOGONAL * math.sqrt(a) * math.sqrt(b):
                    continue
                status = UNUSUAL
                turn = 0.5 * (b - a) / size
                tangent = math.copysign(1.0, turn) / (abs(turn) + math.sqrt(1.0 + turn * turn))
                cosine = 1.0 / math.sqrt(1.0 + tangent * tangent)
                _turn_pair(rows, p, q, cosine, cosine * tangent, inner / size)
                _turn_pair(also, p, q, cosine, cosine * tangent, inner / size)
        if status == USUAL:
            return USUAL
    return UNUSUAL


@kernel()
def _turn_pair(rows, p, q, cosine, sine, phase):
    """Turn two rows against each other, the second in phase with the first."""
    for j in range(rows.shape[1]):
        x, y = rows[p, j], phase * rows[q, j]
        rows[p, j] = cosine * x - sine * y
        rows[q, j] = sine * x + cosine * y


@kernel()
def subtract_identity(gram):
    """Subtract the identity from a Gram matrix in place and return the 1-norm of what is left."""
    largest = 0.0
    for i in range(gram.shape[0]):
        gram[i, i] -= 1
        total = 0.0
        for j in range(gram.shape[1]):
            total += abs(gram[i, j])
        largest = max(largest, total)
    return largest


@kernel()
def least_magnitude(vector):
    """Return the least absolute value of a vector that is not empty."""
    least = abs(vector[0])
    for i in range(1, vector.shape[0]):
        least = min(least, abs(vector[i]))
    return least
