"""JSON objects of channel values as samples: lines of a file, payloads of a broker."""

from __future__ import annotations

import datetime as dt
import json
import math
import re
from collections.abc import Sequence
from typing import Any

import numpy as np
import pyarrow as pa

from streambasis.errors import FeedError
from streambasis.feeds.columns import MOST_NANOSECONDS, Columns, choose
from streambasis.feeds.keys import Keys
from streambasis.feeds.lines import Lines
from streambasis.feeds.rows import Rows
from streambasis.times import NANOSECONDS

_MOMENT = re.compile(
    r"(\d{4}-\d\d-\d\d)(?:[T ](\d\d:\d\d(?::\d\d)?)(?:[.,](\d{1,9}))?(Z|[+-]\d\d(?::?\d\d)?)?)?"
)
_EPOCH = dt.datetime(1970, 1, 1, tzinfo=dt.UTC)
_SHOWN = 40


class RowError(Exception):
    """An object that is no sample; the message says why."""


def object_of(data: bytes | str) -> dict[str, Any]:
    """Return the JSON object that bytes hold.

    Raises
    ------
    RowError
        If they hold anything else.
    """
    try:
        found = json.loads(data)
    except RecursionError:
        raise RowError("nested too deeply") from None
    except ValueError as error:
        # of a text that is not UTF-8 the message would hold the text
        reason = error.msg if isinstance(error, json.JSONDecodeError) else type(error).__name__
        raise RowError(f"no JSON ({reason})") from None
    if not isinstance(found, dict):
        raise RowError("no JSON object of channel values")
    return found


def moment(text: str) -> int:
    """Return an ISO 8601 time as nanoseconds since the Unix epoch; without a zone it is UTC.

    Raises
    ------
    RowError
        If it is none, or beyond 64-bit nanoseconds.
    """
    match = _MOMENT.fullmatch(text.strip())
    try:
        if match is None:
            raise ValueError
        day, clock, fraction, zone = match.groups()
        when = dt.datetime.fromisoformat(f"{day}T{clock or '00:00'}{zone or 'Z'}")
        seconds = (when - _EPOCH) // dt.timedelta(seconds=1)
    except (ValueError, OverflowError):
        raise RowError(f"the time {_short(text)} cannot be read") from None
    value = seconds * NANOSECONDS + int((fraction or "").ljust(9, "0"))
    if abs(value) > MOST_NANOSECONDS:
        raise RowError(f"the time {_short(text)} is not within 292 years of 1970")
    return value


def columns_of(
    name: str,
    found: dict[str, Any],
    channels: Sequence[str] | None,
    time: str | None,
    keys: Keys | None = None,
) -> Columns:
    """Choose channels and time among the keys of an object.

    Raises
    ------
    FeedError
        As of :func:`streambasis.feeds.columns.choose`.
    """
    schema = pa.schema([(key, _kind(found[key])) for key in found])
    return choose(name, schema, channels, time, keys)


def _kind(value: Any) -> pa.DataType:
    if value is None:
        return pa.null()
    if isinstance(value, int | float) and not isinstance(value, bool):
        return pa.float64()
    if isinstance(value, str) and _MOMENT.fullmatch(value.strip()):
        return pa.timestamp("ns")
    return pa.string()


class ObjectReader:
    """Reads objects into rows.

    Parameters
    ----------
    columns : Columns
        Channels and time; a key that is neither is passed over.
    """

    def __init__(self, columns: Columns) -> None:
        self.columns = columns

    def values(self, found: dict[str, Any]) -> list[float]:
        """Return one value per channel; a channel that is absent or null is NaN.

        Raises
        ------
        RowError
            If a value is no finite number, or no channel is there at all.
        """
        row = []
        present = False
        for name in self.columns.channels:
            value = found.get(name)
            if value is None:
                row.append(np.nan)
                present = present or name in found
                continue
            present = True
            if type(value) is not float:
                if not isinstance(value, int) or isinstance(value, bool):
                    raise RowError(f"{name!r}: invalid value {_short(value)}")
                try:
                    value = float(value)
                except OverflowError:
                    value = np.inf
            if value in (np.inf, -np.inf):
                raise RowError(f"{name!r}: the value is not finite")
            row.append(value)
        if not present:
            raise RowError("none of the channels is in it")
        keys = self.columns.keys
        if keys is not None:
            row.append(keys.number(found.get(keys.column)))
            if np.isnan(row[-1]):
                raise RowError(f"{keys.column!r}: no key (text or a whole number)")
        return row

    def time(self, found: dict[str, Any]) -> int:
        """Return the time in nanoseconds.

        Raises
        ------
        RowError
            If there is none, or it cannot be read.
        """
        given = found.get(self.columns.time or "")
        if given is None:
            raise RowError(f"the time is missing ({self.columns.time!r})")
        if isinstance(given, str):
            if self.columns.unit is None:
                return moment(given)
        elif not isinstance(given, bool | list | dict) and self.columns.unit is not None:
            # as ticks_to_nanoseconds, for one value at a quarter of its cost
            unit = self.columns.unit
            if isinstance(given, int) or math.isfinite(given):
                whole = math.floor(given)
                value: int = whole * unit + round((given - whole) * unit)
                if abs(value) <= MOST_NANOSECONDS:
                    return value
            raise RowError("the time is no number of seconds within 292 years")
        raise RowError(f"the time {_short(given)} cannot be read")


def _short(value: Any) -> str:
    text = repr(value) if not isinstance(value, int) or abs(value) < 2**64 else "a huge number"
    return text if len(text) <= _SHOWN else text[:_SHOWN] + "..."


class JsonRows:
    """Parses lines that hold one JSON object each.

    Parameters
    ----------
    name : str
        What the feed is called in messages.
    peek : bytes
        The first lines; the first whole object names the channels.
    channels, time, keys
        As of :func:`streambasis.feeds.open_feed`.
    """

    def __init__(
        self,
        name: str,
        peek: bytes,
        channels: Sequence[str] | None,
        time: str | None,
        keys: Keys | None = None,
    ) -> None:
        for line in peek.split(b"\n"):
            try:
                found = object_of(line)
            except RowError:
                continue
            break
        else:
            raise FeedError(f"{name}: none of the first lines is a JSON object")
        self.columns = columns_of(name, found, channels, time, keys)
        self._reader = ObjectReader(self.columns)

    def begin(self, line: bytes) -> bool:
        """Return False: there is no line of names."""
        del line
        return False

    def parse(self, lines: Lines) -> Rows:
        """Parse lines; blank ones hold no row."""
        rows = Rows.empty(len(self.columns.read), self.columns.time is not None)
        values, times, kept = [], [], []
        for index in range(len(lines)):
            line = lines.text(index)
            if line.isspace():
                continue
            try:
                found = object_of(line)
                row = self._reader.values(found)
                if self.columns.time is not None:
                    times.append(self._reader.time(found))
            except RowError as error:
                rows.faults[index] = str(error)
                continue
            values.append(row)
            kept.append(index)
        if kept:
            rows.values.append(np.array(values))
            rows.lines.append(np.array(kept, np.int64))
            if rows.times is not None:
                rows.times.append(np.array(times, np.int64))
        return rows
