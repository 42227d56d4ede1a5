"""How fast does Spark watch a fleet, beside a single process, and how does that grow with feeds?"""

from __future__ import annotations

import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from bench.harness import Table
from streambasis import Fleet
from streambasis.fleet import spark

CHANNELS = tuple(f"c{i:02}" for i in range(16))
BASELINE = 1000
"""Samples of the one baseline that all feeds begin with, so that none has to be learnt."""
ROWS = 100
"""Samples of a feed in one micro-batch: 10 Hz for 10 s."""
STARTING, MEASURED = 2, 3
"""Micro-batches until both sides are warm, and those that count."""
CORES = 2
SETTINGS = {
    "spark.ui.enabled": "false",
    "spark.ui.showConsoleProgress": "false",
    "spark.log.level": "ERROR",
    "spark.driver.memory": "2g",
}


def samples(count: int, seed: int) -> np.ndarray:
    """Return four hidden sources on all channels, and noise."""
    mixing = np.random.default_rng(0).normal(size=(4, len(CHANNELS)))
    rng = np.random.default_rng(seed)
    return rng.normal(size=(count, 4)) @ mixing + 0.3 * rng.normal(size=(count, len(CHANNELS)))


def table(feeds: int, number: int) -> pa.Table:
    """Return the rows of one micro-batch, those of a feed together."""
    rows = samples(feeds * ROWS, number + 1)
    seconds = np.tile((number * ROWS + np.arange(ROWS)) * 0.1, feeds)
    columns = {name: rows[:, i] for i, name in enumerate(CHANNELS)}
    return pa.table({"feed": np.repeat(np.arange(feeds), ROWS), "time": seconds, **columns})


def config() -> dict[str, Any]:
    """Return the settings of every monitor."""
    return {"channels": CHANNELS, "baseline": samples(BASELINE, 0)}


def spark_seconds(session: Any, folder: Path) -> tuple[float, float]:
    """Return the median seconds of a micro-batch, and the bytes of state of all feeds."""
    given = (
        session.readStream.schema(session.read.parquet(str(folder)).schema)
        .option("maxFilesPerTrigger", 1)
        .parquet(str(folder))
    )
    watched = spark.watch_stream(given, key="feed", time="time", channels=CHANNELS, config=config())
    with tempfile.TemporaryDirectory() as checkpoint:
        query = (
            watched.output.writeStream.format("noop")
            .option("checkpointLocation", checkpoint)
            .trigger(availableNow=True)
            .start()
        )
        query.awaitTermination()
        batches = [p for p in query.recentProgress if p["numInputRows"]][-MEASURED:]
        sizes = spark.snapshots(session, checkpoint).selectExpr("sum(length(snapshot)) AS bytes")
        held = sizes.collect()[0]["bytes"]
    seconds = [p["durationMs"]["triggerExecution"] / 1000 for p in batches]
    return float(np.median(seconds)), float(held)


def process_seconds(folder: Path) -> float:
    """Return the median seconds that a Fleet on as many threads takes for the same, read too."""
    fleet = Fleet(config(), key="feed", threads=CORES)
    taken = []
    for path in sorted(folder.iterdir()):
        start = time.perf_counter()
        fleet.push_many(pq.ParquetFile(path).read())
        taken.append(time.perf_counter() - start)
    fleet.close()
    return float(np.median(taken[-MEASURED:]))


def run(quick: bool) -> list[Table]:
    """Measure rates for some numbers of feeds."""
    out = Table(
        f"Fleets on Spark local[{CORES}]: {len(CHANNELS)} channels, {ROWS} samples of each feed "
        "in a micro-batch",
        ["feeds", "Spark samples/s", "Spark s per micro-batch", "Fleet samples/s",
         "Fleet : Spark", "KB of state per feed"],
        headline=True,
    )  # fmt: skip
    session = spark.session("bench", master=f"local[{CORES}]", settings=SETTINGS)
    for feeds in (10, 100) if quick else (10, 100, 1000):
        with tempfile.TemporaryDirectory() as name:
            folder = Path(name)
            for number in range(STARTING + MEASURED):
                pq.write_table(table(feeds, number), folder / f"{number}.parquet")
            seconds, held = spark_seconds(session, folder)
            alone = process_seconds(folder)
        rows = feeds * ROWS
        out.add(feeds, rows / seconds, seconds, rows / alone, seconds / alone,
                held / feeds / 1000)  # fmt: skip
    session.stop()
    out.notes.append(
        f"Median of {MEASURED} micro-batches after {STARTING}; rows come from Parquet on both "
        f"sides, decisions are made and not kept; Fleet on {CORES} threads of one process."
    )
    return [out]
