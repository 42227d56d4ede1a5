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
    on_stop : callable, optional
        Called once, when the first SIGINT or SIGTERM comes.
    on_hang_up : callable, optional
        Called at each SIGHUP; without it SIGHUP is a wish to stop as well.

    Attributes
    ----------
    asked : threading.Event
        Set by the first wish to stop.

    Notes
    -----
    Python runs a signal's handler in the main thread between two of its steps: a handler that
    touched a lock which that thread holds, such as the one inside ``asked``, would wait for ever,
    and none runs while a kernel does. So the handlers do nothing but give the second signal its
    former meaning, by which a run that hangs can still be ended; what a signal means is done by a
    thread, which reads the number of the signal from a pipe that the interpreter writes at once.
    In a thread other than the main one, which gets no signals, nothing is heard.
    """

    def __init__(
        self,
        on_stop: Callable[[], None] | None = None,
        on_hang_up: Callable[[], None] | None = None,
    ) -> None:
        self.asked = threading.Event()
        self._on_stop = on_stop
        self._on_hang_up = on_hang_up
        self._earlier: dict[int, signal._HANDLER] = {}

    def __enter__(self) -> Self:
        if threading.current_thread() is not threading.main_thread():
            return self
        self._read, self._write = os.pipe2(os.O_CLOEXEC | os.O_NONBLOCK)
        os.set_blocking(self._read, True)
        self._thread = threading.Thread(target=self._listen, name="signals", daemon=True)
        self._thread.start()
        self._wakeup = signal.set_wakeup_fd(self._write, warn_on_full_buffer=False)
        heard = [*STOPPING]
        # a command that was started to outlive its terminal ignores SIGHUP, and goes on doing so
        if self._on_hang_up is not None or signal.getsignal(_HANG_UP) != signal.SIG_IGN:
            heard.append(_HANG_UP)
        self._earlier = {number: signal.getsignal(number) for number in heard}
        for number in heard:
            signal.signal(number, self._hear)
        return self

    def _hear(self, number: int, frame: FrameType | None) -> None:
        del frame
        if number in STOPPING or self._on_hang_up is None:
            signal.signal(number, self._earlier[number])

    def _listen(self) -> None:
        while (came := os.read(self._read, 1)) != _END:
            if came[0] == _HANG_UP and self._on_hang_up is not None:
                self._on_hang_up()
            elif not self.asked.is_set():
                self.asked.set()
                if self._on_stop is not None:
                    self._on_stop()

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
