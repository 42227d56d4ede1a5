"""Ctrl-C and SIGTERM as a wish to stop, SIGHUP as a wish to read the config again."""

from __future__ import annotations

import os
import signal
import threading
from collections.abc import Callable
from types import FrameType, TracebackType
from typing import Self

STOPPING = (int(signal.SIGINT), int(signal.SIGTERM))
_HANG_UP = int(signal.SIGHUP)
_END = b"\0"


class Signals:
    """Hears signals in a thread of its own, however long the main thread is at work.

    Parameters
    ----------
    hang_up_stops : bool
        SIGHUP is a wish to stop as well: what closing a terminal means to what runs on it.

    Attributes
    ----------
    asked : threading.Event
        Set by the first wish to stop.
    on_stop : callable or None
        Called once, when it comes.
    on_hang_up : callable or None
        Called at each SIGHUP that is no wish to stop.

    Notes
    -----
    Python runs a signal's handler in the main thread between two of its steps: a handler that
    touched a lock which that thread holds, such as the one inside ``asked``, would wait for ever,
    and none runs while a kernel does. So the handlers do nothing but give the second signal its
    former meaning, by which a run that hangs can still be ended; what a signal means is done by a
    thread, which reads the number of the signal from a pipe that the interpreter writes at once.
    In a thread other than the main one, which gets no signals, nothing is heard.
    """

    def __init__(self, *, hang_up_stops: bool = False) -> None:
        self.asked = threading.Event()
        self.on_stop: Callable[[], None] | None = None
        self.on_hang_up: Callable[[], None] | None = None
        self._stopping = (*STOPPING, _HANG_UP) if hang_up_stops else STOPPING
        self._earlier: dict[int, signal._HANDLER] = {}

    def __enter__(self) -> Self:
        if threading.current_thread() is not threading.main_thread():
            return self
        self._read, self._write = os.pipe2(os.O_CLOEXEC | os.O_NONBLOCK)
        os.set_blocking(self._read, True)
        self._thread = threading.Thread(target=self._listen, name="signals", daemon=True)
        self._thread.start()
        self._wakeup = signal.set_wakeup_fd(self._write, warn_on_full_buffer=False)
        self._earlier = {number: signal.getsignal(number) for number in (*STOPPING, _HANG_UP)}
        if _HANG_UP in self._stopping and self._earlier[_HANG_UP] == signal.SIG_IGN:
            # it was started to outlive its terminal, and goes on doing so
            del self._earlier[_HANG_UP]
        for number in self._earlier:
            signal.signal(number, self._hear)
        return self

    def _hear(self, number: int, frame: FrameType | None) -> None:
        del frame
        if number in self._stopping:
            signal.signal(number, self._earlier[number])

    def _listen(self) -> None:
        while (came := os.read(self._read, 1)) != _END:
            if came[0] not in self._stopping:
                if self.on_hang_up is not None:
                    self.on_hang_up()
            elif not self.asked.is_set():
                self.asked.set()
                if self.on_stop is not None:
                    self.on_stop()

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if not self._earlier:
            return
        for number, handler in self._earlier.items():
            signal.signal(number, handler)
        signal.set_wakeup_fd(self._wakeup)
        os.write(self._write, _END)
        self._thread.join()
        os.close(self._read)
        os.close(self._write)
