"""The sliding window: samples enter, one at a time or in blocks, and leave.

How the basis follows is the matter of :mod:`streambasis.kernels.exchange`.
"""

from __future__ import annotations

import math

from streambasis.kernels._jit import kernel
from streambasis.kernels.exchange import (
    COEFFICIENTS,
    DROPPED,
    EXPIRED,
    EXPONENT,
    FREE,
    GROWTHS,
    HORIZON,
    ID,
    LAST,
    LENGTH,
    LIVE,
    LOST,
    NEWER,
    NEWEST,
    NONE,
    NOW,
    OLDER,
    OLDEST,
    PIVOT,
    PLACE,
    POOL,
    RENEWAL,
    ROWS,
    SINCE,
    SLOTS,
    STAMPED,
    TIME,
    TIMED,
    TOLERANCE,
    TOP,
    VACANT,
    WANTED,
    WEAR,
    U,
    W,
    append_column,
    drop,
    expire,
    grow,
    held,
    leave_pool,
    let_go,
    reflect,
    replace,
    settle,
    unlink,
)
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
from streambasis.kernels.projection import ALWAYS, MOST_PASSES, NEVER, pass_over, rounding_floor
from streambasis.kernels.scaling import epsilon_of, norm, scaled_copy
from streambasis.kernels.vectors import add_multiple, inner, take_out_and_combine

LEAST_DIMENSION = 16
"""As in the orthogonality ratio of an audit."""
WORN = 16
"""Most exchanges and drops between two factorizations of the block of the pivot samples, per
channel: Q drifts by a few epsilons in that time, far below what V is allowed."""


@kernel(internal=True)
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


@kernel(internal=True)
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


@kernel(internal=True)
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


@kernel(internal=True)
def tolerance_of(a, length, exponent):
    """Return the tolerance of a sample of norm ``length`` in its own scale."""
    floor = rounding_floor(a.header[RANK]) * epsilon_of(a.residual)
    rtol = max(a.reals[RTOL], floor)
    return max(rtol * length, math.ldexp(a.reals[ATOL], -int(exponent)))


@kernel(internal=True)
def refill(a):
    """Let uncovered samples take their place, oldest first, while there are directions to spare."""
    header = a.header
    while header[UNCOVERED] > 0 and header[RANK] < header[CAPACITY]:
        place = 0
        for other in range(1, header[UNCOVERED]):
            if a.members[a.owners[other], ID] < a.members[a.owners[place], ID]:
                place = other
        slot = a.owners[place]
        left = reproject(a, slot)
        if left <= a.sizes[slot, TOLERANCE]:
            keep_projected(a, slot, left)
            continue
        grow(a, left)
        keep_projected(a, slot, 0.0)
        append_column(a, header[RANK], slot)
        # backwards, since a sample found covered gives its place to the last one
        for other in range(header[UNCOVERED] - 1, -1, -1):
            slot = a.owners[other]
            keep_projected(a, slot, reproject(a, slot))


@kernel(internal=True)
def reproject(a, slot):
    """Project an uncovered sample again; return the norm of its residual."""
    place = a.members[slot, PLACE]
    for i in range(a.residual.shape[0]):
        a.residual[i] = a.pool[place, i]
    left, _ = project(a, a.sizes[slot, LENGTH], a.sizes[slot, TOLERANCE])
    return left


@kernel(internal=True)
def keep_projected(a, slot, lost):
    """Keep what projecting an uncovered sample found; once covered it needs no full copy."""
    for j in range(a.header[RANK]):
        a.coordinates[slot, j] = a.work[COEFFICIENTS, j]
    a.sizes[slot, LOST] = lost
    a.members[slot, SINCE] = a.header[GROWTHS]
    if lost <= a.sizes[slot, TOLERANCE]:
        leave_pool(a, slot)


@kernel(internal=True)
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


@kernel(internal=True)
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


@kernel(internal=True)
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
    is_open = settle(a)
    if is_open and header[UNCOVERED] > 0:
        let_go(a)  # its place belongs to a sample that waits
        is_open = False
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
        beta = drop(a)
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


@kernel(internal=True)
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
        if settle(a):
            let_go(a)
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
    if settle(a):
        let_go(a)
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
