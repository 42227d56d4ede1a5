"""Ctrl-C and SIGTERM as a wish to stop, heard between two batches."""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

SIGNALS = (int(signal.SIGINT), int(signal.SIGTERM))


@contextmanager
def asked_to_stop() -> Iterator[threading.Event]:
    """Give an event that is set by the first SIGINT or SIGTERM.

    Notes
    -----
    A batch that is being pushed is never cut in the middle. The second signal acts as it would
    have without this, so that a run that hangs can still be ended. In a thread other than the
    main one, which gets no signals, the event is never set.
    """
    asked = threading.Event()
    if threading.current_thread() is not threading.main_thread():
        yield asked
        return
    earlier = {number: signal.getsignal(number) for number in SIGNALS}

    def hear(number: int, frame: FrameType | None) -> None:
        del frame
        asked.set()
        signal.signal(number, earlier[number])

    for number in SIGNALS:
        signal.signal(number, hear)
    try:
        yield asked
    finally:
        for number, handler in earlier.items():
            signal.signal(number, handler)
