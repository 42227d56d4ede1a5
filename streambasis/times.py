"""Times and spans of every kind a caller may hold, as integer nanoseconds and back.

A time is a number of nanoseconds since an origin that the feed chooses: the Unix epoch for
``datetime`` and ``datetime64``, whatever the caller counts from for plain seconds.
"""

from __future__ import annotations

import datetime as dt
import math
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from streambasis.errors import SampleError, SampleTypeError, SettingError

NANOSECONDS = 1_000_000_000
EARLIEST = -(2**63) + 1
"""The first time there is: int64 without the value that numpy keeps for not-a-time."""
_LATEST = 2**63 - 1
_EPOCH = dt.datetime(1970, 1, 1, tzinfo=dt.UTC)
_MICROSECOND = dt.timedelta(microseconds=1)
_LARGEST_SECONDS = _LATEST / NANOSECONDS


def span_nanoseconds(span: Any) -> int:
    """Return a length of time as whole nanoseconds.

    Parameters
    ----------
    span : float, int, datetime.timedelta or numpy.timedelta64
        Plain numbers are seconds.

    Returns
    -------
    int
        Nanoseconds, at least 1.

    Raises
    ------
    SettingError
        If the span is not a positive length of time that 64-bit nanoseconds can hold.
    """
    if isinstance(span, np.timedelta64):
        value = int(span.astype("timedelta64[ns]").astype(np.int64))
        if np.timedelta64(value, "ns").astype(span.dtype) != span:
            value = 0
    elif isinstance(span, dt.timedelta):
        value = (span // _MICROSECOND) * 1000
    else:
        try:
            seconds = float(span)
        except (TypeError, ValueError):
            raise SettingError(
                f"span={span!r}: give seconds as a number, a datetime.timedelta or a "
                "numpy.timedelta64"
            ) from None
        if not 0 < seconds < _LARGEST_SECONDS:
            raise SettingError(f"span={span!r}: a span is a positive number of seconds")
        value = round(seconds * NANOSECONDS)
    if not 1 <= value <= _LATEST:
        raise SettingError(f"span={span!r}: a span is from one nanosecond to 292 years")
    return value


def nanoseconds(at: Any) -> int:
    """Return one time as whole nanoseconds.

    Parameters
    ----------
    at : float, int, datetime.datetime or numpy.datetime64
        Plain numbers are seconds; a datetime without a zone is taken as UTC.

    Raises
    ------
    SampleError
        If the time is NaN, not-a-time or beyond 64-bit nanoseconds.
    SampleTypeError
        If it is of no known kind.
    """
    kind = at.__class__
    if kind is float and -_LARGEST_SECONDS < at < _LARGEST_SECONDS:
        return _from_seconds(at)
    if kind is int and -_LARGEST_SECONDS < at < _LARGEST_SECONDS:
        return int(at) * NANOSECONDS
    if isinstance(at, dt.datetime) and not hasattr(at, "to_datetime64"):
        moment = at if at.tzinfo is not None else at.replace(tzinfo=dt.UTC)
        value = ((moment - _EPOCH) // _MICROSECOND) * 1000
        if not EARLIEST <= value <= _LATEST:
            raise SampleError(f"time {at}: beyond what 64-bit nanoseconds hold (1678 to 2262)")
        return value
    # a pandas Timestamp is a datetime with nanoseconds
    value = at.to_datetime64() if hasattr(at, "to_datetime64") else at
    return int(many_nanoseconds(np.asarray([value]), 1)[0])


def _from_seconds(seconds: float) -> int:
    # whole seconds and the fraction apart: a Unix time in float64 seconds keeps its last bits,
    # which a product with 1e9 would round away
    whole = math.floor(seconds)
    return whole * NANOSECONDS + round((seconds - whole) * NANOSECONDS)


def many_nanoseconds(at: ArrayLike, count: int) -> NDArray[np.int64]:
    """Return the times of a batch as an int64 array of shape (count,), in nanoseconds.

    Raises
    ------
    SampleError
        If there are not ``count`` times, or one is NaN, not-a-time or out of range; the message
        names its row.
    SampleTypeError
        If they are of no known kind.
    """
    array = np.asarray(at)
    if array.size == 0 and count == 0:
        return np.zeros(0, np.int64)
    if array.shape != (count,):
        raise SampleError(f"times of shape {array.shape} for {count} samples: one time a sample")
    if array.dtype == object and isinstance(array[0], dt.datetime):
        return np.array([_of_row(i, t) for i, t in enumerate(array)], np.int64)
    if array.dtype.kind == "M":
        return _from_datetimes(array)
    if array.dtype.kind in "iu":
        bad = np.abs(array.astype(np.float64)) >= _LARGEST_SECONDS
        if not bad.any():
            return array.astype(np.int64) * NANOSECONDS
    elif array.dtype.kind == "f":
        seconds = array.astype(np.float64)
        bad = ~(np.abs(seconds) < _LARGEST_SECONDS)
        if not bad.any():
            whole = np.floor(seconds)
            fraction = np.rint((seconds - whole) * NANOSECONDS)
            return whole.astype(np.int64) * NANOSECONDS + fraction.astype(np.int64)
    else:
        raise SampleTypeError(
            f"times of type {array.dtype}: give seconds, datetime or numpy.datetime64"
        )
    row = int(bad.argmax())
    raise SampleError(f"row {row}: time {array[row]} is no number of seconds within 292 years")


def _of_row(row: int, at: Any) -> int:
    try:
        return nanoseconds(at)
    except SampleError as error:
        raise SampleError(f"row {row}: {error}") from None


def _from_datetimes(array: NDArray[Any]) -> NDArray[np.int64]:
    missing = np.isnat(array)
    if missing.any():
        raise SampleError(f"row {int(missing.argmax())}: the time is missing (NaT)")
    fine = array.astype("datetime64[ns]")
    # numpy wraps around in silence where nanoseconds do not reach; a date in days or coarser
    # comes back as itself when it was in range
    bad = fine.astype(array.dtype) != array
    if bad.any():
        row = int(bad.argmax())
        raise SampleError(
            f"row {row}: time {array[row]} is beyond what 64-bit nanoseconds hold (1678 to 2262)"
        )
    return fine.astype(np.int64)


def shown(time: int, like: Any) -> str:
    """Return a time in nanoseconds as text of the kind that ``like`` is.

    Parameters
    ----------
    time : int
        Nanoseconds.
    like : any kind of time
        A datetime or datetime64 asks for a date, anything else for seconds.

    Examples
    --------
    >>> shown(1_500_000_000, 0.0)
    '1.5'
    """
    if isinstance(like, dt.datetime | np.datetime64):
        return str(np.datetime64(time, "ns"))
    whole, fraction = divmod(abs(time), NANOSECONDS)
    digits = f".{fraction:09d}".rstrip("0").rstrip(".")
    return f"{'-' if time < 0 else ''}{whole}{digits}"
