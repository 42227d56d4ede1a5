"""Stretches in which something has begun, though no sample of them is beyond the limit."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

STRETCH = 16
"""Samples whose median is looked at: enough for it to be far steadier than a sample, and few beside
the shortest faults that matter."""

LEAST_STRETCHES = 8
"""Fewer stretches in the baseline do not show how far their medians scatter."""

FAR = 5.0
"""Standard deviations above the usual median from which a stretch is not calm: of ordinary ones
next to none, or the limit would creep down."""


class Calm:
    """Tells ordinary stretches from those whose errors are raised all along.

    A fault too weak for its samples to exceed the limit raises all of them. Taken for ordinary
    running they thicken the tail that the limit is fitted to, so that it rises, and hides stronger
    faults as well. The median of a stretch shows such a rise long before single samples do, and
    lone exceedances, which belong in the tail, do not move it.

    Parameters
    ----------
    level, spread : float
        Mean and standard deviation of the median of a stretch in ordinary running; a spread of
        infinity takes every stretch for calm.
    count : float
        Stretches that the level is the mean of.
    memory : float
        Most stretches that count for it, so that it follows a slow change.
    """

    __slots__ = ("count", "level", "memory", "spread")

    def __init__(self, level: float, spread: float, count: float, memory: float) -> None:
        self.level, self.spread, self.count, self.memory = level, spread, count, memory

    @classmethod
    def learn(cls, values: NDArray[np.float64], memory: float) -> Calm:
        """Learn from errors of ordinary running, in order of time."""
        medians = _medians(values)
        if len(medians) < LEAST_STRETCHES:
            return cls(0.0, np.inf, 0.0, memory / STRETCH)
        return cls(
            float(medians.mean()), float(medians.std(ddof=1)), len(medians), memory / STRETCH
        )

    def tell(self, values: NDArray[np.float64]) -> NDArray[np.bool_]:
        """Return which errors, in order of time, come from calm stretches; follow those.

        A stretch beside a raised one is not calm: what raised it may begin or end there. NaN counts
        as raised. The samples behind the last whole stretch are told by the last
        ``STRETCH`` samples; fewer than that are all taken for calm.
        """
        fine = np.ones(len(values), np.bool_)
        if len(values) < STRETCH or self.spread == np.inf:
            return fine
        medians = _medians(values)
        raised = medians > self.level + FAR * self.spread
        beside = raised.copy()
        beside[1:] |= raised[:-1]
        beside[:-1] |= raised[1:]
        calm = ~beside
        whole = len(values) // STRETCH
        fine[: whole * STRETCH] = np.repeat(calm[:whole], STRETCH)
        fine[whole * STRETCH :] = calm[-1]
        kept = medians[:whole][calm[:whole]]
        if kept.size:
            self.count = min(self.count + kept.size, self.memory)
            self.level += kept.size / self.count * (float(kept.mean()) - self.level)
        return fine

    def to_facts(self) -> list[Any]:
        """Hand over everything needed to go on."""
        return [self.level, self.spread, self.count, self.memory]


def _medians(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the (upper) median of each whole stretch, and of the last samples if some are left."""
    whole = len(values) // STRETCH * STRETCH
    rows = values[:whole].reshape(-1, STRETCH)
    if whole and whole < len(values):
        rows = np.vstack([rows, values[-STRETCH:]])
    return np.asarray(np.sort(rows, axis=1)[:, STRETCH // 2])
