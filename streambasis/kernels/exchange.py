"""Pivot exchange: which samples of a window hold up its directions, and when a direction goes.

A basis V (k, n) covers the window: every sample is x = cᵀV + r with its coordinates c kept. Of
k *pivot* samples the coordinates make up the columns of a k×k block P = Q R, factorized here with
the columns of Q as rows. When a pivot leaves, its column is deleted by Givens rotations, which
leaves u, the last column of Q, orthogonal to all other pivots. If a sample of the window needs u
it takes over and V stays; if none does, the direction uᵀV goes.

Every sample lives in its own power-of-two scale, so nothing here depends on the scale of the feed.
What is pushed and what is forgotten, and in which order, is the matter of
:mod:`streambasis.kernels.window`.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

from streambasis.kernels import growth
from streambasis.kernels._jit import kernel
from streambasis.kernels.growth import RANK, UNCOVERED
from streambasis.kernels.scaling import norm
from streambasis.kernels.vectors import add_multiple, combine, inner, rotate, spread, square

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
GOOD_SHARE = 0.1
"""A sample with at least this share of its norm along a vacant direction may hold it up; where
none has, the newest within this factor of the largest share takes over. Swapping in a column with
share h multiplies the volume of the block by h over the old share (Gu & Eisenstat 1996, SIAM J.
Sci. Comput. 17), so this keeps the block from degenerating while the newest, which stays longest,
is preferred."""


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


@kernel(internal=True)
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


@kernel(internal=True)
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


@kernel(internal=True)
def append_column(a, k, slot):
    """Make the sample in ``slot`` the pivot of the last, vacant column of the k×k block."""
    c = a.coordinates[slot]
    for i in range(k):
        a.r[i, k - 1] = inner(a.q[i], c, k)
    a.holders[k - 1] = slot
    a.members[slot, PIVOT] = 1


@kernel(internal=True)
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


@kernel(internal=True)
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


@kernel(internal=True)
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


@kernel(internal=True)
def reflect(vector, w, beta, k):
    """Apply the Householder reflection I - beta·w·wᴴ to a coordinate vector; return wᴴ vector."""
    s = inner(w, vector, k)
    add_multiple(vector, -beta * s, w, k)
    return s


@kernel(internal=True)
def drop(a):
    """Let the vacant direction go: one reflection moves it to the last row, which is given up.

    With H u = alpha·e_k the coordinates become H c and the directions conj(H) V; ``opened`` holds
    uᵀV. What each sample loses is recorded; pivots have nothing along u but rounding. Returns the
    factor beta of H = I - beta·w·wᴴ, with w in the workspace.
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
    add_multiple(opened, -alpha, a.directions[last], opened.shape[0])
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


@kernel(internal=True)
def let_go(a):
    """Drop the vacant direction, uᵀV being unknown as yet."""
    combine(a.directions, a.header[RANK], a.work[U], a.opened)
    drop(a)


@kernel(internal=True)
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


@kernel(internal=True)
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


@kernel(internal=True)
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


@kernel(internal=True)
def settle(a):
    """Find a new pivot for every vacant direction, or drop it.

    Returns whether the last one was left open: no sample needs it, ``work[U]`` holds it, and the
    caller either lets it go or puts a new direction in its place.
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
        elif header[VACANT] == 0:
            return True
        else:
            let_go(a)
        place -= 1
    return False


@kernel(internal=True)
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


@kernel(internal=True)
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
