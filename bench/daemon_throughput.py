"""Throughput of the daemon, decisions written and all, against the monitor by itself."""

from __future__ import annotations

import tempfile
import threading
from collections.abc import Callable
from itertools import count
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet

from bench.harness import Table, interleaved
from bench.hearing import Silent

CHANNELS = 32


def feed_of(rows: int) -> tuple[pa.Table, np.ndarray]:
    """Return a feed of four sources in noise, with times, and its values."""
    rng = np.random.default_rng(1)
    values = rng.normal(size=(rows, 4)) @ rng.normal(size=(4, CHANNELS)) * 3
    values = np.round(values + rng.normal(size=values.shape), 5)
    start = np.datetime64("2026-03-02T00:00:00", "ms")
    columns = {f"c{i:02}": values[:, i] for i in range(CHANNELS)}
    return pa.table({"time": start + np.arange(rows) * 10, **columns}), values


def throughput(rows: int) -> Table:
    """Run the daemon over files of each format, in turn with the monitor alone."""
    from streambasis.feeds import FeedOptions, open_feed
    from streambasis.monitor import NoveltyMonitor
    from streambasis.watch.home import Home
    from streambasis.watch.loop import Run

    table, values = feed_of(rows)
    names = table.column_names[1:]
    result = Table(
        f"{rows:,} samples of {CHANNELS} channels through the daemon, decisions written",
        ["side", "samples per second", "over the monitor alone", "over reading CSV"],
        notes=[
            "the monitor alone: push_many of the whole array; reading CSV: pyarrow, all cores",
            "asked for: Arrow and Parquet 0.5 of the monitor alone; CSV 0.5 of it or 0.33 of "
            "reading CSV, whichever is lower",
        ],
        headline=True,
    )
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        paths = {ending: folder / f"feed.{ending}" for ending in ("arrow", "parquet", "csv")}
        with pa.ipc.new_file(paths["arrow"], table.schema) as file:
            file.write_table(table, max_chunksize=10_000)
        pa.parquet.write_table(table, paths["parquet"])
        pa.csv.write_csv(table, paths["csv"])
        numbers = count()

        def daemon(path: Path) -> Callable[[], object]:
            def run() -> object:
                options = FeedOptions(strict=False, ahead=True)
                with (
                    Home(folder / f"home{next(numbers)}") as home,
                    open_feed(path, options=options) as feed,
                ):
                    home.begin({})
                    monitor = NoveltyMonitor(feed.columns.channels)
                    return Run(feed, monitor, Silent(), home=home, adopt_after=1000)(
                        threading.Event()
                    )

            return run

        sides: dict[str, Callable[[], object]] = {
            "monitor alone": lambda: NoveltyMonitor(names).push_many(values),
            "reading CSV": lambda: pa.csv.read_csv(paths["csv"]),
            **{ending: daemon(path) for ending, path in paths.items()},
        }
        times = interleaved(sides, seconds=0.0)
        alone, reading = times["monitor alone"].median, times["reading CSV"].median
        for side, timing in times.items():
            taken = timing.median
            result.add(side, rows / taken, alone / taken, reading / taken)
    return result
