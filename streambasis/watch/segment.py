"""The decisions that wait to fill a file."""

from __future__ import annotations

from typing import Any, Self

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from streambasis.monitor.verdict import NO_EVENT, NO_TIME, Columns
from streambasis.state import State

SEGMENT_ROWS = 1 << 16
"""Decisions per file, about 4 MB: few files over months, and little held in memory."""

_UNKNOWN = {"time": NO_TIME, "event": NO_EVENT}


class Segment:
    """Decisions on their way into files of equal length.

    Parameters
    ----------
    first : int
        Number of the first sample.
    rows : int
        Decisions per file.

    Attributes
    ----------
    count : int
        Decisions so far.
    written : bool
        Whether its file has been written; set by whoever writes it.
    """

    __slots__ = ("_columns", "count", "first", "rows", "written")

    def __init__(self, first: int = 0, rows: int = SEGMENT_ROWS) -> None:
        self.first, self.rows, self.count = first, rows, 0
        self.written = False
        self._columns = Columns(first, None, rows)

    @property
    def full(self) -> bool:
        """Whether the file is full."""
        return self.count == self.rows

    def take(self, decisions: pa.Table) -> int:
        """Take as many decisions as there is room for and return how many."""
        taken = min(self.rows - self.count, len(decisions))
        rows = slice(self.count, self.count + taken)
        for name in Columns.__slots__:
            getattr(self._columns, name)[rows] = _numbers(name, decisions[name][:taken])
        self.count += taken
        return taken

    def table(self) -> pa.Table:
        """Return the decisions so far, as the monitor gives them."""
        columns = Columns(self.first, None, self.count)
        for name in Columns.__slots__:
            setattr(columns, name, getattr(self._columns, name)[: self.count])
        return columns.table()

    def next(self) -> Self:
        """Return the next file, empty."""
        return type(self)(self.first + self.count, self.rows)

    def to_state(self) -> State:
        """Hand over the decisions so far, where they lie: they are never changed again."""
        arrays = {name: getattr(self._columns, name)[: self.count] for name in Columns.__slots__}
        return State("Segment", {"first": self.first, "rows": self.rows}, arrays)

    @classmethod
    def from_state(cls, state: State) -> Self:
        """Build a segment that goes on where the state was taken."""
        segment = cls(state.facts["first"], state.facts["rows"])
        count = len(state.take("sample", np.int64, (None,)))
        for name in Columns.__slots__:
            held = getattr(segment._columns, name)
            held[:count] = state.take(name, held.dtype, (count,))
        segment.count = count
        return segment


def _numbers(name: str, column: pa.ChunkedArray) -> NDArray[Any]:
    """Return a column as the monitor holds it, with a number for null."""
    if name == "time":
        column = column.cast(pa.int64())
    if column.null_count:
        column = column.fill_null(_UNKNOWN.get(name, np.nan))
    numbers: NDArray[Any] = column.to_numpy()
    return numbers
