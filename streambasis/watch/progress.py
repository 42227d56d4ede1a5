"""How the basis has come along over a run: a bounded table of readings."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from streambasis.monitor import NoveltyMonitor
from streambasis.state import State

SPACING = 1024
"""Samples between two readings at first."""

MOST_READINGS = 2048
"""Most readings kept; one more than a picture can show is of no use."""

ENERGIES = 12
"""Leading energies per reading."""


class Progress:
    """Readings of noise floor, drift angle and energies, at equal spacing over the whole run.

    Parameters
    ----------
    about : mapping
        What JSON holds of the run; goes into the schema of the table.

    Notes
    -----
    A reading is taken at the first call that finds it due. When the table is full, every other
    reading is dropped and the spacing doubles, so that a run of any length has 1,024 to 2,048 of
    them, evenly spread, in 250 kB. What rises and falls between two readings is not seen; that is
    sound because the basis takes a block of samples at a time and moves by their share in all.
    """

    __slots__ = ("_about", "_due", "_rows", "_spacing")

    def __init__(self, about: Mapping[str, Any]) -> None:
        self._about = dict(about)
        self._rows: list[NDArray[np.float64]] = []
        self._spacing = SPACING
        self._due = SPACING

    def take(self, monitor: NoveltyMonitor) -> None:
        """Take a reading of the monitor if one is due."""
        if monitor.count < self._due or not monitor.baseline_done:
            return
        self._rows.append(_reading(monitor))
        if len(self._rows) == MOST_READINGS:
            self._rows = self._rows[1::2]
            self._spacing *= 2
        self._due = (monitor.count // self._spacing + 1) * self._spacing

    def to_state(self) -> State:
        """Hand over the readings."""
        rows = np.array(self._rows).reshape(len(self._rows), 4 + ENERGIES)
        return State("Progress", {"spacing": self._spacing, "due": self._due}, {"readings": rows})

    def take_state(self, state: State) -> None:
        """Take over the readings of an earlier part of the run."""
        self._rows = list(state.take("readings", np.float64, (None, 4 + ENERGIES)))
        self._spacing, self._due = state.facts["spacing"], state.facts["due"]

    def table(self, monitor: NoveltyMonitor) -> pa.Table:
        """Return the readings and one of how the monitor stands now.

        Returns
        -------
        Table
            ``sample`` int64, the last sample read; ``noise`` and ``drift`` float64; ``known``
            int32, directions of adopted behaviour; ``energies``, 12 float64, NaN beyond the rank.
            The metadata of the schema holds ``about``.
        """
        rows = list(self._rows)
        if monitor.baseline_done and not (rows and rows[-1][0] == monitor.count - 1):
            rows.append(_reading(monitor))
        values = np.array(rows).reshape(len(rows), 4 + ENERGIES)
        energies = pa.FixedSizeListArray.from_arrays(values[:, 4:].ravel(), ENERGIES)
        table = pa.table(
            {
                "sample": values[:, 0].astype(np.int64),
                "noise": values[:, 1],
                "drift": values[:, 2],
                "known": values[:, 3].astype(np.int32),
                "energies": energies,
            }
        )
        return table.replace_schema_metadata({"about": json.dumps(self._about)})


def _reading(monitor: NoveltyMonitor) -> NDArray[np.float64]:
    row = np.full(4 + ENERGIES, np.nan)
    # a sample number is exact in float64 up to 2**53
    row[:4] = monitor.count - 1, monitor.noise, monitor.drift, len(monitor.adopted)
    energies = monitor.basis.energies[: min(monitor.rank, ENERGIES)]
    row[4 : 4 + len(energies)] = energies
    return row
