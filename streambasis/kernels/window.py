"""The sliding window: samples enter and leave, pivot samples hold up the directions.

A basis V (k, n) covers the window: every sample is x = cᵀV + r with its coordinates c kept. Of
k *pivot* samples the coordinates make up the columns of a k×k block P = Q R, factorized here with
the columns of Q as rows. When a pivot leaves, its column is deleted by Givens rotations, which
leaves u, the last column of Q, orthogonal to all other pivots. If a sample of the window needs u
it takes over and V stays; if none does, the direction uᵀV goes.

Every sample lives in its own power-of-two scale, so nothing here depends on the scale of the feed.
Reordered sums are sound throughout: every bound used holds for any order of summation.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

from streambasis.kernels import growth
from streambasis.kernels._jit import kernel
from streambasis.kernels.growth import (
    ATOL,
    CAPACITY,
    COUNT,
    DEPENDENT,
    FULL,
    INDEPENDENT,
    NEEDS_ROOM,
    NOT_FINITE,
    POLICY,
    RANK,
    RTOL,
    UNCOVERED,
    ZERO,
)
from streambasis.kernels.projection import (
    ALWAYS,
    MOST_PASSES,
    NEVER,
    pass_over,
    rounding_floor,
)
from streambasis.kernels.scaling import epsilon_of, norm, scaled_copy

# entries of the integer header after those that every basis kernel shares
WINDOW, LIVE, OLDEST, NEWEST, FREE, TOP, VACANT, EXPIRED, DROPPED, GROWTHS, WEAR, LAST, STAMPED = (
    range(growth.HEADER, growth.HEADER + 13)
)
KEPT = growth.HEADER + 13
# the rest concerns the call at hand: what a caller must see to, the time of the sample to come, up
# to which time samples leave for it, and whether it has a time
WANTED, NOW, HORIZON, TIMED = range(KEPT, KEPT + 4)
HEADER = KEPT + 4
# what may be wanted when a kernel returns NEEDS_ROOM
SLOTS, ROWS, POOL, RENEWAL = range(4)
# columns of ``members`` (int64) and ``sizes`` (float64), one row per slot
ID, TIME, OLDER, NEWER, EXPONENT, PIVOT, PLACE, SINCE = range(8)
MEMBER = 8
LENGTH, TOLERANCE, LOST = range(3)
# rows of ``scratch``, and of ``small`` after Q and R
RESIDUAL, OPENED = range(2)
U, W, COEFFICIENTS = range(3)
WORK = 3

NONE = -1


class Held(NamedTuple):
    """The arrays of a basis over a window, as kernels hand them on to each other.

    ``directions`` (rows, n) is V; ``q`` and ``r`` (rows, rows) factorize the block of the pivot
    samples in the slots ``holders``; ``coordinates`` (slots, rows), ``members`` (slots, 8) and
    ``sizes`` (slots, 3) hold the samples, linked from oldest to newest, and zeros in coordinates
    beyond the rank; ``pool`` holds in full the samples that the capacity leaves uncovered, in the
    slots ``owners``. ``residual`` and ``opened`` (n,) and ``work`` (3, rows) are workspace.
    """

    directions: Any
    q: Any
    r: Any
    holders: Any
    coordinates: Any
    members: Any
    sizes: Any
    pool: Any
    owners: Any
    residual: Any
    opened: Any
    work: Any
    header: Any
    reals: Any


GOOD_SHARE = 0.1
"""A sample with at least this share of its norm along a vacant direction may hold it up; where
none has, the newest within this factor of the largest share takes over. Swapping in a column with
share h multiplies the volume of the block by h over the old share (Gu & Eisenstat 1996, SIAM J.
Sci. Comput. 17), so this keeps the block from degenerating while the newest, which stays longest,
is preferred."""
SHORT = 512
"""Up to this many channels four directions are written in one loop, which saves its start-up; on
longer ones the processor holds loads back behind stores to other rows at equal page offsets."""
LEAST_DIMENSION = 16
"""As in the orthogonality ratio of an audit."""
WORN = 16
"""Most exchanges and drops between two factorizations of the block of the pivot samples, per
channel: Q drifts by a few epsilons in that time, far below what V is allowed."""


@kernel(reassociate=True)
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


@kernel(reassociate=True)
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


@kernel(reassociate=True)
def inner(a, b, count):
    """Return aᴴb over the first ``count`` entries."""
    total = a[0] * 0
    for i in range(count):
        total += a[i].conjugate() * b[i]
    return total


@kernel(reassociate=True)
def add_multiple(out, factor, vector, count):
    """Add ``factor`` times ``vector`` to ``out`` over the first ``count`` entries."""
    for i in range(count):
        out[i] += factor * vector[i]


@kernel(reassociate=True)
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


@kernel(reassociate=True)
def rotate(a, b, c, s, start, count, shift):
    """Replace a and b by c·a + s·b and c̄·b - s̄·a, b being read ``shift`` entries further on."""
    for j in range(start, count):
        x, y = a[j], b[j + shift]
        a[j] = c * x + s * y
        b[j] = c.conjugate() * y - s.conjugate() * x


@kernel()
def square(h):
    """Return |h|²."""
    return h.real * h.real + h.imag * h.imag


@kernel()
def held(scratch, small, directions, coordinates, members, sizes, pool, integers, reals):
    """Name the parts of the arrays that a caller keeps together to pass fewer of them."""
    rows = directions.shape[0]
    return Held(
        directions,
        small[:rows],
        small[rows : 2 * rows],
        integers[HEADER : HEADER + rows],
        coordinates,
        members,
        sizes,
        pool,
        integers[HEADER + rows :],
        scratch[RESIDUAL],
        scratch[OPENED],
        small[2 * rows :],
        integers[:HEADER],
        reals,
    )


@kernel()
def delete_column(a, k, place):
    """Delete one column of the factorized k×k block; the last row of Q is then the vacant u.

    Givens rotations (Daniel, Gragg, Kaufman & Stewart 1976), at most 9k² flops; each row of R is
    moved one column to the left while it is rotated.
    """
    q, r, holders = a.q, a.r, a.holders
    for i in range(place + 1):
        for j in range(place, k - 1):
            r[i, j] = r[i, j + 1]
    for i in range(place, k - 1):
        x, y = r[i, i], r[i + 1, i + 1]
        rho = math.sqrt(square(x) + square(y))
        if rho > 0.0:
            c = x.conjugate() / rho
            s = y.conjugate() / rho
            rotate(r[i], r[i + 1], c, s, i, k - 1, 1)
            rotate(q[i], q[i + 1], c.conjugate(), s.conjugate(), 0, k, 0)
        else:
            for j in range(i, k - 1):
                r[i + 1, j] = r[i + 1, j + 1]
        r[i + 1, i] = 0
        holders[i] = holders[i + 1]


@kernel()
def append_column(a, k, slot):
    """Make the sample in ``slot`` the pivot of the last, vacant column of the k×k block."""
    c = a.coordinates[slot]
    for i in range(k):
        a.r[i, k - 1] = inner(a.q[i], c, k)
    a.holders[k - 1] = slot
    a.members[slot, PIVOT] = 1


@kernel()
def loss_without(a, slot, h):
    """Return how far outside the span a sample may lie once its part ``h`` along u is given up.

    The part r that it lost before is orthogonal to u as long as no direction was added since, and
    the two add up like the sides of a right triangle. A direction added later may lie along r,
    which is not kept: then only the sum of both is certain.
    """
    lost, part = a.sizes[slot, LOST], math.sqrt(square(h))
    if a.members[slot, SINCE] == a.header[GROWTHS]:
        return math.sqrt(lost * lost + part * part)
    return lost + part


@kernel()
def share(a, slot, u, k):
    """Return the share of a sample's norm along u, 0 where the sample does not need u.

    A covered sample needs u when without it it might lie further outside than its tolerance.
    Pivots are spoken for, and uncovered samples do not lie in the span.
    """
    if a.members[slot, PIVOT] == 1 or a.members[slot, PLACE] != NONE:
        return 0.0
    h = inner(u, a.coordinates[slot], k)
    if loss_without(a, slot, h) <= a.sizes[slot, TOLERANCE]:
        return 0.0
    return math.sqrt(square(h)) / a.sizes[slot, LENGTH]


@kernel()
def successor(a, u, k):
    """Return the slot of the sample that takes over the vacant direction ``u``, or NONE.

    From the newest on: the first with a good share ends the search.
    """
    largest = 0.0
    slot = a.header[NEWEST]
    while slot != NONE:
        found = share(a, slot, u, k)
        if found >= GOOD_SHARE:
            return slot
        largest = max(largest, found)
        slot = a.members[slot, OLDER]
    if largest == 0.0:
        return NONE
    slot = a.header[NEWEST]
    while share(a, slot, u, k) < GOOD_SHARE * largest:
        slot = a.members[slot, OLDER]
    return slot


@kernel()
def reflect(vector, w, beta, k):
    """Apply the Householder reflection I - beta·w·wᴴ to a coordinate vector; return wᴴ vector."""
    s = inner(w, vector, k)
    add_multiple(vector, -beta * s, w, k)
    return s


@kernel()
def drop(a, known):
    """Let the vacant direction go: one reflection moves it to the last row, which is given up.

    With H u = alpha·e_k the coordinates become H c and the directions conj(H) V. ``opened`` holds
    uᵀV where ``known`` says so. What each sample loses is recorded; pivots have nothing along u but
    rounding. Returns the factor beta of H = I - beta·w·wᴴ, with w in the workspace.
    """
    u, w, opened, header = a.work[U], a.work[W], a.opened, a.header
    k = header[RANK]
    last = k - 1
    size = abs(u[last])
    alpha = u[last] * 0 - 1
    if size > 0.0:
        alpha = -u[last] / size
    for j in range(k):
        w[j] = u[j]
    w[last] -= alpha
    beta = 1.0 / (1.0 + size)
    if known:
        add_multiple(opened, -alpha, a.directions[last], opened.shape[0])
    else:
        combine(a.directions, k, w, opened)
    spread(a.directions, last, -beta, w, opened)
    slot = header[NEWEST]
    while slot != NONE:
        c = a.coordinates[slot]
        end = c[last]
        s = reflect(c, w, beta, k)
        if a.members[slot, PIVOT] == 0:
            a.sizes[slot, LOST] = loss_without(a, slot, s + alpha.conjugate() * end)
        c[last] = 0
        slot = a.members[slot, OLDER]
    for i in range(last):
        reflect(a.q[i], w, beta, k)
        a.q[i, last] = 0
    header[RANK] = last
    header[DROPPED] += 1
    header[WEAR] += 1
    return beta


@kernel()
def unlink(a, slot):
    """Take one sample out of the window; a direction that it held up is vacant from now on."""
    members, header = a.members, a.header
    older, newer = members[slot, OLDER], members[slot, NEWER]
    if older == NONE:
        header[OLDEST] = newer
    else:
        members[older, NEWER] = newer
    if newer == NONE:
        header[NEWEST] = older
    else:
        members[newer, OLDER] = older
    if members[slot, PIVOT] == 1:
        for j in range(header[RANK]):
            if a.holders[j] == slot:
                a.holders[j] = NONE
        header[VACANT] += 1
    if members[slot, PLACE] != NONE:
        leave_pool(a, slot)
    a.members[slot, ID] = NONE
    members[slot, NEWER] = header[FREE]
    header[FREE] = slot
    header[LIVE] -= 1


@kernel()
def leave_pool(a, slot):
    """Give up the full copy of an uncovered sample; the last copy moves into its place."""
    place = a.members[slot, PLACE]
    last = a.header[UNCOVERED] - 1
    if place != last:
        for i in range(a.pool.shape[1]):
            a.pool[place, i] = a.pool[last, i]
        a.owners[place] = a.owners[last]
        a.members[a.owners[place], PLACE] = place
    a.members[slot, PLACE] = NONE
    a.header[UNCOVERED] = last


@kernel()
def expire(a, horizon, room):
    """Take out what is stamped at or before ``horizon``, and the oldest until ``room`` are free."""
    header = a.header
    while header[LIVE] > 0:
        slot = header[OLDEST]
        crowded = header[WINDOW] > 0 and header[LIVE] + room > header[WINDOW]
        if not crowded and (header[STAMPED] == 0 or a.members[slot, TIME] > horizon):
            break
        unlink(a, slot)
        header[EXPIRED] += 1


@kernel()
def settle(a, may_stay_open):
    """Find a new pivot for every vacant direction, or drop it.

    Returns whether the last one was left open: no sample needs it, ``work[U]`` holds it, and the
    caller either drops it or puts a new direction in its place.
    """
    header = a.header
    place = header[RANK] - 1
    while header[VACANT] > 0:
        while a.holders[place] != NONE:
            place -= 1
        k = header[RANK]
        delete_column(a, k, place)
        header[VACANT] -= 1
        header[WEAR] += 1
        u = a.work[U]
        length = norm(a.q[k - 1, :k])
        for j in range(k):
            # of norm 1 to rounding: what Q has lost since it was factorized stays out of V
            a.q[k - 1, j] /= length
            u[j] = a.q[k - 1, j]
        slot = successor(a, u, k)
        if slot != NONE:
            append_column(a, k, slot)
        elif may_stay_open and header[VACANT] == 0:
            return True
        else:
            drop(a, False)
        place -= 1
    return False


@kernel()
def enough(left, before, doubt, tolerance, passes, policy):
    """Say whether a Gram-Schmidt pass that left ``left`` of ``before`` may be the last.

    A residual below ``tolerance`` beyond rounding (``doubt``) is a rejection. Otherwise the
    criterion of Daniel, Gragg, Kaufman & Stewart (1976): a pass that leaves at least 1/√2
    amplifies rounding and the defect of V by at most √2 and 1; the renewal bounds what that adds
    up to.
    """
    if passes == MOST_PASSES or policy == NEVER:
        return True
    if policy == ALWAYS:
        return passes == 2
    if left + doubt <= tolerance:
        return True
    return left - doubt > tolerance and 2.0 * left * left >= before * before


@kernel()
def project(a, length, tolerance):
    """Make ``residual`` orthogonal to the directions; return its norm and the passes taken."""
    k, policy = a.header[RANK], a.header[POLICY]
    coefficients = a.work[COEFFICIENTS]
    for j in range(k):
        coefficients[j] = 0
    before, passes = length, 0
    while True:
        taken = pass_over(a.directions, k, a.residual, coefficients, passes & 1 == 1)
        passes += 1
        left = norm(a.residual)
        if enough(left, before, epsilon_of(a.residual) * taken, tolerance, passes, policy):
            return left, passes
        before = left


@kernel()
def project_open(a, length, tolerance):
    """Do :func:`project` against the directions without uᵀV, which is put into ``opened``.

    The coefficients keep what the sample has along uᵀV; it is in the residual, too.
    """
    k, policy = a.header[RANK], a.header[POLICY]
    u, coefficients, n = a.work[U], a.work[COEFFICIENTS], a.residual.shape[0]
    for j in range(k):
        coefficients[j] = 0
    take_out_and_combine(a.directions, k, a.residual, coefficients, u, a.opened)
    taken = 0.0
    for j in range(k):
        taken += abs(coefficients[j])
    along = inner(u, coefficients, k)
    add_multiple(a.residual, along, a.opened, n)
    before, passes = length, 1
    while True:
        left = norm(a.residual)
        if enough(left, before, epsilon_of(a.residual) * taken, tolerance, passes, policy):
            return left, passes
        before = left
        taken = pass_over(a.directions, k, a.residual, coefficients, passes & 1 == 1)
        passes += 1
        whole = inner(u, coefficients, k)
        add_multiple(a.residual, whole - along, a.opened, n)
        along = whole


@kernel()
def tolerance_of(a, length, exponent):
    """Return the tolerance of a sample of norm ``length`` in its own scale."""
    floor = rounding_floor(a.header[RANK]) * epsilon_of(a.residual)
    rtol = max(a.reals[RTOL], floor)
    return max(rtol * length, math.ldexp(a.reals[ATOL], -int(exponent)))


@kernel()
def replace(a, left):
    """Put the normalized residual in the place of the open direction.

    V + conj(u)(q - d)ᵀ maps d = uᵀV to q and leaves the rest of the span alone: one update of V,
    and no reflection of coordinates. Pivots have no part along u but rounding.
    """
    k, u, opened = a.header[RANK], a.work[U], a.opened
    for i in range(opened.shape[0]):
        opened[i] = a.residual[i] / left - opened[i]
    spread(a.directions, k, 1.0, u, opened)
    slot = a.header[NEWEST]
    while slot != NONE:
        if a.members[slot, PIVOT] == 0:
            h = inner(u, a.coordinates[slot], k)
            add_multiple(a.coordinates[slot], -h, u, k)
            a.sizes[slot, LOST] = loss_without(a, slot, h)
        slot = a.members[slot, OLDER]
    c = a.work[COEFFICIENTS]
    add_multiple(c, left - inner(u, c, k), u, k)
    a.header[DROPPED] += 1
    a.header[GROWTHS] += 1
    a.header[WEAR] += 1


@kernel()
def grow(a, left):
    """Append the normalized residual as a direction; the block gains a row and a column."""
    k = a.header[RANK]
    for i in range(a.residual.shape[0]):
        a.directions[k, i] = a.residual[i] / left
    a.work[COEFFICIENTS, k] = left
    for j in range(k):
        a.q[k, j] = 0
        a.q[j, k] = 0
        a.r[k, j] = 0
    a.q[k, k] = 1
    a.header[RANK] = k + 1
    a.header[GROWTHS] += 1


@kernel()
def refill(a):
    """Let uncovered samples take their place, oldest first, while there are directions to spare."""
    header = a.header
    while header[UNCOVERED] > 0 and header[RANK] < header[CAPACITY]:
        place = 0
        for other in range(1, header[UNCOVERED]):
            if a.members[a.owners[other], ID] < a.members[a.owners[place], ID]:
                place = other
        slot = a.owners[place]
        if reproject(a, slot, True):
            append_column(a, header[RANK], slot)
            # backwards, since a sample found covered gives its place to the last one
            for other in range(header[UNCOVERED] - 1, -1, -1):
                reproject(a, a.owners[other], False)


@kernel()
def reproject(a, slot, may_grow):
    """Project an uncovered sample again; say whether it grew the basis, where it may."""
    length, tolerance = a.sizes[slot, LENGTH], a.sizes[slot, TOLERANCE]
    place = a.members[slot, PLACE]
    for i in range(a.residual.shape[0]):
        a.residual[i] = a.pool[place, i]
    left, _ = project(a, length, tolerance)
    grew = may_grow and left > tolerance
    if grew:
        grow(a, left)
        left = 0.0
    for j in range(a.header[RANK]):
        a.coordinates[slot, j] = a.work[COEFFICIENTS, j]
    a.sizes[slot, LOST] = left
    a.members[slot, SINCE] = a.header[GROWTHS]
    if left <= tolerance:
        leave_pool(a, slot)
    return grew


@kernel()
def enter(a, coefficients, length, tolerance, lost, exponent):
    """Give the newest sample a slot and return it."""
    header, members, sizes = a.header, a.members, a.sizes
    slot = header[FREE]
    if slot != NONE:
        header[FREE] = members[slot, NEWER]
    else:
        slot = header[TOP]
        header[TOP] = slot + 1
    c = a.coordinates[slot]
    k = header[RANK]
    for j in range(k):
        c[j] = coefficients[j]
    for j in range(k, c.shape[0]):
        c[j] = 0
    newest = header[NEWEST]
    a.members[slot, ID] = header[COUNT]
    a.members[slot, TIME] = header[NOW]
    members[slot, OLDER] = newest
    members[slot, NEWER] = NONE
    members[slot, EXPONENT] = exponent
    members[slot, PIVOT] = 0
    members[slot, PLACE] = NONE
    members[slot, SINCE] = header[GROWTHS]
    sizes[slot, LENGTH] = length
    sizes[slot, TOLERANCE] = tolerance
    sizes[slot, LOST] = lost
    if newest == NONE:
        header[OLDEST] = slot
    else:
        members[newest, NEWER] = slot
    header[NEWEST] = slot
    header[LIVE] += 1
    header[COUNT] += 1
    header[LAST] = header[NOW]
    header[STAMPED] = header[TIMED]
    return slot


@kernel()
def is_worn(a):
    """Say whether the directions must be renewed before anything else is done to them.

    A replacement or a drop rounds every entry of V once, by at most half an epsilon of it: an
    entry of V Vᴴ - I takes a random step of about 0.4·epsilon/√n. After m of them a column of k
    entries sums up to about 0.3·k·√(m/n) epsilons; m is limited so that this stays at 0.6·n (of
    16 at least), two fifths of what the contract allows (measured by bench/window_soak.py). The
    second limit, m at most WORN·n, is for Q.
    """
    n = a.residual.shape[0]
    k = max(a.header[RANK], 1)
    wide = max(n, LEAST_DIMENSION)
    return a.header[WEAR] >= min(WORN * wide, 4 * n * wide * wide // (k * k))


@kernel()
def waiting(header):
    """Return the record that says that nothing was taken yet; ``header[WANTED]`` says why."""
    return header[COUNT], 0.0, 0.0, 0.0, False, NEEDS_ROOM, header[RANK], 0, 0, 0


@kernel()
def push_window(
    scratch, small, directions, coordinates, members, sizes, pool, integers, reals, sample
):
    """Push one sample to a basis over a window, after what must leave for it has left.

    Returns ``(sample number, norm, residual, tolerance, grew, reason, rank, passes, expired,
    dropped)``. A negative reason says that the sample was not taken: NOT_FINITE, before anything
    was changed, or NEEDS_ROOM, after which the same call goes on where this one stopped.
    """
    a = held(scratch, small, directions, coordinates, members, sizes, pool, integers, reals)
    header, residual = a.header, a.residual
    position, exponent = scaled_copy(sample, residual)
    if position >= 0:
        return header[COUNT], 0.0, 0.0, 0.0, False, NOT_FINITE, header[RANK], 0, 0, 0
    if header[VACANT] == 0 and is_worn(a):
        header[WANTED] = RENEWAL
        return waiting(header)
    expire(a, header[HORIZON], 1)
    if header[FREE] == NONE and header[TOP] == members.shape[0]:
        header[WANTED] = SLOTS
        return waiting(header)
    is_open = settle(a, header[UNCOVERED] == 0)
    if header[UNCOVERED] > 0 and header[RANK] < header[CAPACITY]:
        refill(a)
        scaled_copy(sample, residual)
    length = norm(residual)
    tolerance = tolerance_of(a, length, exponent)
    if is_open:
        left, passes = project_open(a, length, tolerance)
    else:
        left, passes = project(a, length, tolerance)
    grew = left > tolerance and (is_open or header[RANK] < residual.shape[0])
    reason = ZERO if length == 0.0 else DEPENDENT
    if grew:
        reason = INDEPENDENT
        if is_open:
            replace(a, left)
        elif header[RANK] >= header[CAPACITY]:
            reason = FULL
            if header[UNCOVERED] >= pool.shape[0]:
                header[WANTED] = POOL
                return waiting(header)
        elif header[RANK] >= directions.shape[0]:
            header[WANTED] = ROWS
            return waiting(header)
        else:
            grow(a, left)
    elif is_open:
        beta = drop(a, True)
        reflect(a.work[COEFFICIENTS], a.work[W], beta, header[RANK] + 1)
    elif header[RANK] == residual.shape[0]:
        left = min(left, tolerance)  # nothing is outside: what is left is rounding
    grew = reason == INDEPENDENT
    number = header[COUNT]
    slot = enter(a, a.work[COEFFICIENTS], length, tolerance, 0.0 if grew else left, exponent)
    if grew:
        append_column(a, header[RANK], slot)
    elif reason == FULL:
        keep_whole(a, sample, slot)
    expired, dropped = header[EXPIRED], header[DROPPED]
    header[EXPIRED] = 0
    header[DROPPED] = 0
    return (
        number,
        math.ldexp(length, exponent),
        math.ldexp(left, exponent),
        math.ldexp(tolerance, exponent),
        grew,
        reason,
        header[RANK],
        passes,
        expired,
        dropped,
    )


@kernel()
def keep_whole(a, sample, slot):
    """Keep a full copy of a sample that the capacity leaves uncovered."""
    place = a.header[UNCOVERED]
    scaled_copy(sample, a.pool[place])
    a.owners[place] = slot
    a.members[slot, PLACE] = place
    a.header[UNCOVERED] = place + 1


@kernel()
def scale_rows(samples, out, exponents, lengths):
    """Copy the rows of a block into their own scales; set their exponents and norms."""
    for i in range(samples.shape[0]):
        _, exponents[i] = scaled_copy(samples[i], out[i])
        lengths[i] = norm(out[i])


@kernel()
def push_covered(
    scratch, small, directions, coordinates, members, sizes, pool, integers, reals,
    projected, scaled, clocks, records, reasons,
):  # fmt: skip
    """Push the rows of a projected block up to the first that would change the basis.

    ``projected`` is (coefficients, residuals), ``scaled`` (exponents, lengths),
    ``clocks`` (m, 3) NOW, HORIZON and TIMED of each row. ``records`` (m, 3) receives norm,
    residual and tolerance; ``reasons`` (m, 4) reason, rank, samples that left and directions that
    went. Returns the number of rows taken; the row after them is for :func:`push_window`, which
    goes on from here even where samples have left for it.
    """
    a = held(scratch, small, directions, coordinates, members, sizes, pool, integers, reals)
    coefficients, residuals = projected
    exponents, lengths = scaled
    header = a.header
    for i in range(coefficients.shape[0]):
        left = norm(residuals[i])
        exponent = int(exponents[i])
        tolerance = tolerance_of(a, lengths[i], exponent)
        if left > tolerance or is_worn(a):
            return i
        expire(a, clocks[i, 1], 1)
        if header[FREE] == NONE and header[TOP] == members.shape[0]:
            return i
        rank = header[RANK]
        settle(a, False)
        if header[RANK] != rank:
            return i
        header[NOW] = clocks[i, 0]
        header[TIMED] = clocks[i, 2]
        enter(a, coefficients[i], lengths[i], tolerance, left, exponent)
        records[i, 0] = math.ldexp(lengths[i], exponent)
        records[i, 1] = math.ldexp(left, exponent)
        records[i, 2] = math.ldexp(tolerance, exponent)
        reasons[i, 0] = ZERO if lengths[i] == 0.0 else DEPENDENT
        reasons[i, 1] = rank
        reasons[i, 2] = header[EXPIRED]
        reasons[i, 3] = header[DROPPED]
        header[EXPIRED] = 0
        header[DROPPED] = 0
    return coefficients.shape[0]


@kernel()
def forget(
    scratch, small, directions, coordinates, members, sizes, pool, integers, reals, slot, horizon
):  # fmt: skip
    """Take out the sample in ``slot``, or where that is NONE all stamped up to ``horizon``.

    Returns how many samples left and how many directions went with them.
    """
    a = held(scratch, small, directions, coordinates, members, sizes, pool, integers, reals)
    header = a.header
    expired, dropped = header[EXPIRED], header[DROPPED]
    live = header[LIVE]
    if slot == NONE:
        expire(a, horizon, 0)
    else:
        unlink(a, slot)
    settle(a, False)
    refill(a)
    gone = header[DROPPED] - dropped
    # what an interrupted push has done is still for its decision to say
    header[EXPIRED], header[DROPPED] = expired, dropped
    return live - header[LIVE], gone


@kernel()
def find(number, members, integers):
    """Return the slot of a sample by its number, or NONE."""
    for slot in range(integers[TOP]):
        if members[slot, ID] == number:
            return slot
    return NONE
