"""Times and spans of every kind a caller may hold, as integer nanoseconds and back.

A time is a number of nanoseconds since an origin that the feed chooses: the Unix epoch for
``datetime`` and ``datetime64``, whatever the caller counts from for plain seconds.
"""

from __future__ import annotations

import datetime as dt
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from streambasis.errors import SampleError, SampleTypeError, SettingError

NANOSECONDS = 1_000_000_000
_EPOCH = dt.datetime(1970, 1, 1, tzinfo=dt.UTC)
_LARGEST_SECONDS = (2**63 - 1) / NANOSECONDS


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
    elif isinstance(span, dt.timedelta):
        value = (span // dt.timedelta(microseconds=1)) * 1000
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
    if value < 1:
        raise SettingError(f"span={span!r}: a span is at least one nanosecond")
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
    if isinstance(at, dt.datetime):
        moment = at if at.tzinfo is not None else at.replace(tzinfo=dt.UTC)
        return ((moment - _EPOCH) // dt.timedelta(microseconds=1)) * 1000
    return int(many_nanoseconds(np.asarray([at]), 1)[0])


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
    if array.dtype == object and array.size and isinstance(array.flat[0], dt.datetime):
        array = np.array([nanoseconds(t) for t in array.ravel()], dtype="datetime64[ns]")
    if array.shape != (count,):
        raise SampleError(f"times of shape {array.shape} for {count} samples: one time a sample")
    if array.dtype.kind == "M":
        if np.isnat(array).any():
            raise SampleError(f"row {int(np.isnat(array).argmax())}: the time is missing (NaT)")
        return array.astype("datetime64[ns]").astype(np.int64)
    if array.dtype.kind in "iu":
        bad = np.abs(array.astype(np.float64)) >= _LARGEST_SECONDS
        if not bad.any():
            return array.astype(np.int64) * NANOSECONDS
    elif array.dtype.kind == "f":
        seconds = array.astype(np.float64)
        bad = ~(np.abs(seconds) < _LARGEST_SECONDS)
        if not bad.any():
            whole = np.floor(seconds)
            # whole seconds and the fraction apart: a Unix time in float64 seconds keeps its
            # last bits, which a product with 1e9 would round away
            fraction = np.rint((seconds - whole) * NANOSECONDS)
            return whole.astype(np.int64) * NANOSECONDS + fraction.astype(np.int64)
    else:
        raise SampleTypeError(
            f"times of type {array.dtype}: give seconds, datetime or numpy.datetime64"
        )
    row = int(bad.argmax())
    raise SampleError(f"row {row}: time {array[row]!r} is no number of seconds within 292 years")
