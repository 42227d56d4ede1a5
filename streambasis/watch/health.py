"""Whether a running daemon does its work: a feed that comes, a disk that takes, a sound basis."""

from __future__ import annotations

import time
from collections.abc import Callable

from streambasis.watch.vitals import Vitals


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
    """

    def __init__(
        self, vitals: Vitals, silent_after: float = 0.0, trouble: Callable[[], str] = str
    ) -> None:
        self.silent_after = silent_after
        self.trouble = trouble
        self._vitals = vitals
        self.opened()

    def opened(self) -> None:
        """Hear that the feed is open: silence is counted from here until the first samples."""
        self._opened = time.time()

    def reasons(self) -> list[str]:
        """Return what is wrong, one sentence each; nothing while all is well."""
        vitals = self._vitals
        found = []
        silent = time.time() - (vitals.taken_at or self._opened)
        if self.silent_after and silent > self.silent_after:
            trouble = self.trouble()
            found.append(
                f"feed: nothing has come for {silent:.3g} s, allowed are {self.silent_after:g} s"
                + (f" ({trouble})" if trouble else "")
            )
        if vitals.unkept is not None:
            found.append(f"disk: {vitals.unkept}")
        if vitals.unsound is not None:
            found.append(f"audit: {vitals.unsound}")
        return found
