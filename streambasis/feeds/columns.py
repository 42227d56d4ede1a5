"""Which columns of a feed are its channels and which one is its time."""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from streambasis.errors import FeedError
from streambasis.feeds.keys import Keys

UNITS = {"s": 10**9, "sec": 10**9, "ms": 10**6, "us": 10**3, "ns": 1}
"""Nanoseconds per unit; the name of a time column may end in one, as in ``time_ms``."""

_MOMENT_UNITS = {**UNITS, "day": 86_400 * 10**9}

_TIME_NAME = re.compile(
    r"(?:time|timestamp|time[ _]?stamp|date|date[ _]?time|utc|epoch|unix[ _]?time)"
    r"(?:[ _]*[(\[]?(s|sec|ms|us|ns)[)\]]?)?",
    re.IGNORECASE,
)
SHOWN_NAMES = 12
MOST_NANOSECONDS = 2**63 - 1


@dataclass(frozen=True, slots=True)
class Columns:
    """The choice made.

    Attributes
    ----------
    channels : tuple of str
        Names of the channels, in the order in which their values come.
    time : str or None
        Name of the time column.
    unit : int or None
        Nanoseconds per unit where the time column holds numbers; None where it holds timestamps.
    keys : Keys or None
        The column of keys, where several feeds are told apart; its number follows the channels.
    """

    channels: tuple[str, ...]
    time: str | None
    unit: int | None
    keys: Keys | None = None

    @property
    def read(self) -> tuple[str, ...]:
        """Names of the numbers that a reader gives for each row."""
        return self.channels if self.keys is None else (*self.channels, self.keys.column)


def choose(
    source: str,
    schema: pa.Schema,
    channels: Sequence[str] | None,
    time: str | None,
    keys: Keys | None = None,
) -> Columns:
    """Choose the time column and the channels among the columns of a feed.

    Parameters
    ----------
    source : str
        What the feed is called in messages.
    schema : pyarrow.Schema
        Names and types of the columns; text is a column that could not be read as numbers.
    channels : sequence of str or None
        The channels asked for; None takes every column but the time.
    time : str or None
        The time column asked for; None looks for the one obvious candidate.
    keys : Keys or None
        The column of keys, if there is to be one.

    Raises
    ------
    FeedError
        If a column asked for is unknown or comes twice, a channel is not numeric, several columns
        could be the time, or no channel is left.

    Notes
    -----
    A column of timestamps or dates is a candidate for the time; failing that, one that is named
    like one (``time``, ``timestamp``, ``date``, ``epoch``, ..., with a unit or without). Columns
    named among ``channels`` are never candidates.
    """
    names: list[str] = schema.names
    wanted = list(channels) if channels is not None else None
    if wanted is not None:
        for name in wanted:
            _require(source, names, name)
        for name in wanted:
            if wanted.count(name) > 1:
                raise FeedError(f"{source}: channel {name!r} is asked for twice")
    if keys is not None:
        _require(source, names, keys.column)
        if keys.column in (time, *(wanted or [])):
            raise FeedError(f"{source}: the key {keys.column!r} cannot be time or channel as well")
    reserved = [] if keys is None else [keys.column]
    if time is None:
        time = _find_time(source, schema, [*(wanted or []), *reserved])
    else:
        _require(source, names, time)
    if wanted is None:
        wanted = [name for name in names if name not in (time, *reserved)]
        for position, name in enumerate(names):
            if not name:
                raise FeedError(
                    f"{source}: column {position + 1} has no name; give it one, or choose the "
                    "channels by name"
                )
            _require(source, names, name)
    elif time in wanted:
        raise FeedError(f"{source}: column {time!r} is the time and cannot also be a channel")
    if not wanted:
        raise FeedError(f"{source}: no channel beside the time column {time!r}")
    for name in wanted:
        kind = schema.field(name).type
        if not _numeric(kind):
            what = _described(kind)
            may_tell = what == "text" and keys is None
            apart = ", or give it as the key that tells feeds apart" if may_tell else ""
            raise FeedError(
                f"{source}: column {name!r} is not numeric ({what}); leave it out by "
                f"choosing the channels by name{apart}"
            )
    return Columns(tuple(wanted), time, _unit(source, schema, time), keys)


def _require(source: str, names: list[str], name: str) -> None:
    found = names.count(name)
    if found > 1:
        raise FeedError(f"{source}: {found} columns are named {name!r}; names must be distinct")
    if found == 0:
        near = difflib.get_close_matches(name, names, n=1, cutoff=0.5)
        hint = f" (did you mean {near[0]!r}?)" if near else ""
        more = f" and {len(names) - SHOWN_NAMES} more" if len(names) > SHOWN_NAMES else ""
        listed = ", ".join(names[:SHOWN_NAMES]) + more
        raise FeedError(f"{source}: no column {name!r}{hint}; it has {listed}")


def _find_time(source: str, schema: pa.Schema, taken: list[str]) -> str | None:
    fields = [f for f in schema if f.name not in taken]
    moments: list[str] = [
        f.name for f in fields if pa.types.is_timestamp(f.type) or pa.types.is_date(f.type)
    ]
    named = [f.name for f in fields if _TIME_NAME.fullmatch(f.name)]
    both = [name for name in moments if name in named]
    for candidates in (both, moments, named):
        if len(candidates) == 1:
            return candidates[0]
        if candidates:
            listed = ", ".join(candidates)
            raise FeedError(f"{source}: several columns could be the time ({listed}): name one")
    return None


def _unit(source: str, schema: pa.Schema, time: str | None) -> int | None:
    if time is None:
        return None
    kind = schema.field(time).type
    if _is_moment(kind):
        return None
    if not _numeric(kind):
        raise FeedError(
            f"{source}: time column {time!r} cannot be read ({_described(kind)}); write times as "
            "2026-03-02T14:05:00 (with a fraction or a zone if need be) or as seconds"
        )
    match = _TIME_NAME.fullmatch(time)
    return UNITS[(match.group(1) or "s").lower()] if match else UNITS["s"]


def _is_moment(kind: pa.DataType) -> bool:
    return bool(pa.types.is_timestamp(kind) or pa.types.is_date(kind))


def _numeric(kind: pa.DataType) -> bool:
    types = pa.types
    return bool(
        types.is_integer(kind)
        or types.is_floating(kind)
        or types.is_boolean(kind)
        or types.is_decimal(kind)
        or types.is_null(kind)
    )


def _described(kind: pa.DataType) -> str:
    return "text" if pa.types.is_string(kind) or pa.types.is_large_string(kind) else str(kind)


def values_of(
    columns: Iterable[pa.Array], out: NDArray[np.float64], keys: Keys | None = None
) -> None:
    """Write numeric Arrow columns to ``out``, float64 (m, n); a null becomes NaN.

    With ``keys`` the last column is that of the keys.
    """
    for position, column in enumerate(columns):
        if keys is not None and position == out.shape[1] - 1:
            out[:, position] = keys.numbers(column)
            continue
        if not pa.types.is_float64(column.type):
            column = column.cast(pa.float64(), safe=False)
        out[:, position] = column.to_numpy(zero_copy_only=False)


def times_of(
    column: pa.Array, columns: Columns
) -> tuple[NDArray[np.int64], NDArray[np.bool_], NDArray[np.bool_]]:
    """Return the times of an Arrow column in nanoseconds, and which of them are none.

    Parameters
    ----------
    column : pyarrow.Array, length m
        The time column.
    columns : Columns
        Its unit.

    Returns
    -------
    times : ndarray of int64, shape (m,)
        Nanoseconds; 0 where there is none.
    missing : ndarray of bool, shape (m,)
        No time is given.
    outside : ndarray of bool, shape (m,)
        A time that 64-bit nanoseconds cannot hold, NaN included.

    Notes
    -----
    Whole numbers stay whole numbers, so a Unix time in nanoseconds keeps its last digit.
    """
    missing = column.is_null().to_numpy(zero_copy_only=False)
    kind = column.type
    unit = columns.unit
    if unit is None:
        unit = _MOMENT_UNITS[_moment_unit(kind)]
        width = pa.int32() if pa.types.is_date32(kind) else pa.int64()
        column = column.view(width).cast(pa.int64())
    elif not pa.types.is_integer(kind):
        column = column.cast(pa.float64(), safe=False)
    elif pa.types.is_uint64(kind):
        column = column.cast(pa.int64(), safe=False)
    ticks = column.fill_null(0).to_numpy(zero_copy_only=False)
    times, outside = ticks_to_nanoseconds(ticks, unit)
    return times, missing, outside & ~missing


def _moment_unit(kind: pa.DataType) -> str:
    if pa.types.is_date32(kind):
        return "day"
    return "ms" if pa.types.is_date64(kind) else str(kind.unit)


def ticks_to_nanoseconds(
    ticks: NDArray[Any], unit: int
) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """Return whole numbers or floats of a unit as nanoseconds, and which are out of range."""
    most = MOST_NANOSECONDS // unit
    if ticks.dtype.kind == "f":
        with np.errstate(invalid="ignore"):
            outside = ~(np.abs(ticks) < most)
        kept = np.where(outside, 0.0, ticks)
        # the whole part and the fraction apart: a Unix time in float64 keeps its last bits, which
        # a product with 1e9 would round away
        whole = np.floor(kept)
        fraction = np.rint((kept - whole) * unit).astype(np.int64)
        return whole.astype(np.int64) * unit + fraction, outside
    whole = ticks.astype(np.int64)
    outside = (whole > most) | (whole < -most)
    return np.where(outside, 0, whole) * unit, outside
