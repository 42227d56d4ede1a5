"""Embed a NoveltyMonitor in an asyncio daemon: acquire, judge, keep, and stop in good order.

    python examples/asyncio_daemon.py --samples 40000 --state STATE.arrow
    python examples/asyncio_daemon.py --samples 40000 --state STATE.arrow   # goes on where it was

Three tasks share one event loop. *acquire* takes packets from a device (here an invented one, whose
samples depend on nothing but their number) into a bounded queue. *judge* hands each packet to the
monitor in a thread, where the kernels run without the interpreter's lock; whenever ``--commit``
samples have been judged it saves monitor and place in the feed as one snapshot. *heartbeat* wakes
up every few milliseconds and says in the end how late it was at worst: what the judging costs the
loop. On SIGINT or SIGTERM, or at the end of the samples, the device is let go, the queue is
emptied, and the state is saved once more.

The next run loads the snapshot and asks the device for what follows: ``monitor.count`` is the place
in the feed. Nothing is lost and nothing is counted twice, and what is judged is bit for bit what
one run would have judged, however the packets fall.
"""

from __future__ import annotations

import argparse
import asyncio
import contextlib
import signal
import sys
import time
from collections.abc import AsyncIterator
from pathlib import Path

import numpy as np

from streambasis import NoveltyMonitor, load, save, warm_up

CHANNELS = 32
SOURCES = 4
BASELINE = 2000
BEAT_SECONDS = 0.005
QUEUE_PACKETS = 16
FAULT_EVERY, FAULT_LASTS = 5000, 150
"""The invented device shifts a channel in every so manieth sample, in turn one of three."""


def packet(first: int, count: int) -> np.ndarray:
    """Return samples ``first`` to ``first + count - 1`` of the invented device.

    Each sample has random numbers of its own, so that a device that starts anew in the middle
    gives the same samples.
    """
    mixing = np.random.default_rng(0).normal(size=(SOURCES, CHANNELS))
    rows = np.empty((count, CHANNELS))
    for row, number in zip(rows, range(first, first + count), strict=True):
        rng = np.random.default_rng([1, number])
        row[:] = rng.normal(size=SOURCES) @ mixing + rng.normal(size=CHANNELS)
        fault, since = divmod(number, FAULT_EVERY)
        if fault and since < FAULT_LASTS:
            row[7 * (fault % 3)] += 8.0
    return rows


async def device(first: int, last: int, size: int, rate: float) -> AsyncIterator[np.ndarray]:
    """Yield packets as a device sends them: ``rate`` samples a second, without end if 0."""
    started = time.monotonic()
    for start in range(first, last, size):
        rows = packet(start, min(size, last - start))
        due = started + (start - first + len(rows)) / rate if rate else 0.0
        await asyncio.sleep(max(0.0, due - time.monotonic()))
        yield rows


class Daemon:
    """One monitor, fed from a queue.

    Parameters
    ----------
    state : Path or None
        Snapshot to go on from and to keep up to date.
    commit : int
        Samples between two snapshots.
    """

    def __init__(self, state: Path | None, commit: int) -> None:
        self._state, self._commit = state, commit
        if state is not None and state.exists():
            self.monitor: NoveltyMonitor = load(state)
        else:
            self.monitor = NoveltyMonitor(CHANNELS, baseline=BASELINE)
        self.latest = 0.0
        self._queue: asyncio.Queue[np.ndarray | None] = asyncio.Queue(QUEUE_PACKETS)
        self._open = {event["event"] for event in self.monitor.events if event.open}

    async def run(self, last: int, size: int, rate: float) -> None:
        """Judge samples up to number ``last``, or until a signal comes."""
        await asyncio.to_thread(warm_up, NoveltyMonitor)
        acquiring = asyncio.create_task(self._acquire(last, size, rate))
        beating = asyncio.create_task(self._heartbeat())
        loop = asyncio.get_running_loop()
        for number in (signal.SIGINT, signal.SIGTERM):
            # not in a thread other than the main one, nor on every system
            with contextlib.suppress(NotImplementedError, ValueError, RuntimeError):
                loop.add_signal_handler(number, acquiring.cancel)
        print(f"ready at sample {self.monitor.count}")
        try:
            await self._judge()
            with contextlib.suppress(asyncio.CancelledError):
                await acquiring
        finally:
            beating.cancel()
            acquiring.cancel()

    async def _acquire(self, last: int, size: int, rate: float) -> None:
        try:
            async for rows in device(self.monitor.count, last, size, rate):
                await self._queue.put(rows)  # waits while the judging is behind
        finally:
            await self._queue.put(None)

    async def _judge(self) -> None:
        saved = self.monitor.count
        while (rows := await self._queue.get()) is not None:
            await asyncio.to_thread(self.monitor.push_many, rows)
            self._report()
            if self.monitor.count - saved >= self._commit:
                await self._save()
                saved = self.monitor.count
        await self._save()

    async def _save(self) -> None:
        if self._state is not None:
            await asyncio.to_thread(save, self.monitor, self._state)

    def _report(self) -> None:
        for event in self.monitor.events:
            number = event["event"]
            if event.open and number not in self._open:
                self._open.add(number)
                print(f"event {number} opened at sample {event['start']}: {event['channels']}")
            elif not event.open and number in self._open:
                self._open.remove(number)
                again = "" if event["repeats"] is None else f", repeats event {event['repeats']}"
                print(f"event {number} closed at sample {event['end']}{again}")

    async def _heartbeat(self) -> None:
        while True:
            before = time.monotonic()
            await asyncio.sleep(BEAT_SECONDS)
            self.latest = max(self.latest, time.monotonic() - before - BEAT_SECONDS)


def main(arguments: list[str] | None = None) -> int:
    """Run the daemon as the command line says."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n\n")[0])
    parser.add_argument("--samples", type=int, default=40_000, help="to judge in this run")
    parser.add_argument("--packet", type=int, default=64, help="samples that come at once")
    parser.add_argument("--rate", type=float, default=0.0, help="samples a second; 0: unpaced")
    parser.add_argument("--commit", type=int, default=8192, help="samples between two snapshots")
    parser.add_argument("--state", type=Path, help="snapshot to go on from and to keep")
    options = parser.parse_args(arguments)

    daemon = Daemon(options.state, options.commit)
    first, started = daemon.monitor.count, time.monotonic()
    asyncio.run(daemon.run(first + options.samples, options.packet, options.rate))
    judged, seconds = daemon.monitor.count - first, time.monotonic() - started
    print(
        f"\n{judged} samples in {seconds:.1f} s, up to number {daemon.monitor.count}; "
        f"the loop was {1000 * daemon.latest:.1f} ms late at worst"
    )
    audit = daemon.monitor.audit()
    print(f"rank {daemon.monitor.rank}, orthogonality {audit.orthogonality:.2f} (sound below 3)")
    return 0


if __name__ == "__main__":
    sys.exit(main())
