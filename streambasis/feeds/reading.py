"""What every feed yields, and how batches of any size become batches of one size."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from streambasis.errors import FeedError
from streambasis.feeds.columns import Columns, times_of, values_of

BATCH_ROWS = 1024
"""Samples per batch. Batches are cut at the same sample numbers whatever the format and its own
blocks, so that the same samples give bit-identical results from every file."""


@dataclass(frozen=True, slots=True)
class Batch:
    """Consecutive samples of a feed.

    Attributes
    ----------
    first : int
        Number of the first sample, counted from 0 over the feed.
    values : ndarray of float64, shape (m, n)
        One row per sample, one column per channel; NaN where a value is missing.
    times : ndarray of int64, shape (m,), or None
        Nanoseconds, since the Unix epoch where the feed has timestamps.
    """

    first: int
    values: NDArray[np.float64]
    times: NDArray[np.int64] | None

    def __len__(self) -> int:
        return len(self.values)


class Feed(Protocol):
    """A feed that is open for reading.

    Attributes
    ----------
    name : str
        What the feed is called in messages.
    columns : Columns
        Its channels and its time column.
    rows : int or None
        How many samples it holds, estimated for text; None where nobody knows.
    """

    name: str
    columns: Columns
    rows: int | None

    def batches(self) -> Iterator[Batch]:
        """Yield the samples in order, once, in batches of BATCH_ROWS and a shorter last one."""
        ...


def recut(
    name: str, columns: Columns, source: Iterator[pa.RecordBatch], rows: int = BATCH_ROWS
) -> Iterator[Batch]:
    """Turn Arrow batches of any size into batches of ``rows`` samples and a shorter last one.

    Raises
    ------
    FeedError
        If a time is missing, or there is no sample at all.

    Notes
    -----
    Holds one batch of samples beside the Arrow batch in hand, whatever the length of the feed.
    """
    shape = (rows, len(columns.channels))
    first = filled = 0
    values = np.empty(shape)
    times = None if columns.time is None else np.empty(rows, np.int64)
    for whole in source:
        start = 0
        while start < len(whole):
            part = whole.slice(start, rows - filled)
            here = slice(filled, filled + len(part))
            values_of(part, columns, values[here])
            if times is not None:
                times[here] = times_of(name, part, columns, first + filled)
            start += len(part)
            filled += len(part)
            if filled == rows:
                yield Batch(first, values, times)
                first, filled = first + rows, 0
                # fresh arrays: whoever got the last batch may keep it
                values = np.empty(shape)
                times = None if times is None else np.empty(rows, np.int64)
    if filled:
        yield Batch(first, values[:filled], None if times is None else times[:filled])
    elif first == 0:
        raise FeedError(f"{name}: no samples; the file holds column names and nothing else")
