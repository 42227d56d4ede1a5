"""The decisions that wait to fill a file."""

from __future__ import annotations

from typing import Self

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from streambasis.monitor import NoveltyMonitor
from streambasis.monitor.verdict import Columns
from streambasis.state import State

SEGMENT_ROWS = 1 << 16
"""Decisions per file, about 4 MB: few files over months, and little held in memory."""


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
    columns : Columns
        The decisions so far, and room for those to come.
    count : int
        Decisions so far.
    written : bool
        Whether its file has been written; set by whoever writes it.
    """

    __slots__ = ("columns", "count", "first", "rows", "written")

    def __init__(self, first: int = 0, rows: int = SEGMENT_ROWS) -> None:
        self.first, self.rows, self.count = first, rows, 0
        self.written = False
        self.columns = Columns(first, None, rows)

    @property
    def full(self) -> bool:
        """Whether the file is full."""
        return self.count == self.rows

    def judge(
        self,
        monitor: NoveltyMonitor,
        samples: NDArray[np.float64],
        times: NDArray[np.int64] | None,
    ) -> slice:
        """Have a monitor judge as many samples as there is room for.

        Parameters
        ----------
        monitor : NoveltyMonitor
            Which takes them.
        samples : ndarray of float64, shape (m, n)
            As a feed gives them.
        times : ndarray of int64, shape (m,), or None
            Their times in nanoseconds.

        Returns
        -------
        slice
            Where their decisions lie in ``columns``.
        """
        taken = min(self.rows - self.count, len(samples))
        rows = slice(self.count, self.count + taken)
        if times is not None:
            self.columns.time[rows] = times[:taken]
        monitor.judge_rows(samples[:taken], self.columns, self.count)
        self.count += taken
        return rows

    def table(self) -> pa.Table:
        """Return the decisions so far, as the monitor gives them."""
        columns = Columns(self.first, None, self.count)
        for name in Columns.__slots__:
            setattr(columns, name, getattr(self.columns, name)[: self.count])
        return columns.table()

    def next(self) -> Self:
        """Return the next file, empty."""
        return type(self)(self.first + self.count, self.rows)

    def to_state(self) -> State:
        """Hand over the decisions so far, where they lie: they are never changed again."""
        arrays = {name: getattr(self.columns, name)[: self.count] for name in Columns.__slots__}
        return State("Segment", {"first": self.first, "rows": self.rows}, arrays)

    @classmethod
    def from_state(cls, state: State) -> Self:
        """Build a segment that goes on where the state was taken."""
        segment = cls(state.facts["first"], state.facts["rows"])
        count = len(state.take("sample", np.int64, (None,)))
        for name in Columns.__slots__:
            held = getattr(segment.columns, name)
            held[:count] = state.take(name, held.dtype, (count,))
        segment.count = count
        return segment
