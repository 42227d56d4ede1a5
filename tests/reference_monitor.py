"""Plain NumPy twins of the kernels of the monitor."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray


def standardize(
    samples: NDArray[Any], centre: NDArray[Any], inverse: NDArray[Any], reach: NDArray[Any],
    freeze: NDArray[Any], patience: NDArray[Any], held: NDArray[Any], runs: NDArray[Any],
) -> tuple[NDArray[Any], NDArray[Any], NDArray[Any]]:  # fmt: skip
    """Return samples in noise units, and the last values and runs of repetitions after them."""
    rows = []
    held, runs = held.copy(), runs.copy()
    for sample in samples:
        z = np.clip((sample - centre) * inverse, -reach, reach)
        runs = np.where(sample == held, runs + 1, 0)
        held = sample
        rows.append(np.where(runs >= patience, freeze, z))
    return np.array(rows), held, runs


def score_rows(
    z: NDArray[Any], mean: NDArray[Any], directions: NDArray[Any], first: int,
    whitening: NDArray[Any],
) -> tuple[NDArray[Any], ...]:  # fmt: skip
    """Return coordinates, SPE, what all directions leave of it, and T²."""
    deviations = np.nan_to_num(z - mean)
    coordinates = deviations @ directions.T
    outside = deviations - coordinates[:, :first] @ directions[:first]
    left = deviations - coordinates @ directions
    t2 = np.sum((coordinates[:, :first] @ whitening.T) ** 2, axis=1)
    return coordinates, np.sum(outside**2, axis=1), np.sum(left**2, axis=1), t2


def note_rows(
    judged: NDArray[np.bool_], beyond: NDArray[np.bool_], extreme: NDArray[np.bool_], forming: bool
) -> tuple[NDArray[np.bool_], tuple[int, int]]:
    """Return rows for the basis, loose rows and rows for the limit, and the counts."""
    fold = judged & ~beyond
    out = np.array([fold, beyond & (not forming), fold & (not forming)])
    return out, (int(out[1].sum()), int((fold & extreme).sum()))


def take_off(
    rows: NDArray[Any], coordinates: NDArray[Any], directions: NDArray[Any], start: int, stop: int
) -> NDArray[Any]:
    """Return rows less their parts along some directions."""
    return np.asarray(rows - coordinates[:, start:stop] @ directions[start:stop])


def openings(
    beyond: NDArray[np.bool_], opens: int, window: int, quiet: int
) -> list[tuple[int, int]]:
    """Return the rows at which events open and close, when nothing ever stands."""
    found: list[tuple[int, int]] = []
    opened, since, recent = -1, 0, [False] * window
    for i, flag in enumerate(beyond):
        if opened < 0:
            recent = [*recent[1:], bool(flag)]
            if sum(recent) >= opens:
                opened, since, recent = i, 0, [False] * window
        else:
            since = 0 if flag else since + 1
            if since >= quiet:
                found.append((opened, i))
                opened = -1
    return found
