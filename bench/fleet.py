"""Fleets: rates on one thread and on two, growth with the number of feeds, memory, parking."""

from __future__ import annotations

import importlib
import importlib.util
import tempfile
import time
from pathlib import Path

import numpy as np
import pyarrow as pa

from bench.harness import Table
from streambasis import Fleet, NoveltyMonitor, from_bytes, to_bytes

SOURCES = 4
BASELINE = 256
WARM = 2048 + BASELINE
"""Samples of each feed before anything is timed: a whole block has been learnt from."""


class Plant:
    """Feeds of one plant: the same four sources move the channels of every machine."""

    def __init__(self, channels: int, feeds: int) -> None:
        self.names = [f"c{i:02d}" for i in range(channels)]
        self.feeds = feeds
        self._rng = np.random.default_rng(channels)
        self._mixing = self._rng.normal(size=(SOURCES, channels)).astype(np.float32)

    def batch(self, rows: int) -> pa.Table:
        """Return the next rows of every feed, those of a moment side by side."""
        count = rows * self.feeds
        hidden = self._rng.standard_normal((count, SOURCES), dtype=np.float32)
        noise = self._rng.standard_normal((count, len(self.names)), dtype=np.float32)
        values = hidden @ self._mixing + np.float32(0.3) * noise
        columns = {name: values[:, i].astype(np.float64) for i, name in enumerate(self.names)}
        return pa.table({"machine": np.tile(np.arange(self.feeds), rows), **columns})

    def fleet(self, threads: int, **named: object) -> Fleet:
        """Return a fleet that has learnt, every feed from the same samples."""
        config = {"channels": self.names, "baseline": self._baseline()}
        return Fleet(config, key="machine", threads=threads, **named)  # type: ignore[arg-type]

    def _baseline(self) -> np.ndarray:
        rng = np.random.default_rng(1)
        hidden = rng.normal(size=(BASELINE, SOURCES)) @ self._mixing
        return hidden + 0.3 * rng.normal(size=hidden.shape)


def _seconds(fleet: Fleet, table: pa.Table) -> float:
    start = time.perf_counter()
    fleet.push_many(table)
    return time.perf_counter() - start


def threads(feeds: int, repetitions: int) -> Table:
    """Time one thread against two, taking turns batch by batch, learning included."""
    table = Table(
        f"One thread and two: {feeds} feeds of 32 channels",
        ["rows of a feed per batch", "samples/s, 1 thread", "samples/s, 2 threads", "2 : 1",
         "of batches without learning"],
        notes=["The ratio of all the time, and that of the median batch, in which few feeds end a "
               "block of 2,048 samples: learning from a block is done by NumPy, in calls too short "
               "for two threads to gain much. On a machine that others use the ratio says little."],
        headline=True,
    )  # fmt: skip
    for rows in (1, 16, 64, 256, 1024):
        plant = Plant(32, feeds)
        sides = {count: plant.fleet(count) for count in (1, 2)}
        for fleet in sides.values():
            fleet.push_many(plant.batch(WARM // 2))
        times: dict[int, list[float]] = {1: [], 2: []}
        for _ in range(min(repetitions, max(4, 4 * 2048 // rows))):
            batch = plant.batch(rows)
            for count, fleet in sides.items():
                times[count].append(_seconds(fleet, batch))
        for fleet in sides.values():
            fleet.close()
        mean = {count: float(np.mean(found)) for count, found in times.items()}
        median = {count: float(np.median(found)) for count, found in times.items()}
        size = rows * feeds
        table.add(rows, size / mean[1], size / mean[2], mean[1] / mean[2], median[1] / median[2])
    return table


def growth(counts: tuple[int, ...]) -> Table:
    """Time batches of 16 rows of each feed as feeds grow in number, and count their bytes."""
    table = Table(
        "Growth with the number of feeds: 16 channels, 16 rows of each per batch, 2 threads",
        ["feeds", "samples/s", "to 100 feeds", "kB per feed (nbytes)", "GB in all",
         "resident kB per feed"],
        headline=True,
    )  # fmt: skip
    first = 0.0
    for feeds in counts:
        plant = Plant(16, feeds)
        before = _resident()
        with plant.fleet(2) as fleet:
            fleet.push_many(plant.batch(16))
            times = []
            for _ in range(5):
                times.append(_seconds(fleet, plant.batch(16)))
            rate = 16 * feeds / float(np.median(times))
            first = first or rate
            size = fleet.nbytes
            table.add(
                feeds, rate, rate / first, size / feeds / 1e3, size / 1e9,
                (_resident() - before) / feeds / 1e3,
            )  # fmt: skip
    table.notes.append(
        "Resident: what the process took of the system after 96 rows of each; room for a block of "
        "2,048 samples is held from the start and taken as it fills."
    )
    return table


def parking(feeds: int) -> Table:
    """Time a snapshot out and back, and a fleet of which a part is in memory."""
    plant = Plant(16, feeds)
    monitor = NoveltyMonitor(plant.names, baseline=BASELINE)
    rows = plant.batch(WARM).select(plant.names)
    monitor.push_many(rows.slice(0, BASELINE + 1024))
    data = to_bytes(monitor)
    out, back = [], []
    for _ in range(50):
        start = time.perf_counter()
        data = to_bytes(monitor)
        middle = time.perf_counter()
        from_bytes(data)
        out.append(middle - start)
        back.append(time.perf_counter() - middle)
    table = Table(
        f"Parking: {feeds} feeds of 16 channels, 16 rows of each per batch",
        ["what", "value", "unit"],
        notes=["A snapshot in the middle of a block holds 1,024 waiting samples."],
    )
    table.add("snapshot", len(data) / 1e3, "kB")
    table.add("out of memory", 1e3 * float(np.median(out)), "ms per feed")
    table.add("back into memory", 1e3 * float(np.median(back)), "ms per feed")
    with tempfile.TemporaryDirectory() as folder:
        for name, live in (("all in memory", None), ("a tenth in memory", max(1, feeds // 10))):
            with plant.fleet(2, live=live, home=Path(folder) / name) as fleet:
                fleet.push_many(plant.batch(16))
                taken = [_seconds(fleet, plant.batch(16)) for _ in range(3)]
                start = time.perf_counter()
                fleet.commit()
                committed = time.perf_counter() - start
                table.add(f"batch, {name}", 1e6 * float(np.median(taken)) / feeds, "us per feed")
                table.add(f"commit, {name}", 1e3 * committed / feeds, "ms per feed")
    return table


def _resident() -> int:
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("VmRSS"):
            return 1024 * int(line.split()[1])
    return 0


def run(quick: bool) -> list[Table]:
    """Answer the question."""
    tables = [
        threads(20 if quick else 100, 4 if quick else 24),
        growth((100, 1000) if quick else (100, 1000, 10_000)),
        parking(100 if quick else 1000),
    ]
    # Spark takes a minute to start and to compile in its workers
    if not quick and importlib.util.find_spec("pyspark"):
        tables += importlib.import_module("bench.fleet_spark").run(quick)
    return tables
