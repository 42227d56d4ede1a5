"""Rows as a text parser finds them: samples, their lines, and what is wrong with the others."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


def infinite(values: NDArray[np.float64], names: Sequence[str]) -> Iterator[tuple[int, str]]:
    """Yield the rows that hold an infinite value, each with the reason."""
    if np.isinf(values).any():
        rows, columns = np.nonzero(np.isinf(values))
        for row, first in zip(*np.unique(rows, return_index=True), strict=True):
            yield int(row), f"column {names[columns[first]]!r}: the value is not finite"


@dataclass(slots=True)
class Rows:
    """What a block of lines holds.

    Attributes
    ----------
    values : list of ndarray of float64, shape (m, n)
        Samples, part by part.
    times : list of ndarray of int64, or None
        Their times in nanoseconds.
    lines : list of ndarray of int64
        The line of each, counted from 0 over the block.
    faults : dict of int to str
        The lines that hold no sample, and why.
    """

    values: list[NDArray[np.float64]]
    times: list[NDArray[np.int64]] | None
    lines: list[NDArray[np.int64]]
    faults: dict[int, str]

    @classmethod
    def empty(cls, width: int, timed: bool) -> Rows:
        """Return no rows of so many channels."""
        nothing = np.empty((0, width))
        none = [np.empty(0, np.int64)] if timed else None
        return cls([nothing], none, [np.empty(0, np.int64)], {})

    def note_times(
        self,
        lines: NDArray[np.int64],
        missing: NDArray[np.bool_],
        outside: NDArray[np.bool_],
        name: str,
    ) -> None:
        """Note the rows without a time, and those whose time is out of range."""
        for row in np.flatnonzero(missing):
            self.faults[int(lines[row])] = f"the time is missing (column {name!r})"
        for row in np.flatnonzero(outside):
            self.faults[int(lines[row])] = (
                f"column {name!r}: the time is no number of seconds within 292 years"
            )

    def note_keys(self, lines: NDArray[np.int64], numbers: NDArray[np.float64], name: str) -> None:
        """Note the rows without a key."""
        for row in np.flatnonzero(np.isnan(numbers)):
            self.faults[int(lines[row])] = f"column {name!r}: no key (text or a whole number)"

    def add(
        self,
        values: NDArray[np.float64],
        times: NDArray[np.int64] | None,
        lines: NDArray[np.int64],
        names: Sequence[str],
    ) -> None:
        """Add parsed rows; those with a fault noted, or an infinite value, are left out."""
        for row, reason in infinite(values, names):
            self.faults.setdefault(int(lines[row]), reason)
        if self.faults:
            good = np.array([int(line) not in self.faults for line in lines], dtype=bool)
            values, lines = values[good], lines[good]
            times = times if times is None else times[good]
        self.values.append(values)
        self.lines.append(lines)
        if self.times is not None and times is not None:
            self.times.append(times)

    def joined(self) -> tuple[NDArray[np.float64], NDArray[np.int64] | None, NDArray[np.int64]]:
        """Return values, times and lines in one piece each."""
        times = None if self.times is None else np.concatenate(self.times)
        return np.concatenate(self.values), times, np.concatenate(self.lines)


def lines_behind(count: int, where: NDArray[np.int64], length: int) -> int:
    """Return how many of ``length`` lines lie before the place behind the first samples.

    Parameters
    ----------
    count : int
        Number of samples.
    where : ndarray of int64
        The line of each sample.
    length : int
        Lines in all; what follows the last sample is passed over with it.
    """
    if count == len(where):
        return length
    return int(where[count - 1]) + 1 if count else 0
