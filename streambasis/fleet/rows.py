"""Rows of many feeds: checked as a whole, and told apart."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import ArrayLike, NDArray

from streambasis.errors import SampleError, SampleTypeError
from streambasis.fleet.workers import Workers
from streambasis.kernels.plain import to_rows
from streambasis.samples import (
    Channels,
    arrow_columns,
    arrow_table,
    speaks_arrow,
)
from streambasis.times import many_nanoseconds

Key = str | int
"""What tells one feed from another."""

TIME = "time"
"""The column that is taken for the time where no other is named."""

PIECE = 4096
"""Rows that one thread reads at a time."""

_IN_PLACE = np.zeros(0, np.int64)
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
    """The rows of one batch, and which of them belong to which feed.

    Attributes
    ----------
    keys : list of str or int
        The feeds, in the order in which they first appear.
    spans : dict of key to (int, int)
        Where in ``order`` the rows of each feed begin and end.
    order : ndarray of int64, shape (m,), or (0,)
        Numbers of the rows, those of a feed one after the other; empty where they lie so already.
    values : ndarray of float64, shape (m, n)
        One row per sample; NaN marks a missing value.
    times : ndarray of int64, shape (m,), or None
        Nanoseconds.
    column : pyarrow.ChunkedArray
        The keys as they were given.
    """

    keys: list[Key]
    spans: dict[Key, tuple[int, int]]
    order: NDArray[np.int64]
    values: NDArray[np.float64]
    times: NDArray[np.int64] | None
    column: pa.ChunkedArray

    def __len__(self) -> int:
        return len(self.values)

    def where(self, start: int, stop: int) -> slice | NDArray[np.int64]:
        """Return which rows stand from ``start`` to ``stop`` in the order of the feeds."""
        return self.order[start:stop] if len(self.order) else slice(start, stop)


class Room:
    """Memory for the values of a batch, kept from one to the next.

    Fresh memory costs as much as filling it: the system hands it out page by page.
    """

    def __init__(self) -> None:
        self._held = np.zeros((0, 0))

    @property
    def nbytes(self) -> int:
        """Bytes held: as many as the largest batch so far took."""
        return self._held.nbytes

    def rows(self, count: int, channels: int) -> NDArray[np.float64]:
        """Return an array of rows, to be filled; it is the one returned before."""
        if len(self._held) < count:
            self._held = np.empty((count, channels))
        return self._held[:count]


def read_rows(
    batch: Any, layout: Layout, at: ArrayLike | None, workers: Workers, room: Room
) -> Rows:
    """Check a batch and tell the rows of each feed apart.

    Parameters
    ----------
    batch : object of the Arrow PyCapsule protocol
        A column of keys, and one for each channel.
    layout : Layout
        Which columns these are.
    at : array_like of shape (m,), optional
        Times, where no column holds them.
    workers : Workers
        Who reads.
    room : Room
        Where the values go.

    Raises
    ------
    SampleError
        If a column is missing or doubled, a key is null, or a value or a time is refused.
    SampleTypeError
        If the batch is no table, or a column of a kind that cannot be.

    Notes
    -----
    Costs a sort of the keys, and one copy of the values.
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
    values, refused = _values(table.select(others), layout.channels, workers, room)
    if refused >= 0:
        row, column = divmod(refused, layout.channels.count)
        name = layout.channels.names[column]
        raise SampleError(
            f"row {row}, key {keys[codes[row]]!r}, channel {name!r}: value {values[row, column]} "
            "is not finite; nothing of the batch was taken"
        )
    if time is not None:
        at = table.column(time).to_numpy()
    times = None if at is None else _times(at, len(table))
    ends = np.cumsum(np.bincount(codes, minlength=len(keys))).tolist()
    spans = dict(zip(keys, pairwise([0, *ends]), strict=True))
    order = _IN_PLACE
    if len(keys) > 1 and (codes[1:] < codes[:-1]).any():
        order = np.argsort(codes, kind="stable")
    return Rows(keys, spans, order, values, times, table.column(layout.key))


def _values(
    table: pa.Table, channels: Channels, workers: Workers, room: Room
) -> tuple[NDArray[np.float64], int]:
    """Return the channels as rows, and the position of the first infinite value in them or -1."""
    count = len(table)
    columns = [
        np.ascontiguousarray(column.to_numpy(), np.float64)
        for column in arrow_columns(table, channels, missing=True)
    ]
    addresses = np.array([column.__array_interface__["data"][0] for column in columns])
    values = room.rows(count, channels.count)
    refused: list[int] = []

    def read(start: int) -> None:
        found = to_rows(addresses, count, start, min(start + PIECE, count), values)
        if found >= 0:
            refused.append(found)

    workers(read, range(0, count, PIECE))
    return values, min(refused, default=-1)


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
