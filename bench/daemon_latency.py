"""Latency of the daemon: from publishing a sample to its decision."""

from __future__ import annotations

import tempfile
import threading
import time
from pathlib import Path

import numpy as np
import pyarrow as pa

from bench.harness import Table
from bench.hearing import Silent
from bench.messages import Broker

CHANNELS = 32
BASELINE = 1000
QUANTILES = (0.5, 0.9, 0.99, 0.999, 1.0)


class Clock(Silent):
    """Writes down when which samples were decided."""

    def __init__(self, stop: threading.Event, samples: int) -> None:
        self._stop, self._samples = stop, samples
        self.counts: list[int] = []
        self.times: list[float] = []

    def advance(self, samples: int) -> None:
        """Write down that so many samples are decided now."""
        self.counts.append(samples)
        self.times.append(time.time())
        if samples >= self._samples:
            self._stop.set()


def latency(seconds: float, rate: int = 1000) -> Table:
    """Measure the whole way: broker, queue, parsing, monitor, with commits to a home."""
    from streambasis import warm_up
    from streambasis.feeds import Broker as Settings
    from streambasis.feeds import FeedOptions, open_feed
    from streambasis.monitor import NoveltyMonitor
    from streambasis.watch.home import Home
    from streambasis.watch.loop import Run

    warm_up(NoveltyMonitor)
    count = round(seconds * rate)
    stop = threading.Event()
    clock = Clock(stop, count)
    options = FeedOptions(strict=False, broker=Settings(client="bench"), stop=stop)
    with tempfile.TemporaryDirectory() as folder, Broker(Path(folder)) as broker:
        publisher = broker.publishing(count, rate, CHANNELS)
        with (
            publisher,
            Home(Path(folder) / "home") as home,
            open_feed(broker.url, options=options) as feed,
        ):
            home.begin({})
            monitor = NoveltyMonitor(feed.columns.channels, baseline=BASELINE)
            Run(feed, monitor, clock, home=home, adopt_after=1000)(stop)
            publisher.kill()
        files = sorted((Path(folder) / "home" / "decisions").iterdir())
        published = np.concatenate(
            [
                pa.ipc.open_file(file).read_all()["time"].cast(pa.int64()).to_numpy()
                for file in files
            ]
        )
    decided = np.array(clock.times)[np.searchsorted(clock.counts, np.arange(len(published)) + 1)]
    # before the baseline is complete there are no decisions
    delays = (decided - published / 1e9)[2 * BASELINE :] * 1e3
    table = Table(
        f"From publishing to the decision, {rate:,} samples per second of {CHANNELS} channels",
        ["samples", "batches", *(f"{100 * q:g} % ms" for q in QUANTILES)],
        notes=[
            "QoS 1 through mosquitto; publisher, broker and daemon on this machine, with commits"
        ],
        headline=True,
    )
    table.add(len(delays), len(clock.counts), *map(float, np.quantile(delays, QUANTILES)))
    return table
