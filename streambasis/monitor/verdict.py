"""What the monitor says of each sample: one verdict, or the columns of many."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import pyarrow as pa

NO_EVENT = -1
NO_TIME = np.iinfo(np.int64).min
"""In the columns of events and times: null."""


class Verdict(NamedTuple):
    """What the monitor says of one sample.

    Attributes
    ----------
    sample : int
        Number of the sample, counted from 0.
    time : int or None
        Its time in nanoseconds.
    spe, t2 : float
        Squared prediction error and Hotelling's T²; NaN while the baseline is being taken, and
        for a sample with too few channels observed to be judged.
    limit, t2_limit : float
        Their control limits; the limit of the SPE is that for the channels observed.
    novel : bool
        SPE beyond its limit: a direction that the feed has not shown before.
    extreme : bool
        T² beyond its limit: known directions, of unusual size.
    rank : int
        Directions of the basis.
    event : int or None
        The event that the sample falls into, the newest of several.
    missing : tuple of str
        Channels without a value.
    known : tuple of int
        Adopted events whose behaviour shows in the sample.
    """

    sample: int
    time: int | None
    spe: float
    t2: float
    limit: float
    t2_limit: float
    novel: bool
    extreme: bool
    rank: int
    event: int | None
    missing: tuple[str, ...]
    known: tuple[int, ...]

    @property
    def judged(self) -> bool:
        """Whether the sample could be judged."""
        return self.spe == self.spe


class Columns:
    """The columns of a batch of verdicts, filled piece by piece."""

    __slots__ = ("event", "extreme", "limit", "novel", "rank", "sample", "spe", "t2", "t2_limit",
                 "time")  # fmt: skip

    def __init__(self, first: int, times: NDArray[np.int64] | None, count: int) -> None:
        self.sample = np.arange(first, first + count)
        self.time = np.full(count, NO_TIME) if times is None else times
        self.spe, self.t2, self.limit, self.t2_limit = np.full((4, count), np.nan)
        self.novel, self.extreme = np.zeros((2, count), np.bool_)
        self.rank = np.zeros(count, np.int32)
        self.event = np.full(count, NO_EVENT)

    def plain(self, rows: slice) -> tuple[NDArray[Any], ...]:
        """Return the columns that a plain sample has an entry in, as the kernel names them."""
        found = (self.sample, self.spe, self.t2, self.limit, self.t2_limit, self.extreme, self.rank)
        return tuple(column[rows] for column in found)

    def put(self, where: slice | NDArray[np.int64], part: Columns, count: int) -> None:
        """Take over the first ``count`` decisions of a part, whose rows are ``where`` in this."""
        rows = (
            slice(where.start, where.start + count) if isinstance(where, slice) else where[:count]
        )
        for name in self.__slots__:
            getattr(self, name)[rows] = getattr(part, name)[:count]

    def verdict(self, missing: tuple[str, ...], known: tuple[int, ...]) -> Verdict:
        """Return the first row as a verdict."""
        time, event = int(self.time[0]), int(self.event[0])
        return Verdict(
            int(self.sample[0]),
            None if time == NO_TIME else time,
            float(self.spe[0]),
            float(self.t2[0]),
            float(self.limit[0]),
            float(self.t2_limit[0]),
            bool(self.novel[0]),
            bool(self.extreme[0]),
            int(self.rank[0]),
            None if event == NO_EVENT else event,
            missing,
            known,
        )

    def table(self) -> pa.Table:
        """Return the decision columns as an Arrow table; what is unknown is null."""
        import pyarrow as pa

        unjudged = np.isnan(self.spe)
        judged = not unjudged.any()

        def score(values: NDArray[np.float64]) -> pa.Array:
            return pa.array(values) if judged else pa.array(values, mask=unjudged)

        columns = {
            "sample": pa.array(self.sample),
            "time": _known(self.time, NO_TIME, pa.timestamp("ns")),
            "spe": score(self.spe),
            "t2": score(self.t2),
            "limit": score(self.limit),
            "t2_limit": score(self.t2_limit),
            "novel": pa.array(self.novel),
            "extreme": pa.array(self.extreme),
            "rank": pa.array(self.rank),
            "event": _known(self.event, NO_EVENT, pa.int64()),
        }
        return pa.Table.from_arrays(list(columns.values()), list(columns))


def _known(values: NDArray[np.int64], unknown: int, kind: pa.DataType) -> pa.Array:
    """Return whole numbers as an Arrow array of a kind; the least of all, ``unknown``, is null."""
    import pyarrow as pa

    if values.max(initial=unknown) == unknown:
        return pa.nulls(len(values), kind)
    if values.min() == unknown:
        return pa.array(values, mask=values == unknown).cast(kind)
    return pa.array(values).cast(kind)
