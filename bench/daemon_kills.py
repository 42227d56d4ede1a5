"""Killed at random moments, a run must leave the same bytes as one that was left alone."""

from __future__ import annotations

import multiprocessing
import random
import tempfile
import threading
import time
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from bench.harness import Table
from bench.hearing import Silent

CHANNELS = 8
EVERY = (512, 1e9)
"""Samples and seconds between commits: one is under way all the time."""
LIFE = (0.02, 0.45)
"""Seconds that a process lives, from the moment that it is at work."""
PACE = 0.003
"""Seconds that a process sleeps after each batch, so that a feed lasts for several lives."""
START_SECONDS = 30.0


def rows_of(rows: int) -> list[bytes]:
    """Return lines of CSV: faults that come back, one that stays, gaps, and rows that are torn."""
    rng = np.random.default_rng(6)
    values = rng.normal(size=(rows, 2)) @ rng.normal(size=(2, CHANNELS)) * 3
    values += 0.5 * rng.normal(size=(rows, CHANNELS))
    for start in range(4000, rows, 2500):
        values[start : start + 120, start // 2500 % CHANNELS] += 6
    values[rows * 3 // 4 :, CHANNELS - 1] += 5
    lines = [",".join(f"{value:.9g}" for value in row).encode() + b"\n" for row in values]
    for row in range(0, rows, 700):
        lines[row] = b"torn" + lines[row]
    for row in range(350, rows, 700):
        lines[row] = b"," + lines[row].partition(b",")[2]
    return lines


HEADER = ",".join(f"c{i}" for i in range(CHANNELS)).encode() + b"\n"


class Follower(Silent):
    """What a process reports to: says that it is at work, and ends a feed that has no end."""

    def __init__(self, asked: threading.Event, at_work: Any, last: int | None, pace: float) -> None:
        self._asked, self._at_work, self._last, self._pace = asked, at_work, last, pace

    def warned(self, warning: str) -> None:
        """Hear of a malformed row."""

    def advance(self, samples: int) -> None:
        """Say so, and stop at the last sample."""
        self._at_work.set()
        if self._last is not None and samples >= self._last:
            self._asked.set()
        time.sleep(self._pace)


def live(feed: Path, folder: Path, last: int | None, pace: float, at_work: Any) -> None:
    """Run, or go on, in a process of its own; ``last`` follows the feed up to that sample."""
    from streambasis.feeds import FeedOptions, open_feed
    from streambasis.monitor import NoveltyMonitor
    from streambasis.watch.home import Home
    from streambasis.watch.loop import Run

    asked = threading.Event()
    options = FeedOptions(strict=False, follow=last is not None, stop=asked)
    with Home(folder) as home, open_feed(feed, position=home.position, options=options) as opened:
        home.begin({"feed": str(feed)})
        monitor = home.monitor() or NoveltyMonitor(
            opened.columns.channels, baseline=1000, false_alarm=1e-3
        )
        if last is not None and monitor.count >= last:
            at_work.set()
            return
        reporter = Follower(asked, at_work, last, pace)
        Run(opened, monitor, reporter, home=home, every=EVERY, adopt_after=1000)(asked)
        at_work.set()


@dataclass
class Lives:
    """Processes of one kind, started and killed."""

    feed: Path
    last: int | None
    rng: random.Random
    kills: int = 0
    context: Any = field(default_factory=lambda: multiprocessing.get_context("forkserver"))

    def __post_init__(self) -> None:
        self.context.set_forkserver_preload(["bench.daemon_warm"])

    def one(self, folder: Path, *, whole: bool) -> bool:
        """Run one process, to its end or until it is killed; return whether it ended by itself."""
        at_work = self.context.Event()
        pace = 0.0 if whole else PACE
        child = self.context.Process(
            target=live, args=(self.feed, folder, self.last, pace, at_work)
        )
        child.start()
        if whole:
            child.join()
        else:
            # sometimes before it is at work: opening and going on can be killed as well
            if self.rng.random() < 0.9:
                at_work.wait(START_SECONDS)
            child.join(self.rng.uniform(*LIFE))
            child.kill()
            child.join()
        ended = child.exitcode == 0
        if not ended and (whole or child.exitcode != -9):
            raise SystemExit(f"a process ended with {child.exitcode}")
        self.kills += not ended
        child.close()
        return ended


def results(folder: Path, *, progress: bool) -> dict[str, bytes]:
    """Return what a run leaves for others, byte for byte."""
    found = [*folder.glob("decisions/*"), *folder.glob("*.jsonl")]
    if progress:
        found.append(folder / "progress.arrow")
    return {str(path.relative_to(folder)): path.read_bytes() for path in found}


class Writer(threading.Thread):
    """Writes a file that grows, half a line at a time, and rotates it."""

    def __init__(self, path: Path, lines: list[bytes], per_file: int, rate: float) -> None:
        super().__init__(daemon=True)
        self._path, self._lines, self._per_file, self._rate = path, lines, per_file, rate
        self.stop = threading.Event()

    def run(self) -> None:
        """Write all of it, at the rate asked for."""
        start, done, number = time.monotonic(), 0, 0
        while done < len(self._lines) and not self.stop.is_set():
            upto = min(done + self._per_file, len(self._lines))
            if number:
                self._path.rename(self._path.with_name(f"{self._path.name}.{number}"))
            number += 1
            with self._path.open("wb", buffering=0) as file:
                file.write(HEADER)
                while done < upto and not self.stop.is_set():
                    due = min(upto, max(done, int((time.monotonic() - start) * self._rate)))
                    data = b"".join(self._lines[done:due])
                    file.write(data[: len(data) // 2])
                    time.sleep(0.002)
                    file.write(data[len(data) // 2 :])
                    done = due


def killed(kills: int) -> Table:
    """Kill processes that read a file, and that follow one which is rotated meanwhile."""
    table = Table(
        "Runs killed by SIGKILL at random moments, against one left alone",
        ["feed", "samples", "runs", "kills", "lives of the longest run", "files that differ"],
        notes=[
            "compared byte for byte: decisions, events, malformed rows; a commit is always at work"
        ],
    )
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        _file(table, folder, kills - kills // 4)
        _followed(table, folder, kills // 4)
    return table


def _file(table: Table, folder: Path, kills: int) -> None:
    lines = rows_of(80_000)
    feed = folder / "feed.csv"
    feed.write_bytes(HEADER + b"".join(lines))
    lives = Lives(feed, None, random.Random(11))
    lives.one(folder / "straight", whole=True)
    straight = results(folder / "straight", progress=True)
    runs = longest = differ = 0
    while lives.kills < kills:
        home, before = folder / f"home{runs}", lives.kills
        while lives.kills < kills and not lives.one(home, whole=False):
            continue
        lives.one(home, whole=True)
        found = results(home, progress=True)
        differ += sum(found.get(name) != straight.get(name) for name in found.keys() | straight)
        runs, longest = runs + 1, max(longest, lives.kills - before)
    table.add("CSV file", len(lines), runs, lives.kills, longest, differ)


def _followed(table: Table, folder: Path, kills: int) -> None:
    feed = folder / "followed" / "feed.csv"
    lines = rows_of(max(20_000, 5_000 * kills))
    last = len(lines) - len(range(0, len(lines), 700))
    lives = Lives(feed, last, random.Random(12))
    found: list[dict[str, bytes]] = []
    for whole in (True, False):
        feed.parent.mkdir()
        home = folder / f"followed-{whole}"
        rate = 60_000.0 if whole else 10_000.0
        writer = Writer(feed, lines, 30_000, rate)
        writer.start()
        while not feed.exists() or not feed.stat().st_size:
            time.sleep(0.01)
        while not lives.one(home, whole=whole or lives.kills >= kills):
            continue
        writer.stop.set()
        writer.join()
        for path in feed.parent.iterdir():
            path.unlink()
        feed.parent.rmdir()
        found.append(results(home, progress=False))
    differ = sum(found[0].get(n) != found[1].get(n) for n in found[0].keys() | found[1])
    table.add("CSV followed through rotation", last, 1, lives.kills, lives.kills, differ)
