"""Feeds of an invented fleet of pumps, tables of their rows, and a monitor for each to compare."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from streambasis import NoveltyMonitor

NAMES = ("flow", "pressure", "speed", "current", "winding", "bearing")
CONFIG: dict[str, Any] = {"channels": NAMES, "baseline": 64, "half_life": 520.0, "quiet": 20}
"""With this half-life a block has 65 samples, so that short feeds see many of them."""


def feed(seed: int, samples: int) -> np.ndarray:
    """Return two hidden sources on six channels, a fault in the middle, and some gaps."""
    rng = np.random.default_rng(seed)
    mixing = rng.normal(size=(2, len(NAMES)))
    values = rng.normal(size=(samples, 2)) @ mixing + 0.3 * rng.normal(size=(samples, len(NAMES)))
    values[samples // 2 : samples // 2 + 30, seed % len(NAMES)] += 5.0
    values[samples // 3 :: 37, (seed + 1) % len(NAMES)] = np.nan
    return values


def fleet_of(keys: Sequence[Any], samples: int) -> dict[Any, np.ndarray]:
    """Return a feed for each key."""
    return {key: feed(seed, samples) for seed, key in enumerate(keys)}


def table_of(
    keys: Sequence[Any], values: np.ndarray, *, names: Sequence[str] = NAMES, key: str = "pump"
) -> pa.Table:
    """Return rows as a table with a column of keys."""
    kind = pa.int64() if keys and isinstance(keys[0], int) else pa.string()
    columns = {name: values[:, i] for i, name in enumerate(names)}
    return pa.table({key: pa.array(keys, kind), **columns})


def mixed(
    feeds: dict[Any, np.ndarray], cuts: Sequence[int], rng: np.random.Generator
) -> list[pa.Table]:
    """Return the rows of all feeds shuffled together, each feed in its order, cut into batches."""
    turns = rng.permutation(
        np.concatenate([np.full(len(x), i) for i, x in enumerate(feeds.values())])
    )
    keys = list(feeds)
    values = np.empty((len(turns), len(NAMES)))
    for i, rows in enumerate(feeds.values()):
        values[turns == i] = rows
    whole = table_of([keys[i] for i in turns], values)
    edges = [0, *sorted(cuts), len(whole)]
    return [whole.slice(a, b - a) for a, b in pairwise(edges)]


def apart(
    feeds: dict[Any, np.ndarray], config: dict[str, Any] | None = None
) -> dict[Any, tuple[pa.Table, list[Any]]]:
    """Return decisions and events of a monitor for each feed."""
    found = {}
    for key, values in feeds.items():
        monitor = NoveltyMonitor(**(config or CONFIG))
        found[key] = (monitor.push_many(values), monitor.events)
    return found


def of_key(tables: Sequence[pa.Table], key: Any, column: str = "pump") -> pa.Table:
    """Return the decisions of one feed."""
    whole = pa.concat_tables(tables)
    return whole.filter(pc.equal(whole[column], key)).drop_columns(column).combine_chunks()
