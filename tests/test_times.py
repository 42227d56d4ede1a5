"""Times of every kind become the same nanoseconds, and what is no time is refused by name."""

from __future__ import annotations

import datetime as dt

import numpy as np
import pandas as pd
import pytest

from streambasis.errors import SampleError, SampleTypeError, SettingError
from streambasis.times import EARLIEST, many_nanoseconds, nanoseconds, shown, span_nanoseconds

SECOND = 1_000_000_000
MOMENT = dt.datetime(2024, 2, 29, 12, 30, 15, 250_000)
MOMENT_NS = 1_709_209_815_250_000_000  # date -u -d "2024-02-29 12:30:15.25" +%s%N
EAST = dt.timezone(dt.timedelta(hours=2))


@pytest.mark.parametrize(
    ("span", "expected"),
    [
        (1, SECOND),
        (0.25, SECOND // 4),
        (1e-9, 1),
        (dt.timedelta(milliseconds=3), 3_000_000),
        (np.timedelta64(2, "m"), 120 * SECOND),
        (np.timedelta64(5, "ns"), 5),
    ],
)
def test_spans_of_every_kind_are_nanoseconds(span, expected):
    """Numbers are seconds; timedelta and timedelta64 say their unit themselves."""
    assert span_nanoseconds(span) == expected


@pytest.mark.parametrize(
    "span",
    [
        0,
        -1.0,
        float("nan"),
        float("inf"),
        1e-10,
        1e10,
        "a day",
        None,
        dt.timedelta(0),
        dt.timedelta(days=200_000),
        np.timedelta64("NaT"),
        np.timedelta64(10**12, "D"),
    ],
)
def test_a_span_that_is_none_is_refused_by_name(span):
    """A span that is not a positive length of time within 292 years names itself in the error."""
    with pytest.raises(SettingError, match="span="):
        span_nanoseconds(span)


@pytest.mark.parametrize(
    "at",
    [
        MOMENT,
        MOMENT.replace(tzinfo=dt.UTC),
        MOMENT.replace(tzinfo=dt.UTC).astimezone(EAST),
        np.datetime64(MOMENT),
        np.datetime64(MOMENT, "ns"),
        pd.Timestamp(MOMENT),
        pd.Timestamp(MOMENT, tz="UTC").tz_convert("Asia/Tokyo"),
        1_709_209_815.25,
    ],
)
def test_one_moment_in_every_kind_is_one_time(at):
    """datetime, datetime64, pandas Timestamp and Unix seconds of one moment agree, zones too."""
    assert nanoseconds(at) == MOMENT_NS
    assert many_nanoseconds([at, at], 2).tolist() == [MOMENT_NS, MOMENT_NS]


def test_a_pandas_timestamp_keeps_its_nanoseconds():
    """The digits below a microsecond, which datetime does not have, survive."""
    at = pd.Timestamp(MOMENT_NS + 7)
    assert nanoseconds(at) == MOMENT_NS + 7
    assert many_nanoseconds(pd.DatetimeIndex([at]), 1).tolist() == [MOMENT_NS + 7]


def test_seconds_alone_and_in_a_batch_agree():
    """One time and a batch of times take the same number to the same nanosecond."""
    rng = np.random.default_rng(1)
    seconds = np.concatenate([rng.uniform(-2e9, 2e9, 500), rng.uniform(-1, 1, 500), [0.0, -0.0]])
    many = many_nanoseconds(seconds, len(seconds))
    assert many.tolist() == [nanoseconds(float(s)) for s in seconds]
    assert many.tolist() == [nanoseconds(s) for s in seconds]
    whole = np.arange(-5, 5)
    assert many_nanoseconds(whole, 10).tolist() == [nanoseconds(int(s)) for s in whole]


def test_unix_seconds_keep_all_their_bits():
    """The nearest nanosecond to the float64 given, not what a product with 1e9 rounds to."""
    for seconds in (1_700_000_000.123456, 1_700_000_000.9999998, -1.5, 1e-9):
        whole, fraction = seconds.as_integer_ratio()
        exact = (2 * whole * SECOND + fraction) // (2 * fraction)
        assert abs(nanoseconds(seconds) - exact) <= 1


@pytest.mark.parametrize(
    ("fine", "at"),
    [
        (0.0, float("nan")),
        (0.0, float("inf")),
        (0.0, 1e10),
        (0.0, -1e10),
        (0, 10**11),
        (np.datetime64(0, "ns"), np.datetime64("NaT", "ns")),
        (MOMENT, pd.NaT),
        (np.datetime64(0, "D"), np.datetime64("2300-01-01")),
        (np.datetime64(0, "s"), np.datetime64("0001-01-01", "s")),
        (MOMENT, dt.datetime(2300, 1, 1)),
        (MOMENT, dt.datetime(1600, 1, 1)),
    ],
)
def test_a_time_that_is_none_is_refused_with_its_row(fine, at):
    """NaN, not-a-time and times beyond 64-bit nanoseconds are errors, never a wrapped number."""
    with pytest.raises(SampleError):
        nanoseconds(at)
    with pytest.raises(SampleError, match="row 1"):
        many_nanoseconds([fine, at], 2)


@pytest.mark.parametrize("at", ["noon", b"noon", [1.0], object(), True + 0j])
def test_what_is_no_kind_of_time_is_a_type_error(at):
    """Text, lists, objects and complex numbers are no times."""
    with pytest.raises((SampleTypeError, SampleError)):
        nanoseconds(at)


def test_a_batch_needs_one_time_a_sample():
    """Too few times, too many or a table of them name both shapes."""
    for at in ([1.0], [1.0, 2.0, 3.0], [[1.0, 2.0]], 5.0):
        with pytest.raises(SampleError, match="one time a sample"):
            many_nanoseconds(at, 2)
    assert many_nanoseconds([], 0).tolist() == []


def test_times_are_shown_in_their_own_kind():
    """A message shows dates where dates were given and plain seconds otherwise."""
    assert shown(MOMENT_NS, MOMENT) == "2024-02-29T12:30:15.250000000"
    assert shown(MOMENT_NS, np.datetime64(0, "s")) == "2024-02-29T12:30:15.250000000"
    assert shown(-1_500_000_000, 0.0) == "-1.5"
    assert shown(3 * SECOND, 1) == "3"
    assert shown(EARLIEST, 0) == "-9223372036.854775807"
