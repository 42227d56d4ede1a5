"""Long series as few columns of a picture, each with the range of what falls into it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

NO_TIME = np.iinfo(np.int64).min


class Envelope:
    """The least and the largest value of each series in every column of a picture.

    Parameters
    ----------
    first, count : int
        Number of the first sample, and how many samples there are.
    columns : int
        Most columns; a feed with fewer samples gets a column for each.
    names : sequence of str
        The series.

    Attributes
    ----------
    low, high : dict of str to ndarray of float64, shape (columns,)
        NaN where a column has no value.
    begin, end : ndarray of int64, shape (columns,)
        First and last time in a column, in nanoseconds; ``NO_TIME`` where there is none.

    Notes
    -----
    Column c holds the samples with floor((sample - first)·columns/count) = c, so the largest
    value over any range of columns is that of its samples: no peak is lost, however short.
    Memory does not depend on the number of samples.

    Examples
    --------
    >>> import numpy as np
    >>> from streambasis.report.thinning import Envelope
    >>> spe = np.ones(1000)
    >>> spe[617] = 9.0
    >>> envelope = Envelope(0, 1000, 10, ["spe"])
    >>> envelope.take(np.arange(1000), None, {"spe": spe})
    >>> envelope.high["spe"]
    array([1., 1., 1., 1., 1., 1., 9., 1., 1., 1.])
    """

    def __init__(self, first: int, count: int, columns: int, names: Sequence[str]) -> None:
        self.first = first
        self.count = count
        self.columns = max(1, min(columns, count))
        self.low = {name: np.full(self.columns, np.nan) for name in names}
        self.high = {name: np.full(self.columns, np.nan) for name in names}
        self.begin = np.full(self.columns, NO_TIME)
        self.end = np.full(self.columns, NO_TIME)

    def take(
        self,
        samples: NDArray[np.int64],
        times: NDArray[np.int64] | None,
        series: Mapping[str, NDArray[np.float64]],
    ) -> None:
        """Take consecutive samples.

        Parameters
        ----------
        samples : ndarray of int64, shape (m,)
            Their numbers, ascending.
        times : ndarray of int64, shape (m,), or None
            Their times in nanoseconds, ``NO_TIME`` where unknown.
        series : mapping of str to ndarray of float64, shape (m,)
            NaN where a sample has no value.
        """
        if len(samples) == 0:
            return
        column = (samples - self.first) * self.columns // self.count
        starts = np.flatnonzero(np.diff(column, prepend=column[0] - 1))
        at = column[starts]
        for name, values in series.items():
            self.low[name][at] = np.fmin(self.low[name][at], np.fmin.reduceat(values, starts))
            self.high[name][at] = np.fmax(self.high[name][at], np.fmax.reduceat(values, starts))
        if times is not None:
            fresh = self.begin[at] == NO_TIME
            self.begin[at[fresh]] = times[starts[fresh]]
            self.end[at] = times[np.append(starts[1:], len(samples)) - 1]

    @property
    def samples(self) -> NDArray[np.float64]:
        """Sample number in the middle of each column."""
        width = self.count / self.columns
        return np.asarray(self.first + (np.arange(self.columns) + 0.5) * width - 0.5)
