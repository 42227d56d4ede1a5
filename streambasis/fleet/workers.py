"""Threads that share out work."""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor, wait
from typing import Any

from streambasis.errors import SettingError


def cores() -> int:
    """Return how many cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


class Workers:
    """The calling thread, and as many more as it takes.

    Parameters
    ----------
    threads : int, optional
        How many work at a time; one for each core by default.

    Raises
    ------
    SettingError
        If there is to be none.
    """

    def __init__(self, threads: int | None = None) -> None:
        if threads is not None and (isinstance(threads, bool) or threads < 1):
            raise SettingError(f"threads={threads}: at least one")
        self.count = cores() if threads is None else threads
        self._pool = ThreadPoolExecutor(self.count - 1, "fleet") if self.count > 1 else None

    def __call__(self, function: Callable[[Any], None], items: Iterable[Any]) -> None:
        """Call a function of each item, in no particular order, and return when all are done.

        Raises
        ------
        BaseException
            The first that a call raised. No further call is begun, and none is under way any more
            when it is raised here.
        """
        waiting = deque(items)
        failures: list[BaseException] = []

        def work() -> None:
            try:
                while not failures:
                    try:
                        item = waiting.popleft()
                    except IndexError:
                        return
                    function(item)
            except BaseException as error:
                failures.append(error)

        helpers = min(self.count, len(waiting)) - 1
        futures = [self._pool.submit(work) for _ in range(helpers)] if self._pool else []
        work()
        wait(futures)
        if failures:
            raise failures[0]

    def close(self) -> None:
        """Let the threads go."""
        if self._pool is not None:
            self._pool.shutdown()
