"""Round dates and times for an axis, with labels as short as they can be."""

from __future__ import annotations

import numpy as np

MOST_TICKS = 9
SECOND = 10**9
MINUTE, HOUR, DAY = 60 * SECOND, 3600 * SECOND, 86_400 * SECOND

_STEPS = (
    *(digit * 10**power for power in range(9) for digit in (1, 2, 5)),
    *(count * unit for unit in (SECOND, MINUTE) for count in (1, 2, 5, 10, 15, 30)),
    *(count * HOUR for count in (1, 2, 3, 6, 12)),
    *(count * DAY for count in (1, 2, 4, 7, 14)),
)
_MONTHS = (1, 2, 3, 6, 12, 24, 60, 120, 240, 600)
_NAMES = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")


def date_ticks(first: int, last: int) -> tuple[list[int], list[str]]:
    """Return round moments between two times, at most nine, and their labels.

    Parameters
    ----------
    first, last : int
        Nanoseconds since 1970, ``first`` not after ``last``.

    Returns
    -------
    list of int, list of str
        Times of day where the steps are below one day, with the date at midnight; dates, months
        or years where they are longer.

    Examples
    --------
    >>> from streambasis.report.dates import DAY, HOUR, date_ticks
    >>> date_ticks(0, 2 * DAY + 5 * HOUR)[1]
    ['Jan 1', '06:00', '12:00', '18:00', 'Jan 2', '06:00', '12:00', '18:00', 'Jan 3']
    >>> date_ticks(17_000 * DAY, 17_200 * DAY)[1]
    ['Aug', 'Sep', 'Oct', 'Nov', 'Dec', '2017', 'Feb']
    """
    for step in _STEPS:
        start = -(-first // step) * step
        if (last - start) // step < MOST_TICKS:
            moments = list(range(start, last + 1, step))
            return moments, [_label(moment, step) for moment in moments]
    begin, end = _month_of(first), _month_of(last)
    for months in _MONTHS:
        counted = [m for m in range(begin, end + 1) if m % months == 0 and _start_of(m) >= first]
        if len(counted) <= MOST_TICKS:
            break
    return [_start_of(m) for m in counted], [_month(m) for m in counted]


def _month_of(moment: int) -> int:
    return int(np.datetime64(moment, "ns").astype("datetime64[M]").astype(np.int64))


def _start_of(month: int) -> int:
    return int(np.datetime64(month, "M").astype("datetime64[ns]").astype(np.int64))


def _month(month: int) -> str:
    return _NAMES[month % 12] if month % 12 else str(1970 + month // 12)


def _label(moment: int, step: int) -> str:
    text = str(np.datetime64(moment, "ns"))
    if moment % DAY == 0:
        return f"{_NAMES[int(text[5:7]) - 1]} {int(text[8:10])}"
    if step >= MINUTE:
        return text[11:16]
    if step >= SECOND:
        return text[11:19]
    return text[11:].rstrip("0")
