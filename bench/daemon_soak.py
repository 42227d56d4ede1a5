"""A long run on messages, whose broker goes away now and then: nothing grows, nothing is lost."""

from __future__ import annotations

import os
import subprocess
import tempfile
import threading
import time
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa

from bench.harness import Table
from bench.hearing import Silent
from bench.messages import Broker

CHANNELS = 32
RATE = 2000
SETTLED = 0.25
"""Part of the soak after which memory, files and threads count as settled."""
LOOK_SECONDS = 1.0
END_SECONDS = 15.0
"""Without a sample for so long after the last was published, something is lost."""


class Observer(Silent):
    """Looks at this process once a second, and makes the broker go away now and then."""

    def __init__(self, stop: threading.Event, samples: int, broker: Broker, away: list[float]):
        self._stop, self._samples, self._broker = stop, samples, broker
        self._away = away
        self._started = self._looked = 0.0
        self.looks: list[tuple[float, float, int, int]] = []
        self.restarts = 0
        self.warnings: list[str] = []

    def warned(self, warning: str) -> None:
        """Keep what should not happen here."""
        self.warnings.append(warning)

    def advance(self, samples: int) -> None:
        """Look, and stop at the last sample."""
        now = time.monotonic()
        self._started = self._started or now
        if now - self._looked >= LOOK_SECONDS:
            self._looked = now
            self.looks.append((now - self._started, *_sizes()))
        if samples >= self._samples:
            self._stop.set()

    def outages(
        self, every: float, publisher: subprocess.Popen[str], vitals: Any
    ) -> threading.Thread:
        """Start to take the broker away every so many seconds, and end where nothing comes."""

        def go() -> None:
            for away in self._away:
                if self._stop.wait(every):
                    return
                self._broker.end()
                time.sleep(away)
                self._broker.start()
                self.restarts += 1
            publisher.wait()
            samples = -1
            while vitals.samples > samples:
                samples = vitals.samples
                if self._stop.wait(END_SECONDS):
                    return
            self._stop.set()

        thread = threading.Thread(target=go)
        thread.start()
        return thread


def _sizes() -> tuple[float, int, int]:
    """Return resident memory in MB, open files and threads of this process."""
    pages = int(Path("/proc/self/statm").read_text().split()[1])
    memory = pages * os.sysconf("SC_PAGE_SIZE") / 1e6
    return memory, len(os.listdir("/proc/self/fd")), threading.active_count()


def soak(seconds: float) -> Table:
    """Run on messages for a while, with an outage of 30 s where there is time for it."""
    from streambasis import NoveltyMonitor, warm_up
    from streambasis.feeds import Broker as Settings
    from streambasis.feeds import FeedOptions, open_feed
    from streambasis.watch.home import Home
    from streambasis.watch.loop import Run
    from streambasis.watch.vitals import Vitals

    warm_up(NoveltyMonitor)
    count, stop, vitals = round(seconds * RATE), threading.Event(), Vitals()
    away = [1.0, 30.0 if seconds >= 120 else 3.0, 1.0]
    options = FeedOptions(strict=False, broker=Settings(client="bench"), stop=stop)
    with tempfile.TemporaryDirectory() as name, Broker(Path(name)) as broker:
        observer = Observer(stop, count, broker, away)
        publisher = broker.publishing(count, RATE, CHANNELS)
        with (
            publisher,
            Home(Path(name) / "home") as home,
            open_feed(broker.url, options=options) as feed,
        ):
            home.begin({})
            monitor = NoveltyMonitor(feed.columns.channels)
            outages = observer.outages(seconds / (len(away) + 1), publisher, vitals)
            Run(feed, monitor, observer, home=home, adopt_after=1000, vitals=vitals)(stop)
            connections = feed.counts["connections"]
            outages.join()
            publisher.kill()
        files = sorted((Path(name) / "home" / "decisions").iterdir())
        tables = [pa.ipc.open_file(file).read_all() for file in files]
    taken = np.concatenate([table["sample"].to_numpy() for table in tables])
    times = np.concatenate([table["time"].cast(pa.int64()).to_numpy() for table in tables])
    lost = count - len(np.unique(times))
    table = Table(
        f"{seconds / 60:g} minutes at {RATE:,} messages per second of {CHANNELS} channels",
        ["figure", "settled", "end", "largest"],
        notes=[
            f"{count:,} published, {lost} lost, {len(taken) - len(np.unique(times))} doubled, "
            f"{vitals.duplicates} sent again and recognised",
            f"broker away {observer.restarts} times, {max(away[: observer.restarts or 1]):g} s at "
            f"most; {connections} connections; {vitals.audits} audits, {vitals.failed_audits} of "
            "them failed",
            f"warnings: {'; '.join(observer.warnings) or 'none'}",
        ],
    )
    looks = np.array(observer.looks)
    settled = looks[looks[:, 0] >= SETTLED * seconds]
    for column, figure in enumerate(("resident memory, MB", "open files", "threads"), 1):
        values = settled[:, column]
        table.add(figure, float(values[0]), float(values[-1]), float(values.max()))
    return table
