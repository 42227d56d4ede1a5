"""Rows of many feeds: checked as a whole, put together feed by feed, and back in their order."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import ArrayLike, NDArray

from streambasis.errors import SampleError, SampleTypeError
from streambasis.monitor.verdict import Columns
from streambasis.samples import (
    Channels,
    arrow_table,
    first_refused,
    from_arrow,
    speaks_arrow,
)
from streambasis.times import many_nanoseconds

Key = str | int
"""What tells one feed from another."""

TIME = "time"
"""The column that is taken for the time where no other is named."""

FLOAT64 = np.dtype(np.float64)


@dataclass(frozen=True, slots=True)
class Layout:
    """Where in a table the key, the time and the channels are.

    Attributes
    ----------
    key : str
        Name of the column that holds the key.
    time : str or None
        Name of the column that holds the time; None takes one named ``time``, if there is any.
    channels : Channels
        The channels.
    """

    key: str
    time: str | None
    channels: Channels


@dataclass(frozen=True, slots=True)
class Rows:
    """The rows of one batch, those of a feed one after the other.

    Attributes
    ----------
    keys : list of str or int
        The feeds, in the order in which they first appear.
    ends : ndarray of int64
        For each of them, where its rows end; they begin where those of the one before end.
    values : ndarray of float64, shape (m, n)
        One row per sample; NaN marks a missing value.
    times : ndarray of int64, shape (m,), or None
        Nanoseconds.
    order : ndarray of int64, shape (m,), or None
        Which row of the batch each of these is; None where nothing has moved.
    column : pyarrow.ChunkedArray
        The keys as they were given.
    """

    keys: list[Key]
    ends: NDArray[np.int64]
    values: NDArray[np.float64]
    times: NDArray[np.int64] | None
    order: NDArray[np.int64] | None
    column: pa.ChunkedArray


def read_rows(batch: Any, layout: Layout, at: ArrayLike | None) -> Rows:
    """Check a batch and put together the rows of each feed.

    Parameters
    ----------
    batch : object of the Arrow PyCapsule protocol
        A column of keys, and one for each channel.
    layout : Layout
        Which columns these are.
    at : array_like of shape (m,), optional
        Times, where no column holds them.

    Raises
    ------
    SampleError
        If a column is missing or doubled, a key is null, or a value or a time is refused.
    SampleTypeError
        If the batch is no table, or a column of a kind that cannot be.

    Notes
    -----
    Costs a sort of the rows by their keys, and one copy of the values.
    """
    if not speaks_arrow(batch):
        raise SampleTypeError(
            f"batch of type {type(batch).__name__}: give a table with a column {layout.key!r} of "
            "keys, from pyarrow, polars, pandas, duckdb or whatever else speaks the Arrow "
            "PyCapsule protocol"
        )
    table = arrow_table(batch)
    keys, codes = _keys(table, layout.key)
    time = _time_column(table, layout, at)
    others = [i for i, name in enumerate(table.column_names) if name not in (layout.key, time)]
    values = from_arrow(table.select(others), layout.channels, FLOAT64, missing=True)
    refused = first_refused(values, missing=True)
    if refused is not None:
        row, column = refused
        name = layout.channels.names[column]
        raise SampleError(
            f"row {row}, key {keys[codes[row]]!r}, channel {name!r}: value {values[row, column]} "
            "is not finite; nothing of the batch was taken"
        )
    if time is not None:
        at = table.column(time).to_numpy()
    times = None if at is None else _times(at, len(table))
    counts = np.bincount(codes, minlength=len(keys))
    order = None
    if len(keys) > 1 and (codes[1:] < codes[:-1]).any():
        order = np.argsort(codes, kind="stable")
        values = values[order]
        times = None if times is None else times[order]
    return Rows(keys, np.cumsum(counts), values, times, order, table.column(layout.key))


def _keys(table: pa.Table, name: str) -> tuple[list[Key], NDArray[np.int64]]:
    """Return the distinct keys in the order in which they appear, and the key of each row."""
    _require(table, name, "key")
    column = table.column(name)
    if pa.types.is_dictionary(column.type):
        column = column.cast(column.type.value_type)
    kind = column.type
    if pa.types.is_string(kind) or pa.types.is_large_string(kind) or pa.types.is_string_view(kind):
        column = column.cast(pa.large_string())
    elif not pa.types.is_integer(kind):
        raise SampleTypeError(
            f"key column {name!r}: values of type {kind}; a key is text or a whole number"
        )
    if column.null_count:
        row = int(np.argmax(column.is_null().to_numpy()))
        raise SampleError(
            f"key column {name!r}, row {row}: the key is missing (null); nothing of the batch "
            "was taken"
        )
    found = column.combine_chunks().dictionary_encode()
    if isinstance(found, pa.ChunkedArray):
        found = found.combine_chunks()
    codes = found.indices.to_numpy().astype(np.int64)
    return found.dictionary.to_pylist(), codes


def _require(table: pa.Table, name: str, what: str) -> None:
    count = table.column_names.count(name)
    if count != 1:
        times = "is missing" if count == 0 else f"comes {count} times"
        raise SampleError(
            f"{what} column {name!r} {times} in the batch; its columns: "
            f"{', '.join(table.column_names)}"
        )


def _time_column(table: pa.Table, layout: Layout, at: ArrayLike | None) -> str | None:
    name = layout.time
    if name is None:
        if layout.channels.named and TIME in layout.channels.names:
            return None
        count = table.column_names.count(TIME)
        name = TIME if count else None
    if name is not None:
        _require(table, name, "time")
        if at is not None:
            raise SampleError(f"times are given twice: as at=, and in the column {name!r}")
    return name


def _times(at: ArrayLike, count: int) -> NDArray[np.int64]:
    try:
        return many_nanoseconds(at, count)
    except SampleError as error:
        raise SampleError(f"{error}; nothing of the batch was taken") from None


def decisions(rows: Rows, columns: Columns, key: str) -> pa.Table:
    """Return the key column and the decisions, in the order of the batch."""
    if rows.order is not None:
        for name in Columns.__slots__:
            grouped = getattr(columns, name)
            given = np.empty_like(grouped)
            given[rows.order] = grouped
            setattr(columns, name, given)
    return columns.table().add_column(0, pa.field(key, rows.column.type), rows.column)
