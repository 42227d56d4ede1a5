"""Whether a running daemon does its work: a feed that comes, a disk that takes, a sound basis."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from types import TracebackType
from typing import Self

from streambasis.watch.vitals import Vitals

LOOK_SECONDS = 1.0
REPEAT_SECONDS = 60.0
"""Seconds between two looks at the feed, and from one line about it to the next of its kind."""


class Health:
    """Judges the readings of a run.

    Parameters
    ----------
    vitals : Vitals
        Written by the loop.
    silent_after : float
        Seconds without a sample after which the feed counts as silent; 0 never.
    trouble : callable
        Says what keeps samples from coming, if that is known.

    Attributes
    ----------
    silent_after : float
        May change at any time.
    vitals : Vitals
        The readings.
    """

    def __init__(
        self, vitals: Vitals, silent_after: float = 0.0, trouble: Callable[[], str] = str
    ) -> None:
        self.silent_after = silent_after
        self.trouble = trouble
        self.vitals = vitals
        self.opened()

    def opened(self) -> None:
        """Hear that the feed is open: silence is counted from here until the first samples."""
        self._opened = time.time()

    def reasons(self) -> list[str]:
        """Return what is wrong, one sentence each; nothing while all is well."""
        vitals = self.vitals
        silence = self.silence()
        found = [silence] if silence else []
        if vitals.unkept is not None:
            found.append(f"disk: {vitals.unkept}")
        if vitals.unsound is not None:
            found.append(f"audit: {vitals.unsound}")
        return found

    def silence(self) -> str:
        """Return a sentence if the feed has been silent for too long, else nothing."""
        silent = time.time() - (self.vitals.taken_at or self._opened)
        if not self.silent_after or silent <= self.silent_after:
            return ""
        trouble = self.trouble()
        reason = f" ({trouble})" if trouble else ""
        allowed = f"allowed are {self.silent_after:g} s"
        shown = f"{silent:,.0f}" if silent >= 10.0 else f"{silent:.2f}"
        return f"feed: nothing has come for {shown} s, {allowed}{reason}"


@dataclass(slots=True)
class _Kind:
    """A kind of trouble: what to say when it is over; if it was said, and may be said again."""

    over: str
    said: bool = False
    due: float = 0.0


class Listener:
    """Says when a feed falls silent or loses its connection or session, and when that is over.

    Parameters
    ----------
    health : Health
        Knows it.
    warned : callable
        Told in one line.

    Notes
    -----
    Looks once a second, from a thread of its own since the loop waits for the feed. A connection
    that comes and goes gives no more than a line per minute, and the last one is true.
    """

    def __init__(self, health: Health, warned: Callable[[str], None]) -> None:
        self._health = health
        self._warned = warned
        self._over = threading.Event()
        self._silence = _Kind("samples come again")
        self._connection = _Kind("connected again")
        self._sessions_lost = 0
        self._thread = threading.Thread(target=self._listen, name="health", daemon=True)

    def look(self, now: float) -> None:
        """Say what has changed; ``now`` is a monotonic clock."""
        trouble = self._health.trouble()
        for kind, text in (
            (self._silence, self._health.silence()),
            (self._connection, f"feed: {trouble}" if trouble else ""),
        ):
            if bool(text) != kind.said and now >= kind.due:
                kind.said, kind.due = bool(text), now + REPEAT_SECONDS
                self._warned(text or f"feed: {kind.over}")
        lost = self._health.vitals.sessions_lost
        if lost > self._sessions_lost:
            self._sessions_lost = lost
            self._warned(
                "feed: the broker had forgotten our session: what was sent while we were away is "
                "lost"
            )

    def _listen(self) -> None:
        while not self._over.wait(LOOK_SECONDS):
            self.look(time.monotonic())

    def __enter__(self) -> Self:
        self._thread.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._over.set()
        self._thread.join()
