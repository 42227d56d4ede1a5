"""Watch a fleet of invented pumps with Apache Spark, from a folder into which files arrive.

    python examples/fleet_on_spark.py --home run-spark

Every pump has a monitor of its own. Decisions and events are kept as Parquet, one folder for each
micro-batch, so that a micro-batch that Spark repeats after a crash replaces what it had written.
Run it again with the same --home and more --files: it goes on where it stopped. Needs the extra
``streambasis[spark]`` and Java 17 or later. Advisory: no protective or safety-instrumented
function.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from streambasis import from_bytes
from streambasis.fleet import spark

CHANNELS = ("flow", "inlet", "outlet", "speed", "current", "winding", "bearing", "vibration")
PERIOD = np.timedelta64(10, "s")
START = np.datetime64("2026-03-02T00:00:00", "us")
BASELINE = 500
FAULTS = {1: ("bearing", 0.5), 3: ("current", 0.6), 4: ("bearing", 0.85)}
"""Of every five pumps: which have a fault, in which channel, and after which part of the feed."""


def feed(pump: int, samples: int) -> np.ndarray:
    """Return one pump's samples: two hidden sources move all channels; some have a fault."""
    rng = np.random.default_rng(pump)
    mixing = rng.normal(size=(2, len(CHANNELS)))
    values = rng.normal(size=(samples, 2)) @ mixing
    values += 0.2 * rng.normal(size=values.shape)
    if pump % 5 in FAULTS:
        channel, part = FAULTS[pump % 5]
        first = int(part * samples)
        values[first : first + samples // 20, CHANNELS.index(channel)] += 2.0
    return values


def deliver(folder: Path, pumps: int, samples: int, files: int) -> None:
    """Write the fleet's rows as files, each with the next part of every feed, rows mixed."""
    folder.mkdir(parents=True, exist_ok=True)
    feeds = [feed(pump, samples) for pump in range(pumps)]
    times = START + np.arange(samples) * PERIOD
    edges = np.linspace(0, samples, files + 1).astype(int)
    for number in range(files):
        path = folder / f"{number:04}.parquet"
        if path.exists():
            continue
        part = slice(edges[number], edges[number + 1])
        count = len(times[part])
        columns: dict[str, Any] = {
            "pump": np.repeat([f"pump-{pump:02}" for pump in range(pumps)], count),
            "time": pa.array(np.tile(times[part], pumps)).cast(pa.timestamp("us", "UTC")),
        }
        rows = np.concatenate([values[part] for values in feeds])
        columns |= {name: rows[:, i] for i, name in enumerate(CHANNELS)}
        mixed = np.random.default_rng(number).permutation(len(rows))
        pq.write_table(pa.table(columns).take(mixed), path)


def watch(session: Any, home: Path) -> spark.Watched:
    """Judge what has arrived and not been judged yet, and keep what comes of it."""
    folder = str(home / "arrived")
    arriving = (
        session.readStream.schema(session.read.parquet(folder).schema)
        .option("maxFilesPerTrigger", 1)
        .parquet(folder)
    )
    watched = spark.watch_stream(
        arriving, key="pump", time="time", channels=CHANNELS, config={"baseline": BASELINE}
    )

    def keep(batch: Any, number: int) -> None:
        batch.persist()  # or the stateful operator would run once for each of the three
        parts = watched.of(batch)
        for name in ("decisions", "events", "refused"):
            place = str(home / name / f"batch={number}")
            getattr(parts, name).write.mode("overwrite").parquet(place)
        batch.unpersist()

    query = (
        watched.output.writeStream.foreachBatch(keep)
        .option("checkpointLocation", str(home / "checkpoint"))
        .trigger(availableNow=True)
        .start()
    )
    query.awaitTermination()
    return watched


def tell(session: Any, home: Path) -> None:
    """Print what was kept: the events of the fleet, and how each monitor stands."""
    decisions = session.read.parquet(str(home / "decisions"))
    events = session.read.parquet(str(home / "events"))
    print(f"{decisions.count():,} samples judged, {events.count()} events\n")
    for event in events.orderBy("start_time", "pump").collect():
        shares = [f"{name} {100 * event.contributions[name]:.0f} %" for name in event.channels]
        begin, end = (np.datetime64(event[name], "s") for name in ("start_time", "end_time"))
        print(f"{event.pump}  {begin} to {end}  {event.peak:4.1f} x limit  {', '.join(shares)}")
    print("\npump      samples  rank  noise  open events")
    for row in spark.snapshots(session, str(home / "checkpoint")).orderBy("key").collect():
        monitor = from_bytes(bytes(row.snapshot))
        still = sum(event.open for event in monitor.events)
        print(f"{row.key}  {monitor.count:7,}  {monitor.rank:4}  {monitor.noise:5.2f}  {still:11}")


def main(arguments: list[str] | None = None) -> int:
    """Deliver, watch, tell."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--home", type=Path, help="folder of the run; a temporary one if not given")
    parser.add_argument("--pumps", type=int, default=10)
    parser.add_argument("--samples", type=int, default=3000, help="of each pump")
    parser.add_argument("--files", type=int, default=4, help="in which they arrive")
    parser.add_argument("--master", default="local[2]", help="where Spark runs")
    options = parser.parse_args(arguments)
    quiet = {"spark.log.level": "ERROR", "spark.ui.showConsoleProgress": "false"}
    session = spark.session("fleet of pumps", master=options.master, settings=quiet)
    with tempfile.TemporaryDirectory() as temporary:
        home = options.home or Path(temporary)
        deliver(home / "arrived", options.pumps, options.samples, options.files)
        watch(session, home)
        tell(session, home)
    return 0


if __name__ == "__main__":
    sys.exit(main())
