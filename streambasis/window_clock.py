"""The clock of a window: which samples are stamped, and what the span lets leave.

A clock is what a kernel finds in the header from ``NOW`` to ``TIMED``: the time of the sample to
come, the time up to which samples leave for it, and whether it has a time at all.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.errors import SampleError
from streambasis.kernels import exchange, growth
from streambasis.times import EARLIEST, many_nanoseconds, nanoseconds, shown

NOTHING_LEAVES = EARLIEST - 1
"""A time before all others."""


def clock_of(header: NDArray[np.int64], span: int | None, at: Any) -> tuple[int, int, int]:
    """Return the clock of the sample to come.

    Parameters
    ----------
    header : ndarray of int64
        The header of the window, which says what came before.
    span : int or None
        Nanoseconds kept.
    at : time or None
        As the caller gave it; None where the sample has none.

    Raises
    ------
    SampleError
        If the time runs backwards, is missing while there is a span, or some samples have a time
        and others have none.
    """
    now = None if at is None else nanoseconds(at)
    _check_timed(header, span, now is not None)
    if now is None:
        return 0, NOTHING_LEAVES, 0
    if header[exchange.STAMPED] and now < header[exchange.LAST]:
        raise _backwards(header[growth.COUNT], now, int(header[exchange.LAST]), at)
    return now, NOTHING_LEAVES if span is None else max(now - span, NOTHING_LEAVES), 1


def clocks_of(
    header: NDArray[np.int64], span: int | None, at: Any, count: int
) -> NDArray[np.int64]:
    """Return the clocks of ``count`` samples to come, (count, 3); as :func:`clock_of` for each."""
    clocks = np.zeros((count, 3), np.int64)
    clocks[:, 1] = NOTHING_LEAVES
    if count == 0:
        return clocks
    _check_timed(header, span, at is not None)
    if at is None:
        return clocks
    times = many_nanoseconds(at, count)
    first = header[exchange.LAST] if header[exchange.STAMPED] else times[0]
    before = np.concatenate([[first], times[:-1]])
    if (times < before).any():
        row = int((times < before).argmax())
        like = np.asarray(at)[row]
        raise _backwards(header[growth.COUNT] + row, int(times[row]), int(before[row]), like)
    clocks[:, 0] = times
    clocks[:, 2] = 1
    if span is not None:
        # no wrap-around: times below the earliest plus the span have nothing before them
        far = times >= EARLIEST + span
        clocks[far, 1] = times[far] - span
    return clocks


def _check_timed(header: NDArray[np.int64], span: int | None, timed: bool) -> None:
    count = header[growth.COUNT]
    if span is not None and not timed:
        raise SampleError(
            f"sample {count}: a basis with span= needs the time of every sample; give at="
        )
    if count and timed != bool(header[exchange.STAMPED]):
        this, others = ("a time", "none") if timed else ("no time", "one")
        raise SampleError(
            f"sample {count} has {this}, the samples before it have {others}: "
            "give at= for all samples or for none"
        )


def _backwards(number: int, now: int, last: int, like: Any) -> SampleError:
    return SampleError(
        f"sample {number}: its time {shown(now, like)} is before {shown(last, like)}, the time of "
        "the sample before it; nothing was taken"
    )
