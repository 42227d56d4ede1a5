"""Feeds: reading rates against pyarrow's own, and latency from a broker to a batch."""

from __future__ import annotations

import json
import shutil
import socket
import subprocess
import sys
import tempfile
import threading
import time
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pyarrow.json
import pyarrow.parquet

from bench.harness import Table, interleaved

CHANNELS = 32
LOOPBACK = "127.0.0.1"
_PUBLISHER = f"""
import json, sys, time
from paho.mqtt.client import Client
from paho.mqtt.enums import CallbackAPIVersion
port, count, rate = map(int, sys.argv[1:])
client = Client(CallbackAPIVersion.VERSION2, client_id="bench-publisher")
client.max_inflight_messages_set(0)
client.connect("{LOOPBACK}", port)
client.loop_start()
time.sleep(1)
values = {{f"c{{i:02}}": 0.125 * i for i in range({CHANNELS})}}
start = time.perf_counter()
sent = 0
while sent < count:
    due = min(count, int((time.perf_counter() - start) * rate))
    while sent < due:
        client.publish("bench", json.dumps({{"time": time.time(), **values}}), qos=1)
        sent += 1
    time.sleep(0.0005)
time.sleep(0.5)
"""


def run(quick: bool) -> list[Table]:
    """Answer both questions."""
    return [reading(20_000 if quick else 100_000), latency(3.0 if quick else 20.0)]


def _feed(rows: int) -> pa.Table:
    rng = np.random.default_rng(1)
    start = np.datetime64("2026-03-02T00:00:00", "ms")
    columns = {f"c{i:02}": np.round(rng.standard_normal(rows), 5) for i in range(CHANNELS)}
    return pa.table({"time": start + np.arange(rows) * 10, **columns})


def reading(rows: int) -> Table:
    """Compare a feed with reading the same file by pyarrow, into one table."""
    from streambasis.feeds import FeedOptions, open_feed

    table = _feed(rows)
    result = Table(
        f"Reading {rows:,} samples of {CHANNELS} channels as batches",
        ["file", "samples per second", "rate over pyarrow's own", "least", "most"],
        notes=["pyarrow reads the file whole, on all cores; a feed on one, in bounded memory"],
    )
    with tempfile.TemporaryDirectory() as folder:
        csv, parquet = Path(folder) / "feed.csv", Path(folder) / "feed.parquet"
        arrow, lines = Path(folder) / "feed.arrow", Path(folder) / "feed.jsonl"
        torn = Path(folder) / "torn.csv"
        pa.csv.write_csv(table, csv)
        pa.parquet.write_table(table, parquet)
        with pa.ipc.new_file(arrow, table.schema) as file:
            file.write_table(table, max_chunksize=10_000)
        part = table.slice(0, rows // 10).to_pylist()
        lines.write_text("".join(json.dumps(row, default=str) + "\n" for row in part))
        whole = csv.read_bytes().split(b"\n")
        # one row in a hundred has a word where a number should be
        whole[1:-1:100] = [row.rpartition(b",")[0] + b",ERR" for row in whole[1:-1:100]]
        torn.write_bytes(b"\n".join(whole))
        own = {
            csv: lambda: pa.csv.read_csv(csv),
            torn: lambda: pa.csv.read_csv(csv),
            parquet: lambda: pa.parquet.read_table(parquet, memory_map=False),
            arrow: lambda: pa.ipc.open_file(pa.OSFile(str(arrow))).read_all(),
            lines: lambda: pa.json.read_json(lines),
        }
        options = FeedOptions(strict=False)
        for path, theirs in own.items():
            count = rows // 10 if path == lines else rows

            def ours(path: Path = path) -> int:
                return sum(len(batch) for batch in open_feed(path, options=options).batches())

            times = interleaved({"feed": ours, "pyarrow": theirs}, seconds=0.0)
            feed, other = times["feed"], times["pyarrow"]
            result.add(
                path.name,
                count / feed.median,
                other.median / feed.median,
                other.least / feed.most,
                other.most / feed.least,
            )
    return result


def latency(seconds: float, rate: int = 1000) -> Table:
    """Measure the time from publishing a sample to holding it in a batch."""
    from streambasis.feeds import Broker, FeedOptions, open_feed

    result = Table(
        f"From publishing to a batch, {rate:,} messages per second of {CHANNELS} channels",
        ["batches committed", "messages", "median ms", "99th percentile ms", "largest ms"],
        notes=[
            "QoS 1 through mosquitto on the same machine; the publisher is a process of its own"
        ],
    )
    count = round(seconds * rate)
    with tempfile.TemporaryDirectory() as folder:
        port, broker = _broker(Path(folder))
        arguments = [sys.executable, "-c", _PUBLISHER, str(port), str(count), str(rate)]
        stop = threading.Event()
        options = FeedOptions(broker=Broker(client="bench"), stop=stop)
        delays: list[np.ndarray] = []
        batches = taken = 0
        with subprocess.Popen(arguments) as publisher:
            # what is left of the messages when the publisher has ended does not count
            threading.Thread(target=lambda: (publisher.wait(), stop.set())).start()
            try:
                with open_feed(f"mqtt://{LOOPBACK}:{port}/bench", options=options) as feed:
                    for batch in feed.batches():
                        now = time.time()
                        delays.append(now - batch.times / 1e9)
                        feed.commit(batch.position)
                        batches += 1
                        taken += len(batch)
            finally:
                publisher.kill()
                broker.terminate()
                broker.wait()
    middle, high, most = np.quantile(np.concatenate(delays) * 1e3, [0.5, 0.99, 1.0])
    result.add(batches, taken, float(middle), float(high), float(most))
    return result


def _broker(folder: Path) -> tuple[int, subprocess.Popen[bytes]]:
    """Start mosquitto on a free port of the loopback address."""
    program = shutil.which("mosquitto", path="/usr/sbin:/usr/bin:/usr/local/sbin")
    if program is None:
        raise SystemExit("mosquitto is not installed: apt-get install mosquitto")
    with socket.socket() as probe:
        probe.bind((LOOPBACK, 0))
        port = int(probe.getsockname()[1])
    config = folder / "mosquitto.conf"
    config.write_text(f"listener {port} {LOOPBACK}\nallow_anonymous true\n")
    broker = subprocess.Popen([program, "-c", str(config)], stderr=subprocess.DEVNULL)
    for _ in range(200):
        try:
            socket.create_connection((LOOPBACK, port), 1).close()
        except OSError:
            time.sleep(0.02)
        else:
            return port, broker
    raise SystemExit("mosquitto does not listen")
