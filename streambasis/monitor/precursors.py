"""Exceedances that may be chance or the beginning of an event."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from streambasis.state import State, owned

MOST = 1024
"""Most exceedances held back; beyond, the oldest count as chance."""


class Precursors:
    """Exceedances held back from the limit until a quiet run has shown that they were chance.

    A fault that grows slowly is beyond the limit now and then, long before it is often enough to
    open an event. Taken for the tail of ordinary running, such samples lift the limit, which
    hides the fault for longer, which lifts the limit further. So an event claims the exceedances
    that lead up to it without a quiet run between them, by the rule by which it closes; only the
    others refine the limit.

    Parameters
    ----------
    quiet : int
        Samples without an exceedance that make a quiet run.
    """

    __slots__ = ("_numbers", "_values", "quiet")

    def __init__(self, quiet: int) -> None:
        self.quiet = quiet
        self._numbers = np.zeros(0, np.int64)
        self._values = np.zeros(0)

    def hold(self, numbers: NDArray[np.int64], values: NDArray[np.float64]) -> None:
        """Hold exceedances back: their sample numbers, ascending, and their values."""
        self._numbers = np.concatenate([self._numbers, numbers])
        self._values = np.concatenate([self._values, values])

    def claim(self, start: int) -> None:
        """Discard what belongs to an event that begins at sample ``start``, or leads up to it."""
        before = int(np.searchsorted(self._numbers, start))
        self._keep(0, self._apart(np.append(self._numbers[:before], start)))

    def drop(self, numbers: NDArray[np.int64]) -> None:
        """Discard what belongs to samples of these numbers."""
        if len(self._numbers):
            kept = ~np.isin(self._numbers, numbers)
            self._numbers, self._values = self._numbers[kept], self._values[kept]

    def release(self, now: int) -> NDArray[np.float64]:
        """Return the values that were chance, as seen from sample ``now``, and forget them."""
        free = self._apart(np.append(self._numbers, now))
        free = max(free, len(self._numbers) - MOST)
        values = self._values[:free]
        self._keep(free, len(self._numbers))
        return values

    def _apart(self, numbers: NDArray[np.int64]) -> int:
        """Return how many of all but the last number have a quiet run between them and it."""
        runs = np.flatnonzero(np.diff(numbers) > self.quiet)
        return int(runs[-1]) + 1 if runs.size else 0

    def _keep(self, start: int, stop: int) -> None:
        self._numbers = self._numbers[start:stop].copy()
        self._values = self._values[start:stop].copy()

    def to_state(self) -> State:
        """Hand over everything needed to go on."""
        arrays = {"numbers": owned(self._numbers), "values": owned(self._values)}
        return State("Precursors", {"quiet": self.quiet}, arrays)

    @classmethod
    def from_state(cls, state: State) -> Precursors:
        """Build one that goes on where the state was taken."""
        held = cls(state.facts["quiet"])
        numbers = state.take("numbers", np.int64, (None,))
        held.hold(numbers, state.take("values", np.float64, numbers.shape, finite=True))
        return held
