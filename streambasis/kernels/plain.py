"""Plain samples of many monitors, one monitor after the other, in one call.

A sample is *plain* while no event is open, if no value is missing and its residual is within the
limit. Nearly all are. What a monitor needs for them lies in its own arrays, whose addresses stand
in its *port*, a row of whole numbers; so a call can go over any monitors without Python in between.
"""

import math

from streambasis.kernels._addresses import flags_at, floats_at, integers_at
from streambasis.kernels._jit import kernel
from streambasis.kernels.monitor import score_rows, take_off

(
    OPEN, CHANNELS, BLOCK, WINDOW, FILL, COUNT, KNOWN, FIRST, SPREADS, RANK,
    CENTRE, INVERSE, REACH, FREEZE, PATIENCE, HELD, RUNS, MEAN, DIRECTIONS, WHITENING,
    Z, SPE, NUMBER, TIME, LOOSE, FOLD, POOL, RING, COUNTERS, LIMITS, WORK, TOLD,
    PORT,
) = range(33)  # fmt: skip
"""Places in a port: open events; channels, samples per block and per persistence window; rows in
the buffer, number of the next sample; adopted directions, those and the basis together, rows of
the whitening, rank reported. From CENTRE on addresses, as ``standardize``, ``score_rows`` and
``walk`` name what lies there, and the columns of the buffer; LIMITS holds those of SPE and T², WORK
room for a residual, coordinates and what ``score_rows`` tells of a row, TOLD for its flags."""

ROWS_AT_A_TIME = 64


@kernel()
def take_plain(ports, starts, stops, order, samples, times, columns, due):
    """Judge rows of many feeds, of each up to the first that is not plain or to the block's end.

    Parameters
    ----------
    ports : (f,) int64
        Address of the port of each feed.
    starts, stops : (f,) int64
        Which rows are whose; of ``starts``, what is still to be judged is left.
    order : (m,) int64, or (0,)
        Where each row lies in the arrays below; with no entries, row i lies at i.
    samples, times : (m, n), (m,) int64
        In channel units.
    columns : (number, spe, t2, limit, t2_limit, extreme, rank)
        Filled where a row was judged.
    due : (f,) bool
        Filled: whether a row is left, or a full block is to be learnt from.
    """
    for f in range(ports.shape[0]):
        port = integers_at(ports[f], (PORT,))
        if port[OPEN] == 0:
            starts[f] = _take(port, starts[f], stops[f], order, samples, times, columns)
        due[f] = starts[f] < stops[f] or port[FILL] == port[BLOCK]


@kernel()
def to_rows(columns, length, start, stop, out):
    """Put columns side by side as rows, a few rows at a time so that both stay in the cache.

    Parameters
    ----------
    columns : (n,) int64
        Address of each column of ``length`` float64.
    start, stop : int
        Rows to be filled.
    out : (length, n)
        Where they are filled.

    Returns
    -------
    int
        Position in ``out``, counted through its rows, of the first infinite value; -1 if none is.
    """
    n = columns.shape[0]
    infinite = 0
    for top in range(start, stop, ROWS_AT_A_TIME):
        bottom = min(top + ROWS_AT_A_TIME, stop)
        for j in range(n):
            column = floats_at(columns[j], (length,))
            for i in range(top, bottom):
                value = column[i]
                out[i, j] = value
                infinite += math.isinf(value)
    for i in range(start, stop if infinite else start):
        for j in range(n):
            if math.isinf(out[i, j]):
                return i * n + j
    return -1


@kernel(internal=True)
def _take(port, start, stop, order, samples, times, columns):
    """Judge the rows of one feed; return the first that was not judged."""
    number, spe, t2, limit, t2_limit, extreme, rank = columns
    n, first, rows = port[CHANNELS], port[FIRST], port[WINDOW] + port[BLOCK]
    z = floats_at(port[Z], (rows, n))
    held, runs = floats_at(port[HELD], (n,)), integers_at(port[RUNS], (n,))
    mean, directions = floats_at(port[MEAN], (n,)), floats_at(port[DIRECTIONS], (first, n))
    whitening = floats_at(port[WHITENING], (port[SPREADS], first))
    limits = floats_at(port[LIMITS], (2,))
    work = floats_at(port[WORK], (n + first + 5,))
    coordinates = work[n : n + first].reshape((1, first))
    for i in range(start, stop):
        if port[FILL] == port[BLOCK]:
            return i
        row = order[i] if order.shape[0] else i
        at = port[WINDOW] + port[FILL]
        if not _standard(port, samples[row], held, runs, z[at]):
            return i
        found, told = work[n + first :], flags_at(port[TOLD], (4,))
        score_rows(
            z[at : at + 1], mean, directions, first, whitening, limits, work[:n], coordinates,
            found[0:1], found[1:2], found[2:3], found[3:4], found[4:5],
            told[0:1], told[1:2], told[2:3], told[3:4],
        )  # fmt: skip
        if told[1]:
            return i
        number[row], spe[row], t2[row] = port[COUNT], found[0], found[2]
        limit[row], t2_limit[row] = found[3], found[4]
        extreme[row], rank[row] = told[3], port[RANK]
        for j in range(n):
            runs[j] = runs[j] + 1 if samples[row, j] == held[j] else 0
            held[j] = samples[row, j]
        _note(port, at, times[row], found[1])
        _clean(port, z[at : at + 1], coordinates, directions, found[2], limits[1])
    return stop


@kernel(internal=True)
def _standard(port, sample, held, runs, out):
    """Write a sample about its centre and in noise units; return whether no value is missing.

    As ``standardize`` does for many, but that the runs are left as they are.
    """
    n = port[CHANNELS]
    centre, inverse = floats_at(port[CENTRE], (n,)), floats_at(port[INVERSE], (n,))
    reach, freeze = floats_at(port[REACH], (n,)), floats_at(port[FREEZE], (n,))
    patience = integers_at(port[PATIENCE], (n,))
    whole = True
    for j in range(n):
        value = (sample[j] - centre[j]) * inverse[j]
        value = min(max(value, -reach[j]), reach[j])
        if runs[j] + 1 >= patience[j] and sample[j] == held[j]:
            value = freeze[j]
        whole = whole and not math.isnan(sample[j])
        out[j] = value
    return whole


@kernel(internal=True)
def _note(port, at, time, rest):
    """Enter a sample in the buffer and in the walk, and count it."""
    rows, window = port[WINDOW] + port[BLOCK], port[WINDOW]
    floats_at(port[SPE], (rows,))[at] = rest
    integers_at(port[NUMBER], (rows,))[at] = port[COUNT]
    integers_at(port[TIME], (rows,))[at] = time
    flags_at(port[LOOSE], (rows,))[at] = False
    flags_at(port[FOLD], (rows,))[at] = True
    flags_at(port[POOL], (rows,))[at] = True
    ring, counters = flags_at(port[RING], (window,)), integers_at(port[COUNTERS], (4,))
    position = counters[0]
    counters[1] -= int(ring[position])
    ring[position] = False
    counters[0] = (position + 1) % window
    port[FILL] += 1
    port[COUNT] += 1


@kernel(internal=True)
def _clean(port, z, coordinates, directions, t2, most):
    """Make a sample fit to be folded: known behaviour taken off, coordinates drawn in to T²."""
    take_off(z, coordinates, directions, 0, port[KNOWN])
    if t2 > most:
        excess = 1.0 - math.sqrt(most / t2)
        for k in range(port[KNOWN], port[FIRST]):
            coordinates[0, k] *= excess
        take_off(z, coordinates, directions, port[KNOWN], port[FIRST])
