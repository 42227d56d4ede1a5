"""When a run is committed to its home, and what happens while the disk takes nothing."""

from __future__ import annotations

import threading
import time
from collections.abc import Mapping
from contextlib import suppress
from typing import Any

import pyarrow as pa

from streambasis.errors import HomeError
from streambasis.monitor import NoveltyMonitor
from streambasis.state import State
from streambasis.watch.home import Home
from streambasis.watch.reporting import Reporter
from streambasis.watch.vitals import Vitals

COMMIT_SAMPLES = 1 << 16
COMMIT_SECONDS = 10.0
"""Samples and seconds between two commits: what a crash makes the next run do again."""

RETRY_SECONDS = 2.0
REPEAT_SECONDS = 60.0
"""Seconds until a disk that did not take a commit is tried again, and until that is said again."""

FEW_FILES = 4
MOST_FILES = 16
MOST_BYTES = 1 << 26
"""Full files of decisions that wait in memory, about 4 MB each, while the disk is slower than a
file is read, and while it takes nothing or the feed is live; bytes of events and malformed rows.
Beyond that no sample is taken until there is room: nothing is lost, and a live feed goes by its own
rule for being full."""


class Keeping:
    """Commits of a run: one under way at a time, tried again while the disk takes none.

    Parameters
    ----------
    home : Home
        Where to.
    vitals : Vitals
        Its readings of commits are kept up to date.
    reporter : Reporter
        Told at most once per minute that the disk takes nothing, and that it does again.
    every : (int, float)
        Samples, and seconds, between two commits.

    Attributes
    ----------
    every : (int, float)
        May change at any time.
    """

    def __init__(
        self, home: Home, vitals: Vitals, reporter: Reporter, every: tuple[int, float]
    ) -> None:
        self._home, self._vitals, self._reporter, self.every = home, vitals, reporter, every
        self._count = 0 if home.state is None else home.state.parts["core"].facts["count"]
        self._started = time.monotonic()
        self._said = -REPEAT_SECONDS
        self._note_snapshot()

    @property
    def fresh(self) -> bool:
        """Whether nothing has been committed yet, by this process or an earlier one."""
        return self._home.committed is None

    @property
    def fills_files(self) -> bool:
        """Whether the next commit writes files of decisions."""
        return self._home.waiting > 0

    def _note_snapshot(self) -> None:
        self._vitals.snapshot_bytes = self._home.bytes
        self._vitals.committed_at = self._home.committed

    def due(self, count: int, *, soon: bool) -> bool:
        """Return whether a commit is to be started.

        Parameters
        ----------
        count : int
            Samples taken.
        soon : bool
            Somebody waits for one.
        """
        if self._home.busy:
            return False
        samples, seconds = self.every
        since = time.monotonic() - self._started
        if self._vitals.unkept is not None:
            return since >= RETRY_SECONDS
        return soon or self._home.waiting > 0 or count - self._count >= samples or since >= seconds

    def start(
        self,
        monitor: NoveltyMonitor,
        facts: Mapping[str, Any],
        parts: Mapping[str, State],
        progress: pa.Table | None,
    ) -> None:
        """Start a commit; the parameters are those of :meth:`Home.start_commit`."""
        self._started, self._count = time.monotonic(), monitor.count
        self._home.start_commit(monitor, facts, parts, progress)

    def settle(self) -> Mapping[str, Any] | None:
        """Return the facts of a commit that has come through since the last call."""
        try:
            done = self._home.settle()
        except HomeError as error:
            self._failed(error)
            return None
        if done is not None:
            self._succeeded()
        return done

    def wait(self, seconds: float, asked: threading.Event) -> None:
        """Wait until the commit under way is through, somebody asks to stop, or so long."""
        if not asked.is_set() and not self._home.wait(seconds):
            asked.wait(seconds)

    def finish(
        self,
        monitor: NoveltyMonitor,
        facts: Mapping[str, Any],
        parts: Mapping[str, State],
        progress: pa.Table | None,
    ) -> Mapping[str, Any]:
        """Commit, wait for it, and return its facts.

        Raises
        ------
        HomeError
            If the disk does not take it.
        """
        # what an earlier one could not write is part of this one
        with suppress(HomeError):
            self._home.settle(wait=True)
        self._home.commit(monitor, facts, parts, progress)
        self._count, self._started = monitor.count, time.monotonic()
        self._succeeded()
        return facts

    def _failed(self, error: HomeError) -> None:
        self._vitals.unkept = str(error)
        if time.monotonic() - self._said >= REPEAT_SECONDS:
            self._said = time.monotonic()
            self._reporter.warned(
                f"{error}; scoring goes on, and what it gives waits in memory until there is room"
            )

    def _succeeded(self) -> None:
        self._note_snapshot()
        if self._vitals.unkept is not None:
            self._vitals.unkept = None
            self._said = -REPEAT_SECONDS
            self._reporter.warned(f"{self._home.path}: written again, with all that waited")

    def full(self, *, live: bool) -> bool:
        """Return whether so much waits that no sample may be taken.

        Parameters
        ----------
        live : bool
            Samples come as they arrive, and should not wait.
        """
        most = MOST_FILES if live or self._vitals.unkept is not None else FEW_FILES
        return self._home.waiting >= most or self._home.waiting_bytes >= MOST_BYTES
