"""Scoring against fixed directions, and the walk from one event transition to the next."""

import math

from streambasis.kernels._jit import kernel

NOTHING, OPENED, COLLECTED, CLOSED = 0, 1, 2, 3


@kernel(reassociate=True)
def standardize(samples, centre, inverse, reach, freeze, patience, held, runs, out):
    """Write samples about their centre and in noise units to ``out``; NaN stays NaN.

    Parameters
    ----------
    samples, out : (m, n)
        Samples in channel units, and where they are written.
    centre, inverse : (n,)
        What is taken off, and what is multiplied by.
    reach : (n,)
        A value further than this from the centre, in noise units, is put there.
    freeze, patience : (n,)
        Where a channel is put, in noise units, that has repeated a value so many times or more.
    held, runs : (n,)
        Last value of each channel and how many times it has come again; updated.

    Returns
    -------
    int
        How many values are NaN.
    """
    gaps = 0
    for i in range(samples.shape[0]):
        for j in range(samples.shape[1]):
            sample = samples[i, j]
            value = (sample - centre[j]) * inverse[j]
            if value > reach[j]:
                value = reach[j]
            elif value < -reach[j]:
                value = -reach[j]
            runs[j] = runs[j] + 1 if sample == held[j] else 0
            held[j] = sample
            if runs[j] >= patience[j]:
                value = freeze[j]
            gaps += math.isnan(value)
            out[i, j] = value
    return gaps


@kernel(reassociate=True)
def score_rows(
    z, mean, directions, first, whitening, limits, residual,
    coordinates, spe, rest, t2, limit, t2_limit, judged, beyond, novel, extreme,
):  # fmt: skip
    """Split rows over orthonormal directions and compare what comes out with the limits.

    A row is never combined with another, so that its results do not depend on how the rows were
    cut into batches. Reordered sums change a result by a few roundings only, as the error bound of
    a dot product allows. Directions are taken off four at a time: the row is read and written a
    quarter as often.

    Parameters
    ----------
    z, mean : (m, n), (n,)
        Samples in noise units and what is taken off each; NaN counts as nothing left.
    directions : (q, n)
        Orthonormal rows; the first ``first`` make the squared prediction error, the others are
        those of open events. A direction no longer visible is a row of zeros.
    whitening : (r, first)
        Maps coordinates to whitened coordinates, of which T² is the sum of squares.
    limits : (2,)
        Limits of the squared prediction error and of T²; the first is NaN where the rows cannot be
        judged.
    residual : (n,)
        Workspace.
    coordinates : (m, q)
        Filled.
    spe, rest, t2, limit, t2_limit : (m,)
        Filled: squared norm of what the first directions leave, of what all leave, Hotelling's T²
        and both limits; NaN where the rows cannot be judged.
    judged, beyond, novel, extreme : (m,) bool
        Filled: whether the rows can be judged, and whether rest, SPE and T² are beyond their limit.
    """
    fine = not math.isnan(limits[0])
    count = directions.shape[0]
    n = z.shape[1]
    for i in range(z.shape[0]):
        row = z[i]
        for j in range(n):
            value = row[j] - mean[j]
            residual[j] = 0.0 if math.isnan(value) else value
        for k in range(0, count - 3, 4):
            a, b, c, d = 0.0, 0.0, 0.0, 0.0
            for j in range(n):
                value = residual[j]
                a += directions[k, j] * value
                b += directions[k + 1, j] * value
                c += directions[k + 2, j] * value
                d += directions[k + 3, j] * value
            for j in range(n):
                residual[j] -= (
                    a * directions[k, j]
                    + b * directions[k + 1, j]
                    + c * directions[k + 2, j]
                    + d * directions[k + 3, j]
                )
            coordinates[i, k] = a
            coordinates[i, k + 1] = b
            coordinates[i, k + 2] = c
            coordinates[i, k + 3] = d
        for k in range(count - count % 4, count):
            a = 0.0
            for j in range(n):
                a += directions[k, j] * residual[j]
            for j in range(n):
                residual[j] -= a * directions[k, j]
            coordinates[i, k] = a
        left = 0.0
        for j in range(n):
            left += residual[j] * residual[j]
        rest[i] = left
        for k in range(first, count):
            left += coordinates[i, k] * coordinates[i, k]
        spe[i] = left
        total = 0.0
        for k in range(whitening.shape[0]):
            c = 0.0
            for j in range(first):
                c += whitening[k, j] * coordinates[i, j]
            total += c * c
        t2[i] = total
        if not fine:
            rest[i] = spe[i] = t2[i] = math.nan
        limit[i] = limits[0]
        t2_limit[i] = limits[1] if fine else math.nan
        judged[i] = fine
        beyond[i] = rest[i] > limits[0]
        novel[i] = spe[i] > limits[0]
        extreme[i] = t2[i] > limits[1]


@kernel()
def take_off(rows, coordinates, directions, start, stop):
    """Take the parts along directions ``start`` to ``stop`` out of rows, in place."""
    for i in range(rows.shape[0]):
        for k in range(start, stop):
            c = coordinates[i, k]
            for j in range(rows.shape[1]):
                rows[i, j] -= c * directions[k, j]


@kernel()
def note_rows(judged, beyond, extreme, forming, fold, loose, pool):
    """Say what the end of a block is to do with rows.

    Parameters
    ----------
    judged, beyond, extreme : (m,) bool
        As :func:`score_rows` gives them.
    forming : bool
        Whether an event's directions are being learnt, to which every row beyond the limit counts.
    fold, loose, pool : (m,) bool
        Filled: whether a row is for the basis, is beyond the limit and no event's, and is for the
        limit.

    Returns
    -------
    (loose rows, extreme rows for the basis)
        How many.
    """
    count = far = 0
    for i in range(judged.shape[0]):
        fold[i] = judged[i] and not beyond[i]
        loose[i] = beyond[i] and not forming
        pool[i] = fold[i] and not forming
        count += loose[i]
        far += fold[i] and extreme[i]
    return count, far


@kernel()
def walk(first, judged, beyond, shows, ring, counters, last, quiet, taken, settings):
    """Go on from one sample to the next up to the first one that changes an event.

    Parameters
    ----------
    first : int
        Number of the sample in row 0.
    judged, beyond : (m,) bool
        Whether the sample could be judged, and whether it is beyond the limit even with the open
        events taken off.
    shows : (m, open) bool
        Whether each standing event shows in the sample; not looked at for a forming one.
    ring : (window,) bool
        Which of the last judged samples were beyond.
    counters : (4,) int64
        Position in the ring, samples beyond in it, open events, whether the last is forming.
    last, quiet, taken : (most open,) int64
        Of each open event: number of the last sample that shows it, judged samples since then,
        samples collected for its directions.
    settings : (4,) int64
        Samples beyond that open an event, quiet run that closes one, samples collected between
        updates of the directions, most open events.

    Returns
    -------
    (row, what, event)
        Row of the sample after which something is due, NOTHING at the end of the rows; the
        position of the event concerned.
    """
    opens, run, collect, most = settings[0], settings[1], settings[2], settings[3]
    window = ring.shape[0]
    for i in range(judged.shape[0]):
        if not judged[i]:
            continue
        standing = counters[2] - counters[3]
        due = -1
        for j in range(counters[2]):
            shown = shows[i, j] if j < standing else beyond[i]
            if shown:
                last[j] = first + i
                quiet[j] = 0
                if j >= standing or not beyond[i]:
                    taken[j] += 1
                    if taken[j] % collect == 0 and due < 0:
                        due = j
            else:
                quiet[j] += 1
        for j in range(counters[2]):
            if quiet[j] >= run:
                return i, CLOSED, j
        if due >= 0:
            return i, COLLECTED, due
        if counters[3] == 0 and counters[2] < most:
            position = counters[0]
            counters[1] += int(beyond[i]) - int(ring[position])
            ring[position] = beyond[i]
            counters[0] = (position + 1) % window
            if counters[1] >= opens:
                return i, OPENED, counters[2]
    return judged.shape[0], NOTHING, -1
